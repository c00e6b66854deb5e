//! Segmentation of drain waveforms whose pieces are known.

use crate::drain::{Clamp, EDGE_S, Shape, True, burst_train, valley_v, waveform};
use crate::generate::Maker;
use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha12Rng;
use ringstep_analysis::analyse;
use ringstep_analysis::cycles::{Segment, Segmentation, segment};
use ringstep_analysis::findings::{BoardFacts, CycleMode, DoubtName, Subject};
use ringstep_analysis::waveform::{Samples, TimeAxis};
use std::f64::consts::TAU;

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

/// Whether the plateau can be seen apart from the leakage ring.
fn is_plateau_seen(shape: &Shape, truth: &True, interval_s: f64) -> bool {
    let half_plateau_s = 0.5 * (truth.knee_s - truth.turn_off_s);
    let left_v = shape.leak_v * (-shape.leak_decay_per_s * half_plateau_s).exp();
    left_v < 0.15 * shape.reflected_v && half_plateau_s > 5.0 * interval_s
}

/// How well a knee can be told: well where the plateau can be seen and the ring falls through the bulk voltage, somewhat less
/// where its fall is cut short, and somewhere on the plateau where that can't be seen.
fn knee_tolerance_s(shape: &Shape, truth: &True, interval_s: f64) -> f64 {
    let is_cut = truth.end_s - truth.knee_s < 0.3 / shape.ring_hz;
    let close_s = 2.0 * EDGE_S + interval_s + if is_cut { 0.05 / shape.ring_hz } else { 0.0 };
    if is_plateau_seen(shape, truth, interval_s) {
        close_s
    } else {
        close_s + truth.knee_s - truth.turn_off_s + 0.5 / shape.ring_hz
    }
}

/// Every whole cycle that was put in is found, and classified as it was put in, and none is found that was not.
fn compare(shape: &Shape, found: &Segmentation, truths: &[True], samples: &Samples) -> Result<(), String> {
    let interval_s = samples.mean_interval_s();
    let margin_s = 2.0 * EDGE_S + 2.0 * interval_s;
    let is_at = |start_s: f64, index: usize| {
        let truth = &truths[index];
        // Where the ring has brought the node down by itself, no edge shows when the switch closed.
        let valley = index.checked_sub(1).is_some_and(|before| valley_v(shape, &truths[before]) < 0.2 * shape.bulk_v);
        let early_s = if valley { 0.5 / shape.ring_hz } else { 0.0 };
        let tolerance_s = 2.0 * EDGE_S + 1.5 * interval_s;
        (-early_s - tolerance_s..tolerance_s).contains(&(start_s - truth.turn_on_s))
    };
    for (index, truth) in truths.iter().enumerate() {
        // The edge that begins a cycle and the on-state behind it may not be told where the record's ends cut them.
        let end_s = truths.get(index + 1).map_or(f64::INFINITY, |next| next.turn_off_s);
        if truth.turn_on_s < margin_s || end_s > samples.end_s() - margin_s {
            continue;
        }
        let segment = found.segments.iter().find(|segment| is_at(segment.cycle.start_s, index));
        let segment = segment.ok_or_else(|| format!("no cycle at {}", truth.turn_on_s))?;
        let boundary = (truth.knee_s - truth.end_s).abs() < 2.0 * interval_s;
        if segment.cycle.mode != truth.mode && !boundary {
            return Err(format!("{truth:?} is read as {segment:?}"));
        }
        if truth.mode != CycleMode::Continuous && !boundary {
            let off_s = segment.cycle.end_of_demagnetisation_s.unwrap() - truth.knee_s;
            if off_s.abs() > knee_tolerance_s(shape, truth, interval_s) {
                return Err(format!("{truth:?} has its knee off by {off_s}"));
            }
        }
    }
    let whole = found.segments.iter().filter(|segment| segment.cycle.mode != CycleMode::Incomplete);
    let invented = |segment: &&Segment| !(0..truths.len()).any(|index| is_at(segment.cycle.start_s, index));
    whole.clone().find(invented).map_or(Ok(()), |segment| Err(format!("{segment:?} was not put in")))
}

fn shape_with_gaps(random: &mut ChaCha12Rng) -> (Shape, &'static [usize], &'static [f64]) {
    let mut shape = random_shape(random);
    let gaps: &[usize] = [&[1][..], &[1, 1, 1, 9], &[1, 3, 1, 2], &[1, 1, 40]][random.random_range(0..4)];
    let on_scale: &[f64] = if gaps.len() == 1 { &[1.0] } else { &[1.0, 0.8, 0.9] };
    let demagnetised_s = shape.on_s * (1.0 + shape.bulk_v / shape.reflected_v);
    if demagnetised_s > 0.7 * shape.period_s {
        shape.on_s *= 0.7 * shape.period_s / demagnetised_s;
    }
    (shape, gaps, on_scale)
}

fn skipping(shape: &Shape) -> BoardFacts {
    BoardFacts { switching_period_s: Some(shape.period_s), skips_cycles: Some(true), ..BoardFacts::default() }
}

#[test]
fn every_cycle_is_classified_over_many_seeds() {
    for seed in 0..600 {
        let mut random = ChaCha12Rng::seed_from_u64(seed);
        let (shape, gaps, on_scale) = shape_with_gaps(&mut random);
        let (interval_s, count) = [(4e-9, 60_000), (20e-9, 50_000), (200e-9, 10_000)][random.random_range(0..3)];
        if 0.8 * shape.on_s < 4.0 * interval_s {
            continue;
        }
        let phase_s = random.random_range(0.0..8e-6);
        let (samples, truths) = waveform(&shape, on_scale, gaps, interval_s, count, phase_s, seed);
        let label = format!("seed {seed} interval {interval_s} gaps {gaps:?} {shape:?}");
        let found = segment(&samples, &skipping(&shape)).unwrap_or_else(|| panic!("{label}: nothing found"));
        compare(&shape, &found, &truths, &samples).unwrap_or_else(|error| panic!("{label}: {error}"));
        assert_eq!(found.collapse, None, "{label}");
    }
}

#[test]
fn a_record_too_coarse_for_its_turn_ons_is_doubted_or_read_right() {
    let (mut right, mut doubted, mut refused) = (0, 0, 0);
    for seed in 0..300 {
        let mut random = ChaCha12Rng::seed_from_u64(seed);
        let (shape, gaps, on_scale) = shape_with_gaps(&mut random);
        let shortest_s = shape.on_s * on_scale.iter().copied().fold(1.0, f64::min);
        let samples_an_on_state = random.random_range(0.5..8.0);
        let interval_s = shortest_s / samples_an_on_state;
        let (samples, truths) = waveform(&shape, on_scale, gaps, interval_s, 4000, 0.0, seed);
        let label = format!("seed {seed}: {samples_an_on_state} samples an on-state, gaps {gaps:?} {shape:?}");
        match segment(&samples, &skipping(&shape)) {
            None => refused += 1,
            Some(found) if !found.turn_ons_resolved => doubted += 1,
            Some(found) => {
                right += 1;
                compare(&shape, &found, &truths, &samples).unwrap_or_else(|error| panic!("{label}: {error}"));
                continue;
            }
        }
        assert!(samples_an_on_state < 5.0, "{label}: refused or doubted");
    }
    println!("{right} read right, {doubted} doubted, {refused} refused");
}

#[test]
fn continuous_conduction_is_told_from_discontinuous() {
    for seed in 0..300 {
        let mut random = ChaCha12Rng::seed_from_u64(1000 + seed);
        let mut shape = random_shape(&mut random);
        shape.dither = 0.0;
        // Volt-seconds balance over the period, and the core never empties.
        shape.on_s = shape.period_s / (1.0 + shape.bulk_v / shape.reflected_v);
        shape.carried = random.random_range(0.05..2.0);
        let (interval_s, count) = [(4e-9, 40_000), (20e-9, 20_000), (200e-9, 10_000)][random.random_range(0..3)];
        let (samples, truths) = waveform(&shape, &[1.0], &[1], interval_s, count, random.random_range(0.0..8e-6), seed);
        let label = format!("seed {seed} interval {interval_s} {shape:?}");
        let found = segment(&samples, &BoardFacts::default()).unwrap();
        assert!(truths.iter().all(|truth| truth.mode == CycleMode::Continuous));
        compare(&shape, &found, &truths, &samples).unwrap_or_else(|error| panic!("{label}: {error}"));
        assert!(found.segments.iter().all(|segment| segment.relaxation.is_none()), "{label}");
    }
}

#[test]
fn noise_and_bare_rings_hold_no_switching_cycles() {
    for seed in 0..1000 {
        let mut maker = Maker::new(seed);
        let (w, decay, phase) = (maker.between(0.02, 0.3), maker.between(1e-4, 2e-2), maker.between(0.0, TAU));
        let ring = |n: usize| 10.0 * (-decay * n as f64).exp() * (w * n as f64 + phase).cos();
        let (size, band) = match seed % 4 {
            0 => (0.0, None),
            1 => (0.0, Some(maker.log_between(0.02, 0.2))),
            2 => (1.0, None),
            _ => (1.0, Some(0.1)),
        };
        let spread_v = if size == 0.0 { 1.0 } else { 0.02 };
        let noise = maker.noise(5000, band);
        let volts = noise.iter().enumerate().map(|(n, noise)| size * ring(n) + spread_v * noise).collect();
        let samples = Samples::new(TimeAxis::Even { start_s: 0.0, interval_s: 1e-8 }, volts).unwrap();
        let found = segment(&samples, &BoardFacts::default());
        assert!(found.is_none(), "seed {seed} w {w} decay {decay} phase {phase} band {band:?}: {found:?}");
    }
}

#[test]
fn the_conduction_boundary_is_told_as_soon_as_the_ring_has_begun_to_fall() {
    for seed in 0..200 {
        let mut random = ChaCha12Rng::seed_from_u64(2000 + seed);
        let mut shape = random_shape(&mut random);
        shape.dither = 0.0;
        let demagnetised_s = shape.on_s * (1.0 + shape.bulk_v / shape.reflected_v);
        // The core is empty this long before the next turn-on: from the boundary itself to a quarter of a ring period.
        let empty_s = random.random_range(0.0..0.25) / shape.ring_hz;
        shape.period_s = demagnetised_s + empty_s;
        let seen_s = (empty_s - 2.0 * 20e-9_f64).max(0.0);
        let fallen_v = shape.reflected_v * (1.0 - (TAU * shape.ring_hz * seen_s).cos());
        let (samples, truths) = waveform(&shape, &[1.0], &[1], 20e-9, 20_000, random.random_range(0.0..8e-6), seed);
        let label = format!("seed {seed}: {fallen_v} V fallen in {empty_s} s less two samples, {shape:?}");
        let found = segment(&samples, &BoardFacts::default()).unwrap();
        // Before it has fallen by a sixth of its height, two samples before the edge, or on a plateau hidden by the leakage ring
        // either class may stand, but all cycles must be there.
        let is_seen = is_plateau_seen(&shape, &truths[1], 20e-9);
        if is_seen && fallen_v > (0.17 * shape.reflected_v).max(8.0 * shape.noise_v) {
            compare(&shape, &found, &truths, &samples).unwrap_or_else(|error| panic!("{label}: {error}"));
        } else {
            let all = (samples.end_s() / shape.period_s) as usize;
            assert!(found.turn_ons_s.len().abs_diff(all) <= 1, "{label}: {}", found.turn_ons_s.len());
        }
    }
}

/// Discontinuous at 100 kHz with a well damped leakage ring.
fn beacon() -> Shape {
    Shape {
        bulk_v: 300.0,
        reflected_v: 100.0,
        on_drop_v: 2.0,
        on_s: 1.2e-6,
        carried: 0.0,
        period_s: 10e-6,
        ring_hz: 500e3,
        ring_decay_per_s: 8e4,
        leak_hz: 5e6,
        leak_decay_per_s: 2e6,
        leak_v: 80.0,
        clamp: Clamp::None,
        dither: 0.02,
        noise_v: 0.5,
        step_v: 2.0,
    }
}

fn modes(found: &Segmentation) -> Vec<CycleMode> {
    let modes = found.segments.iter().map(|segment| segment.cycle.mode);
    modes.filter(|&mode| mode != CycleMode::Incomplete).collect()
}

#[test]
fn a_frequency_that_folds_back_is_not_taken_for_skipping() {
    // A controller that folds its frequency back moves the period from one cycle to the next.
    let (samples, truths) = waveform(&beacon(), &[1.0], &[1, 2, 3, 2], 20e-9, 20_000, 1e-6, 1);
    let folding = BoardFacts { switching_period_s: Some(10e-6), skips_cycles: Some(false), ..BoardFacts::default() };
    let found = segment(&samples, &folding).unwrap();
    assert!(modes(&found).len() + 2 >= truths.len());
    assert!(modes(&found).iter().all(|&mode| mode == CycleMode::Discontinuous), "{:?}", modes(&found));
    // The same waveform of a controller that skips cycles.
    let found = segment(&samples, &skipping(&beacon())).unwrap();
    compare(&beacon(), &found, &truths, &samples).unwrap();
    assert!(modes(&found).contains(&CycleMode::Skipped));
}

#[test]
fn a_periodic_collapse_is_recognised_and_regulation_is_not() {
    let hiccup = |bursts: usize, grows: bool, gap: usize| {
        let made = burst_train(&beacon(), bursts, grows, gap, 50e-9, 5);
        segment(&made, &skipping(&beacon())).unwrap()
    };
    // An output charged from zero, over and over.
    let found = hiccup(3, true, 300);
    assert!(found.collapse.as_ref().is_some_and(|sentence| sentence.contains("start-up")), "{:?}", found.collapse);
    // Bursts at no load, in regulation: as many cycles at a steady reflected voltage, as long a gap.
    let found = hiccup(3, false, 300);
    assert_eq!(found.collapse, None);
    // A pause that no regulation makes.
    let found = hiccup(2, false, 6000);
    assert!(found.collapse.as_ref().is_some_and(|sentence| sentence.contains("stays off")), "{:?}", found.collapse);
}

#[test]
fn a_collapsing_output_gives_a_doubt_in_the_findings() {
    let made = burst_train(&beacon(), 3, true, 300, 50e-9, 5);
    let findings = analyse(&made, Subject::Drain, &skipping(&beacon()));
    assert!(findings.doubts.iter().any(|doubt| doubt.name == DoubtName::ProtectionOrRestart), "{:?}", findings.doubts);
}

#[test]
fn the_leakage_ring_begins_behind_the_flat_top_of_the_clamp() {
    for seed in 0..60 {
        let mut random = ChaCha12Rng::seed_from_u64(3000 + seed);
        let length_s = random.random_range(150e-9..500e-9);
        let clamp = Clamp::Flat { above_bulk_v: 100.0 * random.random_range(1.4..2.0), length_s };
        let shape =
            Shape { clamp, on_s: 1.6e-6, leak_hz: random.random_range(3e6..8e6), leak_decay_per_s: 1.5e6, ..beacon() };
        let (samples, truths) = waveform(&shape, &[1.0], &[1], 4e-9, 20_000, 1e-6, seed);
        let found = segment(&samples, &skipping(&shape)).unwrap();
        let released_s = 0.25 / shape.leak_hz + length_s;
        let mut read = 0;
        for segment in found.segments.iter().filter(|segment| segment.cycle.mode == CycleMode::Discontinuous) {
            let Some(truth) = truths.iter().find(|truth| (truth.turn_on_s - segment.cycle.start_s).abs() < 0.1e-6)
            else {
                panic!("seed {seed}: {segment:?}")
            };
            let Some(leakage) = &segment.leakage else { continue };
            let start_s = samples.time_s(leakage.samples.start) - truth.turn_off_s;
            // Behind the release, one period spared at most, and not a whole one given away besides.
            assert!(
                (released_s..released_s + 2.0 / shape.leak_hz).contains(&start_s),
                "seed {seed}: {start_s} {released_s} {shape:?}"
            );
            let period = leakage.period_s * shape.leak_hz;
            assert!((period - 1.0).abs() < 0.05, "seed {seed}: {period} {shape:?}");
            read += 1;
        }
        assert!(read >= 5, "seed {seed}: {read} leakage rings");
    }
}
