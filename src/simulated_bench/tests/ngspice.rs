//! The stepped converter against a general-purpose circuit simulator: the same component values, the same gate times, ngspice
//! solving the whole network with its own diodes and its own integration.

use crate::{
    need::need,
    trace::{Trace, settled},
};
use ringstep_simulated_bench::{
    boards::ClampLevel,
    converter::{CycleTruth, circuit::Circuit, circuit::State, junction::CapacitanceLaw},
};
use std::{fmt::Write, fs, process::Command};

/// Charge of a law at the voltage expression `v`.
fn charge(law: &CapacitanceLaw, v: &str) -> String {
    match *law {
        CapacitanceLaw::Junction { zero_bias_f, potential_v, grading } => {
            let u = format!("(1+({v})/{potential_v})");
            let x = format!("max({u},0.5)");
            let scale = zero_bias_f * potential_v;
            format!(
                "{scale:e}*((pow({x},{:e})-1)/{:e}+pow({x},{:e})*({u}-{x}))",
                1.0 - grading,
                1.0 - grading,
                -grading
            )
        }
        CapacitanceLaw::Knee { low_f, high_f, knee_v, width_v } => format!(
            "{low_f:e}*({v})+{:e}*({:e}-ln(1+exp(({knee_v}-({v}))/{width_v})))",
            (high_f - low_f) * width_v,
            (knee_v / width_v).exp().ln_1p()
        ),
    }
}

/// Netlist of the power stage: bulk and output held, everything quiet at time zero, the channel's current limit drawn from
/// the gate times of `cycles` (turn-on, turn-off, current at turn-off).
fn netlist(circuit: &Circuit, state: &State, gate: &[(f64, f64, f64)], length_s: f64, output: &str) -> String {
    let p = &circuit.parts;
    let mut limit = String::from("0 0");
    for (on_s, off_s, at_off_a) in gate {
        let ramp_s = 20.0 / p.turn_on_a_per_s;
        // The ramp is cut short by a turn-off within it; nothing else ends it.
        let most_a = 20f64.min((off_s - on_s) * p.turn_on_a_per_s);
        let full_s = (on_s + ramp_s).min(off_s - 1e-10);
        write!(limit, " {on_s:.12e} 0 {full_s:.12e} {most_a} {off_s:.12e} {most_a}").unwrap();
        write!(limit, " {:.12e} {at_off_a:.9e} {:.12e} 0", off_s + 1e-11, off_s + p.turn_off_s).unwrap();
    }
    let (n, rectifier, clamp) = (p.turns_ratio, &p.rectifier, &p.clamp.diode);
    let level = match p.clamp.level {
        ClampLevel::Capacitor { farad, bleed_ohm } => {
            format!("Ccl k b {farad:e}\nRcl k b {bleed_ohm:e}\n.ic v(k)={:e}", state.bulk_v + state.clamp_v)
        }
        ClampLevel::Zener { volt } => format!("Vz k b {volt:e}"),
    };
    // The model diodes drop about 27 mV at 1 A; the rest of the stated drop is a source.
    let drop = |volt: f64| volt - 0.027;
    let transistor = charge(&p.transistor, "v(d)");
    let clamp_junction = charge(&clamp.junction, "v(k)-v(d)");
    let rectifier_junction = charge(&rectifier.junction, "v(o)-v(s)");
    format!(
        "* power stage\n\
         Vb b 0 {bulk_v:e}\nVo o 0 {output_v:e}\n\
         Rw b w {winding_ohm:e}\nLlk w m {leakage_h:e}\nRlk w m {leakage_loss_ohm:e}\n\
         Lm m d {magnetising_h:e}\n\
         Bcore m d I=v(m,d)/{core_ohm:e}*(1+{growth:e}*v(m,d)*v(m,d)/(v(m,d)*v(m,d)+{growth_v:e}*{growth_v:e}))\n\
         Esec s0 0 d m {per_n:e}\nVs s0 s 0\nFpri m d Vs {minus_per_n:e}\n\
         Drec s r drec\nVrec r r1 {rec_drop:e}\nRrec r1 o {rec_ohm:e}\n\
         Crec o s Q='{rectifier_junction}'\nCsec o s {secondary_f:e}\n\
         Ct d 0 Q='{transistor}'\nCw d 0 {fixed_f:e}\n\
         Vlim lim 0 PWL({limit})\n\
         Bch d 0 I=v(lim)>1e-9 ? min(v(lim),v(d)/{on_ohm:e}) : 0\n\
         Dbody 0 d1 dbody\nVbody d1 d {body_drop:e}\n\
         Dcl d c dclamp\nVcl c c1 {clamp_drop:e}\nRcl1 c1 k {clamp_ohm:e}\n\
         Ccj k d Q='{clamp_junction}'\n{level}\n\
         .model drec d(is=1e-9 n=0.05 tt={rec_tt:e})\n\
         .model dclamp d(is=1e-9 n=0.05 tt={clamp_tt:e})\n\
         .model dbody d(is=1e-9 n=0.05)\n\
         .options reltol=1e-4 abstol=1e-9 vntol=1e-5 method=trap\n\
         .control\nset wr_singlescale\nset numdgt=10\ntran 1n {length_s:e} 0 1n\nwrdata {output} v(d)\nquit\n.endc\n.end\n",
        bulk_v = state.bulk_v,
        output_v = state.output_v,
        winding_ohm = p.winding_ohm,
        leakage_h = p.leakage_h,
        leakage_loss_ohm = p.leakage_loss_ohm,
        magnetising_h = p.magnetising_h,
        core_ohm = p.core_ohm,
        growth = p.core_growth,
        growth_v = p.core_growth_v,
        per_n = 1.0 / n,
        minus_per_n = -1.0 / n,
        rec_drop = drop(rectifier.drop_v),
        rec_ohm = rectifier.series_ohm,
        secondary_f = p.secondary_f,
        fixed_f = p.winding_f + circuit.probe_f,
        on_ohm = p.on_ohm,
        body_drop = drop(p.body_v),
        clamp_drop = drop(clamp.drop_v),
        clamp_ohm = clamp.series_ohm,
        rec_tt = rectifier.storage_s,
        clamp_tt = clamp.storage_s,
    )
}

fn run_ngspice(netlist: &str, folder: &std::path::Path, output: &str) -> Trace {
    let file = folder.join("stage.cir");
    fs::write(&file, netlist).unwrap();
    let done = Command::new("ngspice").arg("-b").arg(&file).current_dir(folder).output().unwrap();
    let text = fs::read_to_string(folder.join(output))
        .unwrap_or_else(|_| panic!("{}", String::from_utf8_lossy(&[done.stdout, done.stderr].concat())));
    let mut trace = Trace { time_s: vec![], drain_v: vec![], bulk_v: vec![] };
    for line in text.lines() {
        let mut numbers = line.split_whitespace().filter_map(|word| word.parse::<f64>().ok());
        if let (Some(time_s), Some(drain_v)) = (numbers.next(), numbers.next()) {
            trace.time_s.push(time_s);
            trace.drain_v.push(drain_v);
        }
    }
    trace
}

/// A burst of pulses out of complete rest, stepped and simulated.
struct Pair {
    stepped: Trace,
    simulated: Trace,
    cycles: Vec<CycleTruth>,
    ring: (f64, f64),
    plateau: Vec<(f64, f64)>,
    bulk_v: f64,
}

fn pair(name: &str, line_v: f64, load_a: f64) -> Pair {
    let plant = settled(name, 5, line_v, load_a);
    let mut stepper = plant.stepper(1);
    // Step until everything rests, then until the gate turns on again.
    let at_rest = |s: &State| s.drain_v == s.bulk_v && s.magnetising_a == 0.0;
    while !at_rest(stepper.state()) {
        assert!(stepper.next_point().time_s < 5e-3, "{name} never rests at {load_a} A");
    }
    let (mut state, mut start_s) = (*stepper.state(), 0.0);
    while at_rest(stepper.state()) {
        state = *stepper.state();
        start_s = stepper.next_point().time_s;
    }
    let first = stepper.truth().cycles.len() - 1;
    let start_s = start_s - 100e-9;
    let mut stepped = Trace { time_s: vec![], drain_v: vec![], bulk_v: vec![] };
    let mut gate_currents = vec![];
    let mut offs = 0;
    loop {
        let before_a = stepper.state().leakage_a;
        let point = stepper.next_point();
        let truth = stepper.truth();
        let now_off = truth.cycles[first..].iter().filter(|cycle| cycle.turn_off_s.is_some()).count();
        if now_off > offs {
            gate_currents.push(before_a);
            offs = now_off;
        }
        stepped.time_s.push(point.time_s - start_s);
        stepped.drain_v.push(point.drain_v);
        if at_rest(stepper.state()) {
            break;
        }
    }
    let truth = stepper.truth();
    let cycles: Vec<CycleTruth> = truth.cycles[first..]
        .iter()
        .map(|cycle| CycleTruth {
            turn_on_s: cycle.turn_on_s - start_s,
            turn_off_s: cycle.turn_off_s.map(|t| t - start_s),
            demagnetised_s: cycle.demagnetised_s.map(|t| t - start_s),
            mode: cycle.mode,
        })
        .collect();
    let gate: Vec<_> = cycles
        .iter()
        .zip(&gate_currents)
        .map(|(cycle, at_off_a)| (cycle.turn_on_s, cycle.turn_off_s.unwrap(), *at_off_a))
        .collect();
    let folder = std::env::temp_dir().join(format!("ringstep-ngspice-{name}-{line_v}-{}", std::process::id()));
    fs::create_dir_all(&folder).unwrap();
    let length_s = *stepped.time_s.last().unwrap();
    let text = netlist(stepper.circuit(), &state, &gate, length_s, "drain.txt");
    let simulated = run_ngspice(&text, &folder, "drain.txt");
    fs::remove_dir_all(&folder).unwrap();
    let from_s = cycles[0].turn_on_s;
    let plateau = truth
        .leakage_rings
        .iter()
        .map(|ring| (ring.start_s - start_s, ring.end_s - start_s))
        .filter(|(begin_s, _)| *begin_s > from_s)
        .collect();
    let ring = truth.relaxation_rings.last().unwrap();
    Pair {
        stepped,
        simulated,
        ring: (ring.start_s - start_s, ring.end_s - start_s),
        cycles,
        plateau,
        bulk_v: state.bulk_v,
    }
}

fn assert_close(what: &str, ours: f64, theirs: f64, tolerance: f64) {
    let off = ours / theirs - 1.0;
    println!("{what}: {ours:.6e} against {theirs:.6e}, {:+.4} %", 100.0 * off);
    assert!(off.abs() < tolerance, "{what}: {ours:e} against {theirs:e} of ngspice");
}

fn check(name: &str, line_v: f64, load_a: f64) {
    let pair = pair(name, line_v, load_a);
    let (from_s, to_s) = pair.ring;
    let what = |quantity: &str| format!("{name} {line_v} V {quantity}");
    let relaxation = |trace: &Trace| trace.frequency(from_s, to_s, pair.bulk_v, 15);
    let ((ours_hz, periods), (theirs_hz, _)) = (relaxation(&pair.stepped), relaxation(&pair.simulated));
    assert!(periods >= 10, "{periods} periods of relaxation ring");
    assert_close(&what("relaxation ring"), ours_hz, theirs_hz, 0.003);
    let mut leakage_rings = 0;
    for (cycle, (release_s, end_s)) in pair.cycles.iter().zip(&pair.plateau) {
        let (off_s, knee_s) = (cycle.turn_off_s.unwrap(), cycle.demagnetised_s.unwrap());
        let peak = |trace: &Trace| trace.highest_v(off_s, knee_s);
        assert_close(&what("peak"), peak(&pair.stepped), peak(&pair.simulated), 0.01);
        // The second half of the plateau, whole ring periods or not: the ring has died down there.
        let flat_s = 0.5 * (release_s + end_s);
        let reflected = |trace: &Trace| trace.mean_v(flat_s, *end_s) - pair.bulk_v;
        assert_close(&what("reflected"), reflected(&pair.stepped), reflected(&pair.simulated), 0.01);
        let level_v = pair.stepped.mean_v(flat_s, *end_s);
        let leakage = |trace: &Trace| trace.frequency(*release_s, *end_s, level_v, 5);
        let ((ours_hz, periods), (theirs_hz, _)) = (leakage(&pair.stepped), leakage(&pair.simulated));
        // After a long gap the first pulse refills the clamp and leaves hardly any leakage ring.
        if periods >= 3 {
            assert_close(&what("leakage ring"), ours_hz, theirs_hz, 0.003);
            leakage_rings += 1;
        }
    }
    assert!(leakage_rings > 0, "no leakage ring to compare");
    let (mut square, mut count) = (0.0, 0);
    for (time_s, drain_v) in pair.stepped.time_s.iter().zip(&pair.stepped.drain_v) {
        if *time_s > pair.cycles[0].turn_on_s {
            square += (drain_v - pair.simulated.at(*time_s)).powi(2);
            count += 1;
        }
    }
    println!("{} {:.3} V", what("root-mean-square difference"), (square / f64::from(count)).sqrt());
}

#[test]
fn a_resistor_capacitor_clamp_and_a_smooth_junction_agree_with_ngspice() {
    if need("ngspice") {
        check("beacon", 230.0, 0.01);
        check("beacon", 85.0, 0.01);
    }
}

#[test]
fn a_zener_clamp_and_a_knee_agree_with_ngspice() {
    if need("ngspice") {
        check("foghorn", 230.0, 0.01);
        check("foghorn", 85.0, 0.01);
    }
}

#[test]
fn a_large_junction_with_a_large_swing_agrees_with_ngspice() {
    if need("ngspice") {
        check("winch", 120.0, 0.03);
    }
}
