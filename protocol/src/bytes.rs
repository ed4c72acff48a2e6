//! A byte string of bounded length that lives in place.
//!
//! Messages carry names, snippet blocks and spectrum codes of varying length; this type keeps them
//! inside the message, with no allocation and a maximum encoded length known at compile time.
//! On the wire: varint length, then the bytes (the postcard byte-array form).

use core::fmt;
use postcard::experimental::max_size::MaxSize;
use serde::de::{Error, SeqAccess, Visitor};
use serde::{Deserialize, Deserializer, Serialize, Serializer};

/// At most `N` bytes, stored in place. `N` must stay below 16 384 (two length bytes).
#[derive(Clone, Copy)]
pub struct Bytes<const N: usize> {
    length: u16,
    storage: [u8; N],
}

impl<const N: usize> Bytes<N> {
    /// An empty string.
    pub const fn new() -> Self {
        const { assert!(N < 16_384) };
        Self { length: 0, storage: [0; N] }
    }

    /// A copy of `source`, cut to `N` bytes.
    pub fn from_slice_cut(source: &[u8]) -> Self {
        let mut bytes = Self::new();
        for &byte in source {
            if !bytes.push(byte) {
                break;
            }
        }
        bytes
    }

    /// Appends one byte; `false` when full, and then nothing changes.
    pub fn push(&mut self, byte: u8) -> bool {
        match self.storage.get_mut(usize::from(self.length)) {
            Some(slot) => {
                *slot = byte;
                self.length += 1;
                true
            }
            None => false,
        }
    }

    /// Appends all of `source`; `false` when it does not fit, and then nothing changes.
    pub fn extend(&mut self, source: &[u8]) -> bool {
        if source.len() > self.room() {
            return false;
        }
        source.iter().all(|&byte| self.push(byte))
    }

    /// How many more bytes fit.
    pub fn room(&self) -> usize {
        N - usize::from(self.length).min(N)
    }

    /// The bytes.
    pub fn as_slice(&self) -> &[u8] {
        self.storage.get(..usize::from(self.length)).unwrap_or(&[])
    }

    /// The bytes as text, or `""` if they are not UTF-8.
    pub fn as_text(&self) -> &str {
        core::str::from_utf8(self.as_slice()).unwrap_or("")
    }
}

impl<const N: usize> Default for Bytes<N> {
    fn default() -> Self {
        Self::new()
    }
}

impl<const N: usize> PartialEq for Bytes<N> {
    fn eq(&self, other: &Self) -> bool {
        self.as_slice() == other.as_slice()
    }
}

impl<const N: usize> Eq for Bytes<N> {}

impl<const N: usize> fmt::Debug for Bytes<N> {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "{:02x?}", self.as_slice())
    }
}

#[cfg(feature = "defmt")]
impl<const N: usize> defmt::Format for Bytes<N> {
    fn format(&self, f: defmt::Formatter<'_>) {
        defmt::write!(f, "{=[u8]:02x}", self.as_slice());
    }
}

impl<const N: usize> MaxSize for Bytes<N> {
    const POSTCARD_MAX_SIZE: usize = N + if N < 128 { 1 } else { 2 };
}

impl<const N: usize> Serialize for Bytes<N> {
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        serializer.serialize_bytes(self.as_slice())
    }
}

impl<'de, const N: usize> Deserialize<'de> for Bytes<N> {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        struct BytesVisitor<const N: usize>;
        impl<'de, const N: usize> Visitor<'de> for BytesVisitor<N> {
            type Value = Bytes<N>;

            fn expecting(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
                write!(f, "at most {N} bytes")
            }

            fn visit_bytes<E: Error>(self, source: &[u8]) -> Result<Self::Value, E> {
                let mut bytes = Bytes::new();
                if bytes.extend(source) { Ok(bytes) } else { Err(E::invalid_length(source.len(), &self)) }
            }

            fn visit_seq<A: SeqAccess<'de>>(self, mut seq: A) -> Result<Self::Value, A::Error> {
                let mut bytes = Bytes::new();
                while let Some(byte) = seq.next_element()? {
                    if !bytes.push(byte) {
                        return Err(A::Error::invalid_length(N + 1, &self));
                    }
                }
                Ok(bytes)
            }
        }
        deserializer.deserialize_bytes(BytesVisitor)
    }
}
