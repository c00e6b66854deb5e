//! Rings of one node taken together: line ripple is taken out, strangers are left out, and honest scatter is kept.

use crate::generate::Maker;
use ringstep_analysis::{findings::Ring, fit::join, quantity::Measured};

const NOISE_HZ: f64 = 20.0;

fn ring(frequency_hz: f64) -> Ring {
    let exact = Measured::exact(1.0);
    Ring {
        frequency_hz: Measured { value: frequency_hz, standard_uncertainty: NOISE_HZ },
        damped_frequency_hz: Measured { value: frequency_hz, standard_uncertainty: NOISE_HZ },
        decay_per_s: exact,
        quality_factor: exact,
        amplitude_v: 100.0,
        alternative_hz: None,
    }
}

/// Twelve rings on a bulk voltage that ripples by `ripple_v`, with a frequency that follows it.
fn rippled(seed: u64, ripple_v: f64, hz_per_v: f64) -> Vec<(Ring, f64)> {
    let mut maker = Maker::new(seed);
    (0..12)
        .map(|n| {
            let level_v = 160.0 + ripple_v * (f64::from(n) * 0.9).sin();
            (ring(550e3 + hz_per_v * (level_v - 160.0) + NOISE_HZ * maker.normal()), level_v)
        })
        .collect()
}

fn scatter(rings: &[Ring]) -> f64 {
    let mean = rings.iter().map(|ring| ring.frequency_hz.value).sum::<f64>() / rings.len() as f64;
    let squares: f64 = rings.iter().map(|ring| (ring.frequency_hz.value - mean).powi(2)).sum();
    (squares / (rings.len() - 1) as f64).sqrt()
}

#[test]
fn line_ripple_does_not_smear_the_frequency() {
    for seed in 0..50 {
        let joined = join(&rippled(seed, 5.0, 400.0));
        assert!((joined.slope_hz_per_v - 400.0).abs() < 12.0, "{}", joined.slope_hz_per_v);
        assert!(joined.left_out.is_empty() && scatter(&joined.rings) < 2.0 * NOISE_HZ);
    }
}

#[test]
fn rings_that_do_not_follow_the_voltage_are_left_as_they_are() {
    let moved = (0..200).filter(|&seed| join(&rippled(seed, 5.0, 0.0)).slope_hz_per_v != 0.0).count();
    assert!(moved <= 8, "{moved} of 200");
}

#[test]
fn a_ring_of_another_state_is_left_out_and_no_other() {
    let mut wrong = 0;
    for seed in 0..200 {
        let mut rings = rippled(1000 + seed, 0.5, 0.0);
        assert!(join(&rings).left_out.len() <= 1);
        wrong += usize::from(!join(&rings).left_out.is_empty());
        rings[7].0.frequency_hz.value += 15.0 * NOISE_HZ;
        assert_eq!(join(&rings).left_out, [7], "seed {seed}");
    }
    assert!(wrong <= 2, "{wrong} of 200");
}
