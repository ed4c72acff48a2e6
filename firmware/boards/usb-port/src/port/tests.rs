//! The port on a bus that a test plays the host of: enumeration, opening, packets.
#![allow(clippy::unwrap_used, clippy::panic)]

use super::*;
use legwise_firmware::link::Link;
use legwise_firmware::packets::PacketLink;
use std::collections::VecDeque;
use std::sync::{Arc, Mutex};
use std::vec::Vec;
use usb_device::UsbDirection;
use usb_device::bus::PollResult;
use usb_device::endpoint::{EndpointAddress, EndpointType};

/// What lies between host and device.
#[derive(Default)]
struct Wire {
    events: VecDeque<PollResult>,
    /// Packets for endpoint 0, then those for the bulk endpoint.
    requests: VecDeque<[u8; 8]>,
    incoming: VecDeque<Vec<u8>>,
    /// What the device sent, by endpoint.
    answers: Vec<u8>,
    packets: Vec<Vec<u8>>,
    /// Packets the host will still fetch from the bulk endpoint.
    readable: usize,
    endpoints_in: usize,
    endpoints_out: usize,
}

#[derive(Clone, Default)]
struct FakeBus(Arc<Mutex<Wire>>);

impl UsbBus for FakeBus {
    fn alloc_ep(
        &mut self,
        direction: UsbDirection,
        address: Option<EndpointAddress>,
        _: EndpointType,
        _: u16,
        _: u8,
    ) -> usb_device::Result<EndpointAddress> {
        let mut wire = self.0.lock().unwrap();
        let wire = &mut *wire;
        let count = match direction {
            UsbDirection::In => &mut wire.endpoints_in,
            UsbDirection::Out => &mut wire.endpoints_out,
        };
        Ok(address.unwrap_or_else(|| {
            *count += 1;
            EndpointAddress::from_parts(*count, direction)
        }))
    }

    fn write(&self, endpoint: EndpointAddress, bytes: &[u8]) -> usb_device::Result<usize> {
        let mut wire = self.0.lock().unwrap();
        if endpoint.index() == 0 {
            wire.answers.extend(bytes);
        } else if wire.readable == 0 {
            return Err(UsbError::WouldBlock);
        } else {
            wire.readable -= 1;
            wire.packets.push(bytes.to_vec());
        }
        Ok(bytes.len())
    }

    fn read(&self, endpoint: EndpointAddress, buffer: &mut [u8]) -> usb_device::Result<usize> {
        let mut wire = self.0.lock().unwrap();
        let packet = match endpoint.index() {
            0 => wire.requests.pop_front().map(|request| request.to_vec()),
            _ => wire.incoming.pop_front(),
        };
        let packet = packet.ok_or(UsbError::WouldBlock)?;
        buffer[..packet.len()].copy_from_slice(&packet);
        Ok(packet.len())
    }

    fn poll(&self) -> PollResult {
        self.0.lock().unwrap().events.pop_front().unwrap_or(PollResult::None)
    }

    fn enable(&mut self) {}
    fn reset(&self) {}
    fn set_device_address(&self, _: u8) {}
    fn set_stalled(&self, _: EndpointAddress, _: bool) {}
    fn is_stalled(&self, _: EndpointAddress) -> bool {
        false
    }
    fn suspend(&self) {}
    fn resume(&self) {}
}

const SETUP: PollResult = PollResult::Data { ep_out: 0, ep_in_complete: 0, ep_setup: 1 };
const SENT: PollResult = PollResult::Data { ep_out: 0, ep_in_complete: 1, ep_setup: 0 };

/// *Universal Serial Bus Specification 2.0*, table 9-3, and *USB Class Definitions for Communications
/// Devices 1.2*, PSTN subclass, table 13.
const SET_ADDRESS: [u8; 8] = [0x00, 5, 7, 0, 0, 0, 0, 0];
const SET_CONFIGURATION: [u8; 8] = [0x00, 9, 1, 0, 0, 0, 0, 0];
const GET_CONFIGURATION: [u8; 8] = [0x80, 6, 0, 2, 0, 0, 0xff, 0];
const OPENED: [u8; 8] = [0x21, 0x22, 0b11, 0, 0, 0, 0, 0];
const CLOSED: [u8; 8] = [0x21, 0x22, 0, 0, 0, 0, 0, 0];

/// A request from the host, and all of its answer fetched.
fn ask(wire: &FakeBus, request: [u8; 8]) {
    let mut wire = wire.0.lock().unwrap();
    wire.requests.push_back(request);
    wire.events.extend([SETUP, SENT, SENT, SENT]);
}

/// Lets the port work through everything that has happened.
fn settle(port: &mut impl PacketPort, wire: &FakeBus) -> PortState {
    while !wire.0.lock().unwrap().events.is_empty() {
        port.poll();
    }
    port.poll()
}

/// The wire, and the bus that a port can be made on.
fn bus() -> (FakeBus, UsbBusAllocator<FakeBus>) {
    let wire = FakeBus::default();
    (wire.clone(), UsbBusAllocator::new(wire))
}

fn port(bus: &UsbBusAllocator<FakeBus>) -> UsbPort<'_, FakeBus> {
    UsbPort::new(bus, "monitor", "0123").unwrap()
}

/// Enumerates: after a reset, an address and a configuration.
fn configure(wire: &FakeBus) {
    wire.0.lock().unwrap().events.push_back(PollResult::Reset);
    ask(wire, SET_ADDRESS);
    ask(wire, SET_CONFIGURATION);
}

#[test]
fn the_host_is_present_once_it_has_configured_the_device() {
    let (wire, bus) = bus();
    let mut port = port(&bus);
    assert_eq!(settle(&mut port, &wire), PortState::Absent);
    wire.0.lock().unwrap().events.push_back(PollResult::Reset);
    ask(&wire, SET_ADDRESS);
    assert_eq!(settle(&mut port, &wire), PortState::Absent);
    ask(&wire, SET_CONFIGURATION);
    assert_eq!(settle(&mut port, &wire), PortState::Present { opening: 0 });
    wire.0.lock().unwrap().events.push_back(PollResult::Suspend);
    assert_eq!(settle(&mut port, &wire), PortState::Absent);
}

#[test]
fn each_opening_is_counted_and_a_closing_is_not() {
    let (wire, bus) = bus();
    let mut port = port(&bus);
    configure(&wire);
    for (request, opening) in [(OPENED, 1), (OPENED, 1), (CLOSED, 1), (OPENED, 2)] {
        ask(&wire, request);
        assert_eq!(settle(&mut port, &wire), PortState::Present { opening });
    }
}

#[test]
fn the_descriptors_claim_no_modem_commands() {
    let (wire, bus) = bus();
    let mut port = port(&bus);
    configure(&wire);
    ask(&wire, GET_CONFIGURATION);
    settle(&mut port, &wire);
    let descriptors = wire.0.lock().unwrap().answers.clone();
    let mut rest = descriptors.as_slice();
    let (mut functional, mut interfaces) = (0, 0);
    while let [length, kind, ..] = *rest {
        let (descriptor, after) = rest.split_at(usize::from(length));
        match (kind, descriptor) {
            // Abstract control management: no capability at all.
            (0x24, [_, _, 2, capabilities]) => {
                functional += 1;
                assert_eq!(*capabilities, 0);
            }
            // Interface of the communications class, modem model: protocol "none".
            (4, [.., 2, 2, protocol, _]) => {
                interfaces += 1;
                assert_eq!(*protocol, 0);
            }
            _ => {}
        }
        rest = after;
    }
    assert_eq!((functional, interfaces), (1, 1), "{descriptors:02x?}");
}

#[test]
fn a_transfer_of_full_packets_ends_with_an_empty_one() {
    let (wire, bus) = bus();
    let mut link = PacketLink::<_, 1024>::new(port(&bus));
    configure(&wire);
    wire.0.lock().unwrap().readable = 10;
    while !wire.0.lock().unwrap().events.is_empty() {
        link.receive(&mut []).unwrap();
    }
    assert_eq!(link.send(&[1; 128]), Ok(128));
    let lengths: Vec<usize> = wire.0.lock().unwrap().packets.iter().map(Vec::len).collect();
    assert_eq!(lengths, [64, 64, 0]);
}

#[test]
fn a_host_that_opened_the_port_and_does_not_read_is_no_error_and_blocks_nothing() {
    let (wire, bus) = bus();
    let mut link = PacketLink::<_, 256>::new(port(&bus));
    configure(&wire);
    ask(&wire, OPENED);
    while !wire.0.lock().unwrap().events.is_empty() {
        link.receive(&mut []).unwrap();
    }
    assert_eq!(link.send(&[1; 300]), Ok(256));
    for _ in 0..1000 {
        assert_eq!(link.send(&[2; 300]), Ok(0));
    }
    // A new program: what was meant for the old one is gone, and counted.
    ask(&wire, CLOSED);
    ask(&wire, OPENED);
    while !wire.0.lock().unwrap().events.is_empty() {
        link.receive(&mut []).unwrap();
    }
    assert_eq!(link.dropped_bytes(), 256);
    wire.0.lock().unwrap().readable = 10;
    assert_eq!(link.send(&[3; 5]), Ok(5));
    assert_eq!(wire.0.lock().unwrap().packets, [[3; 5]]);
}

#[test]
fn packets_from_the_host_arrive_whole_and_their_absence_is_no_error() {
    let (wire, bus) = bus();
    let mut port = port(&bus);
    configure(&wire);
    settle(&mut port, &wire);
    let mut packet = [0; PACKET_BYTES];
    assert_eq!(port.read_packet(&mut packet), Ok(0));
    wire.0.lock().unwrap().incoming.push_back((0..64).collect());
    assert_eq!(port.read_packet(&mut packet), Ok(64));
    assert_eq!(packet.to_vec(), (0..64).collect::<Vec<u8>>());
}

#[test]
fn a_serial_number_is_sixteen_digits() {
    let mut digits = [0; 16];
    assert_eq!(hexadecimal(0, &mut digits), "0000000000000000");
    assert_eq!(hexadecimal(0x0123_4567_89ab_cdef, &mut digits), "0123456789abcdef");
    assert_eq!(hexadecimal(u64::MAX, &mut digits), "ffffffffffffffff");
}
