//! A link over packets: 64 bytes at a time, never waiting, for USB serial ports (CDC-ACM).
//!
//! * A transfer ends with a packet that is not full. After data that ends with a full packet an empty
//!   one must follow, or the host waits for more (*Universal Serial Bus Specification 2.0*, 5.8.3).
//! * A host that does not read stops the packets, not the sampler: the queue takes no more, the
//!   outbox upstream sheds its oldest passing messages and keeps the kept ones.
//! * When the host goes away, what it did not fetch is dropped and counted: the next one must not begin
//!   with stale bytes. Frames cut by that are dropped by the host's decoder.

use crate::link::Link;
use heapless::Deque;

/// Bytes in a full packet: the largest of a full-speed bulk endpoint.
pub const PACKET_BYTES: usize = 64;

/// Bytes on their way into packets; holds up to `N`.
#[derive(Debug, Default)]
pub struct PacketQueue<const N: usize> {
    bytes: Deque<u8, N>,
    /// Whether the last packet was full, so that an empty one must follow if nothing else does.
    was_full: bool,
    dropped_bytes: u64,
}

impl<const N: usize> PacketQueue<N> {
    /// An empty queue.
    pub const fn new() -> Self {
        Self { bytes: Deque::new(), was_full: false, dropped_bytes: 0 }
    }

    /// Takes as many bytes from the front of `bytes` as there is room for; returns how many.
    pub fn push(&mut self, bytes: &[u8]) -> usize {
        bytes.iter().take_while(|&&byte| self.bytes.push_back(byte).is_ok()).count()
    }

    /// Writes the next packet to the front of `packet` and returns its length, which may be 0;
    /// `None` when nothing needs to be sent. The same again until [`Self::sent`].
    pub fn packet(&self, packet: &mut [u8; PACKET_BYTES]) -> Option<usize> {
        let mut length = 0;
        for (slot, &byte) in packet.iter_mut().zip(&self.bytes) {
            *slot = byte;
            length += 1;
        }
        (length > 0 || self.was_full).then_some(length)
    }

    /// The packet of `length` bytes is on its way: forgets them.
    pub fn sent(&mut self, length: usize) {
        for _ in 0..length {
            self.bytes.pop_front();
        }
        self.was_full = length == PACKET_BYTES;
    }

    /// Drops everything that waits, and counts it.
    pub fn clear(&mut self) {
        self.dropped_bytes = self.dropped_bytes.saturating_add(self.bytes.len() as u64);
        self.bytes.clear();
        self.was_full = false;
    }

    /// Bytes dropped so far.
    pub const fn dropped_bytes(&self) -> u64 {
        self.dropped_bytes
    }
}

/// What a packet port is doing right now.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum PortState {
    /// No host, or one that has not finished talking to the device, or a sleeping one.
    Absent,
    /// A host that can take packets. The number changes whenever a program opens the port anew, as
    /// far as the port can tell.
    Present {
        /// Counts openings.
        opening: u32,
    },
}

/// The hardware behind a [`PacketLink`].
///
/// # For driver authors
/// Nothing waits. `poll` is called at every step of the main loop.
pub trait PacketPort {
    /// What can go wrong.
    type Error: core::fmt::Debug;

    /// Lets the port do its housekeeping, and says how it stands.
    fn poll(&mut self) -> PortState;

    /// Hands over one packet, possibly an empty one; `false` when the one before is still waiting.
    ///
    /// # Errors
    /// When the hardware fails.
    fn write_packet(&mut self, packet: &[u8]) -> Result<bool, Self::Error>;

    /// Fetches one packet into the front of `packet`; 0 when there is none.
    ///
    /// # Errors
    /// When the hardware fails.
    fn read_packet(&mut self, packet: &mut [u8; PACKET_BYTES]) -> Result<usize, Self::Error>;
}

/// A [`PacketPort`] as a [`Link`]; up to `N` bytes wait for the host.
#[derive(Debug)]
pub struct PacketLink<P, const N: usize> {
    port: P,
    state: PortState,
    queue: PacketQueue<N>,
    received: [u8; PACKET_BYTES],
    received_length: usize,
    received_taken: usize,
}

impl<P: PacketPort, const N: usize> PacketLink<P, N> {
    /// A link over a port.
    pub const fn new(port: P) -> Self {
        Self {
            port,
            state: PortState::Absent,
            queue: PacketQueue::new(),
            received: [0; PACKET_BYTES],
            received_length: 0,
            received_taken: 0,
        }
    }

    /// Bytes dropped because the host went away before fetching them.
    pub const fn dropped_bytes(&self) -> u64 {
        self.queue.dropped_bytes()
    }

    /// Whether a host can take packets.
    pub const fn is_present(&self) -> bool {
        matches!(self.state, PortState::Present { .. })
    }

    /// Housekeeping, and as many packets as the port takes.
    fn pump(&mut self) -> Result<(), P::Error> {
        let state = self.port.poll();
        if state != self.state {
            self.state = state;
            self.queue.clear();
            self.received_length = 0;
            self.received_taken = 0;
        }
        let mut packet = [0; PACKET_BYTES];
        while self.is_present()
            && let Some(length) = self.queue.packet(&mut packet)
            && self.port.write_packet(packet.get(..length).unwrap_or(&[]))?
        {
            self.queue.sent(length);
        }
        Ok(())
    }
}

impl<P: PacketPort, const N: usize> Link for PacketLink<P, N> {
    type Error = P::Error;

    fn send(&mut self, bytes: &[u8]) -> Result<usize, P::Error> {
        self.pump()?;
        if !self.is_present() {
            return Ok(0);
        }
        let taken = self.queue.push(bytes);
        self.pump()?;
        Ok(taken)
    }

    fn receive(&mut self, buffer: &mut [u8]) -> Result<usize, P::Error> {
        self.pump()?;
        if self.received_taken == self.received_length && self.is_present() {
            self.received_length = self.port.read_packet(&mut self.received)?.min(PACKET_BYTES);
            self.received_taken = 0;
        }
        let waiting = self.received.get(self.received_taken..self.received_length).unwrap_or(&[]);
        let taken = waiting.len().min(buffer.len());
        for (slot, &byte) in buffer.iter_mut().zip(waiting) {
            *slot = byte;
        }
        self.received_taken += taken;
        Ok(taken)
    }
}

#[cfg(test)]
#[allow(clippy::unwrap_used)]
mod tests {
    use super::*;
    use core::convert::Infallible;
    use proptest::prelude::*;
    use proptest::test_runner::RngSeed;
    use std::vec::Vec;

    /// A port that takes packets only when the host reads.
    #[derive(Debug, Default)]
    struct FakePort {
        opening: Option<u32>,
        /// Packets the host will fetch before it stops reading.
        readable: usize,
        packets: Vec<Vec<u8>>,
        incoming: Vec<Vec<u8>>,
    }

    impl PacketPort for FakePort {
        type Error = Infallible;

        fn poll(&mut self) -> PortState {
            self.opening.map_or(PortState::Absent, |opening| PortState::Present { opening })
        }

        fn write_packet(&mut self, packet: &[u8]) -> Result<bool, Infallible> {
            let can = self.readable > 0;
            if can {
                self.readable -= 1;
                self.packets.push(packet.to_vec());
            }
            Ok(can)
        }

        fn read_packet(&mut self, packet: &mut [u8; PACKET_BYTES]) -> Result<usize, Infallible> {
            if self.incoming.is_empty() {
                return Ok(0);
            }
            let first = self.incoming.remove(0);
            packet[..first.len()].copy_from_slice(&first);
            Ok(first.len())
        }
    }

    fn link(readable: usize) -> PacketLink<FakePort, 256> {
        PacketLink::new(FakePort { opening: Some(1), readable, ..FakePort::default() })
    }

    fn lengths(link: &PacketLink<FakePort, 256>) -> Vec<usize> {
        link.port.packets.iter().map(Vec::len).collect()
    }

    #[test]
    fn exact_multiples_of_a_packet_end_with_an_empty_one_and_nothing_else_does() {
        for (bytes, expected) in [
            (1, &[1][..]),
            (63, &[63]),
            (64, &[64, 0]),
            (65, &[64, 1]),
            (128, &[64, 64, 0]),
            (191, &[64, 64, 63]),
        ] {
            let mut link = link(usize::MAX);
            assert_eq!(link.send(&[7; 200][..bytes]), Ok(bytes));
            link.receive(&mut []).unwrap();
            assert_eq!(lengths(&link), expected, "{bytes} bytes");
        }
    }

    #[test]
    fn an_empty_packet_is_not_sent_where_more_bytes_follow() {
        let mut link = link(1);
        assert_eq!(link.send(&[1; 64]), Ok(64));
        assert_eq!(lengths(&link), [64]); // the empty packet waits: the port is busy
        assert_eq!(link.send(&[2; 10]), Ok(10));
        link.port.readable = 9;
        link.receive(&mut []).unwrap();
        assert_eq!(lengths(&link), [64, 10]);
    }

    #[test]
    fn a_host_that_does_not_read_stops_the_packets_and_not_the_caller() {
        let mut link = link(0);
        assert_eq!(link.send(&[1; 200]), Ok(200));
        assert_eq!(link.send(&[2; 200]), Ok(56));
        assert_eq!(link.send(&[3; 200]), Ok(0));
        assert_eq!(link.dropped_bytes(), 0);
        link.port.readable = usize::MAX;
        link.receive(&mut []).unwrap();
        assert_eq!(lengths(&link), [64, 64, 64, 64, 0]);
        assert_eq!(link.port.packets.concat(), [[1; 200].as_slice(), &[2; 56]].concat());
    }

    #[test]
    fn what_a_host_left_behind_is_dropped_and_counted_before_the_next_one() {
        for next in [None, Some(2)] {
            let mut link = link(1);
            link.send(&[1; 200]).unwrap();
            link.port.opening = next;
            link.receive(&mut []).unwrap();
            assert_eq!(link.dropped_bytes(), 136);
            assert_eq!(link.send(&[2; 10]), Ok(if next.is_some() { 10 } else { 0 }));
            link.port.opening = Some(3);
            link.port.readable = usize::MAX;
            link.port.packets.clear();
            link.receive(&mut []).unwrap();
            assert_eq!(link.send(&[5; 3]), Ok(3));
            assert_eq!(link.port.packets, [[5; 3]]);
        }
    }

    #[test]
    fn a_packet_longer_than_the_buffer_is_handed_out_in_pieces() {
        let mut link = link(0);
        link.port.incoming = [(0..64).collect(), (64..70).collect()].into();
        let mut received = Vec::new();
        let mut buffer = [0; 20];
        loop {
            let count = link.receive(&mut buffer).unwrap();
            if count == 0 {
                break;
            }
            received.extend_from_slice(&buffer[..count]);
        }
        assert_eq!(received, (0..70).collect::<Vec<u8>>());
    }

    proptest! {
        #![proptest_config(ProptestConfig { failure_persistence: None, rng_seed: RngSeed::Fixed(1), ..ProptestConfig::default() })]
        /// Whatever the host's pace: bytes arrive once, in order, and a transfer is always closed
        /// by a short packet when the host has caught up.
        #[test]
        fn bytes_arrive_in_order_and_transfers_are_closed(
            steps in prop::collection::vec((0_usize..300, 0_usize..4), 1..60),
        ) {
            let mut link = link(0);
            let mut accepted = Vec::new();
            for (number, (length, readable)) in steps.into_iter().enumerate() {
                link.port.readable = readable;
                let bytes: Vec<u8> = (0..length).map(|n| (n + number * 31) as u8).collect();
                let taken = link.send(&bytes).unwrap();
                accepted.extend_from_slice(&bytes[..taken]);
            }
            link.port.readable = usize::MAX;
            link.receive(&mut []).unwrap();
            prop_assert_eq!(link.port.packets.concat(), accepted);
            prop_assert!(link.port.packets.last().is_none_or(|packet| packet.len() < PACKET_BYTES));
            prop_assert!(link.port.packets.windows(2).all(|two| !two[1].is_empty() || two[0].len() == PACKET_BYTES));
        }
    }
}
