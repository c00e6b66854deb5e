//! The parts on the drain node as a board file states them: capacitance laws of transistor and clamp diode, snubber.

use crate::files::{Table, Value};
use ringstep_analysis::{
    pieces::{CapacitanceLaw, LawShape, NodeSnubber},
    quantity::Unit,
};
use std::ops::RangeInclusive;

const CAPACITANCE_F: RangeInclusive<f64> = 0.0..=1e-6;
/// Tolerance of a data sheet's typical curve where the file states none (common practice).
const USUAL_TOLERANCE: f64 = 0.2;

/// A capacitance over voltage: the points of a data-sheet curve, or the junction's law.
pub(super) fn law(table: &Table<'_, '_>) -> Option<CapacitanceLaw> {
    let tolerance = table.optional("tolerance", |value| value.quantity(Unit::Percent, 0.0..=1.0));
    let shape = if table.has("voltages") { points(table) } else { junction(table) };
    table.finish();
    let half_width = tolerance?.unwrap_or(USUAL_TOLERANCE);
    Some(CapacitanceLaw { shape: shape?, relative_uncertainty: half_width / 3f64.sqrt() })
}

fn points(table: &Table<'_, '_>) -> Option<LawShape> {
    let volts = table.required("voltages", |value| value.list(|value| value.quantity(Unit::Volt, 0.0..=5e3)));
    let farads = table.required("capacitances", |value| value.list(|value| value.quantity(Unit::Farad, 1e-15..=1e-6)));
    let (volts, farads) = (volts?, farads?);
    if volts.len() != farads.len() {
        let expected = format!("expected as many as voltages, {}", volts.len());
        table.refuse("capacitances", format!("a list of {}", farads.len()), expected);
        return None;
    }
    if !volts.windows(2).all(|pair| pair[0] < pair[1]) {
        table.refuse("voltages", "not ascending", "expected the lowest voltage first");
        return None;
    }
    Some(LawShape::Table(volts.into_iter().zip(farads).collect()))
}

fn junction(table: &Table<'_, '_>) -> Option<LawShape> {
    if !table.has("zero_bias") {
        let help = "state the data sheet's curve as `voltages` and `capacitances`, or the junction's `zero_bias`, `potential` and `exponent`";
        table.missing("voltages", Some(help.to_owned()));
        return None;
    }
    let zero_bias_f = table.required("zero_bias", |value| value.quantity(Unit::Farad, CAPACITANCE_F));
    let potential_v = table.required("potential", |value| value.quantity(Unit::Volt, 0.05..=1e3));
    let exponent = table.required("exponent", |value| value.number(0.1..=3.0));
    let fixed_f = table.optional("fixed", |value| value.quantity(Unit::Farad, CAPACITANCE_F));
    Some(LawShape::Junction {
        zero_bias_f: zero_bias_f?,
        potential_v: potential_v?,
        exponent: exponent?,
        fixed_f: fixed_f?.unwrap_or(0.0),
    })
}

/// A resistor and a capacitor in series across the drain node.
pub(super) fn snubber(value: Value<'_, '_>) -> Option<NodeSnubber> {
    let table = value.table()?;
    let resistance_ohm = table.required("resistance", |value| value.measured(Unit::Ohm, 0.1..=1e6));
    let capacitance_f = table.required("capacitance", |value| value.measured(Unit::Farad, 1e-13..=1e-6));
    table.finish();
    Some(NodeSnubber { resistance_ohm: resistance_ohm?, capacitance_f: capacitance_f? })
}
