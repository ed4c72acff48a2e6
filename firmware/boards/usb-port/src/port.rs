//! USB serial port (CDC-ACM) as a packet port. Polled; no interrupts.
//!
//! The descriptors claim no AT commands (protocol "none", capabilities 0), so that modem services
//! leave the port alone.

use legwise_firmware::packets::{PACKET_BYTES, PacketPort, PortState};
use usb_device::UsbError;
use usb_device::bus::{UsbBus, UsbBusAllocator};
use usb_device::device::{StringDescriptors, UsbDevice, UsbDeviceBuilder, UsbDeviceState, UsbVidPid};
use usbd_serial::{CdcAcmClass, USB_CLASS_CDC};

/// Numbers that the pid.codes registry sets aside for tests at the bench. A board that leaves it needs
/// numbers of its own.
const TEST_NUMBERS: UsbVidPid = UsbVidPid(0x1209, 0x0001);

/// A USB device with one serial port.
pub struct UsbPort<'a, B: UsbBus> {
    device: UsbDevice<'a, B>,
    class: CdcAcmClass<'a, B>,
    was_open: bool,
    opening: u32,
}

impl<'a, B: UsbBus> UsbPort<'a, B> {
    /// The port; `None` when the descriptors do not fit, which no input can cause.
    pub fn new(bus: &'a UsbBusAllocator<B>, product: &'a str, serial: &'a str) -> Option<Self> {
        let class = CdcAcmClass::new(bus, PACKET_BYTES as u16);
        let strings =
            StringDescriptors::default().manufacturer("Legwise").product(product).serial_number(serial);
        let device = UsbDeviceBuilder::new(bus, TEST_NUMBERS)
            .strings(&[strings])
            .ok()?
            .max_packet_size_0(64)
            .ok()?
            .device_class(USB_CLASS_CDC)
            .build();
        Some(Self { device, class, was_open: false, opening: 0 })
    }
}

impl<B: UsbBus> PacketPort for UsbPort<'_, B> {
    type Error = UsbError;

    fn poll(&mut self) -> PortState {
        self.device.poll(&mut [&mut self.class]);
        // DTR does not say whether anyone reads; but when it rises, someone has opened the port anew.
        let is_open = self.class.dtr();
        if is_open && !self.was_open {
            self.opening = self.opening.wrapping_add(1);
        }
        self.was_open = is_open;
        match self.device.state() {
            UsbDeviceState::Configured => PortState::Present { opening: self.opening },
            _ => PortState::Absent,
        }
    }

    fn write_packet(&mut self, packet: &[u8]) -> Result<bool, UsbError> {
        match self.class.write_packet(packet) {
            Ok(_) => Ok(true),
            Err(UsbError::WouldBlock) => Ok(false),
            Err(error) => Err(error),
        }
    }

    fn read_packet(&mut self, packet: &mut [u8; PACKET_BYTES]) -> Result<usize, UsbError> {
        match self.class.read_packet(packet) {
            Ok(length) => Ok(length),
            Err(UsbError::WouldBlock) => Ok(0),
            Err(error) => Err(error),
        }
    }
}

/// A number as sixteen hexadecimal digits.
pub fn hexadecimal(number: u64, digits: &mut [u8; 16]) -> &str {
    for (place, digit) in digits.iter_mut().rev().enumerate() {
        let value = (number >> (4 * place)) as u8 & 0xf;
        *digit = if value < 10 { b'0' + value } else { b'a' - 10 + value };
    }
    core::str::from_utf8(digits).unwrap_or("0")
}

#[cfg(test)]
mod tests;
