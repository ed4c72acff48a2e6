//! What has been handed to the log since the last commit, so that a failed transaction loses nothing.
//!
//! Bounded by [`super::PENDING_FRAMES`]. When it overflows because nothing can be stored, passing
//! messages go first (their loss is counted and noted); a kept one beyond that is refused, stays on
//! the device unacknowledged and is sent again.

use super::store::Arrival;
use legwise_protocol::framing::{Delivery, DeviceFrame};
use legwise_protocol::message::Message;

/// One thing to store.
#[derive(Clone, Debug)]
pub(super) enum Item {
    /// A frame and when it came. Boxed: notes are small.
    Frame(Box<DeviceFrame>, Arrival),
    /// A row of `note`.
    Note { utc_ns: i64, kind: String, text: String },
}

impl Item {
    /// Whether it may be given up when memory runs out. The greeting counts as kept: without it no
    /// reading has a scale.
    fn is_passing(&self) -> bool {
        match self {
            Self::Frame(frame, _) => {
                frame.envelope.delivery == Delivery::Passing && !matches!(frame.message, Message::Hello(_))
            }
            Self::Note { .. } => false,
        }
    }
}

/// The buffer.
#[derive(Debug, Default)]
pub(super) struct Pending {
    items: Vec<Item>,
    given_up: u64,
}

impl Pending {
    pub(super) fn len(&self) -> usize {
        self.items.len()
    }

    pub(super) fn items(&self) -> &[Item] {
        &self.items
    }

    /// Passing messages given up since the last [`Self::clear`].
    pub(super) fn given_up(&self) -> u64 {
        self.given_up
    }

    /// Takes `item`; gives up passing ones when there are `limit` already. `false`: refused.
    pub(super) fn push(&mut self, item: Item, limit: usize) -> bool {
        if self.items.len() >= limit {
            let before = self.items.len();
            self.items.retain(|item| !item.is_passing());
            self.given_up += (before - self.items.len()) as u64;
        }
        if self.items.len() >= limit {
            if item.is_passing() {
                self.given_up += 1;
                return true;
            }
            return false;
        }
        self.items.push(item);
        true
    }

    /// Everything but the newest item is stored.
    pub(super) fn keep_newest(&mut self) {
        let older = self.items.len().saturating_sub(1);
        self.items.drain(..older);
    }

    /// Everything is stored.
    pub(super) fn clear(&mut self) {
        self.items.clear();
        self.given_up = 0;
    }
}
