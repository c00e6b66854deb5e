//! Rings can be compared only at one bulk and one reflected voltage: the node capacitance depends on both.

use super::{AddedDoubt, AddedDoubtName, AddedOptions, AddedPoint, AddedRefusal};
use crate::quantity::Measured;

/// How far beyond the voltage tolerance a known slope may correct: it is the slope at one voltage only.
const SLOPE_REACH: f64 = 5.0;
/// Relative change of a ring frequency over that of the bulk voltage, at most, where the slope is not known: all of the
/// capacitance that of an abrupt junction, `C ~ V^-1/2` and `f ~ C^-1/2`.
const STEEPEST: f64 = 0.25;

/// What a record's voltages do to its frequency: the correction, its own uncertainty and what the slope's uncertainty makes of it.
#[derive(Debug, Clone, Copy, Default)]
pub(super) struct Moved {
    pub(super) correction_hz: f64,
    pub(super) own_hz: f64,
    pub(super) by_slope_hz: f64,
}

/// Holds the voltages of the records against each other.
pub(super) fn matching(
    points: &[AddedPoint],
    options: &AddedOptions,
    doubts: &mut Vec<AddedDoubt>,
) -> Result<Vec<Moved>, AddedRefusal> {
    let slope = options.frequency_slope_hz_per_v;
    let reach = if slope.is_some() { SLOPE_REACH } else { 1.0 };
    let remedy = if slope.is_some() {
        "that is further than a slope can correct; record all of them at the same line voltage and load"
    } else {
        "record all of them at the same line voltage and load, or state how the frequency moves with bulk voltage"
    };
    let [bulk_v, reflected_v] = [|p: &AddedPoint| p.bulk_voltage_v, |p: &AddedPoint| p.reflected_voltage_v].map(
        |pick: fn(&AddedPoint) -> Option<Measured>| points.iter().filter_map(pick).map(|v| v.value).collect::<Vec<_>>(),
    );
    let bulk_mean_v = bulk_v.iter().sum::<f64>() / bulk_v.len().max(1) as f64;
    within("bulk", &bulk_v, 0.0, reach * options.voltage_tolerance, remedy)?;
    let remedy = "record all of them at the same output voltage and load";
    // What counts is the voltage the node stands at, and the knee is read with what the leakage ring has left on it.
    within("reflected", &reflected_v, bulk_mean_v, options.voltage_tolerance, remedy)?;
    if points.iter().any(|point| point.bulk_voltage_v.is_none()) {
        doubts.push(AddedDoubt {
            name: AddedDoubtName::VoltagesUnknown,
            sentence:
                "Not every record tells its bulk voltage, so whether they match was not checked: make sure that line \
                       voltage and load were the same."
                    .to_owned(),
        });
        return Ok(vec![Moved::default(); points.len()]);
    }
    let first = &points[0];
    let moved = points.iter().map(|point| {
        let (Some(here), Some(there)) = (point.bulk_voltage_v, first.bulk_voltage_v) else { return Moved::default() };
        // What was added does not change with voltage: it dilutes what does.
        let diluted = (point.frequency_hz.value / first.frequency_hz.value).powi(2);
        let ratio = point.frequency_hz.value / first.frequency_hz.value;
        match slope {
            Some(slope) => Moved {
                correction_hz: -slope.value * ratio * diluted * (here.value - there.value),
                own_hz: slope.value * ratio * diluted * here.standard_uncertainty,
                by_slope_hz: -slope.standard_uncertainty * ratio * diluted * (here.value - there.value),
            },
            None => {
                let apart = (here.value / there.value).ln().abs();
                let half_width = STEEPEST * diluted * apart * point.frequency_hz.value;
                Moved { own_hz: Measured::within(0.0, half_width).standard_uncertainty, ..Moved::default() }
            }
        }
    });
    Ok(moved.collect())
}

/// Refuses voltages that differ by more than a share of the level they reach from `base_v`.
fn within(
    what: &'static str,
    values: &[f64],
    base_v: f64,
    allowed: f64,
    remedy: &'static str,
) -> Result<(), AddedRefusal> {
    let low_v = values.iter().copied().fold(f64::INFINITY, f64::min);
    let high_v = values.iter().copied().fold(f64::NEG_INFINITY, f64::max);
    let apart = (high_v - low_v) / (base_v + 0.5 * (high_v + low_v)).abs();
    if values.len() < 2 || apart <= allowed {
        return Ok(());
    }
    let (percent, allowed) = (100.0 * apart, 100.0 * allowed);
    Err(AddedRefusal::VoltagesDiffer { what, one_v: low_v, other_v: high_v, percent, allowed, remedy })
}
