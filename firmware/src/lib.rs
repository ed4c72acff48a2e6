//! The Legwise monitor as a library.
#![no_std]
#![deny(missing_docs)]
pub mod source;
