//! A link that passes on no more bytes than a line of a given speed would have.
//!
//! Time is the sample count, told by the caller: the same recording gives the same bytes on every run
//! and on every machine. Credit is held in bytes times millihertz, so that nothing is divided:
//!
//! ```text
//!   pass_time(sample)   credit = min(credit, one byte) + pairs passed × bytes per second × 1000
//!   send                while credit >= rate: one byte more, credit - rate
//! ```
//!
//! An idle line saves nothing up but part of a byte. What the caller does between two calls of
//! [`ThrottledLink::pass_time`] shares the credit of one stretch, as it would share a short FIFO.

use crate::link::Link;
use legwise_protocol::framing::DELIMITER;

/// Passes on what a line of so many bytes per second would; counts frames that await an answer.
#[derive(Debug)]
pub struct ThrottledLink<L> {
    link: L,
    bytes_per_s: u32,
    sample_rate_mhz: u64,
    sample: u64,
    credit: u64,
    /// Frames sent less frames received.
    unanswered: i32,
}

impl<L> ThrottledLink<L> {
    /// `link` as a line of `bytes_per_s` at a sample rate; 0 stands for as fast as `link` itself.
    pub const fn new(link: L, bytes_per_s: u32, sample_rate_mhz: u64) -> Self {
        Self { link, bytes_per_s, sample_rate_mhz, sample: 0, credit: 0, unanswered: 0 }
    }

    /// The line has had time until `sample`. An instant before the last one changes nothing.
    pub fn pass_time(&mut self, sample: u64) {
        let pairs = sample.saturating_sub(self.sample);
        if pairs > 0 {
            self.sample = sample;
            let kept = self.credit.min(self.sample_rate_mhz);
            self.credit = kept + pairs * u64::from(self.bytes_per_s) * 1000;
        }
    }

    /// Whether the other side has sent at least as many frames as it was sent: true after each frame of
    /// a host that answers all of them, which makes its acknowledgements prompt in sample time too.
    pub const fn is_answered(&self) -> bool {
        self.unanswered <= 0
    }

    /// The link within.
    pub const fn inner_mut(&mut self) -> &mut L {
        &mut self.link
    }

    fn count(&mut self, bytes: &[u8], step: i32) {
        for &byte in bytes {
            if byte == DELIMITER {
                self.unanswered = self.unanswered.wrapping_add(step);
            }
        }
    }
}

impl<L: Link> Link for ThrottledLink<L> {
    type Error = L::Error;

    fn send(&mut self, bytes: &[u8]) -> Result<usize, L::Error> {
        if self.bytes_per_s == 0 {
            return self.link.send(bytes);
        }
        let mut sent = 0;
        while let Some(byte) = bytes.get(sent..sent + 1)
            && self.credit >= self.sample_rate_mhz
            && self.link.send(byte)? == 1
        {
            self.credit -= self.sample_rate_mhz;
            self.count(byte, 1);
            sent += 1;
        }
        Ok(sent)
    }

    fn receive(&mut self, buffer: &mut [u8]) -> Result<usize, L::Error> {
        let received = self.link.receive(buffer)?;
        self.count(buffer.get(..received).unwrap_or(&[]), -1);
        Ok(received)
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::fakes::MemoryLink;

    const RATE_MHZ: u64 = 200_000_000;

    #[test]
    fn a_line_never_passes_more_than_its_speed_allows_nor_less_by_a_byte() {
        // 960 bytes/s at 200 kS/s is a byte every 208⅓ pairs; blocks of 256 and of 7.
        for block in [7, 256] {
            let mut link = ThrottledLink::new(MemoryLink::<4096>::new(), 960, RATE_MHZ);
            let mut sent = 0;
            for sample in (block..=400_000).step_by(block) {
                link.pass_time(sample as u64);
                while let Ok(1..) = link.send(&[1; 50]).inspect(|count| sent += count) {}
                let due = sample * 960 / 200_000;
                assert_eq!(sent, due, "at {sample}");
            }
        }
    }

    #[test]
    fn an_idle_line_saves_nothing_up() {
        let mut link = ThrottledLink::new(MemoryLink::<4096>::new(), 11_520, RATE_MHZ);
        for sample in 1..1000 {
            link.pass_time(sample * 256);
        }
        // 256 pairs are 14.7 bytes, and part of one may be left from before.
        assert_eq!(link.send(&[1; 64]), Ok(15));
        assert_eq!(link.send(&[1; 64]), Ok(0));
        link.pass_time(5);
        assert_eq!(link.send(&[1; 64]), Ok(0), "time does not run backwards");
    }

    #[test]
    fn a_frame_is_unanswered_until_one_comes_back() {
        let mut link = ThrottledLink::new(MemoryLink::<64>::new(), 1000, RATE_MHZ);
        link.pass_time(RATE_MHZ);
        assert_eq!(link.send(&[7, 7]), Ok(2));
        assert!(link.is_answered(), "half a frame awaits nothing");
        assert_eq!(link.send(&[7, DELIMITER]), Ok(2));
        assert!(!link.is_answered());
        link.inner_mut().put(&[9, DELIMITER]);
        assert_eq!(link.receive(&mut [0; 8]), Ok(2));
        assert!(link.is_answered());
    }

    #[test]
    fn without_a_speed_everything_passes_at_once() {
        let mut link = ThrottledLink::new(MemoryLink::<64>::new(), 0, RATE_MHZ);
        assert_eq!(link.send(&[1; 50]), Ok(50));
    }
}
