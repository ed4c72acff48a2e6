//! What each bus standard lets a receiver bear, each number with its source and whether it was checked.
//!
//! Voltages are against the *receiver's own* common, not protective earth and not the driver's common.
//! "Seen" means the number was read in the named secondary source (data sheets, application notes,
//! manuals that quote the standard); no paid standard was opened in full. "From memory" means nobody
//! checked it: such numbers are marked wherever they are printed.

use crate::limits::{LimitSet, Window};
use postcard::experimental::max_size::MaxSize;
use serde::{Deserialize, Serialize};

/// Names a row of [`TABLE`]. Wire format: append, never reorder.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Hash, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
#[repr(u8)]
pub enum ReceiverId {
    /// TIA/EIA-485-A.
    #[default]
    Tia485A = 0,
    /// TIA/EIA-422-B.
    Tia422B = 1,
    /// ITU-T V.11.
    V11 = 2,
    /// ISO 11898-2, 2003 and older.
    CanHighSpeed2003 = 3,
    /// ISO 11898-2:2016 and later.
    CanHighSpeed2016 = 4,
    /// ISO 11898-3.
    CanFaultTolerant = 5,
    /// SAE J1939-11 / -15.
    J1939 = 6,
    /// TIA/EIA-644-A (LVDS).
    Lvds644A = 7,
    /// TIA/EIA-899 (M-LVDS), type 1 receiver.
    MlvdsType1 = 8,
    /// TIA/EIA-899 (M-LVDS), type 2 receiver.
    MlvdsType2 = 9,
    /// FlexRay electrical physical layer.
    FlexRay = 10,
    /// MIL-STD-1553B.
    Mil1553B = 11,
    /// IEC 61158-2 type 1 (MBP, 31.25 kbit/s).
    Mbp = 12,
    /// Limits the user brought.
    Custom = 13,
}

/// Whether a number was read somewhere or only remembered.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Standing {
    /// Read in the named source.
    Seen,
    /// From memory; not verified.
    FromMemory,
}

/// A figure with where it comes from.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Sourced<T> {
    /// The figure.
    pub value: T,
    /// Source, in words a reader can look up.
    pub source: &'static str,
    /// Whether it was checked against that source.
    pub standing: Standing,
}

/// Differential input that a receiver need not decide, in millivolts: below `low` one state, above
/// `high` the other.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Threshold {
    /// At or below: the low (recessive) state.
    pub low_mv: i32,
    /// At or above: the high (dominant) state.
    pub high_mv: i32,
}

/// What a differential voltage means to a receiver.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Decision {
    /// At or below the lower threshold.
    Low,
    /// Between the thresholds: the receiver may decide either way.
    Undefined,
    /// At or above the upper threshold.
    High,
}

impl Threshold {
    /// What `microvolts` of differential mode mean.
    pub const fn decide(self, microvolts: i32) -> Decision {
        // In 64 bits: a threshold of the user's own may lie beyond ±2147 V.
        if microvolts as i64 >= self.high_mv as i64 * 1000 {
            Decision::High
        } else if microvolts as i64 <= self.low_mv as i64 * 1000 {
            Decision::Low
        } else {
            Decision::Undefined
        }
    }
}

/// One interface.
#[derive(Clone, Copy, Debug)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Receiver {
    /// Its wire number.
    pub id: ReceiverId,
    /// The name users type.
    pub name: &'static str,
    /// The standard's own name.
    pub title: &'static str,
    /// Window for each terminal.
    pub terminal: Option<Sourced<Window>>,
    /// Window for the average of the two.
    pub average: Option<Sourced<Window>>,
    /// Differential thresholds.
    pub threshold: Sourced<Threshold>,
    /// What a reader must know before relying on the row.
    pub note: &'static str,
    /// |DM| in millivolts at or below which the pair is taken as not driven (between the idle level
    /// and the weakest driven level of this interface; common practice, no source).
    pub idle_below_mv: u32,
}

impl Receiver {
    /// The windows the device checks. The standard's rule decides which exist: per terminal, on the
    /// average, or both.
    pub const fn limits(&self) -> LimitSet {
        LimitSet {
            terminal: match self.terminal {
                Some(sourced) => Some(sourced.value),
                None => None,
            },
            average: match self.average {
                Some(sourced) => Some(sourced.value),
                None => None,
            },
        }
    }
}

/// The row of `id`; `None` for [`ReceiverId::Custom`].
pub fn by_id(id: ReceiverId) -> Option<&'static Receiver> {
    TABLE.iter().find(|receiver| receiver.id == id)
}

/// The row a user names: exact name, case ignored.
pub fn by_name(name: &str) -> Option<&'static Receiver> {
    TABLE.iter().find(|receiver| receiver.name.eq_ignore_ascii_case(name))
}

const fn seen<T>(value: T, source: &'static str) -> Sourced<T> {
    Sourced { value, source, standing: Standing::Seen }
}

const fn remembered<T>(value: T, source: &'static str) -> Sourced<T> {
    Sourced { value, source, standing: Standing::FromMemory }
}

const fn mv(low: i32, high: i32) -> Window {
    Window::from_millivolts(low, high)
}

const fn threshold(low_mv: i32, high_mv: i32) -> Threshold {
    Threshold { low_mv, high_mv }
}

/// All interfaces, in wire order.
pub const TABLE: [Receiver; 13] = [
    Receiver {
        id: ReceiverId::Tia485A,
        name: "tia485a",
        title: "TIA/EIA-485-A (RS-485: Modbus serial, PROFIBUS DP, BACnet MS/TP, DMX512)",
        terminal: Some(seen(
            mv(-7_000, 12_000),
            "485-A cl. 4.3.1 as quoted by TI ISO14xx data sheet (any bus terminal) and a serial-port textbook",
        )),
        average: Some(seen(
            mv(-7_000, 12_000),
            "TI SLLA272, The RS-485 Design Guide; a serial-port textbook",
        )),
        threshold: seen(threshold(-200, 200), "485-A cl. 4.3.2 as quoted by TI SLLA272 and TI AM26LV32E"),
        note: "Both readings hold together: the average and each terminal must stay inside; the terminal window binds first.",
        idle_below_mv: 600,
    },
    Receiver {
        id: ReceiverId::Tia422B,
        name: "tia422b",
        title: "TIA/EIA-422-B (RS-422)",
        terminal: Some(remembered(mv(-10_000, 10_000), "422-B receiver input range")),
        average: Some(seen(
            mv(-7_000, 7_000),
            "RS-422/485 interface-card manuals; camera-interface DC table citing 422-B",
        )),
        threshold: seen(
            threshold(-200, 200),
            "RS-422/485 interface-card manuals; a computer maker's page on EIA-422-A levels",
        ),
        note: "The terminal limit is from memory. Many 422 chips bear more than the standard asks.",
        idle_below_mv: 600,
    },
    Receiver {
        id: ReceiverId::V11,
        name: "v11",
        title: "ITU-T V.11",
        terminal: Some(remembered(mv(-10_000, 10_000), "V.11 receiver input range")),
        average: Some(remembered(mv(-7_000, 7_000), "V.11 common-mode range")),
        threshold: remembered(threshold(-300, 300), "V.11 receiver sensitivity"),
        note: "Every number is from memory; 422-B calls itself compatible yet has 200 mV thresholds.",
        idle_below_mv: 600,
    },
    Receiver {
        id: ReceiverId::CanHighSpeed2003,
        name: "can-2003",
        title: "ISO 11898-2, 2003 and older (high-speed CAN)",
        terminal: None,
        average: Some(seen(
            mv(-2_000, 7_000),
            "TI SN65HVD23x data sheet; TI SLOA101B; TI SN75LBC031 data sheet",
        )),
        threshold: seen(threshold(500, 900), "TI SN65HVD23x and SN75LBC031 data sheets"),
        note: "A bus that mixes generations is judged by this narrower window.",
        idle_below_mv: 700,
    },
    Receiver {
        id: ReceiverId::CanHighSpeed2016,
        name: "can-2016",
        title: "ISO 11898-2:2016 and later (high-speed CAN)",
        terminal: Some(remembered(
            mv(-12_000, 12_000),
            "reading of the 2016 text that each pin is meant; the figure itself is in TI TCAN1044V and Infineon TLE9263",
        )),
        average: Some(seen(
            mv(-12_000, 12_000),
            "TI TCAN1044V (SLLSFG2), TCAN1146-Q1; Infineon TLE9263 table 17",
        )),
        threshold: seen(threshold(500, 900), "Infineon TLE9263 table 17"),
        note: "That the window applies to each pin is from memory. Survival ratings of parts (such as 58 V) are not a working range.",
        idle_below_mv: 700,
    },
    Receiver {
        id: ReceiverId::CanFaultTolerant,
        name: "can-ft",
        title: "ISO 11898-3 (fault-tolerant CAN, up to 125 kbit/s)",
        terminal: None,
        average: None,
        threshold: seen(threshold(-3_500, -2_900), "MAX3055 data sheet p. 3 (CANH-CANL, 5 V part)"),
        note: "Defines no common-mode window: the range cannot be judged. Recessive rests near -5 V.",
        idle_below_mv: 600,
    },
    Receiver {
        id: ReceiverId::J1939,
        name: "j1939",
        title: "SAE J1939-11 / -15",
        terminal: None,
        average: Some(remembered(
            mv(-2_000, 7_000),
            "J1939-11 common-mode range, taken to equal ISO 11898-2:2003",
        )),
        threshold: seen(threshold(500, 900), "as ISO 11898-2 (TI SN65HVD23x data sheet)"),
        note: "The window is from memory. A summary's 'common mode 1.5 to 3.5 V' reads like the driver's offset, not the receiver's window.",
        idle_below_mv: 700,
    },
    Receiver {
        id: ReceiverId::Lvds644A,
        name: "lvds",
        title: "TIA/EIA-644-A (LVDS)",
        terminal: Some(seen(mv(0, 2_400), "TIA PN-4584 (644-A draft) annex B")),
        average: Some(seen(mv(50, 2_350), "derived from the terminal window at 100 mV differential")),
        threshold: seen(threshold(-100, 100), "TI SN65LVDS109 data sheet p. 5; TI DS90LV012A"),
        note: "The receiver sits at the end of the line; the ground shift it bears is about 1 V.",
        idle_below_mv: 100,
    },
    Receiver {
        id: ReceiverId::MlvdsType1,
        name: "mlvds-1",
        title: "TIA/EIA-899 (M-LVDS), type 1 receiver",
        terminal: Some(seen(mv(-1_400, 3_800), "DS91M040 data sheet")),
        average: Some(seen(mv(-1_375, 3_775), "DS91M040 data sheet, threshold test voltages")),
        threshold: seen(threshold(-50, 50), "DS91M040 data sheet, function table"),
        note: "-1 to 3.4 V is often quoted instead; not adopted here.",
        idle_below_mv: 150,
    },
    Receiver {
        id: ReceiverId::MlvdsType2,
        name: "mlvds-2",
        title: "TIA/EIA-899 (M-LVDS), type 2 receiver",
        terminal: Some(seen(mv(-1_400, 3_800), "DS91M040 data sheet")),
        average: Some(seen(mv(-1_375, 3_775), "DS91M040 data sheet, threshold test voltages")),
        threshold: seen(threshold(50, 150), "DS91M040 data sheet, function table; an M-LVDS FAQ"),
        note: "Thresholds are offset so that an idle pair reads low.",
        idle_below_mv: 150,
    },
    Receiver {
        id: ReceiverId::FlexRay,
        name: "flexray",
        title: "FlexRay electrical physical layer",
        terminal: None,
        average: Some(seen(mv(-10_000, 15_000), "NXP TJA1085 data sheet")),
        threshold: seen(threshold(-300, 300), "NXP TJA1085 data sheet: |DM| 150 to 300 mV is grey"),
        note: "The bus pin's 60 V is survival only.",
        idle_below_mv: 300,
    },
    Receiver {
        id: ReceiverId::Mil1553B,
        name: "mil1553b",
        title: "MIL-STD-1553B",
        terminal: Some(remembered(
            mv(-10_000, 10_000),
            "MIL-STD-1553B common-mode rejection test, line to ground",
        )),
        average: None,
        threshold: remembered(threshold(-430, 430), "0.86 V p-p at the transformer stub"),
        note: "Every number is from memory. Do not clip onto flight systems.",
        idle_below_mv: 430,
    },
    Receiver {
        id: ReceiverId::Mbp,
        name: "mbp",
        title: "IEC 61158-2 type 1 (MBP, 31.25 kbit/s)",
        terminal: None,
        average: None,
        threshold: seen(
            threshold(-75, 75),
            "0.15 V p-p, automation forum text; signal levels from a PROFIBUS manual",
        ),
        note: "The pair floats and carries 9 to 32 V between its wires: no window against a common exists. Never in explosive atmospheres unless certified.",
        idle_below_mv: 100,
    },
];

const _: () = {
    // The row number is the wire number.
    let mut row = 0;
    while row < TABLE.len() {
        assert!(TABLE[row].id as usize == row);
        row += 1;
    }
};
