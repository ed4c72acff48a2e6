//! The Legwise monitor as a library: pairs of samples in, records of what happened out.
//!
//! `no_std`, no allocation, no panic, no `unsafe`; the same code runs on a microcontroller and on a
//! desktop. Hardware stands behind two small traits: [`source::PairSource`] and [`link::Link`].
//! [`monitor::Monitor`] puts everything together; [`pipeline::Pipeline`] is the measuring part alone.
//!
//! One algorithm per file, in the order a sample meets them: [`source`], [`staging`]
//! ([`calibration`], [`alignment`]), [`block`], [`extremes`], [`limit_check`], [`storm`],
//! [`account`], [`levels`], [`snippet_ring`], [`spectrum`] ([`fft`]), [`outbox`], [`link`].
//!
//! For boards: [`front_end`] (divider to scale), [`sampling`] (circular buffers and scans), [`converters`]
//! (external converters), [`packets`] (USB packets), [`alarm`], [`fakes`]; `PORTING.md` shows the way.
#![no_std]
#![deny(missing_docs)]

#[cfg(test)]
extern crate std;

pub mod account;
pub mod alarm;
pub mod alignment;
pub mod block;
pub mod calibration;
pub mod converters;
pub mod dither;
pub mod extremes;
pub mod fakes;
pub mod fft;
pub mod front_end;
pub mod halfband;
mod interval;
pub mod levels;
pub mod limit_check;
pub mod link;
pub mod monitor;
pub mod outbox;
pub mod packets;
pub mod pipeline;
pub mod sampling;
pub mod settings;
pub mod snippet_ring;
pub mod source;
pub mod spectrum;
pub mod staging;
pub mod storm;
mod trace;
mod trigonometry;
