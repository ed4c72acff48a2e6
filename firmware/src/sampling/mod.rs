//! From a converter that writes a ring of memory by itself to numbered sample pairs.
//!
//! Boards with a converter and a circular transfer (DMA) share everything but the registers:
//!
//! ```text
//!  registers (board)            here, tested on the desktop
//!  ring position ─► [`counter`]      position modulo the ring ─► words since the start
//!  timer ────────► [`tick_clock`]   ticks ─► sampling instants, across changes of the rate
//!                   [`ring_reader`]  words written ─► whole scans to copy, or how many were lost
//!  ring words ────► [`scan`]         words of a scan ─► leg A, leg B, marker right or wrong
//!                   [`circular`]     all of it as a [`crate::source::PairSource`]
//! ```
//!
//! A *scan* is what the converter writes for one sampling instant: both legs, and usually a *marker*,
//! a channel whose voltage is known. The legs look alike, so readings that slip by one place swap A
//! and B: the differential mode turns over, the common mode stays right, and nothing else shows it.
//! The marker does.

pub mod circular;
pub mod counter;
pub mod ring_reader;
pub mod scan;
pub mod tick_clock;
