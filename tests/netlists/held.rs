//! Holds the analysis against the truths of the netlists, on 8-bit recordings with noise.

use super::{
    INTERVAL_S, Recording, simulate,
    truth::{BOARDS, Truth},
};
use crate::need::need;
use ringstep_analysis::{
    analyse,
    findings::{BoardFacts, DoubtName, Findings, Subject},
    quantity::Measured,
};

/// Edges are found this well: the slowest of these boards takes 0.1 us to charge its node.
const EDGE_S: f64 = 0.15e-6;

/// The recording of a board and what the analysis finds in it: made afresh where the simulator is, the stored one otherwise.
fn analysed(board: &str) -> (Truth, Recording, Findings) {
    let truth = Truth::read(board);
    let recording = match need("ngspice") {
        true => Recording::digitise(board, &simulate(board), &truth, INTERVAL_S),
        false => Recording::read(board),
    };
    let samples = recording.samples();
    let inductance = Measured { value: truth.primary_inductance_h, standard_uncertainty: 0.0 };
    let facts = BoardFacts {
        primary_inductance_h: Some(inductance),
        switching_period_s: Some(truth.switching_period_s),
        skips_cycles: Some(true),
        ..BoardFacts::default()
    };
    let findings = analyse(&samples, Subject::Drain, &facts);
    (truth, recording, findings)
}

#[test]
fn every_board_is_read_as_it_is() {
    let mut off = Vec::new();
    for board in BOARDS {
        let (truth, recording, findings) = analysed(board);
        check_cycles(board, &truth, &recording, &findings, &mut off);
        let relaxation = findings.relaxation_ring.map(|ring| ring.frequency_hz);
        let leakage = findings.leakage_ring.map(|ring| ring.frequency_hz);
        let mut close = |what: &str, found: Option<Measured>, expected: f64, tolerance: f64| {
            let error = found.map(|found| found.value / expected - 1.0);
            let percent = error.map_or("none".to_owned(), |error| format!("{:+.3} %", 100.0 * error));
            println!("{board:10} {what:22} true {expected:12.5e} error {percent}, at most {:.1} %", 100.0 * tolerance);
            if error.is_none_or(|error| error.abs() > tolerance) {
                off.push(format!("{board}: {what} is off by {percent}"));
            }
        };
        if board != "pumphouse" {
            close("relaxation frequency", relaxation, truth.relaxation.frequency_hz, 0.005);
            close("node capacitance", findings.node_capacitance_f, truth.relaxation.node_capacitance_f, 0.02);
            close("reflected voltage", findings.reflected_voltage_v, truth.reflected_voltage_v, 0.01);
            close("bulk voltage", findings.bulk_voltage_v, truth.bulk_voltage_v, 0.005);
        }
        if board != "winch" {
            close("leakage frequency", leakage, truth.leakage.frequency_hz, 0.005);
        }
        if let Some(found) = findings.leakage_inductance_h {
            let deviation = (found.value - truth.leakage_inductance_h) / found.standard_uncertainty;
            println!("{board:10} leakage inductance {:+.2} standard uncertainties", deviation);
            if deviation.abs() > 2.0 {
                off.push(format!("{board}: leakage inductance {found:?} against {}", truth.leakage_inductance_h));
            }
        }
        println!("{board:10} doubts {:?}", findings.doubts.iter().map(|d| (d.name, &d.sentence)).collect::<Vec<_>>());
    }
    assert!(off.is_empty(), "{off:#?}");
}

#[test]
fn continuous_conduction_gives_no_capacitance() {
    let (_, _, findings) = analysed("pumphouse");
    assert_eq!(
        (findings.relaxation_ring, findings.node_capacitance_f, findings.leakage_inductance_h),
        (None, None, None)
    );
    assert!(findings.doubts.iter().any(|doubt| doubt.name == DoubtName::ContinuousConduction));
}

/// A slow clamp diode bends every crest of winch's leakage ring: refused or right, never a wrong figure.
#[test]
fn a_bent_leakage_ring_is_refused_or_right() {
    let (truth, _, findings) = analysed("winch");
    if let Some(ring) = findings.leakage_ring {
        let error = ring.frequency_hz.value / truth.leakage.frequency_hz - 1.0;
        assert!(error.abs() < 0.005, "{error}");
    }
}

/// Cycles by their turn-on; what begins before the record is the analysis's own incomplete first one.
fn check_cycles(board: &str, truth: &Truth, recording: &Recording, findings: &Findings, off: &mut Vec<String>) {
    let found: Vec<_> = findings.cycles.iter().filter(|cycle| cycle.start_s > recording.scale.start_s).collect();
    let complete = found.len() == truth.cycles.len();
    if !complete {
        off.push(format!("{board}: {} cycles found of {}", found.len(), truth.cycles.len()));
    }
    let ends = &recording.scale.ends_of_demagnetisation_s;
    for ((found, expected), end_s) in found.iter().zip(&truth.cycles).zip(ends) {
        let mode = format!("{:?}", found.mode).to_lowercase();
        let times = (found.start_s - expected.start_s).abs().max((found.turn_off_s - expected.turn_off_s).abs());
        let knee = match (found.end_of_demagnetisation_s, end_s) {
            (Some(found), Some(end_s)) => (found - end_s).abs() < EDGE_S,
            (found, end_s) => found.is_none() == end_s.is_none(),
        };
        if mode != expected.mode || times > EDGE_S || !knee {
            off.push(format!("{board}: {found:?}, demagnetised {end_s:?} instead of {:?}", expected.start_s));
        }
    }
}
