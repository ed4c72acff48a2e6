//! The spectral part of the report: which rung tells which line.

use super::fixture::*;
use legwise_protocol::receivers::ReceiverId;

/// Three rungs; bins up to 0.4 of each rung's rate, from where the next one below reaches 0.3 of its own.
fn ladder(fixture: &Fixture, set: &str, segments: i64, lines: [(usize, f64); 3]) {
    let ranges = [39_usize..513, 39..410, 0..410];
    for (rung, (range, (bin, amplitude_v))) in (0..).zip(ranges.into_iter().zip(lines)) {
        let common = rung_density(rung, 1e-10, bin, amplitude_v);
        let differential = rung_density(rung, 4e-10, bin, amplitude_v / 100.0);
        let first_bin = range.start as i64;
        let modes = [&common[range.clone()], &differential[range]];
        fixture.spectra(set, (rung, first_bin), modes, segments);
    }
}

#[test]
fn lines_of_all_rungs_are_listed_with_their_rung() {
    let fixture = Fixture::single(ReceiverId::Tia485A, &quiet_totals(1_000_000));
    // 100 kHz or so at the full rate, 6.1 kHz on the middle rung, 53 Hz on the lowest.
    ladder(&fixture, "idle", 100, [(205, 0.5), (100, 0.25), (7, 1.0)]);
    let report = fixture.report();
    let spectrum = report.spectrum;
    assert_eq!(spectrum.left_out, 0);
    for (mode, share) in [(spectrum.common.unwrap(), 1.0), (spectrum.differential.unwrap(), 0.01)] {
        let expected = [(2_u8, 7.0, 1.0), (0, 205.0, 0.5), (1, 100.0, 0.25)];
        assert_eq!(mode.lines.len(), 3, "{:?}", mode.lines);
        for (line, (rung, bin, amplitude_v)) in mode.lines.iter().zip(expected) {
            let bin_hz = 500_000.0 / 8_f64.powi(rung.into()) / 1024.0;
            assert_eq!((line.rung, line.method), (rung, "interpolated"));
            assert!((line.frequency_hz / (bin * bin_hz) - 1.0).abs() < 1e-3, "{line:?}");
            // Power codes are good for 0.024 % of the amplitude, six digits of the rest are no matter.
            assert!((line.amplitude_v / (share * amplitude_v) - 1.0).abs() < 1e-3, "{line:?}");
        }
        // Crossovers at 0.35 of the lower rung's rate.
        let bounds: Vec<_> = mode.rungs.iter().map(|rung| (rung.from_hz, rung.to_hz)).collect();
        let (top, bottom) = (0.35 * 62_500.0, 0.35 * 7_812.5);
        assert_eq!(bounds, [(top, 250_000.0), (bottom, top), (0.0, bottom)]);
        assert_eq!((mode.bin_hz, mode.rungs[2].bin_hz), (500_000.0 / 1024.0, 7_812.5 / 1024.0));
        assert!((mode.unresolved_below_hz - 2.5 * 7_812.5 / 1024.0).abs() < 1e-9);
        let floor = (1e-10_f64 * if share < 1.0 { 4.0 } else { 1.0 }).sqrt();
        for rung in &mode.rungs {
            assert!((rung.noise_floor_v_per_rthz / floor - 1.0).abs() < 5e-3, "{rung:?}");
        }
    }
}

#[test]
fn idle_and_driven_spectra_are_shown_together_weighted_by_segments() {
    let fixture = Fixture::single(ReceiverId::Tia485A, &quiet_totals(1_000_000));
    ladder(&fixture, "idle", 300, [(205, 0.6), (100, 0.6), (7, 0.6)]);
    ladder(&fixture, "driven", 100, [(205, 0.2), (100, 0.2), (7, 0.2)]);
    fixture.spectrum(1, 0, 0, &tone_density(1e-10, 41, 0.75), 100);
    let spectrum = fixture.report().spectrum;
    assert_eq!(spectrum.left_out, 1, "a spectrum of one mode beside those of both");
    let common = spectrum.common.unwrap();
    assert_eq!((common.spectra, common.segments, common.skipped_segments), (2, 400, 0));
    let expected = ((3.0 * 0.36 + 0.04) / 4.0_f64).sqrt();
    assert_eq!(common.lines.len(), 3);
    for line in &common.lines {
        assert!((line.amplitude_v / expected - 1.0).abs() < 1e-3, "{line:?}");
    }
}

/// A line walks over the crossover in quarter bins of the higher rung: it is listed once, as what it is,
/// whichever rung tells it.
#[test]
fn a_line_near_a_crossover_is_listed_once_with_its_amplitude() {
    let crossover_hz = 0.35 * 62_500.0;
    for step in -16..=16 {
        let frequency_hz = crossover_hz + f64::from(step) * 0.25 * RATE_HZ / 1024.0;
        let fixture = Fixture::single(ReceiverId::Tia485A, &quiet_totals(1_000_000));
        for (rung, range) in [(0_u8, 39_usize..513), (1, 0..410)] {
            let density = hann_line(rung, 1e-10, frequency_hz, 0.5);
            let part = &density[range.clone()];
            fixture.spectra("idle", (rung, range.start as i64), [part, part], 100);
        }
        let lines = fixture.report().spectrum.common.unwrap().lines;
        assert_eq!(lines.len(), 1, "{frequency_hz} Hz: {lines:?}");
        let rate_hz = RATE_HZ / 8_f64.powi(lines[0].rung.into());
        assert!((lines[0].frequency_hz - frequency_hz).abs() < 0.02 * rate_hz / 1024.0, "{lines:?}");
        assert!((lines[0].amplitude_v / 0.5 - 1.0).abs() < 2e-3, "{lines:?}");
        if (frequency_hz - crossover_hz).abs() > 2.1 * RATE_HZ / 1024.0 {
            assert_eq!(lines[0].rung, u8::from(frequency_hz < crossover_hz), "{frequency_hz} Hz");
        }
    }
}

#[test]
fn a_log_of_devices_before_the_ladder_shows_one_rung() {
    let common = night().report().spectrum.common.unwrap();
    let rungs: Vec<_> = common.rungs.iter().map(|rung| (rung.rung, rung.from_hz, rung.to_hz)).collect();
    assert_eq!(rungs, [(0, 0.0, 250_000.0)]);
    assert_eq!((common.lines[0].rung, common.rungs[0].segments), (0, 100));
}
