//! The program from outside: run as a user runs it, judged by what it prints, leaves behind and returns.
//!
//! One test binary, so that the program and its bundled database are linked once. What a run must say
//! comes from [`truth`], a second and slower way to the same numbers, or from the sidecars of the
//! recordings under `tests/recordings`, whose expected values were worked out by hand.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod bad_input;
mod hand_made;
mod output;
mod picture;
mod readme;
mod room;
mod same_numbers;
mod storage;
mod tied_legs;
mod truth;

#[cfg(unix)]
mod permission;
#[cfg(unix)]
mod played_board;
#[cfg(unix)]
mod serial_port;
#[cfg(unix)]
mod terminal;
