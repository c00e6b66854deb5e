//! The values of a run as a table for the terminal.

use super::output;
use ringstep::{record::Results, sequence::event::PointValues};
use ringstep_analysis::quantity::{Measured, Unit};

/// One row a quantity, one column a point.
pub(super) fn values_table(results: &Results) -> String {
    let rows = rows();
    let mut heading = vec!["95 % intervals".to_owned()];
    heading.extend(results.points.iter().map(|point| format!("{} V line", point.line_v)));
    let heading: Vec<&str> = heading.iter().map(String::as_str).collect();
    output::table(
        &heading,
        rows.into_iter().map(|(name, unit, pick)| {
            let cells = results.points.iter().map(|point| text(pick(&point.values), unit));
            std::iter::once(name.to_owned()).chain(cells).collect()
        }),
    )
}

fn text(value: Option<Measured>, unit: Option<Unit>) -> String {
    match (value, unit) {
        (None, _) => "-".to_owned(),
        (Some(value), Some(unit)) => value.text_with_95_percent_interval(unit),
        (Some(value), None) => format!("{:.2} +- {:.2}", value.value, 2.0 * value.standard_uncertainty),
    }
}

/// Name, unit where there is one, and where the value stands.
type Row = (&'static str, Option<Unit>, fn(&PointValues) -> Option<Measured>);

fn rows() -> [Row; 11] {
    [
        ("node capacitance", Some(Unit::Farad), |v| v.node_capacitance_f),
        ("  without the probe", Some(Unit::Farad), |v| v.node_capacitance_without_probe_f),
        ("leakage inductance", Some(Unit::Henry), |v| v.leakage_inductance_h),
        ("relaxation ring", Some(Unit::Hertz), |v| v.relaxation_frequency_hz),
        ("  quality factor", None, |v| v.relaxation_quality_factor),
        ("leakage ring", Some(Unit::Hertz), |v| v.leakage_frequency_hz),
        ("  quality factor", None, |v| v.leakage_quality_factor),
        ("reflected voltage", Some(Unit::Volt), |v| v.reflected_voltage_v),
        ("bulk voltage", Some(Unit::Volt), |v| v.bulk_voltage_v),
        ("peak drain voltage", Some(Unit::Volt), |v| v.peak_drain_voltage_v),
        ("turn-on rate", Some(Unit::Hertz), |v| v.turn_on_rate_hz),
    ]
}
