//! The way to the host: the second of the two hardware traits.

use embedded_io::{ErrorType, Read, ReadReady, Write, WriteReady};

/// A byte stream in both directions that never makes the sampler wait.
///
/// # For driver authors
/// * `send` takes as many bytes as there is room for right now, possibly none, and returns how many.
///   It never blocks: a host that has opened the port and does not read must not stop the sampler.
/// * `receive` returns the bytes that have arrived, possibly none.
/// * Bytes may be lost on the way, frames find themselves again; order must be kept.
///
/// # For callers
/// Bytes that were not taken must be offered again.
pub trait Link {
    /// What can go wrong.
    type Error: core::fmt::Debug;

    /// Offers bytes; returns how many were taken.
    ///
    /// # Errors
    /// When the hardware fails. Bytes offered in that call may or may not have been sent.
    fn send(&mut self, bytes: &[u8]) -> Result<usize, Self::Error>;

    /// Fetches bytes that have arrived into the front of `buffer`; returns how many.
    ///
    /// # Errors
    /// When the hardware fails.
    fn receive(&mut self, buffer: &mut [u8]) -> Result<usize, Self::Error>;
}

/// Any `embedded-io` stream that can say whether it is ready, as a [`Link`].
#[derive(Debug)]
pub struct IoLink<T>(T);

impl<T> IoLink<T> {
    /// Wraps a stream.
    pub const fn new(stream: T) -> Self {
        Self(stream)
    }

    /// The stream.
    pub fn into_inner(self) -> T {
        self.0
    }
}

impl<T: ErrorType + Read + ReadReady + Write + WriteReady> Link for IoLink<T> {
    type Error = T::Error;

    fn send(&mut self, bytes: &[u8]) -> Result<usize, T::Error> {
        if bytes.is_empty() || !self.0.write_ready()? { Ok(0) } else { self.0.write(bytes) }
    }

    fn receive(&mut self, buffer: &mut [u8]) -> Result<usize, T::Error> {
        if buffer.is_empty() || !self.0.read_ready()? { Ok(0) } else { self.0.read(buffer) }
    }
}
