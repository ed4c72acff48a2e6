-- Legwise log, schema 3. One file holds one night (or one recording). Tables are append-only,
-- except `run`, `totals` and `link`, whose single row per run is replaced by a newer account.
-- Units are in the names: _uv microvolts, _twice_uv twice the value in microvolts, _samples and
-- *_sample pair counts and indices, _mhz millihertz, _ns nanoseconds (UTC: since 1970-01-01).

-- What this log is: format, tool_version, created_utc, origin (serial|recording|simulated),
-- origin_name, point, and notes of the tool. Values are text.
CREATE TABLE info (key TEXT PRIMARY KEY, value TEXT NOT NULL) STRICT;

-- One start of one device. Every other table hangs on it.
CREATE TABLE run (
  run INTEGER PRIMARY KEY,
  boot_id INTEGER NOT NULL,
  wire_version INTEGER, firmware_version TEXT, board TEXT, serial TEXT, reset_cause TEXT,
  sample_rate_mhz INTEGER, skew_ns INTEGER,
  -- JSON of the two leg scales as the wire carries them: codes to microvolts, rails, uncertainty
  legs TEXT
) STRICT;

-- What was watched for, from `sample` on. The JSON of the wire's Settings.
CREATE TABLE settings (
  run INTEGER NOT NULL, number INTEGER NOT NULL, sample INTEGER NOT NULL,
  receiver TEXT NOT NULL, settings TEXT NOT NULL,
  PRIMARY KEY (run, number)
) STRICT, WITHOUT ROWID;

-- Counter and host clock at the arrival of frames, about one pair per second.
CREATE TABLE clock (
  run INTEGER NOT NULL, sample INTEGER NOT NULL, utc_ns INTEGER NOT NULL, monotonic_ns INTEGER NOT NULL
) STRICT;

CREATE TABLE summary (
  run INTEGER NOT NULL, first_sample INTEGER NOT NULL, samples INTEGER NOT NULL,
  leg_a_low_uv INTEGER, leg_a_high_uv INTEGER, leg_b_low_uv INTEGER, leg_b_high_uv INTEGER,
  cm_low_twice_uv INTEGER, cm_high_twice_uv INTEGER, dm_low_uv INTEGER, dm_high_uv INTEGER,
  cm_mean_twice_uv INTEGER,
  clipped INTEGER NOT NULL, outside INTEGER NOT NULL, excursions INTEGER NOT NULL, alarm INTEGER NOT NULL,
  PRIMARY KEY (run, first_sample)
) STRICT, WITHOUT ROWID;

-- Kept messages carry the device's number: a re-sent one meets its own row and changes nothing.
-- `part`: 0 whole, 1 begin, 2 middle, 3 finish. `excursion` numbers excursions within a run from 1.
CREATE TABLE excursion (
  run INTEGER NOT NULL, number INTEGER NOT NULL, excursion INTEGER NOT NULL, part INTEGER NOT NULL,
  first_sample INTEGER NOT NULL, samples INTEGER NOT NULL,
  limits INTEGER NOT NULL, worst_limit INTEGER NOT NULL,
  extreme_twice_uv INTEGER NOT NULL, extreme_sample INTEGER NOT NULL,
  outside_samples INTEGER NOT NULL, area_twice_uv_samples INTEGER NOT NULL,
  dm_low_uv INTEGER, dm_high_uv INTEGER, clipped_samples INTEGER NOT NULL,
  edge_suspect INTEGER NOT NULL, cut INTEGER NOT NULL,
  PRIMARY KEY (run, number)
) STRICT, WITHOUT ROWID;

CREATE TABLE storm (
  run INTEGER NOT NULL, number INTEGER NOT NULL,
  excursions INTEGER NOT NULL, edge_suspects INTEGER NOT NULL,
  first_sample INTEGER NOT NULL, samples INTEGER NOT NULL,
  limits INTEGER NOT NULL, worst_limit INTEGER NOT NULL,
  extreme_twice_uv INTEGER NOT NULL, extreme_sample INTEGER NOT NULL,
  outside_samples INTEGER NOT NULL, area_twice_uv_samples INTEGER NOT NULL,
  dm_low_uv INTEGER, dm_high_uv INTEGER, clipped_samples INTEGER NOT NULL,
  PRIMARY KEY (run, number)
) STRICT, WITHOUT ROWID;

-- Raw waveform around an excursion: compressed blocks exactly as they came (WIRE.md, snippet blocks).
CREATE TABLE snippet (
  run INTEGER NOT NULL, number INTEGER NOT NULL, excursion INTEGER NOT NULL,
  first_sample INTEGER NOT NULL, samples INTEGER NOT NULL, part INTEGER NOT NULL, more INTEGER NOT NULL,
  blocks BLOB NOT NULL,
  PRIMARY KEY (run, number)
) STRICT, WITHOUT ROWID;

-- Samples the device did not examine. cause: overrun|skipped|stopped|resynchronised
CREATE TABLE gap (
  run INTEGER NOT NULL, number INTEGER NOT NULL,
  first_sample INTEGER NOT NULL, samples INTEGER NOT NULL, cause TEXT NOT NULL,
  PRIMARY KEY (run, number)
) STRICT, WITHOUT ROWID;

-- Levels of one interval; a level that was not found is NULL.
CREATE TABLE levels (
  run INTEGER NOT NULL, first_sample INTEGER NOT NULL, samples INTEGER NOT NULL,
  idle_uv INTEGER, idle_samples INTEGER, high_uv INTEGER, high_samples INTEGER,
  low_uv INTEGER, low_samples INTEGER, mid_samples INTEGER NOT NULL,
  cm_idle_samples INTEGER NOT NULL, cm_idle_twice_uv INTEGER NOT NULL,
  cm_high_samples INTEGER NOT NULL, cm_high_twice_uv INTEGER NOT NULL,
  cm_low_samples INTEGER NOT NULL, cm_low_twice_uv INTEGER NOT NULL,
  PRIMARY KEY (run, first_sample)
) STRICT, WITHOUT ROWID;

-- One averaged spectrum of one mode, put together from its parts; by devices of wire version 1, later
-- ones fill `spectra`. mode: 0 common, 1 differential.
-- codes: two bytes little-endian per bin (WIRE.md, power codes), V²/Hz one-sided.
CREATE TABLE spectrum (
  run INTEGER NOT NULL, first_sample INTEGER NOT NULL, mode INTEGER NOT NULL, rung INTEGER NOT NULL,
  span_samples INTEGER NOT NULL, points INTEGER NOT NULL, segments INTEGER NOT NULL,
  skipped INTEGER NOT NULL, codes BLOB NOT NULL,
  PRIMARY KEY (run, first_sample, mode, rung)
) STRICT, WITHOUT ROWID;

-- The device's whole account, newest first to last: replaced as newer ones arrive. JSON of the
-- wire's Totals. `end_cause` is set by the End message: exhausted|stopped; NULL while running.
CREATE TABLE totals (
  run INTEGER PRIMARY KEY, sample INTEGER NOT NULL, totals TEXT NOT NULL, end_cause TEXT
) STRICT;

-- Kept messages the device had to give up (newest account).
CREATE TABLE loss (
  run INTEGER PRIMARY KEY, snippet_parts INTEGER NOT NULL, records INTEGER NOT NULL
) STRICT;

-- What the link did, per run (replaced as it grows): frames that arrived, frames missing by
-- sequence number, and what the decoder dropped.
CREATE TABLE link (
  run INTEGER PRIMARY KEY, frames INTEGER NOT NULL, missing_frames INTEGER NOT NULL,
  repeated_frames INTEGER NOT NULL, damaged_frames INTEGER NOT NULL, oversize_frames INTEGER NOT NULL,
  unknown_frames INTEGER NOT NULL, dropped_bytes INTEGER NOT NULL
) STRICT;

-- What the tool did and noticed: connected, lost the port, clock step, note by the user.
CREATE TABLE note (utc_ns INTEGER NOT NULL, kind TEXT NOT NULL, text TEXT NOT NULL) STRICT;

-- Since schema 2.
-- Averaged spectra of one rung of the ladder and one set of segments, put together from their parts:
-- both modes and their cross density. segment_set: idle|driven. skipped: segments passed over to save
-- time; other: because they belong to the other set. The first bin of codes is first_bin; its
-- frequency is bin * rate / 8^rung / points. codes: seven bytes per bin (WIRE.md, power and cross codes).
CREATE TABLE spectra (
  run INTEGER NOT NULL, first_sample INTEGER NOT NULL, span_samples INTEGER NOT NULL,
  segment_set TEXT NOT NULL, rung INTEGER NOT NULL, points INTEGER NOT NULL,
  segments INTEGER NOT NULL, skipped INTEGER NOT NULL, other INTEGER NOT NULL,
  first_bin INTEGER NOT NULL, codes BLOB NOT NULL,
  PRIMARY KEY (run, first_sample, rung, segment_set)
) STRICT, WITHOUT ROWID;

-- Since schema 3.
-- Changes of the sampling rate: from first_sample on, until the next one. The counter goes on, it counts
-- pairs.
CREATE TABLE rate (
  run INTEGER NOT NULL, number INTEGER NOT NULL,
  first_sample INTEGER NOT NULL, sample_rate_mhz INTEGER NOT NULL,
  PRIMARY KEY (run, number)
) STRICT, WITHOUT ROWID;
