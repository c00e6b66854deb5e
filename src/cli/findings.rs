//! What an analysis found, as a table and plain sentences for people, as one object for machines.

use super::output;
use ringstep_analysis::{
    findings::{CycleMode, Findings, Ring, RingKind, Subject},
    quantity::{Measured, Unit},
};
use serde_json::{Value, json};

/// One object in SI values: every key is always there, and a quantity that can't be had is null.
pub(crate) fn to_json(findings: &Findings) -> Value {
    let mut json = json!(findings);
    for ring in ["relaxation_ring", "leakage_ring"] {
        if json[ring].is_null() {
            json[ring] = json!({
                "frequency_hz": null, "damped_frequency_hz": null, "decay_per_s": null, "quality_factor": null,
            });
        }
    }
    json
}

/// Values with their standard uncertainties, the cycles, and every doubt.
pub(crate) fn describe(findings: &Findings, subject: Subject) -> String {
    let rows = match subject {
        Subject::Drain => drain_rows(findings),
        Subject::RingDown => {
            let mut rows = ring_rows("ring", findings.relaxation_ring.as_ref());
            rows.push(row("capacitance", findings.node_capacitance_f, Unit::Farad));
            rows
        }
    };
    let mut parts = vec![output::table(&["quantity", "value +- standard uncertainty"], rows)];
    if subject == Subject::Drain {
        parts.push(format!("{}\n{}", cycles(findings), rings(findings)));
    }
    let doubts: Vec<String> = findings.doubts.iter().map(|doubt| format!("  - {}", doubt.sentence)).collect();
    if !doubts.is_empty() {
        parts.push(format!("Doubts:\n{}", doubts.join("\n")));
    }
    format!("\n{}", parts.join("\n\n"))
}

fn drain_rows(findings: &Findings) -> Vec<Vec<String>> {
    let mut rows = ring_rows("relaxation ring", findings.relaxation_ring.as_ref());
    rows.extend(ring_rows("leakage ring", findings.leakage_ring.as_ref()));
    rows.extend([
        row("node capacitance, probe included", findings.node_capacitance_f, Unit::Farad),
        row("leakage inductance", findings.leakage_inductance_h, Unit::Henry),
        row("reflected voltage", findings.reflected_voltage_v, Unit::Volt),
        row("bulk voltage", findings.bulk_voltage_v, Unit::Volt),
        row("peak drain voltage", findings.peak_drain_voltage_v, Unit::Volt),
        row("turn-on rate", findings.turn_on_rate_hz, Unit::Hertz),
    ]);
    rows
}

fn ring_rows(name: &str, ring: Option<&Ring>) -> Vec<Vec<String>> {
    let Some(ring) = ring else { return vec![vec![name.to_owned(), ABSENT.to_owned()]] };
    let decay = ring.decay_per_s;
    let time_constant_s = Measured {
        value: decay.value.recip(),
        standard_uncertainty: decay.standard_uncertainty / (decay.value * decay.value),
    };
    vec![
        row(&format!("{name}, undamped frequency"), Some(ring.frequency_hz), Unit::Hertz),
        row(&format!("{name}, frequency as it rings"), Some(ring.damped_frequency_hz), Unit::Hertz),
        row(&format!("{name}, decay time constant"), Some(time_constant_s), Unit::Second),
        vec![format!("{name}, quality factor"), plain(ring.quality_factor)],
    ]
}

/// Shown in the place of a value that can't be had; a doubt says why.
const ABSENT: &str = "-";

fn row(name: &str, value: Option<Measured>, unit: Unit) -> Vec<String> {
    let value = value.map(|value| value.text_with_standard_uncertainty(unit));
    vec![name.to_owned(), value.unwrap_or_else(|| ABSENT.to_owned())]
}

/// A number without unit to two digits of its uncertainty.
fn plain(value: Measured) -> String {
    let digits = 1.0 - value.standard_uncertainty.log10().floor();
    let decimals = if digits.is_finite() { digits.clamp(0.0, 6.0) as usize } else { 1 };
    format!("{:.decimals$} +- {:.decimals$}", value.value, value.standard_uncertainty)
}

fn cycles(findings: &Findings) -> String {
    let modes = [
        (CycleMode::Continuous, "continuous"),
        (CycleMode::Discontinuous, "discontinuous"),
        (CycleMode::Skipped, "followed by skipped ones"),
        (CycleMode::Incomplete, "cut by an end of the record"),
    ];
    let counted = modes.iter().filter_map(|(mode, name)| {
        let count = findings.cycles.iter().filter(|cycle| cycle.mode == *mode).count();
        (count > 0).then(|| format!("{count} {name}"))
    });
    match findings.cycles.len() {
        0 => "Switching cycles: none".to_owned(),
        _ => format!("Switching cycles: {}", counted.collect::<Vec<_>>().join(", ")),
    }
}

fn rings(findings: &Findings) -> String {
    let counted = [(RingKind::Relaxation, "relaxation"), (RingKind::Leakage, "leakage")].map(|(kind, name)| {
        let fits = || findings.ring_fits.iter().filter(|fit| fit.kind == kind);
        format!("{} of {} {name} rings", fits().filter(|fit| fit.accepted).count(), fits().count())
    });
    format!("Fits accepted: {}", counted.join(", "))
}
