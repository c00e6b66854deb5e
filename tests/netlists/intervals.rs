//! Whether the stated intervals hold the truth on the waveforms of the circuit simulator, and how far the values are off: capacitance,
//! leakage inductance with the parts of the node stated, and the textbook value.

use super::{INTERVAL_S, Recording, simulate, truth::Truth};
use crate::need::need;
use ringstep_analysis::{
    analyse,
    findings::{Accuracy, BoardFacts, Findings, Subject},
    pieces::{CapacitanceLaw, LawShape, NodePieces, SecondaryPiece},
    quantity::{COVERAGE_95, Measured},
};

/// Boards whose recording holds a relaxation ring.
const BOARDS: [&str; 5] = ["beacon", "foghorn", "tidegauge", "winch", "semaphore"];

/// Depletion capacitance in the form of SPICE.
fn junction(zero_bias_f: f64, potential_v: f64, exponent: f64) -> LawShape {
    LawShape::Junction { zero_bias_f, potential_v, exponent, fixed_f: 0.0 }
}

fn exact(shape: LawShape) -> CapacitanceLaw {
    CapacitanceLaw { shape, relative_uncertainty: 0.0 }
}

/// The parts as the netlist of the board has them.
fn pieces(board: &str) -> NodePieces {
    let knee = |v: f64| 48e-12 + 220e-12 / (1.0 + ((v - 62.0) / 7.0).exp());
    let table = (0..500).map(|v| (f64::from(v), knee(f64::from(v)))).collect();
    let (transistor, rectifier, output_v, turns_ratio, snubber_f, clamp, clamp_v) = match board {
        "beacon" => {
            (LawShape::Table(vec![(0.0, 1e-15)]), (150e-12, 0.6, 0.45), 12.0, 9.0, 0.0, (20e-12, 0.7, 0.4), 170.0)
        }
        "foghorn" => (junction(400e-12, 0.8, 0.5), (600e-12, 0.6, 0.45), 15.0, 6.0, 0.0, (0.0, 1.0, 0.5), 145.0),
        "tidegauge" => (junction(260e-12, 1.0, 0.35), (1600e-12, 0.5, 0.4), 5.0, 12.0, 0.0, (0.0, 1.0, 0.5), 0.0),
        "winch" => (LawShape::Table(table), (300e-12, 0.6, 0.45), 12.0, 7.0, 0.0, (30e-12, 0.7, 0.4), 150.0),
        _ => (junction(300e-12, 0.75, 0.4), (900e-12, 0.6, 0.45), 12.0, 8.0, 470e-12, (15e-12, 0.7, 0.4), 170.0),
    };
    let (zero_bias_f, potential_v, exponent) = rectifier;
    let rectifier_f = exact(junction(zero_bias_f, potential_v, exponent)).at(output_v);
    NodePieces {
        transistor: Some(exact(transistor)),
        secondaries: Some(vec![SecondaryPiece {
            turns_ratio,
            rectifier_f: Measured::exact(rectifier_f),
            snubber_f: Measured::exact(snubber_f),
        }]),
        clamp_diode: Some(exact(junction(clamp.0, clamp.1, clamp.2))),
        clamp_v: (clamp_v > 0.0).then_some(clamp_v),
        snubber: None,
    }
}

fn found(recording: &Recording, truth: &Truth, pieces: NodePieces) -> Findings {
    let facts = BoardFacts {
        primary_inductance_h: Some(Measured::exact(truth.primary_inductance_h)),
        switching_period_s: Some(truth.switching_period_s),
        skips_cycles: Some(true),
        pieces,
        // The simulator's clock and scales are exact.
        accuracy: Accuracy { time_base: 0.0, vertical_gain: 0.0, probe_factor: 0.0 },
        ..BoardFacts::default()
    };
    analyse(&recording.samples(), Subject::Drain, &facts)
}

/// What became of one quantity over boards and seeds.
#[derive(Default)]
struct Tally {
    inside: usize,
    cases: usize,
    widths: Vec<f64>,
    worst: f64,
}

impl Tally {
    fn count(&mut self, found: Option<Measured>, truth: f64) {
        self.cases += 1;
        let Some(found) = found else { return };
        let error = found.value / truth - 1.0;
        let half_width = COVERAGE_95 * found.standard_uncertainty / truth;
        self.inside += usize::from(error.abs() <= half_width);
        self.widths.push(2.0 * half_width);
        if error.abs() > self.worst.abs() {
            self.worst = error;
        }
    }

    /// Chance that intervals which hold the truth in 95 % of cases hold it in no more than these (binomial, lower tail).
    fn chance(&self) -> f64 {
        let (n, p) = (self.cases as f64, 0.95_f64);
        let mut term = (n * (1.0 - p).ln()).exp();
        let mut sum = term;
        for k in 0..self.inside {
            term *= (n - k as f64) / (k as f64 + 1.0) * p / (1.0 - p);
            sum += term;
        }
        sum.min(1.0)
    }

    fn line(&mut self, name: &str) -> String {
        self.widths.sort_by(f64::total_cmp);
        let median = self.widths.get(self.widths.len() / 2).copied().unwrap_or(f64::NAN);
        format!(
            "{name:34} {:3} of {:3} inside, median width {:6.3} %, worst error {:+.3} %, chance {:.3}",
            self.inside,
            self.cases,
            100.0 * median,
            100.0 * self.worst,
            self.chance()
        )
    }
}

fn hold(seeds: u64) {
    let mut all: [Tally; 3] = Default::default();
    let mut off = Vec::new();
    for board in BOARDS {
        let truth = Truth::read(board);
        let simulated = simulate(board);
        let mut own: [Tally; 3] = Default::default();
        for seed in 0..seeds {
            let recording = Recording::with_noise(7000 + seed, &simulated, &truth, INTERVAL_S);
            let stated = found(&recording, &truth, pieces(board));
            let textbook = found(&recording, &truth, NodePieces::default());
            let whole = truth.relaxation.node_capacitance_f;
            let values = [
                (stated.node_capacitance_f, whole),
                (stated.leakage_inductance_h, truth.leakage_inductance_h),
                (textbook.leakage_inductance_h, truth.leakage_inductance_h),
            ];
            for (n, (value, truth)) in values.into_iter().enumerate() {
                own[n].count(value, truth);
                all[n].count(value, truth);
            }
        }
        for (tally, (name, limit)) in
            own.iter_mut().zip([("capacitance", 0.005), ("leakage, parts stated", 0.01), ("leakage, textbook", 0.3)])
        {
            println!("{}", tally.line(&format!("{board}, {name}")));
            if tally.worst.abs() > limit {
                off.push(format!("{board}: {name} is off by {:+.2} %", 100.0 * tally.worst));
            }
        }
    }
    for (tally, name) in all.iter_mut().zip(["capacitance", "leakage, parts stated", "leakage, textbook"]) {
        println!("{}", tally.line(name));
        if tally.chance() < 0.01 {
            off.push(format!("intervals of {name} hold the truth in {} of {} cases", tally.inside, tally.cases));
        }
    }
    assert!(off.is_empty(), "{off:#?}");
}

#[test]
fn values_and_intervals_hold_on_the_simulators_boards() {
    if need("ngspice") {
        hold(2);
    }
}

/// Two hundred cases: `scripts/intervals.sh`.
#[test]
#[ignore = "long: run by scripts/intervals.sh"]
fn intervals_hold_over_many_seeds() {
    hold(40);
}
