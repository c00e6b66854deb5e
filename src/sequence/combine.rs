//! The values of one point from the findings of its captures.

use super::{event::PointValues, survey::Survey};
use ringstep_analysis::{
    circuit,
    findings::{BoardFacts, Findings, Ring},
    fit,
    quantity::Measured,
};

/// What was captured at one point.
pub(super) struct Captured<'a> {
    pub(super) survey: &'a Survey,
    pub(super) relaxation: &'a [(usize, Findings)],
    /// At the load start.
    pub(super) leakage: &'a [(usize, Findings)],
}

/// Puts the captures of one point together.
pub(super) fn combine(captured: &Captured<'_>, facts: &BoardFacts) -> PointValues {
    let relaxation = ring(captured.relaxation, |findings| findings.relaxation_ring);
    let (leakage, leakage_captures) = leakage_ring(captured).unzip();
    let node = relaxation.zip(facts.primary_inductance_h).map(|(ring, l)| circuit::node_capacitance(&ring, l));
    let both = || captured.relaxation.iter().chain(captured.leakage);
    let peaks = both().filter_map(|(_, findings)| findings.peak_drain_voltage_v);
    PointValues {
        leakage_captures: leakage_captures.unwrap_or_default(),
        relaxation_frequency_hz: relaxation.map(|ring| ring.frequency_hz),
        relaxation_quality_factor: relaxation.map(|ring| ring.quality_factor),
        leakage_frequency_hz: leakage.map(|ring| ring.frequency_hz),
        leakage_quality_factor: leakage.map(|ring| ring.quality_factor),
        node_capacitance_f: node,
        node_capacitance_without_probe_f: node.zip(facts.probe_capacitance_f).map(|(node, probe)| less(node, probe)),
        leakage_inductance_h: leakage.zip(node).map(|(ring, node)| circuit::leakage_inductance_textbook(&ring, node)),
        reflected_voltage_v: mean(captured.relaxation, |findings| findings.reflected_voltage_v),
        bulk_voltage_v: mean(captured.relaxation, |findings| findings.bulk_voltage_v),
        peak_drain_voltage_v: peaks.reduce(|a, b| if b.value > a.value { b } else { a }),
        turn_on_rate_hz: captured.survey.findings.turn_on_rate_hz,
    }
}

/// Leakage-ring frequencies at the measuring load and at the load start, apart: they differ, for the ring is larger at one.
pub(super) fn leakage_frequencies(captured: &Captured<'_>) -> [Option<Measured>; 2] {
    let frequency = |set| ring(set, |findings| findings.leakage_ring).map(|ring| ring.frequency_hz);
    [frequency(captured.relaxation), frequency(captured.leakage)]
}

/// The leakage ring with the captures it is taken from, at the load where it is known best: at the load start it is large, but
/// the clamp may conduct again on later crests; at the measuring load it is clean, but small.
fn leakage_ring(captured: &Captured<'_>) -> Option<(Ring, Vec<usize>)> {
    let sets = [captured.relaxation, captured.leakage].into_iter();
    let rings = sets.filter_map(|set| Some((ring(set, |findings| findings.leakage_ring)?, set)));
    let best = rings.min_by(|(a, _), (b, _)| {
        a.frequency_hz.relative_uncertainty().total_cmp(&b.frequency_hz.relative_uncertainty())
    });
    best.map(|(ring, set)| (ring, set.iter().map(|(number, _)| *number).collect()))
}

fn ring(findings: &[(usize, Findings)], pick: fn(&Findings) -> Option<Ring>) -> Option<Ring> {
    fit::combine(&findings.iter().filter_map(|(_, findings)| pick(findings)).collect::<Vec<_>>())
}

fn mean(findings: &[(usize, Findings)], pick: fn(&Findings) -> Option<Measured>) -> Option<Measured> {
    fit::weighted_mean(findings.iter().filter_map(|(_, findings)| pick(findings)))
}

fn less(whole: Measured, part: Measured) -> Measured {
    Measured {
        value: whole.value - part.value,
        standard_uncertainty: whole.standard_uncertainty.hypot(part.standard_uncertainty),
    }
}
