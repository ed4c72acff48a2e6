//! One conversation with a device: bytes in, rows in the log and an acknowledgement out.
//!
//! ```text
//!  bytes ─► decoder ─► per boot: sequence numbers (missing, repeated) ─► log ─► commit ─► acknowledge
//!                      kept numbers (without a hole?)            └─► the caller's live view
//! ```
//!
//! * What was damaged between two frames counts for the run of the frame before (the first run, if
//!   there was none): the result does not depend on how the bytes were cut into pieces.
//! * Joining a device that runs already is not a loss: counting begins at the first sequence number
//!   seen. A device that restarts *while listened to* begins at 0, so what is missing before its
//!   first frame counts as missing. After a reconnect, the frames of a known boot sent meanwhile do too.
//! * A kept message is acknowledged only after a durable commit, and never across a hole
//!   (`session/kept.rs`).
//!
//! Waiting for bytes, opening ports and sending requests are left to the caller.

mod kept;

use crate::log::{Arrival, LinkCounts, Log, LogError, Stored};
use kept::KeptNumbers;
use legwise_protocol::decoder::{DecoderCounts, DeviceDecoder};
use legwise_protocol::framing::{DELIMITER, Delivery, DeviceFrame, Envelope};
use legwise_protocol::message::Message;
use std::collections::BTreeMap;

/// Passing messages are committed at least this often.
const COMMIT_NS: i64 = 1_000_000_000;
/// Kept messages sooner: the device's memory for them is small, and only an acknowledgement frees it.
const KEPT_COMMIT_NS: i64 = 200_000_000;
/// Frames that make a transaction whatever the clock says (virtual boards run faster than time).
const COMMIT_FRAMES: u64 = 8192;
/// Least distance of two wishes for [`Session::wants_identify`].
const IDENTIFY_NS: i64 = 3_000_000_000;

/// Decoder, counts and log of one connection, reconnects included.
#[derive(Debug)]
pub struct Session {
    log: Log,
    decoder: DeviceDecoder,
    /// What of the decoder's counts has been put down to a run.
    counted: DecoderCounts,
    /// Damage before the first frame.
    early: LinkCounts,
    boots: BTreeMap<u32, Boot>,
    current: Option<u32>,
    /// Whether bytes have been missed since the frame before for reasons other than the line.
    is_rejoining: bool,
    since_commit: SinceCommit,
    identify_asked_ns: Option<i64>,
}

#[derive(Debug, Default)]
struct SinceCommit {
    frames: u64,
    /// Whether there are frames or damage to write down.
    has_news: bool,
    has_kept: bool,
    /// Arrival of the first bytes after the commit.
    begin_ns: Option<i64>,
}

/// One boot of one device.
#[derive(Debug, Default)]
struct Boot {
    next_sequence: u32,
    has_hello: bool,
    kept: KeptNumbers,
    link: LinkCounts,
    /// `link` as the log knows it.
    told_link: LinkCounts,
}

/// How a sequence number follows the ones before.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Follows {
    /// Directly.
    Next,
    /// After a hole, or as the first one of all.
    Later,
    /// It had its turn already.
    Repeated,
}

impl Session {
    /// A session that writes to `log`.
    pub fn new(log: Log) -> Self {
        Self {
            log,
            decoder: DeviceDecoder::new(),
            counted: DecoderCounts::default(),
            early: LinkCounts::default(),
            boots: BTreeMap::new(),
            current: None,
            is_rejoining: true,
            since_commit: SinceCommit::default(),
            identify_asked_ns: None,
        }
    }

    /// Takes bytes as they came; stores their frames and commits when it is time.
    ///
    /// `on_frame` sees every frame that is new, in order, before it is stored; a re-sent one is not
    /// new. Call it with no bytes now and then on a silent line, so that commits stay timely.
    ///
    /// # Errors
    /// When the log cannot be written. All bytes are taken nevertheless and their frames wait in
    /// memory ([`Log::store`]): free the disk and go on receiving. The first error is returned.
    pub fn receive(
        &mut self,
        bytes: &[u8],
        arrival: Arrival,
        on_frame: &mut dyn FnMut(&DeviceFrame),
    ) -> Result<(), LogError> {
        let mut outcome = Ok(());
        // One frame at a time, so that damage is counted where it happened.
        for piece in bytes.split_inclusive(|&byte| byte == DELIMITER) {
            let mut arrived = None;
            self.decoder.feed_envelopes(piece, |envelope, message| arrived = Some((envelope, message)));
            self.count_damage();
            match arrived {
                Some((envelope, Some(message))) => {
                    let frame = DeviceFrame { envelope, message };
                    outcome = outcome.and(self.take(&frame, arrival, on_frame));
                }
                Some((envelope, None)) => self.pass_over(&envelope),
                None => {}
            }
        }
        let since = &mut self.since_commit;
        if !since.has_news {
            return outcome;
        }
        let waited_ns =
            arrival.monotonic_ns.saturating_sub(*since.begin_ns.get_or_insert(arrival.monotonic_ns));
        let limit_ns = if since.has_kept { KEPT_COMMIT_NS } else { COMMIT_NS };
        if waited_ns >= limit_ns || since.frames >= COMMIT_FRAMES {
            outcome = outcome.and(self.flush());
        }
        outcome
    }

    /// Commits: whatever has been received is on the disk when this returns.
    ///
    /// # Errors
    /// When the log cannot be written; nothing is lost, the next commit tries again.
    pub fn flush(&mut self) -> Result<(), LogError> {
        self.since_commit = SinceCommit::default();
        for (&boot_id, boot) in &mut self.boots {
            if boot.link != boot.told_link {
                boot.told_link = boot.link;
                self.log.set_link(boot_id, boot.link);
            }
        }
        if let Err(error) = self.log.commit() {
            self.since_commit.has_news = true; // so that silence does not end the attempts
            return Err(error);
        }
        for boot in self.boots.values_mut() {
            boot.kept.commit();
        }
        Ok(())
    }

    /// The number to acknowledge to the device that speaks now, when there is news: every kept
    /// message up to it is on the disk. Offered again when the device repeats what was acknowledged.
    pub fn acknowledgement(&mut self) -> Option<u32> {
        self.boots.get_mut(&self.current?)?.kept.acknowledge()
    }

    /// Whether the device should be asked to identify itself, which makes it send again what is not
    /// acknowledged: after a loss of kept messages, after joining late, or when its greeting was
    /// missed. `true` at most once in three seconds.
    pub fn wants_identify(&mut self, now: Arrival) -> bool {
        let Some(boot) = self.current.and_then(|boot_id| self.boots.get(&boot_id)) else { return false };
        if boot.has_hello && !boot.kept.has_hole() {
            return false;
        }
        let is_due =
            self.identify_asked_ns.is_none_or(|asked| now.monotonic_ns.saturating_sub(asked) >= IDENTIFY_NS);
        if is_due {
            self.identify_asked_ns = Some(now.monotonic_ns);
        }
        is_due
    }

    /// What the link did so far, all runs together.
    pub fn link_counts(&self) -> LinkCounts {
        let mut sum = self.early;
        for boot in self.boots.values() {
            let link = &boot.link;
            sum.frames += link.frames;
            sum.missing_frames += link.missing_frames;
            sum.repeated_frames += link.repeated_frames;
            sum.damaged_frames += link.damaged_frames;
            sum.oversize_frames += link.oversize_frames;
            sum.unknown_frames += link.unknown_frames;
            sum.dropped_bytes += link.dropped_bytes;
        }
        sum
    }

    /// The connection was lost and is back: half a frame from before is forgotten.
    pub fn reconnected(&mut self) {
        self.decoder.restart();
        self.is_rejoining = true;
        self.identify_asked_ns = None;
    }

    /// The log, to write notes or to look into.
    pub fn log_mut(&mut self) -> &mut Log {
        &mut self.log
    }

    /// Ends the session: the last counts and everything that waits go into the log.
    ///
    /// # Errors
    /// When the log cannot be written. Call [`Self::flush`] until it succeeds if that may change.
    pub fn finish(mut self) -> Result<Log, LogError> {
        self.flush()?;
        if self.boots.is_empty() && self.early != LinkCounts::default() {
            let LinkCounts { damaged_frames, oversize_frames, unknown_frames, dropped_bytes, .. } =
                self.early;
            let text = format!(
                "no frame was understood: {damaged_frames} damaged, {oversize_frames} too long, \
                 {unknown_frames} unknown, {dropped_bytes} bytes dropped"
            );
            self.log.note_now("link", &text)?;
        }
        self.log.finish()?;
        Ok(self.log)
    }

    fn take(
        &mut self,
        frame: &DeviceFrame,
        arrival: Arrival,
        on_frame: &mut dyn FnMut(&DeviceFrame),
    ) -> Result<(), LogError> {
        let follows = self.follow(&frame.envelope);
        let boot = self.boots.entry(frame.envelope.boot_id).or_default();
        boot.has_hello |= matches!(frame.message, Message::Hello(_));
        let (is_new, number) = match frame.envelope.delivery {
            Delivery::Passing => (follows != Follows::Repeated, None),
            Delivery::Kept { number } => (!boot.kept.has(number), Some(number)),
        };
        if is_new {
            on_frame(frame);
        }
        self.since_commit.frames += 1;
        self.since_commit.has_news = true;
        let stored = self.log.store(frame, arrival);
        let is_held = !matches!(stored, Err(LogError::TooManyWaiting { .. }));
        if let Some(number) = number.filter(|_| is_held) {
            boot.kept.take(number, follows == Follows::Next);
            self.since_commit.has_kept = true;
        }
        stored.map(|_: Stored| ())
    }

    /// Counts in a message of a later version: it cannot be stored, and waiting for it would stop the
    /// acknowledgements for good, so its kept number counts as taken.
    fn pass_over(&mut self, envelope: &Envelope) {
        let follows = self.follow(envelope);
        self.since_commit.has_news = true;
        if let Delivery::Kept { number } = envelope.delivery {
            let boot = self.boots.entry(envelope.boot_id).or_default();
            boot.kept.take(number, follows == Follows::Next);
            self.since_commit.has_kept = true;
        }
    }

    /// Counts the frame in and says how its sequence number follows.
    fn follow(&mut self, envelope: &Envelope) -> Follows {
        let (boot_id, sequence) = (envelope.boot_id, envelope.sequence);
        let is_restart = self.current.is_some() && !self.is_rejoining;
        let early = std::mem::take(&mut self.early);
        self.current = Some(boot_id);
        self.is_rejoining = false;
        let boot = self.boots.entry(boot_id).or_insert_with(|| Boot {
            next_sequence: if is_restart { 0 } else { sequence },
            link: early,
            ..Boot::default()
        });
        let is_first = boot.link.frames == 0;
        boot.link.frames += 1;
        let ahead = sequence.wrapping_sub(boot.next_sequence);
        // The numbers wrap: more than half a turn ahead is behind.
        if ahead > u32::MAX / 2 {
            boot.link.repeated_frames += 1;
            return Follows::Repeated;
        }
        boot.link.missing_frames += u64::from(ahead);
        boot.next_sequence = sequence.wrapping_add(1);
        if ahead == 0 && !(is_first && sequence != 0) { Follows::Next } else { Follows::Later }
    }

    /// Puts new damage down to the run that spoke last.
    fn count_damage(&mut self) {
        let now = self.decoder.counts();
        let before = std::mem::replace(&mut self.counted, now);
        self.since_commit.has_news |=
            now.dropped_bytes != before.dropped_bytes || now.unknown_frames != before.unknown_frames;
        let link = match self.current.and_then(|boot_id| self.boots.get_mut(&boot_id)) {
            Some(boot) => &mut boot.link,
            None => &mut self.early,
        };
        link.damaged_frames += now.damaged_frames - before.damaged_frames;
        link.oversize_frames += now.oversize_frames - before.oversize_frames;
        link.unknown_frames += now.unknown_frames - before.unknown_frames;
        link.dropped_bytes += now.dropped_bytes - before.dropped_bytes;
    }
}

#[cfg(test)]
mod tests;
