//! Plan, station and board file of the demonstration, from what the simulated bench announces.

use super::bench_process::Announcement;

/// A sweep from more than half of the rated load down to a few thousandths of it.
pub(super) fn plan(bench: &Announcement, line_v: &[f64]) -> String {
    let documents = &bench.documents;
    let lines: Vec<String> = line_v.iter().map(|v| format!("\"{v} V\"")).collect();
    let floor_a = (0.004 * documents.maximum_load_a).max(documents.minimum_load_a);
    format!(
        r#"format = "ringstep plan 1"
name = "{board}, line sweep"
line = [{lines}]
line_frequency = "50 Hz"
settle_timeout = "10 s"

[load]
start = "{start_a:.4} A"
floor = "{floor_a:.4} A"

[captures]
relaxation_ring = 4
leakage_ring = 4
ring_periods = 10
"#,
        board = bench.board,
        lines = lines.join(", "),
        start_a = 0.6 * documents.maximum_load_a,
    )
}

/// The station around the simulated bench.
pub(super) fn station(bench: &Announcement) -> String {
    format!(
        r#"format = "ringstep station 1"
name = "Norrsund Harbour Works, simulated bench"

[scope]
address = "{scope}"
channel = 1
earthed = true
input_rating = "300 V"

[load]
address = "{load}"
earthed = false

[source]
address = "{source}"
isolated = true

[probe]
factor = {factor}
capacitance = "{capacitance_pf} pF +- 3 %"
bandwidth = "200 MHz"
rating = "2.5 kV"
derating_frequency = "2 MHz"
differential = true
serial_number = "SIMULATED"

[limits]
drain = "{drain_v} V"
line = "270 V"
line_current = "1 A"
load_power = "100 W"
"#,
        scope = bench.scope,
        load = bench.load,
        source = bench.source,
        factor = bench.probe_factor,
        capacitance_pf = bench.probe_capacitance_f * 1e12,
        drain_v = bench.documents.drain_rating_v,
    )
}

/// The board as its documents state it, with the primary inductance measured on this very sample.
pub(super) fn board(bench: &Announcement) -> String {
    let (documents, sheets) = (&bench.documents, &bench.data_sheets);
    let output_v = documents.output_v;
    format!(
        r#"format = "ringstep board 1"
name = "{name}"
topology = "flyback"
primary_inductance = "{inductance_uh:.4} uH +- 0.5 %"
controller = "{controller}"
switching_frequency = "{switching_khz} kHz"
bulk_capacitance = "{bulk_uf} uF +- 20 %"
drain_rating = "{drain_v} V"
line_range = ["{low_v} V", "{high_v} V"]

[clamp]
kind = "{clamp}"
voltage = "{clamp_v} V"
diode_capacitance = {clamp_diode}

[transistor]
output_capacitance = {output_capacitance}

[[output]]
name = "{output_v} V"
voltage = "{output_v} V"
regulation = ["{regulation_low_v:.3} V", "{regulation_high_v:.3} V"]
maximum_load = "{maximum_a} A"
minimum_load = "{minimum_a} A"
turns_ratio = {turns_ratio}
rectifier = "schottky"
rectifier_capacitance = "{rectifier_pf:.1} pF +- {tolerance:.1} %"
snubber_capacitance = "{secondary_pf:.1} pF +- {tolerance:.1} %"
"#,
        name = bench.board,
        inductance_uh = bench.primary_inductance_reading_h * 1e6,
        controller = documents.controller,
        switching_khz = documents.switching_frequency_hz * 1e-3,
        bulk_uf = documents.bulk_capacitance_f * 1e6,
        drain_v = documents.drain_rating_v,
        low_v = documents.line_range_v[0],
        high_v = documents.line_range_v[1],
        clamp = documents.clamp,
        clamp_v = documents.clamp_v,
        regulation_low_v = 0.95 * output_v,
        regulation_high_v = 1.05 * output_v,
        maximum_a = documents.maximum_load_a,
        minimum_a = documents.minimum_load_a,
        turns_ratio = documents.turns_ratio,
        clamp_diode = curve(&sheets.clamp_diode, sheets.tolerance),
        output_capacitance = curve(&sheets.output_capacitance, sheets.tolerance),
        rectifier_pf = sheets.rectifier_f * 1e12,
        secondary_pf = sheets.secondary_f * 1e12,
        tolerance = 100.0 * sheets.tolerance,
    )
}

/// A data-sheet curve as a board file states it.
fn curve(points: &[[f64; 2]], tolerance: f64) -> String {
    let list = |texts: Vec<String>| texts.join(", ");
    let volts = list(points.iter().map(|[v, _]| format!("\"{v:.3} V\"")).collect());
    let farads = list(points.iter().map(|[_, f]| format!("\"{:.3} pF\"", f * 1e12)).collect());
    format!("{{ voltages = [{volts}], capacitances = [{farads}], tolerance = \"{:.1} %\" }}", 100.0 * tolerance)
}
