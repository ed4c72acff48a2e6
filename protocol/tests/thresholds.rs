//! Deciding what a differential voltage means: exact at the thresholds, safe for any threshold.

use legwise_protocol::receivers::{Decision, TABLE, Threshold};

#[test]
fn a_voltage_on_a_threshold_is_decided_and_one_microvolt_inside_is_not() {
    for receiver in &TABLE {
        let threshold = receiver.threshold.value;
        let (low_uv, high_uv) = (threshold.low_mv * 1000, threshold.high_mv * 1000);
        assert_eq!(threshold.decide(high_uv), Decision::High, "{}", receiver.name);
        assert_eq!(threshold.decide(high_uv - 1), Decision::Undefined, "{}", receiver.name);
        assert_eq!(threshold.decide(low_uv + 1), Decision::Undefined, "{}", receiver.name);
        assert_eq!(threshold.decide(low_uv), Decision::Low, "{}", receiver.name);
    }
}

#[test]
fn thresholds_beyond_the_range_of_microvolts_are_never_reached() {
    let widest = Threshold { low_mv: i32::MIN, high_mv: i32::MAX };
    for microvolts in [i32::MIN, -1, 0, i32::MAX] {
        assert_eq!(widest.decide(microvolts), Decision::Undefined);
    }
}
