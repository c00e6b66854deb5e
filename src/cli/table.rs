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

fn text(value: Option<Measured>, unit: Unit) -> String {
    value.map_or_else(|| "-".to_owned(), |value| value.text_with_95_percent_interval(unit))
}

/// Name, unit, and where the value stands.
type Row = (&'static str, Unit, fn(&PointValues) -> Option<Measured>);

fn rows() -> [Row; 11] {
    [
        ("node capacitance", Unit::Farad, |v| v.node_capacitance_f),
        ("  without the probe", Unit::Farad, |v| v.node_capacitance_without_probe_f),
        ("leakage inductance", Unit::Henry, |v| v.leakage_inductance_h),
        ("relaxation ring", Unit::Hertz, |v| v.relaxation_frequency_hz),
        ("  quality factor", Unit::One, |v| v.relaxation_quality_factor),
        ("leakage ring", Unit::Hertz, |v| v.leakage_frequency_hz),
        ("  quality factor", Unit::One, |v| v.leakage_quality_factor),
        ("reflected voltage", Unit::Volt, |v| v.reflected_voltage_v),
        ("bulk voltage", Unit::Volt, |v| v.bulk_voltage_v),
        ("peak drain voltage", Unit::Volt, |v| v.peak_drain_voltage_v),
        ("turn-on rate", Unit::Hertz, |v| v.turn_on_rate_hz),
    ]
}
