//! Values as the report prints them: prefix, 95 % interval, true signs.

use crate::sequence::event::{PointValues, Purpose};
use ringstep_analysis::{
    findings::CycleMode,
    quantity::{Measured, Unit},
};

/// A quantity of the table: name, unit, and where it stands.
pub(super) type Quantity = (&'static str, Unit, fn(&PointValues) -> Option<Measured>);

/// Every quantity of a point, in the order of the table.
pub(super) const QUANTITIES: [Quantity; 11] = [
    ("Node capacitance, probe included", Unit::Farad, |v| v.node_capacitance_f),
    ("Node capacitance without the probe", Unit::Farad, |v| v.node_capacitance_without_probe_f),
    ("Leakage inductance", Unit::Henry, |v| v.leakage_inductance_h),
    ("Relaxation-ring frequency, undamped", Unit::Hertz, |v| v.relaxation_frequency_hz),
    ("Relaxation-ring Q", Unit::One, |v| v.relaxation_quality_factor),
    ("Leakage-ring frequency, undamped", Unit::Hertz, |v| v.leakage_frequency_hz),
    ("Leakage-ring Q", Unit::One, |v| v.leakage_quality_factor),
    ("Reflected voltage", Unit::Volt, |v| v.reflected_voltage_v),
    ("Bulk voltage", Unit::Volt, |v| v.bulk_voltage_v),
    ("Peak drain voltage", Unit::Volt, |v| v.peak_drain_voltage_v),
    ("Turn-on rate", Unit::Hertz, |v| v.turn_on_rate_hz),
];

/// `"92.4 pF ± 1.4 pF"`: the value and the half-width of its 95 % interval.
pub(super) fn with_interval(value: Measured, unit: Unit) -> String {
    tidy(&value.text_with_95_percent_interval(unit))
}

/// A bare quantity to four digits: `"1.25 µs"`.
pub(super) fn short(value: f64, unit: &str) -> String {
    let magnitude = value.abs();
    let prefixes = [(1e6, "M"), (1e3, "k"), (1.0, ""), (1e-3, "m"), (1e-6, "µ"), (1e-9, "n"), (1e-12, "p")];
    let found = prefixes.into_iter().find(|(worth, _)| magnitude >= worth * 0.9999);
    let (worth, prefix) = found.unwrap_or((1.0, ""));
    let scaled = value / worth;
    let decimals = if scaled.abs() >= 100.0 {
        0
    } else if scaled.abs() >= 10.0 {
        1
    } else {
        2
    };
    let text = format!("{scaled:.decimals$}");
    let text = if text.contains('.') { text.trim_end_matches('0').trim_end_matches('.') } else { &text };
    format!("{} {prefix}{unit}", text.replace('-', "\u{2212}"))
}

/// True signs in place of those a keyboard has.
fn tidy(text: &str) -> String {
    let text = text.replace("+-", "±").replace('-', "\u{2212}");
    ["H", "F", "V", "A", "W", "Hz", "s"]
        .iter()
        .fold(text, |text, unit| text.replace(&format!(" u{unit}"), &format!(" µ{unit}")))
}

pub(super) fn purpose(purpose: Purpose) -> &'static str {
    match purpose {
        Purpose::Survey => "survey",
        Purpose::RelaxationRing => "relaxation ring",
        Purpose::LeakageRing => "leakage ring",
    }
}

pub(super) fn mode(mode: CycleMode) -> &'static str {
    match mode {
        CycleMode::Continuous => "continuous",
        CycleMode::Discontinuous => "discontinuous",
        CycleMode::Skipped => "skipped",
        CycleMode::Incomplete => "incomplete",
    }
}
