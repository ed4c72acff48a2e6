//! `SCHEMA.md` against what is emitted: same keys, same types, nothing missing on either side.

use super::fixture::{night, options};
use super::ladder::night_of_ladder;
use crate::receiver_table;
use crate::report::{Options, Report, json};
use crate::spectrum::conversion::{ConversionFloor, FloorPoint};
use serde_json::Value;
use std::collections::{BTreeMap, BTreeSet};

/// Section name to (key, type).
type Schema = BTreeMap<String, BTreeMap<String, String>>;

fn schema() -> Schema {
    let mut sections = Schema::new();
    let mut name = String::new();
    for line in include_str!("../SCHEMA.md").lines() {
        if let Some(title) = line.strip_prefix("## ") {
            name = title.trim_matches('`').to_string();
        } else if let Some(row) = line.strip_prefix("| `") {
            let (key, rest) = row.split_once("` | ").expect("a key");
            let kind = rest.split(" | ").next().expect("a type").trim();
            let cells = line.replace("\\|", "/").matches('|').count();
            assert_eq!(cells, 5, "four columns: {line}");
            let before = sections.entry(name.clone()).or_default().insert(key.to_string(), kind.to_string());
            assert!(before.is_none(), "{key} twice in {name}");
        }
    }
    sections
}

/// Compares `value` with a type; notes each key seen with a value in `filled`.
fn check(schema: &Schema, kind: &str, value: &Value, path: &str, filled: &mut BTreeSet<(String, String)>) {
    let (kind, may_be_null) = kind.strip_suffix(", or null").map_or((kind, false), |kind| (kind, true));
    if value.is_null() {
        assert!(may_be_null, "{path} is null but documented as {kind}");
        return;
    }
    if let Some(item) = kind.strip_prefix("list of ") {
        let list = value.as_array().unwrap_or_else(|| panic!("{path} is no list"));
        list.iter().for_each(|value| check(schema, item, value, &format!("{path}[]"), filled));
        return;
    }
    let is_right = match kind {
        "text" => value.is_string(),
        "whole number" => value.is_i64() || value.is_u64(),
        "number" => value.is_number(),
        "yes/no" => value.is_boolean(),
        section => {
            let section = section.trim_matches('`');
            return check_object(schema, section, value, path, filled);
        }
    };
    assert!(is_right, "{path} = {value} is not {kind}");
}

fn check_object(
    schema: &Schema,
    section: &str,
    value: &Value,
    path: &str,
    filled: &mut BTreeSet<(String, String)>,
) {
    let documented = schema.get(section).unwrap_or_else(|| panic!("{path}: no section {section}"));
    let object = value.as_object().unwrap_or_else(|| panic!("{path} is no object"));
    let emitted: BTreeSet<&String> = object.keys().collect();
    let expected: BTreeSet<&String> = documented.keys().collect();
    assert_eq!(emitted, expected, "keys of {path} (section {section})");
    for (key, value) in object {
        let is_empty = value.is_null() || value.as_array().is_some_and(Vec::is_empty);
        if !is_empty {
            filled.insert((section.to_string(), key.clone()));
        }
        check(schema, &documented[key], value, &format!("{path}.{key}"), filled);
    }
}

#[test]
fn schema_page_and_emitted_keys_are_the_same() {
    let schema = schema();
    let mut filled = BTreeSet::new();
    for fixture in [night(), night_of_ladder()] {
        let report = json::value(&fixture.report()).unwrap();
        check(&schema, "`report`", &report, "report", &mut filled);
    }
    let floor = FloorPoint {
        frequency_hz: 4_000.0,
        real: 0.01,
        imaginary: 0.0,
        radius: 0.001,
        common_noise_v2_per_hz: None,
    };
    let with_floor = Options { floor: ConversionFloor::new(vec![floor]).ok(), ..options(10) };
    let report = Report::from_log(&night_of_ladder().log, &with_floor).unwrap();
    check(&schema, "`report`", &json::value(&report).unwrap(), "report", &mut filled);
    let receivers: Value = serde_json::from_str(&receiver_table::json(None).unwrap()).unwrap();
    check(&schema, "`receivers`", &receivers, "receivers", &mut filled);
    let documented: BTreeSet<(String, String)> = schema
        .iter()
        .flat_map(|(section, keys)| keys.keys().map(|key| (section.clone(), key.clone())))
        .collect();
    let never_filled: Vec<_> = documented.difference(&filled).collect();
    assert!(never_filled.is_empty(), "documented but not filled by the example: {never_filled:?}");
}

#[test]
fn the_keys_others_rely_on_are_there() {
    let report = json::value(&night().report()).unwrap();
    for path in [
        "/recording/pairs",
        "/recording/sample_rate_hz",
        "/recording/clipped_samples",
        "/receiver/name",
        "/worst/leg_max_v",
        "/worst/leg_min_v",
        "/worst/cm_max_v",
        "/worst/cm_min_v",
        "/worst/margin_v",
        "/levels/idle_v",
        "/levels/driven_high_v",
        "/levels/driven_low_v",
        "/excursions/count",
        "/excursions/samples_outside",
        "/excursions/list/0/first_sample",
        "/excursions/list/0/samples",
        "/excursions/list/0/extreme_v",
        "/verdict",
    ] {
        assert!(report.pointer(path).is_some_and(|value| !value.is_null()), "{path}");
    }
    assert_eq!(report["schema"], "legwise-report/1");
}
