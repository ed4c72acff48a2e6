//! The night log: one SQLite file that holds all a report needs, whatever happens to the machine.
//!
//! A night is long and laptops die, so the rules are these (`schema.sql` draws the tables):
//!
//! * rows go in by transactions of about a second; the writer ahead log (WAL) lets a report read meanwhile;
//! * a transaction that holds kept messages reaches the disk before [`Log::commit`] returns, so that
//!   they may be acknowledged then; one with passing messages only is left to the operating system;
//! * what could not be stored (a full disk) stays in memory and is tried again by every commit;
//! * a re-sent message meets its own row and changes nothing.
//!
//! ```text
//!            store                commit: all on disk
//!  Idle ───────────────► Open ─────────────────────────► Idle
//!                         │ disk full, busy, pulled
//!                         ▼                  commit: everything since the last good one again
//!                      Stalled ────────────────────────► Idle
//!                       │   ▲ store: frames wait in memory
//!                       └───┘
//! ```
//!
//! Decoding, counting and acknowledging are left to [`crate::session`].

pub mod clock;
mod error;
mod file;
#[cfg(test)]
pub(crate) mod fixtures;
mod pending;
pub mod rate;
mod rows;
mod schema;
pub mod spectra;
mod spectrum;
mod store;

pub use error::LogError;
pub use file::{About, Log, Origin};
pub(crate) use schema::TABLES;
pub use store::{Arrival, LinkCounts, Stored};

/// `PRAGMA user_version` of the logs this version writes, and the newest it reads.
pub const SCHEMA_VERSION: i32 = 3;
/// `PRAGMA application_id` of every log: the letters "LGW1".
pub const APPLICATION_ID: i32 = 0x4C47_5731;
/// Frames held in memory between two commits, and while nothing can be stored.
pub const PENDING_FRAMES: usize = 65_536;

#[cfg(test)]
mod tests;
