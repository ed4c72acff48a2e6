//! The language the monitor and its host share.
//!
//! `no_std`, no allocation, no panic. Four rooms:
//!
//! * [`units`]: microvolts, sample indices and the integer forms derived from them;
//! * [`receivers`]: what each bus standard lets a receiver bear, with sources;
//! * [`message`] and [`command`]: what the device says and what the host asks;
//! * [`framing`] and [`decoder`]: how either becomes bytes on a wire and back again.
//!
//! `WIRE.md` beside this crate is normative; the tests read its tables.
#![no_std]
#![deny(missing_docs)]

pub mod bytes;
pub mod command;
pub mod cross;
pub mod decoder;
pub mod framing;
pub mod limits;
pub mod message;
pub mod power;
pub mod receivers;
pub mod snippet;
mod stuffing;
pub mod units;

/// Version of the wire format: the first number of every [`message::Hello`].
///
/// Raised when a message or command is appended; the change list is in `WIRE.md`.
pub const WIRE_VERSION: u16 = 3;
