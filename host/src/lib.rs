//! The Legwise host tool as a library; `legwise` the program is a thin layer on top.
//!
//! ```text
//!  port | recording | line ─► board (the firmware on the desktop) ─► bytes ─► session ─► log ─► report
//! ```
//!
//! * [`mod@line`]: a simulated pair; [`recording`]: files of sampled legs; [`port`]: a real board;
//! * [`board`]: the firmware pipeline run here, for the first two;
//! * [`session`]: decodes, counts what is missing, stores; [`log`]: the SQLite file;
//! * [`report`], [`spectrum`], [`plot`], [`receiver_table`], [`export`]: what a log says;
//! * [`board_file`]: what a board does of its own, measured once and kept;
//! * [`cli`]: the commands.

pub mod board;
pub mod board_file;
pub mod cli;
pub mod export;
pub mod line;
pub mod log;
pub mod plot;
pub mod port;
pub mod receiver_table;
pub mod recording;
pub mod report;
pub mod session;
pub mod spectrum;
pub mod watching;
