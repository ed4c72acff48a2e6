//! What speaks for and against a name, as data, and the rule that makes a confidence of it.

/// One observation.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Fact {
    /// The fundamental stands this far above its floor, dB.
    FundamentalAboveFloorDb(f64),
    /// No line at the fundamental itself.
    FundamentalMissing,
    /// So many multiples of the fundamental were found ...
    MultiplesFound(u32),
    /// ... of so many that a usual source of that level would show, and so many of those were not found.
    MultiplesMissing(u32),
    /// Multiples that fall on lines of another family.
    MultiplesShared(u32),
    /// Pairs of lines at equal distances from multiples of the fundamental.
    SidebandPairs(u32),
    /// Multiples whose power spreads to both sides, as unresolved sidebands do.
    SpreadMultiples(u32),
    /// The fundamental lies in the range usual for such a source.
    InUsualRange,
    /// It does not.
    OutsideUsualRange,
    /// Width of the fundamental over its frequency, where wider than the window.
    Smeared(f64),
    /// A single narrow line and nothing else.
    Alone,
    /// Level of the differential over the common mode, dB.
    DifferentialOverCommonDb(f64),
    /// Median density of the differential mode while driven over that while idle, dB.
    DrivenOverIdleDb(f64),
    /// Median density of the differential over the common mode while driven, dB.
    BroadbandOverCommonDb(f64),
    /// Rms of the differential mode while driven, V.
    DrivenRmsV(f64),
    /// Share of the spectrum's variation (in dB) that random data of the bit rate explain.
    DataShapeExplains(f64),
    /// The estimated bit rate over the hinted one.
    BitRateOverHint(f64),
    /// Share of the lines at multiples of the rate of characters.
    CharacterLines(f64),
    /// A second sample rate puts the line above half the rate, at this frequency, Hz.
    TrueFrequencyHz(f64),
}

/// A fact and how much it weighs: positive speaks for the name, negative against it.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Evidence {
    /// What was seen.
    pub fact: Fact,
    /// Its weight, natural logarithm of odds.
    pub weight: f64,
}

impl Evidence {
    /// Weighs a fact.
    pub(super) const fn new(fact: Fact, weight: f64) -> Self {
        Self { fact, weight }
    }
}

/// `1/(1 + e^−w)` of the sum of the weights.
pub(super) fn confidence(evidence: &[Evidence]) -> f64 {
    let weight: f64 = evidence.iter().map(|evidence| evidence.weight).sum();
    1.0 / (1.0 + (-weight).exp())
}
