//! The converter against vectors and relations from outside: junction law, ring on a junction, flyback relations; and its
//! own promises: steps that do not matter, captures that depend on settings and key alone.

use crate::trace::{Trace, board, capture, settled};
use ringstep_simulated_bench::{
    boards,
    converter::{
        Plant,
        circuit::{Channel, Circuit, Conduction, Drive, State},
        junction::CapacitanceLaw,
    },
};

const JUNCTION: CapacitanceLaw = CapacitanceLaw::Junction { zero_bias_f: 300e-12, potential_v: 20.0, grading: 0.5 };

fn close(what: &str, ours: f64, expected: f64, tolerance: f64) {
    assert!((ours / expected - 1.0).abs() < tolerance, "{what}: {ours:e} instead of {expected:e}");
}

/// Energy by Simpson's rule over `v C(v)`.
fn energy_j(law: &CapacitanceLaw, volt: f64) -> f64 {
    let steps = 100_000;
    let h = volt / f64::from(steps);
    (0..=steps)
        .map(|i| {
            let v = f64::from(i) * h;
            let weight = if i == 0 || i == steps { 1.0 } else { 2.0 + 2.0 * f64::from(i % 2) };
            weight * v * law.capacitance_f(v)
        })
        .sum::<f64>()
        * h
        / 3.0
}

/// Closed forms of the graded junction: 300 pF, 20 V, m = 1/2 at 400 V: C = C0/(1+u)^m, Q = C0 Vj [(1+u)^(1-m) - 1]/(1-m),
/// E = C0 Vj^2 {[(1+u)^(2-m) - 1]/(2-m) - [(1+u)^(1-m) - 1]/(1-m)}, Ctr = Q/V, Cer = 2E/V^2.
#[test]
fn the_junction_law_gives_the_computed_charge_energy_and_mean_capacitances() {
    close("capacitance", JUNCTION.capacitance_f(400.0), 65.465e-12, 1e-5);
    close("charge", JUNCTION.charge_c(400.0), 42.991e-9, 2e-5);
    close("energy", energy_j(&JUNCTION, 400.0), 6.7589e-6, 2e-5);
    close("time-related", JUNCTION.charge_c(400.0) / 400.0, 107.48e-12, 5e-5);
    close("energy-related", 2.0 * energy_j(&JUNCTION, 400.0) / 400.0_f64.powi(2), 84.486e-12, 2e-5);
}

#[test]
fn charge_is_the_integral_of_capacitance_in_every_law_that_ships() {
    for board in boards::all() {
        let parts = &board.parts;
        for law in [parts.transistor, parts.clamp.diode.junction, parts.rectifier.junction, JUNCTION] {
            for volt in [-0.6, -0.2, 0.5, 12.0, 41.0, 43.0, 120.0, 500.0] {
                let h = 1e-4;
                let slope_f = (law.charge_c(volt + h) - law.charge_c(volt - h)) / (2.0 * h);
                close(board.name, slope_f, law.capacitance_f(volt), 1e-4);
            }
            assert_eq!(law.charge_c(0.0), 0.0);
        }
    }
}

/// 500 uH on 60 pF and the junction above, lossless, from a bus of 325 V.
fn bare_ring() -> Circuit {
    let mut parts = board("beacon").parts;
    let nothing = CapacitanceLaw::Junction { zero_bias_f: 0.0, potential_v: 1.0, grading: 0.5 };
    (parts.magnetising_h, parts.leakage_h) = (450e-6, 50e-6);
    (parts.winding_ohm, parts.leakage_loss_ohm, parts.core_ohm) = (0.0, 1e15, 1e15);
    (parts.winding_f, parts.transistor) = (60e-12, JUNCTION);
    (parts.clamp.diode.junction, parts.rectifier.junction) = (nothing, nothing);
    // Next to nothing across the secondary: both inductances are one.
    parts.secondary_f = 1e-15 * parts.turns_ratio.powi(2);
    parts.bulk_f = 1.0;
    Circuit { parts, probe_f: 0.0 }
}

/// Frequencies of exact integration: small-signal 618.967 kHz; initial swing +50/+100/+150 V: 618.721/617.992/616.782 kHz.
#[test]
fn a_large_swing_lowers_the_ring_on_a_junction_as_computed() {
    let circuit = bare_ring();
    let (square, _) = circuit.relaxation_mode(325.0, 1e3, 12.0);
    close("small signal", square.sqrt() / std::f64::consts::TAU, 618.967e3, 5e-6);
    let on = Conduction { channel: Channel::Off, body: false, clamp: false, rectifier: false };
    let drive = Drive { line_v: None, line_limit_a: 0.0, load_a: 0.0, load_s: 0.0 };
    for (swing_v, expected_hz) in [(50.0, 618.721e3), (100.0, 617.992e3), (150.0, 616.782e3)] {
        let mut state = State {
            drain_v: 325.0 + swing_v,
            winding_v: -swing_v * 0.9,
            clamp_v: 1e3,
            output_v: 12.0,
            bulk_v: 325.0,
            ..Default::default()
        };
        let mut trace = Trace { time_s: vec![], drain_v: vec![], bulk_v: vec![] };
        for index in 0..60_000 {
            let time_s = f64::from(index) * 0.3e-9;
            trace.time_s.push(time_s);
            trace.drain_v.push(state.drain_v);
            state = circuit.step(time_s, 0.3e-9, &state, &on, &drive);
        }
        let (frequency_hz, periods) = trace.frequency(0.0, 1.0, 325.0, 10);
        assert_eq!(periods, 10);
        close("swing", frequency_hz, expected_hz, 5e-6);
    }
}

#[test]
fn halving_the_step_moves_ring_frequencies_by_less_than_a_hundredth_of_a_percent() {
    for (name, load_a) in [("beacon", 0.1), ("foghorn", 0.05), ("tidegauge", 0.03), ("winch", 0.05)] {
        for line_v in [85.0, 265.0] {
            let plant = settled(name, 1, line_v, load_a);
            let run = |scale: f64| {
                let mut stepper = plant.stepper(4).with_step_scale(scale);
                let trace = Trace::of(&mut stepper, 300e-6);
                (trace, stepper.truth())
            };
            let (whole, truth) = run(1.0);
            let half = run(0.5).0;
            let ring = *truth.relaxation_rings.iter().find(|r| (r.end_s - r.start_s) * r.frequency_hz > 12.0).unwrap();
            let plateau = *truth.leakage_rings.iter().find(|ring| ring.end_s - ring.start_s > 1e-6).unwrap();
            let level_v = half.mean_v(0.5 * (plateau.start_s + plateau.end_s), plateau.end_s);
            let relaxation = |trace: &Trace| trace.frequency(ring.start_s, ring.end_s, ring.bulk_v, 10).0;
            let leakage = |trace: &Trace| trace.frequency(plateau.start_s, plateau.end_s, level_v, 5).0;
            for frequency in [&relaxation as &dyn Fn(&Trace) -> f64, &leakage] {
                let moved = frequency(&whole) / frequency(&half) - 1.0;
                println!("{name} {line_v} V: {moved:e}");
                assert!(moved.abs() < 1e-4, "{name} at {line_v} V: {moved}");
            }
        }
    }
}

#[test]
fn the_tail_of_a_ring_has_the_frequency_of_the_linearised_circuit() {
    // Where the clamp's level sags while the ring lasts, its diode's capacitance creeps up by some 0.1 pF.
    for (name, load_a, tolerance) in
        [("beacon", 0.02, 6e-4), ("foghorn", 0.015, 3e-5), ("tidegauge", 0.02, 6e-4), ("winch", 0.03, 6e-4)]
    {
        let plant = settled(name, 6, 120.0, load_a);
        let (mut trace, truth) = capture(&plant, 1, 1e-3);
        // The bulk moves with the line: the ring is what remains of the drain voltage without it.
        trace.drain_v.iter_mut().zip(&trace.bulk_v).for_each(|(drain_v, bulk_v)| *drain_v -= bulk_v);
        let ring = truth.relaxation_rings.iter().max_by(|a, b| (a.end_s - a.start_s).total_cmp(&(b.end_s - b.start_s)));
        let ring = ring.unwrap();
        // From where the swing has fallen below 2 V: no amplitude dependence is left.
        let range = trace.between(ring.start_s, ring.end_s);
        let loud = range.clone().rev().find(|i| trace.drain_v[*i].abs() > 2.0).unwrap();
        let (damped_hz, periods) = trace.frequency(trace.time_s[loud], ring.end_s, 0.0, 10);
        assert!(periods >= 5, "{name}: {periods} periods");
        // Envelope decay from the crests; undamped from w0^2 = wd^2 + gamma^2.
        let crest = |from_s: f64| trace.highest_v(from_s, from_s + 1.0 / damped_hz);
        let span_s = 5.0 / damped_hz;
        let decay = (crest(trace.time_s[loud]) / crest(trace.time_s[loud] + span_s)).ln() / span_s;
        let undamped_hz = (damped_hz.powi(2) + (decay / std::f64::consts::TAU).powi(2)).sqrt();
        println!("{name}: {undamped_hz:.1} against {:.1}", ring.frequency_hz);
        close(name, undamped_hz, ring.frequency_hz, tolerance);
        let from_frequency_f = 1.0 / ((std::f64::consts::TAU * undamped_hz).powi(2) * truth.primary_inductance_h);
        close(name, from_frequency_f, ring.node_capacitance_f, 2.0 * tolerance);
    }
}

/// Duty cycle in continuous conduction, D = V_R/(V_R + V_bulk - V_on), and no mean voltage across the primary in steady state:
/// the drain's mean over whole cycles is the bulk voltage.
#[test]
fn continuous_conduction_obeys_the_volt_second_balance() {
    let plant = settled("pumphouse", 1, 120.0, 2.0);
    let (trace, truth) = capture(&plant, 1, 200e-6);
    let circuit = plant.circuit();
    let cycles = &truth.cycles[1..truth.cycles.len() - 1];
    let (begin_s, end_s) = (cycles[0].turn_on_s, cycles[cycles.len() - 1].turn_on_s);
    let bulk_v = trace.bulk_v[trace.between(begin_s, end_s).start];
    let mean_v = trace.mean_v(begin_s, end_s);
    close("mean drain voltage", mean_v, bulk_v, 0.01);
    for pair in cycles.windows(2) {
        let off_s = pair[0].turn_off_s.unwrap();
        let duty = (off_s - pair[0].turn_on_s) / (pair[1].turn_on_s - pair[0].turn_on_s);
        let reflected_v = circuit.reflected_v(15.0);
        close("duty", duty, reflected_v / (reflected_v + bulk_v - 0.5), 0.03);
    }
}

#[test]
fn a_capture_depends_on_settings_and_key_but_not_on_waiting() {
    let plant = settled("beacon", 8, 230.0, 0.1);
    let mut patient = settled("beacon", 8, 230.0, 0.1);
    patient.advance(1.2345);
    let (first, _) = capture(&plant, 7, 300e-6);
    assert_eq!(first, capture(&plant, 7, 300e-6).0);
    assert_eq!(first, capture(&patient, 7, 300e-6).0);
    assert_ne!(first, capture(&plant, 8, 300e-6).0);
    assert_ne!(first, capture(&settled("beacon", 9, 230.0, 0.1), 7, 300e-6).0);
}

#[test]
fn seeds_spread_components_within_their_tolerances() {
    let nominal = &board("winch").nominal;
    let inductances: Vec<f64> = (0..40)
        .map(|seed| {
            let parts = Plant::new(board("winch"), seed).circuit().parts;
            parts.magnetising_h + parts.leakage_h
        })
        .collect();
    let off = |h: &f64| h / nominal.primary_inductance_h - 1.0;
    assert!(inductances.iter().all(|h| off(h).abs() < nominal.primary_inductance_tolerance + 0.003));
    assert!(inductances.iter().any(|h| off(h) > 0.02) && inductances.iter().any(|h| off(h) < -0.02));
}
