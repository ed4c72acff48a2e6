//! Shared builders for the tests across rooms: boards, waveforms, recorded messages, the excursion rule
//! written a second time.
//!
//! Nothing here is used outside tests; a builder that fails stops the test that asked for it.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

pub mod boards;
pub mod emulator;
pub mod link_budget;
pub mod recorder;
pub mod replay;
pub mod rule;
pub mod sources;
pub mod waveforms;
