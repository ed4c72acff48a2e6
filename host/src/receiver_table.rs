//! The receiver table for people and for programs: what each interface lets a receiver bear, with
//! the source of each number and whether it was verified.
//!
//! The table itself lives in [`legwise_protocol::receivers`]; here it only becomes text and JSON
//! (keys in `report/SCHEMA.md`).

use crate::report::figures;
use crate::report::text::Style;
use crate::report::text::layout::{Align, labelled, paragraph, table};
use legwise_protocol::limits::Window;
use legwise_protocol::receivers::{Receiver, ReceiverId, Sourced, Standing, TABLE, Threshold};
use serde::Serialize;

/// Name and version of the JSON layout.
pub const SCHEMA: &str = "legwise-receivers/1";

/// The table as data.
#[derive(Clone, Debug, Serialize)]
pub struct ReceiverTable {
    /// [`SCHEMA`].
    pub schema: &'static str,
    /// Name of the receiver used where none is named.
    pub default: &'static str,
    /// The rows.
    pub receivers: Vec<ReceiverRow>,
}

/// One interface.
#[derive(Clone, Debug, Serialize)]
pub struct ReceiverRow {
    /// The name users type.
    pub name: &'static str,
    /// The standard's own name.
    pub title: &'static str,
    /// Window for each terminal; `null` when the standard defines none.
    pub terminal: Option<Figures>,
    /// Window for the average of the two; `null` when the standard defines none.
    pub average: Option<Figures>,
    /// Differential thresholds: at or below the lower one the low state, from the upper one on the
    /// high state, undecided between.
    pub threshold: Figures,
    /// |VA-VB| at or below which the pair is taken as not driven, V.
    pub idle_below_v: f64,
    /// What to know before relying on the row.
    pub note: &'static str,
}

/// Two figures and where they come from.
#[derive(Clone, Copy, Debug, PartialEq, Serialize)]
pub struct Figures {
    /// The lower one in V.
    pub low_v: f64,
    /// The upper one in V.
    pub high_v: f64,
    /// Where they come from.
    pub source: &'static str,
    /// `seen` (verified in the named secondary source) or `from-memory`.
    pub standing: &'static str,
}

impl Figures {
    fn new(low_v: f64, high_v: f64, source: &'static str, standing: Standing) -> Self {
        let standing = match standing {
            Standing::Seen => "seen",
            Standing::FromMemory => "from-memory",
        };
        Self { low_v, high_v, source, standing }
    }

    fn of_window(sourced: Sourced<Window>) -> Self {
        let Window { low, high } = sourced.value;
        let volts = |microvolts: i32| figures::volts_of_uv(i64::from(microvolts));
        Self::new(volts(low.uv()), volts(high.uv()), sourced.source, sourced.standing)
    }

    fn of_threshold(sourced: Sourced<Threshold>) -> Self {
        let Threshold { low_mv, high_mv } = sourced.value;
        let volts = |millivolts: i32| f64::from(millivolts) / 1000.0;
        Self::new(volts(low_mv), volts(high_mv), sourced.source, sourced.standing)
    }

    /// Both figures, with a star where they were not verified.
    fn short(&self) -> String {
        let star = if self.standing == "seen" { "" } else { " *" };
        format!("{} to {} V{star}", self.low_v, self.high_v)
    }

    fn long(&self) -> String {
        let standing = if self.standing == "seen" {
            "verified in a secondary source"
        } else {
            "FROM MEMORY, not verified"
        };
        format!("{} to {} V ({standing}: {})", self.low_v, self.high_v, self.source)
    }
}

impl ReceiverTable {
    /// The row of `receiver`, or all rows.
    pub fn of(receiver: Option<&Receiver>) -> Self {
        let default = TABLE.iter().find(|row| row.id == ReceiverId::default()).map_or("", |row| row.name);
        let rows = receiver.map_or_else(|| TABLE.iter().map(row).collect(), |one| vec![row(one)]);
        Self { schema: SCHEMA, default, receivers: rows }
    }
}

fn row(receiver: &Receiver) -> ReceiverRow {
    ReceiverRow {
        name: receiver.name,
        title: receiver.title,
        terminal: receiver.terminal.map(Figures::of_window),
        average: receiver.average.map(Figures::of_window),
        threshold: Figures::of_threshold(receiver.threshold),
        idle_below_v: f64::from(receiver.idle_below_mv) / 1000.0,
        note: receiver.note,
    }
}

/// The table (or one row in full) as terminal text.
pub fn text(receiver: Option<&Receiver>, style: Style) -> String {
    let data = ReceiverTable::of(receiver);
    match data.receivers.as_slice() {
        [one] => row_text(one, data.default, style),
        rows => table_text(rows, data.default, style),
    }
}

/// The table (or one row) as indented JSON text.
///
/// # Errors
/// None is expected: the table holds nothing JSON cannot say.
pub fn json(receiver: Option<&Receiver>) -> Result<String, serde_json::Error> {
    let mut text = serde_json::to_string_pretty(&ReceiverTable::of(receiver))?;
    text.push('\n');
    Ok(text)
}

fn table_text(rows: &[ReceiverRow], default: &str, style: Style) -> String {
    let window =
        |figures: Option<Figures>| figures.map_or_else(|| "none".to_string(), |figures| figures.short());
    let cells: Vec<Vec<String>> = rows
        .iter()
        .map(|row| {
            vec![row.name.to_string(), window(row.terminal), window(row.average), row.threshold.short()]
        })
        .collect();
    let columns = [
        ("name", Align::Left),
        ("each terminal", Align::Left),
        ("average of the two", Align::Left),
        ("undecided VA-VB", Align::Left),
    ];
    let mut text = style.strong("What a receiver bears, against its own common");
    text.push_str("\n\n");
    text.push_str(&table(&columns, &cells));
    text.push_str(&paragraph("* from memory, not verified. Everything else was read in a secondary source."));
    text.push('\n');
    for row in rows {
        text.push_str(&labelled(row.name, row.title));
    }
    text.push('\n');
    text.push_str(&paragraph(&format!(
        "{default} is used where none is named. Limits are inclusive. Sources and notes: name one receiver."
    )));
    text
}

fn row_text(row: &ReceiverRow, default: &str, style: Style) -> String {
    let is_default = if row.name == default { " (used where none is named)" } else { "" };
    let mut text = format!("{}{is_default}\n", style.strong(row.name));
    text.push_str(&labelled("standard", row.title));
    let window = |figures: Option<Figures>| {
        figures.map_or_else(
            || "no window is defined, so this is not judged".to_string(),
            |figures| figures.long(),
        )
    };
    text.push_str(&labelled("each terminal", &window(row.terminal)));
    text.push_str(&labelled("average", &window(row.average)));
    text.push_str(&labelled("undecided VA-VB", &row.threshold.long()));
    let idle = format!("|VA-VB| up to {} (common practice, no source)", figures::volts(row.idle_below_v));
    text.push_str(&labelled("taken as idle", &idle));
    text.push_str(&labelled("note", row.note));
    text
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::report::text::layout::{WIDTH, width};
    use legwise_protocol::receivers::by_name;

    #[test]
    fn every_receiver_is_in_the_table_with_its_windows() {
        let text = text(None, Style::PLAIN);
        for receiver in &TABLE {
            assert!(text.contains(receiver.title), "{} is missing", receiver.name);
        }
        // TIA-485-A: -7 to +12 V per terminal and on the average, 200 mV (TI SLLA272).
        let line = text.lines().find(|line| line.trim_start().starts_with("tia485a")).unwrap();
        assert_eq!(line.matches("-7 to 12 V").count(), 2, "{line}");
        assert!(line.contains("-0.2 to 0.2 V"), "{line}");
    }

    #[test]
    fn text_keeps_to_the_page_and_carries_no_colour_unless_asked() {
        for receiver in TABLE.iter().map(Some).chain([None]) {
            let plain = text(receiver, Style::PLAIN);
            assert!(plain.lines().all(|line| width(line) <= WIDTH), "{plain}");
            assert!(!plain.contains('\u{1b}'));
            assert!(text(receiver, Style::COLOURED).contains('\u{1b}'));
        }
    }

    #[test]
    fn numbers_from_memory_say_so_and_seen_ones_name_their_source() {
        let v11 = text(by_name("v11"), Style::PLAIN);
        assert_eq!(v11.matches("FROM MEMORY").count(), 3, "{v11}");
        let can = text(by_name("can-2003"), Style::PLAIN);
        assert!(can.contains("SN65HVD23x") && !can.contains("FROM MEMORY"), "{can}");
        assert!(text(None, Style::PLAIN).lines().any(|line| line.contains("v11") && line.contains(" *")));
    }

    #[test]
    fn json_holds_exact_volts() {
        let all: serde_json::Value = serde_json::from_str(&json(None).unwrap()).unwrap();
        assert_eq!(all["schema"], SCHEMA);
        assert_eq!(all["default"], "tia485a");
        assert_eq!(all["receivers"].as_array().unwrap().len(), TABLE.len());
        let one: serde_json::Value = serde_json::from_str(&json(by_name("mlvds-1")).unwrap()).unwrap();
        assert_eq!(one["receivers"][0]["average"]["high_v"], 3.775);
        assert!(one["receivers"][0]["terminal"]["source"].as_str().unwrap().contains("DS91M040"));
    }
}
