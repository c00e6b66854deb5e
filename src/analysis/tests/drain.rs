//! Drain waveforms made piece by piece from what they should hold: on-state, rise, clamp, leakage ring, plateau, knee,
//! relaxation ring.

use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha12Rng;
use rand_distr::{Distribution, Normal};
use ringstep_analysis::findings::CycleMode;
use ringstep_analysis::waveform::{Samples, TimeAxis};
use std::f64::consts::TAU;

#[derive(Debug, Clone, Copy, PartialEq)]
pub(crate) enum Clamp {
    None,
    /// Flat top at this voltage above the bulk, for this long.
    Flat {
        above_bulk_v: f64,
        length_s: f64,
    },
}

#[derive(Debug, Clone, Copy)]
pub(crate) struct Shape {
    pub(crate) bulk_v: f64,
    pub(crate) reflected_v: f64,
    pub(crate) on_drop_v: f64,
    pub(crate) on_s: f64,
    /// Volt-seconds still in the core at turn-on, as a share of those that an on-time adds: 0 where the core is empty.
    pub(crate) carried: f64,
    pub(crate) period_s: f64,
    pub(crate) ring_hz: f64,
    pub(crate) ring_decay_per_s: f64,
    pub(crate) leak_hz: f64,
    pub(crate) leak_decay_per_s: f64,
    pub(crate) leak_v: f64,
    pub(crate) clamp: Clamp,
    pub(crate) dither: f64,
    pub(crate) noise_v: f64,
    pub(crate) step_v: f64,
}

/// What was put in.
#[derive(Debug, Clone, Copy)]
pub(crate) struct True {
    pub(crate) turn_on_s: f64,
    pub(crate) turn_off_s: f64,
    /// When the core would be empty; beyond the end in continuous conduction.
    pub(crate) knee_s: f64,
    pub(crate) end_s: f64,
    pub(crate) mode: CycleMode,
}

/// On-states of this length followed by these gaps in periods (1: no cycle left out).
pub(crate) fn waveform(
    shape: &Shape,
    on_scale: &[f64],
    gaps: &[usize],
    interval_s: f64,
    count: usize,
    phase_s: f64,
    seed: u64,
) -> (Samples, Vec<True>) {
    let mut random = ChaCha12Rng::seed_from_u64(seed);
    let mut truths = Vec::new();
    let mut at_s = -phase_s;
    for index in 0.. {
        let gap = gaps[index % gaps.len()];
        let wobble = 1.0 + shape.dither * random.random_range(-1.0..1.0);
        let end_s = at_s + shape.period_s * gap as f64 * wobble;
        let on_s = shape.on_s * on_scale[index % on_scale.len()];
        let turn_off_s = at_s + on_s;
        let knee_s = turn_off_s + on_s * (1.0 + shape.carried) * shape.bulk_v / shape.reflected_v;
        let mode = match (knee_s < end_s, gap) {
            (false, _) => CycleMode::Continuous,
            (true, 1) => CycleMode::Discontinuous,
            _ => CycleMode::Skipped,
        };
        truths.push(True { turn_on_s: at_s, turn_off_s, knee_s, end_s, mode });
        at_s = end_s;
        if at_s > interval_s * count as f64 {
            break;
        }
    }
    let noise = Normal::new(0.0, shape.noise_v).unwrap();
    let mut cycle = 0;
    let mut volts = Vec::with_capacity(count);
    for index in 0..count {
        let t = interval_s * index as f64;
        while t >= truths[cycle].end_s {
            cycle += 1;
        }
        let clean = voltage(shape, &truths[cycle], t, cycle.checked_sub(1).map(|before| &truths[before]));
        let noisy = clean + noise.sample(&mut random);
        volts.push((noisy / shape.step_v).round() * shape.step_v);
    }
    let samples = Samples::new(TimeAxis::Even { start_s: 0.0, interval_s }, volts).unwrap();
    (samples.with_range(Some(shape.step_v), None).unwrap(), truths)
}

/// Bursts of thirty cycles with a pause of so many periods between them; the reflected voltage grows from a fifth of its end
/// value in each where the output is charged from zero.
pub(crate) fn burst_train(
    shape: &Shape,
    bursts: usize,
    grows: bool,
    pause: usize,
    interval_s: f64,
    seed: u64,
) -> Samples {
    const CYCLES: usize = 30;
    let mut volts: Vec<f64> = Vec::new();
    for burst in 0..bursts {
        for cycle in 0..CYCLES {
            let charged = 0.2 + 0.8 * cycle as f64 / (CYCLES - 1) as f64;
            let reflected_v = shape.reflected_v * if grows { charged } else { 1.0 };
            // What keeps the cycle discontinuous at the low voltage of an empty output: less is put in.
            let on_s = shape.on_s * reflected_v / shape.reflected_v;
            let of_cycle = Shape { reflected_v, on_s, dither: 0.0, ..*shape };
            let gap = if cycle + 1 == CYCLES { pause } else { 1 };
            let count = (gap as f64 * shape.period_s / interval_s).round() as usize;
            let seed = seed + (burst * CYCLES + cycle) as u64;
            let (piece, _) = waveform(&of_cycle, &[1.0], &[gap], interval_s, count, 0.0, seed);
            volts.extend_from_slice(piece.volts());
        }
    }
    let samples = Samples::new(TimeAxis::Even { start_s: 0.0, interval_s }, volts).unwrap();
    samples.with_range(Some(shape.step_v), None).unwrap()
}

/// Lowest voltage of the half ring period before the end of a cycle: where the ring has brought the node down itself, no edge
/// shows when the switch closed.
pub(crate) fn valley_v(shape: &Shape, cycle: &True) -> f64 {
    let step_s = 0.01 / shape.ring_hz;
    let back = (0..50).map(|n| cycle.end_s - f64::from(n) * step_s).filter(|&t| t > cycle.knee_s);
    back.map(|t| off_voltage(shape, cycle, t)).fold(f64::INFINITY, f64::min)
}

/// How long the switch takes to pull the node down.
pub(crate) const EDGE_S: f64 = 30e-9;

fn voltage(shape: &Shape, cycle: &True, t: f64, before: Option<&True>) -> f64 {
    let since_on = t - cycle.turn_on_s;
    if since_on < EDGE_S {
        // The switch takes its time to pull the node down from wherever it was.
        let from_v = before.map_or(shape.bulk_v, |before| off_voltage(shape, before, before.end_s));
        return from_v + (shape.on_drop_v * 0.2 - from_v) * (since_on / EDGE_S);
    }
    if t < cycle.turn_off_s {
        return shape.on_drop_v * since_on / (cycle.turn_off_s - cycle.turn_on_s);
    }
    off_voltage(shape, cycle, t)
}

fn off_voltage(shape: &Shape, cycle: &True, t: f64) -> f64 {
    let since_off = t - cycle.turn_off_s;
    let plateau_v = shape.bulk_v + shape.reflected_v;
    if t > cycle.knee_s {
        let since = t - cycle.knee_s;
        // From rest: no current flows at the knee, so the voltage leaves the plateau without a kink.
        let (w, decay) = (TAU * shape.ring_hz, shape.ring_decay_per_s);
        let ring = (-decay * since).exp() * ((w * since).cos() + decay / w * (w * since).sin());
        let v = shape.bulk_v + shape.reflected_v * ring;
        // The body diode holds the node.
        return v.max(-0.7);
    }
    let (top_v, flat_s) = match shape.clamp {
        Clamp::None => (plateau_v + shape.leak_v, 0.0),
        Clamp::Flat { above_bulk_v, length_s } => (shape.bulk_v + above_bulk_v, length_s),
    };
    let rise_s = 0.25 / shape.leak_hz;
    if since_off < rise_s {
        return top_v * (since_off / rise_s * TAU / 4.0).sin();
    }
    if since_off < rise_s + flat_s {
        return top_v;
    }
    let since = since_off - rise_s - flat_s;
    plateau_v + (top_v - plateau_v) * (-shape.leak_decay_per_s * since).exp() * (TAU * shape.leak_hz * since).cos()
}
