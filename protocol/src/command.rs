//! What the host asks. Enum numbers are wire format: append, never reorder (`WIRE.md` pins them).

use crate::limits::LimitSet;
use crate::message::{Detection, Reporting};
use crate::receivers::ReceiverId;
use postcard::experimental::max_size::MaxSize;
use serde::{Deserialize, Serialize};

/// A request. The device answers each with a [`crate::message::Reply`], except [`Command::Acknowledge`].
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Command {
    /// Say who you are: answered by `Hello` and `Settings`.
    Identify,
    /// Every kept message up to and including this number is safely stored; forget them.
    Acknowledge {
        /// Highest number stored without a hole.
        through: u32,
    },
    /// Watch these limits from the next block on.
    WatchLimits {
        /// Where they come from.
        receiver: ReceiverId,
        /// The windows.
        limits: LimitSet,
    },
    /// Tell excursions apart like this from the next block on.
    SetDetection(Detection),
    /// Report this often from the next block on.
    SetReporting(Reporting),
    /// Examine samples.
    Start,
    /// Finish what is open, say `End`, and pause.
    Stop,
}

/// A command as it travels.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Request {
    /// Counts up with every request; the reply names it.
    pub sequence: u32,
    /// What is asked.
    pub command: Command,
}
