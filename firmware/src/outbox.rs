//! What waits to be sent: kept messages until they are acknowledged, passing ones until sent.
//!
//! ```text
//!   record --> kept queue     [ sent, not acknowledged | not yet sent ]  forgotten when acknowledged
//!          \-> passing queue  [ not yet sent ]                           forgotten when sent or shed
//!                     both leave in the order they were made,
//!                     but kept ones first while many of them wait
//! ```
//!
//! When the passing queue is full its oldest messages are shed, and each uses up a sequence number so
//! that the host sees the loss. When the kept queue is nearly full, snippets are refused first; when
//! it is full, other kept messages too. Both are counted and told in a kept `Loss` message as soon as
//! there is room. Counts and extremes survive any of this: they are in `Totals`.

use crate::trace;
use legwise_protocol::framing::{self, Delivery, Envelope, MESSAGE_BYTES};
use legwise_protocol::message::{Loss, Message};

/// What precedes a message in a queue: length (2 bytes), order (4), sample (8), little-endian.
const HEADER: usize = 14;
/// Longest form of a `Loss` message: its number and two counts.
const LOSS_BYTES: usize = 11;

/// A message in a queue.
#[derive(Clone, Copy, Debug)]
struct Entry {
    /// Where its bytes begin, from the front of the queue.
    offset: usize,
    length: usize,
    /// Counts every message made.
    order: u32,
    sample: u64,
}

impl Entry {
    /// Where the next entry begins, from the front of the queue.
    const fn end(&self) -> usize {
        self.offset + self.length
    }
}

/// A queue of messages in a ring of `N` bytes.
#[derive(Debug)]
struct ByteQueue<const N: usize> {
    ring: [u8; N],
    start: usize,
    used: usize,
}

impl<const N: usize> ByteQueue<N> {
    const fn new() -> Self {
        Self { ring: [0; N], start: 0, used: 0 }
    }

    const fn clear(&mut self) {
        (self.start, self.used) = (0, 0);
    }

    const fn is_open_for(&self, length: usize) -> bool {
        N - self.used >= length + HEADER
    }

    fn push(&mut self, bytes: &[u8], order: u32, sample: u64) -> bool {
        if !self.is_open_for(bytes.len()) {
            return false;
        }
        let mut header = [0; HEADER];
        let length = (bytes.len() as u16).to_le_bytes();
        let fields = length.into_iter().chain(order.to_le_bytes()).chain(sample.to_le_bytes());
        for (slot, byte) in header.iter_mut().zip(fields) {
            *slot = byte;
        }
        self.append(&header);
        self.append(bytes);
        true
    }

    /// The entry that begins `offset` bytes from the front.
    fn entry(&self, offset: usize) -> Option<Entry> {
        if offset >= self.used {
            return None;
        }
        let mut header = [0; HEADER];
        self.read(offset, &mut header);
        let [l0, l1, o0, o1, o2, o3, sample @ ..] = header;
        Some(Entry {
            offset: offset + HEADER,
            length: usize::from(u16::from_le_bytes([l0, l1])),
            order: u32::from_le_bytes([o0, o1, o2, o3]),
            sample: u64::from_le_bytes(sample),
        })
    }

    /// Forgets the entry at the front; returns the bytes it took.
    fn pop(&mut self) -> usize {
        let bytes = self.entry(0).map_or(0, |entry| entry.end()).min(self.used);
        self.start = (self.start + bytes) % N.max(1);
        self.used -= bytes;
        bytes
    }

    /// Copies an entry's bytes to `out`; the part of `out` that was written.
    fn message<'a>(&self, entry: &Entry, out: &'a mut [u8]) -> &'a [u8] {
        let out = out.get_mut(..entry.length).unwrap_or(&mut []);
        self.read(entry.offset, out);
        out
    }

    fn append(&mut self, bytes: &[u8]) {
        let at = (self.start + self.used) % N.max(1);
        let (front, back) = bytes.split_at(bytes.len().min(N - at.min(N)));
        for (slot, &byte) in self.ring.iter_mut().skip(at).zip(front) {
            *slot = byte;
        }
        for (slot, &byte) in self.ring.iter_mut().zip(back) {
            *slot = byte;
        }
        self.used += bytes.len();
    }

    fn read(&self, offset: usize, out: &mut [u8]) {
        let at = (self.start + offset) % N.max(1);
        let around = self.ring.iter().skip(at).chain(&self.ring);
        for (slot, &byte) in out.iter_mut().zip(around) {
            *slot = byte;
        }
    }
}

/// The two queues and the numbers that go with them. `KEPT` and `PASSING` are bytes.
#[derive(Debug)]
pub struct Outbox<const KEPT: usize, const PASSING: usize> {
    boot_id: u32,
    sequence: u32,
    order: u32,
    kept: ByteQueue<KEPT>,
    passing: ByteQueue<PASSING>,
    /// Number of the newest kept message that is no longer held.
    kept_acknowledged: u32,
    /// Kept messages at the front that have been sent, and the bytes they take in the queue.
    kept_sent: u32,
    kept_sent_bytes: usize,
    /// Kept messages at the front that were sent at least once, before a repetition too.
    kept_sent_ever: u32,
    /// Sample count of the newest message.
    newest_sample: u64,
    loss: Loss,
    told_loss: Loss,
    shed: u32,
}

impl<const KEPT: usize, const PASSING: usize> Default for Outbox<KEPT, PASSING> {
    fn default() -> Self {
        Self::new()
    }
}

impl<const KEPT: usize, const PASSING: usize> Outbox<KEPT, PASSING> {
    /// Room that snippets leave for other kept messages.
    const RESERVE: usize = KEPT / 4;

    /// An empty outbox.
    pub const fn new() -> Self {
        const { assert!(KEPT >= 2 * MESSAGE_BYTES && PASSING >= 2 * MESSAGE_BYTES) };
        Self {
            boot_id: 0,
            sequence: 0,
            order: 0,
            kept: ByteQueue::new(),
            passing: ByteQueue::new(),
            kept_acknowledged: 0,
            kept_sent: 0,
            kept_sent_bytes: 0,
            kept_sent_ever: 0,
            newest_sample: 0,
            loss: Loss { snippet_parts: 0, records: 0 },
            told_loss: Loss { snippet_parts: 0, records: 0 },
            shed: 0,
        }
    }

    /// Starts afresh, empty, for one boot.
    pub fn begin(&mut self, boot_id: u32) {
        self.kept.clear();
        self.passing.clear();
        self.boot_id = boot_id;
        (self.sequence, self.order, self.newest_sample) = (0, 0, 0);
        (self.kept_acknowledged, self.kept_sent, self.kept_sent_ever) = (0, 0, 0);
        self.kept_sent_bytes = 0;
        (self.loss, self.told_loss, self.shed) = (Loss::default(), Loss::default(), 0);
    }

    /// Passing messages shed so far.
    pub const fn shed(&self) -> u32 {
        self.shed
    }

    /// Kept messages given up so far.
    pub const fn loss(&self) -> Loss {
        self.loss
    }

    /// Whether every message has been sent (kept ones may still await acknowledgement).
    pub fn is_sent(&self) -> bool {
        self.passing.used == 0 && self.kept_sent_bytes >= self.kept.used
    }

    /// Whether nothing is held any more, acknowledged or not.
    pub const fn is_empty(&self) -> bool {
        self.passing.used == 0 && self.kept.used == 0
    }

    /// Bytes still free for kept messages.
    pub const fn kept_room(&self) -> usize {
        KEPT - self.kept.used
    }

    /// Bytes still free for passing messages.
    pub const fn passing_room(&self) -> usize {
        PASSING - self.passing.used
    }

    /// Takes a message made when the source had delivered `sample` pairs.
    pub fn record(&mut self, message: &Message, sample: u64) {
        trace::record(message, sample);
        self.newest_sample = sample;
        self.tell_loss(sample);
        let mut buffer = [0; MESSAGE_BYTES];
        let Ok(bytes) = framing::encode_message(message, &mut buffer) else { return };
        self.order = self.order.wrapping_add(1);
        if message.is_kept() {
            self.record_kept(message, bytes, sample);
        } else {
            self.record_passing(bytes, sample);
        }
    }

    /// Forgets kept messages up to and including number `through`.
    pub fn acknowledge(&mut self, through: u32) {
        // Numbers that were never sent cannot have been stored: ignore them.
        let count = through.wrapping_sub(self.kept_acknowledged);
        if count > self.kept_sent_ever {
            return;
        }
        for _ in 0..count {
            self.kept_sent_bytes -= self.kept.pop().min(self.kept_sent_bytes);
        }
        self.kept_acknowledged = through;
        self.kept_sent_ever -= count;
        self.kept_sent = self.kept_sent.saturating_sub(count);
        self.tell_loss(self.newest_sample);
    }

    /// Sends every kept message again that was not acknowledged: the host is new or was away.
    pub fn send_again(&mut self) {
        self.kept_sent = 0;
        self.kept_sent_bytes = 0;
    }

    /// Writes the next frame into `out` and returns its length; 0 when nothing waits.
    /// `out` must hold [`framing::DEVICE_FRAME_BYTES`].
    pub fn next_frame(&mut self, out: &mut [u8]) -> usize {
        let mut buffer = [0; MESSAGE_BYTES];
        let is_pressed = self.kept.used - self.kept_sent_bytes > Self::RESERVE;
        let waiting = (self.kept.entry(self.kept_sent_bytes), self.passing.entry(0));
        let (entry, delivery, message) = match waiting {
            (Some(kept), passing)
                if is_pressed || passing.is_none_or(|passing| is_before(kept.order, passing.order)) =>
            {
                self.kept_sent += 1;
                let number = self.kept_acknowledged.wrapping_add(self.kept_sent);
                self.kept_sent_ever = self.kept_sent_ever.max(self.kept_sent);
                self.kept_sent_bytes = kept.end();
                (kept, Delivery::Kept { number }, self.kept.message(&kept, &mut buffer))
            }
            (_, Some(passing)) => {
                let message = self.passing.message(&passing, &mut buffer);
                self.passing.pop();
                (passing, Delivery::Passing, message)
            }
            (_, None) => return 0,
        };
        let envelope =
            Envelope { boot_id: self.boot_id, sequence: self.sequence, sample: entry.sample, delivery };
        self.sequence = self.sequence.wrapping_add(1);
        framing::frame_message(&envelope, message, out).unwrap_or(0)
    }

    fn record_kept(&mut self, message: &Message, bytes: &[u8], sample: u64) {
        let is_snippet = matches!(message, Message::Snippet(_));
        let needed = bytes.len() + if is_snippet { Self::RESERVE } else { 0 };
        if self.kept.is_open_for(needed) && self.kept.push(bytes, self.order, sample) {
            return;
        }
        let lost = if is_snippet { &mut self.loss.snippet_parts } else { &mut self.loss.records };
        *lost = lost.saturating_add(1);
    }

    fn record_passing(&mut self, bytes: &[u8], sample: u64) {
        while !self.passing.is_open_for(bytes.len()) {
            if self.passing.pop() == 0 {
                return;
            }
            self.shed = self.shed.saturating_add(1);
            self.sequence = self.sequence.wrapping_add(1);
        }
        self.passing.push(bytes, self.order, sample);
    }

    /// Puts the account of lost kept messages into the queue when it changed and there is room.
    fn tell_loss(&mut self, sample: u64) {
        if self.loss == self.told_loss {
            return;
        }
        let mut buffer = [0; LOSS_BYTES];
        let Ok(bytes) = framing::encode_message(&Message::Loss(self.loss), &mut buffer) else { return };
        if self.kept.is_open_for(bytes.len() + Self::RESERVE / 2) {
            self.order = self.order.wrapping_add(1);
            if self.kept.push(bytes, self.order, sample) {
                self.told_loss = self.loss;
                trace::loss(&self.loss);
            }
        }
    }
}

/// Whether order number `a` was given out before `b` (they wrap).
const fn is_before(a: u32, b: u32) -> bool {
    a.wrapping_sub(b) > u32::MAX / 2
}
