//! Why added capacitors say nothing, or less than they seem to: each with what to change on the bench.

use serde::{Deserialize, Serialize};

/// A reason to trust the values less.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize)]
pub struct AddedDoubt {
    /// Which kind.
    pub name: AddedDoubtName,
    /// What was seen, and what to change on the bench.
    pub sentence: String,
}

/// Kinds of doubt about added capacitors.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum AddedDoubtName {
    /// The points lie on no straight line.
    NotALine,
    /// The period moved little.
    SmallShift,
    /// A capacitor has no stated uncertainty.
    CapacitorExact,
    /// The records tell no bulk or reflected voltage.
    VoltagesUnknown,
    /// The bare node, measured again, has another frequency.
    BareNodeMoved,
}

/// Why the points say nothing.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum AddedRefusal {
    /// Not enough different capacitors.
    #[error(
        "{0} different capacitance{s} among the records, and two are needed: record the bare node and the node with a capacitor \
         of known value across it", s = if *.0 == 1 { "" } else { "s" }
    )]
    TooFewCapacitors(usize),
    /// A number that is none.
    #[error(
        "record {record} has {what}: a capacitance must be zero or more, a frequency positive, and the uncertainty of the \
         frequency more than zero"
    )]
    Unusable {
        /// Which record, counted from one.
        record: usize,
        /// What is wrong with it.
        what: String,
    },
    /// More capacitance, and the ring no slower.
    #[error(
        "the ring does not slow down as capacitance is added: {from_hz} with {from_f}, and {to_hz} with {to_f}. Check that the \
         capacitor sits between drain and source with short leads, and that each file belongs to the value before it"
    )]
    NotFalling {
        /// Frequency with less capacitance.
        from_hz: String,
        /// Less capacitance.
        from_f: String,
        /// Frequency with more capacitance.
        to_hz: String,
        /// More capacitance.
        to_f: String,
    },
    /// The values would be too uncertain to mean anything.
    #[error(
        "the shift is too small to say anything: the period grew {period_ratio:.3} times, from which the inductance is uncertain \
         by {inductance_percent:.0} % and the capacitance by {capacitance_percent:.0} % (one standard deviation; {limit:.0} % at \
         most). Aim for 1.5 to 2 times{advice}, and capture longer rings", limit = 100.0 * super::LARGEST_UNCERTAINTY
    )]
    ShiftTooSmall {
        /// Longest period over shortest.
        period_ratio: f64,
        /// Relative standard uncertainty of the inductance.
        inductance_percent: f64,
        /// Relative standard uncertainty of the capacitance.
        capacitance_percent: f64,
        /// A capacitor to try.
        advice: String,
    },
    /// The records belong to different working points.
    #[error(
        "the {what} voltage is {one_v:.1} V in one record and {other_v:.1} V in another: {percent:.1} % of the node's voltage, where \
         {allowed:.1} % will do; {remedy}"
    )]
    VoltagesDiffer {
        /// `bulk` or `reflected`.
        what: &'static str,
        /// Lowest voltage.
        one_v: f64,
        /// Highest voltage.
        other_v: f64,
        /// Difference over the voltage the node stands at: the bulk's, or the plateau's for the reflected voltage.
        percent: f64,
        /// Tolerance.
        allowed: f64,
        /// What to do.
        remedy: &'static str,
    },
    /// The weighted line does not come to rest or has no meaning.
    #[error(
        "no straight line with a positive inductance and capacitance goes through the points: check the values of the capacitors \
         and that every record shows the same ring"
    )]
    NoLine,
}
