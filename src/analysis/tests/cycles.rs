//! Segmentation of drain waveforms whose pieces are known.

use crate::drain::{Clamp, Shape, True, waveform};
use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha12Rng;
use ringstep_analysis::cycles::{Segmentation, segment};
use ringstep_analysis::findings::{BoardFacts, CycleMode};
use ringstep_analysis::waveform::{Samples, TimeAxis};

fn random_shape(random: &mut ChaCha12Rng) -> Shape {
    let bulk_v = random.random_range(100.0..375.0);
    let reflected_v = random.random_range(60.0..130.0);
    let ring_hz = random.random_range(250e3..900e3);
    let clamp = if random.random_bool(0.3) {
        Clamp::None
    } else {
        let above_bulk_v = reflected_v * random.random_range(1.3..2.0);
        Clamp::Flat { above_bulk_v, length_s: random.random_range(50e-9..300e-9) }
    };
    let noise_v = random.random_range(0.2..1.5);
    Shape {
        bulk_v,
        reflected_v,
        on_drop_v: random.random_range(0.5..4.0),
        on_s: random.random_range(0.8e-6..2.5e-6),
        carried: 0.0,
        period_s: 1.0 / random.random_range(60e3..130e3),
        ring_hz,
        ring_decay_per_s: std::f64::consts::PI * ring_hz / random.random_range(8.0..40.0),
        leak_hz: random.random_range(3e6..9e6),
        leak_decay_per_s: random.random_range(1e6..3e6),
        leak_v: reflected_v * random.random_range(0.4..1.2),
        clamp,
        dither: random.random_range(0.0..0.06),
        noise_v,
        step_v: [0.05, 2.5][usize::from(random.random_bool(0.5))],
    }
}

/// How well a knee can be told: well where the plateau can be seen apart from the leakage ring, within half a ring period where
/// it can't.
fn knee_tolerance_s(shape: &Shape, truth: &True, interval_s: f64) -> f64 {
    let half_plateau_s = 0.5 * (truth.knee_s - truth.turn_off_s);
    let left_v = shape.leak_v * (-shape.leak_decay_per_s * half_plateau_s).exp();
    if left_v < 0.15 * shape.reflected_v && half_plateau_s > 5.0 * interval_s {
        60e-9 + interval_s
    } else {
        0.5 / shape.ring_hz + interval_s
    }
}

/// Holds every whole cycle that was found against what was put in, and counts those whose knee could be held closely.
fn compare(shape: &Shape, found: &Segmentation, truths: &[True], samples: &Samples, label: &str) -> usize {
    let interval_s = samples.mean_interval_s();
    // A turn-on at the very ends of the record may or may not be seen.
    let inside: Vec<&True> = truths
        .iter()
        .filter(|truth| truth.turn_on_s > 2.0 * interval_s && truth.end_s < samples.end_s() - 2.0 * interval_s)
        .collect();
    let mut close = 0;
    for truth in &inside {
        let segment =
            found.segments.iter().find(|s| (s.cycle.start_s - truth.turn_on_s).abs() < 60e-9 + 1.5 * interval_s);
        let Some(segment) = segment else { panic!("{label}: no cycle at {}: {:#?}", truth.turn_on_s, found.segments) };
        let boundary = (truth.knee_s - truth.end_s).abs() < 2.0 * interval_s;
        assert!(segment.cycle.mode == truth.mode || boundary, "{label}: {truth:?} read as {segment:?}");
        if truth.mode != CycleMode::Continuous && !boundary {
            let knee_s = segment.cycle.end_of_demagnetisation_s.unwrap();
            let tolerance_s = knee_tolerance_s(shape, truth, interval_s);
            assert!((knee_s - truth.knee_s).abs() < tolerance_s, "{label}: {truth:?} has its knee at {knee_s}");
            close += usize::from(tolerance_s < 60e-9 + 1.1 * interval_s);
        }
    }
    // And none that was not put in.
    for segment in found.segments.iter().filter(|segment| segment.cycle.mode != CycleMode::Incomplete) {
        let near = |truth: &True| (segment.cycle.start_s - truth.turn_on_s).abs() < 60e-9 + 1.5 * interval_s;
        assert!(truths.iter().any(near), "{label}: {segment:?} was not put in");
    }
    close
}

fn tally(name: &str, seeds: std::ops::Range<u64>, f: impl Fn(u64) + std::panic::RefUnwindSafe) {
    let mut bad = 0;
    for seed in seeds.clone() {
        if std::panic::catch_unwind(|| f(seed)).is_err() {
            bad += 1;
        }
    }
    println!("TALLY {name} {bad} of {}", seeds.end);
    assert_eq!(bad, 0);
}

#[test]
fn every_cycle_is_classified_over_many_seeds() {
    tally("every_cycle_is_classified_over_many_seeds", seeds(120), |seed| {
        let mut random = ChaCha12Rng::seed_from_u64(seed);
        let mut shape = random_shape(&mut random);
        let gaps: &[usize] = [&[1][..], &[1, 1, 1, 9], &[1, 3, 1, 2], &[1, 1, 40]][random.random_range(0..4)];
        let on_scale: &[f64] = if gaps.len() == 1 { &[1.0] } else { &[1.0, 0.8, 0.9] };
        let demagnetised = shape.on_s * (1.0 + shape.bulk_v / shape.reflected_v);
        if demagnetised > 0.7 * shape.period_s {
            shape.on_s *= 0.7 * shape.period_s / demagnetised;
        }
        let fine = [(4e-9, 60_000), (20e-9, 50_000), (200e-9, 10_000)][random.random_range(0..3)];
        let (interval_s, count) = fine;
        let (samples, truths) =
            waveform(&shape, on_scale, gaps, interval_s, count, random.random_range(0.0..8e-6), seed);
        let label = format!("seed {seed} interval {interval_s} gaps {gaps:?} {shape:?}");
        let facts =
            BoardFacts { switching_period_s: Some(shape.period_s), skips_cycles: Some(true), ..BoardFacts::default() };
        let Some(found) = segment(&samples, &facts) else { panic!("{label}: nothing found") };
        compare(&shape, &found, &truths, &samples, &label);
        assert_eq!(found.collapse, None, "{label}");
    });
}

#[test]
fn continuous_conduction_is_told_from_discontinuous() {
    tally("continuous_conduction_is_told_from_discontinuous", seeds(60), |seed| {
        let mut random = ChaCha12Rng::seed_from_u64(1000 + seed);
        let mut shape = random_shape(&mut random);
        // The plateau ends exactly where volt-seconds balance: lengthen the on-time beyond the period's share.
        shape.dither = 0.0;
        shape.on_s = 1.02 * shape.period_s / (1.0 + shape.bulk_v / shape.reflected_v);
        let (interval_s, count) = [(4e-9, 40_000), (20e-9, 20_000), (200e-9, 10_000)][random.random_range(0..3)];
        let (samples, truths) = waveform(&shape, &[1.0], &[1], interval_s, count, random.random_range(0.0..8e-6), seed);
        let label = format!("seed {seed} interval {interval_s} {shape:?}");
        let found = segment(&samples, &BoardFacts::default()).unwrap();
        compare(&shape, &found, &truths, &samples, &label);
        assert!(found.segments.iter().all(|segment| segment.relaxation.is_none()), "{label}");
    });
}

#[test]
fn noise_and_bare_rings_hold_no_switching_cycles() {
    tally("noise_and_bare_rings_hold_no_switching_cycles", seeds(200), |seed| {
        let mut random = ChaCha12Rng::seed_from_u64(seed);
        let mut volts: Vec<f64> = (0..5000).map(|_| random.random_range(-1.0..1.0)).collect();
        if seed % 2 == 1 {
            let (w, decay) = (random.random_range(0.02..0.3), random.random_range(1e-4..2e-2));
            volts
                .iter_mut()
                .enumerate()
                .for_each(|(n, v)| *v = 0.02 * *v + 10.0 * (-decay * n as f64).exp() * (w * n as f64).cos());
        }
        let samples = Samples::new(TimeAxis::Even { start_s: 0.0, interval_s: 1e-8 }, volts).unwrap();
        let found = segment(&samples, &BoardFacts::default());
        assert!(found.is_none(), "seed {seed}: {found:?}");
    });
}

fn seeds(n: u64) -> std::ops::Range<u64> {
    let k: u64 = std::env::var("SEEDS").ok().and_then(|s| s.parse().ok()).unwrap_or(1);
    0..n * k
}
