//! The values of one point from the findings of its captures.

use super::{event::PointValues, survey::Survey};
use ringstep_analysis::{
    budget::Budget,
    circuit::{CircuitValues, Observed, RingObservation},
    findings::{BoardFacts, Findings, Ring},
    fit,
    quantity::Measured,
};

/// Findings with the numbers of their captures.
type Numbered<'a> = &'a [(usize, Findings)];

/// What was captured at one point.
pub(super) struct Captured<'a> {
    pub(super) survey: &'a Survey,
    pub(super) relaxation: &'a [(usize, Findings)],
    /// At the load start.
    pub(super) leakage: &'a [(usize, Findings)],
}

/// Puts the captures of one point together.
pub(super) fn combine(captured: &Captured<'_>, facts: &BoardFacts) -> PointValues {
    let relaxation = rings(captured.relaxation, |findings| findings.relaxation_ring);
    let (leakage, leakage_set) = leakage_rings(captured).unwrap_or_default();
    let releases: Vec<f64> = leakage_set.iter().filter_map(|(_, findings)| findings.release_v()).collect();
    let observed = Observed {
        relaxation: RingObservation::of(&relaxation),
        leakage: RingObservation::of(&leakage),
        bulk_voltage_v: mean(captured.relaxation, |findings| findings.bulk_voltage_v),
        reflected_voltage_v: mean(captured.relaxation, |findings| findings.reflected_voltage_v),
        release_v: (!releases.is_empty()).then(|| releases.iter().sum::<f64>() / releases.len() as f64),
    };
    let values = CircuitValues::of(&observed, facts);
    let (relaxation, leakage) = (fit::combine(&relaxation), fit::combine(&leakage));
    let both = || captured.relaxation.iter().chain(captured.leakage);
    let peaks = both().filter_map(|(_, findings)| findings.peak_drain_voltage_v);
    let of = |budget: &Option<Budget>| budget.as_ref().map(Budget::measured);
    PointValues {
        leakage_captures: leakage_set.iter().map(|(number, _)| *number).collect(),
        relaxation_frequency_hz: observed.relaxation.map(|ring| ring.measured()),
        relaxation_quality_factor: relaxation.map(|ring| ring.quality_factor),
        relaxation_amplitude_v: relaxation.map(|ring| ring.amplitude_v),
        leakage_frequency_hz: observed.leakage.map(|ring| ring.measured()),
        leakage_quality_factor: leakage.map(|ring| ring.quality_factor),
        leakage_amplitude_v: leakage.map(|ring| ring.amplitude_v),
        node_capacitance_f: of(&values.node_capacitance),
        node_capacitance_without_probe_f: of(&values.node_capacitance_without_probe),
        leakage_inductance_h: of(&values.leakage_inductance),
        reflected_voltage_v: of(&values.reflected_voltage),
        bulk_voltage_v: of(&values.bulk_voltage),
        peak_drain_voltage_v: peaks.reduce(|a, b| if b.value > a.value { b } else { a }),
        turn_on_rate_hz: captured.survey.findings.turn_on_rate_hz,
        budgets: values.budgets(),
        capacitance_parts: values.capacitance_parts,
    }
}

/// Leakage-ring frequencies at the measuring load and at the load start, apart: they differ, for the ring is larger at one.
pub(super) fn leakage_frequencies(captured: &Captured<'_>) -> [Option<Measured>; 2] {
    let frequency =
        |set| RingObservation::of(&rings(set, |findings| findings.leakage_ring)).map(|ring| ring.measured());
    [captured.relaxation, captured.leakage].map(frequency)
}

/// The leakage rings with the captures they are taken from, at the load where they are known best: at the load start they are large,
/// but the clamp may conduct again on later crests; at the measuring load they are clean, but small.
fn leakage_rings<'a>(captured: &Captured<'a>) -> Option<(Vec<Ring>, Numbered<'a>)> {
    let sets = [captured.relaxation, captured.leakage].into_iter();
    let known = sets.filter_map(|set| {
        let rings = rings(set, |findings| findings.leakage_ring);
        let uncertainty = fit::combine(&rings)?.frequency_hz.relative_uncertainty();
        Some((uncertainty, rings, set))
    });
    let (_, rings, set) = known.min_by(|a, b| a.0.total_cmp(&b.0))?;
    Some((rings, set))
}

/// The rings of the captures, brought to one bulk voltage.
fn rings(findings: &[(usize, Findings)], pick: fn(&Findings) -> Option<Ring>) -> Vec<Ring> {
    let rings = findings.iter().filter_map(|(_, findings)| {
        let bulk_v = findings.bulk_voltage_v.map_or(0.0, |bulk| bulk.value);
        Some((pick(findings)?, bulk_v))
    });
    fit::join(&rings.collect::<Vec<_>>()).rings
}

fn mean(findings: &[(usize, Findings)], pick: fn(&Findings) -> Option<Measured>) -> Option<Measured> {
    fit::weighted_mean(findings.iter().filter_map(|(_, findings)| pick(findings)))
}
