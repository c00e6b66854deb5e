//! Rings on a voltage-dependent capacitance and with a loss that depends on amplitude, made by integrating the circuit: what small
//! swings would tell must come out of large ones.

use crate::generate::{Made, Maker};
use ringstep_analysis::{
    findings::RingKind,
    fit::{Accepted, Base, fit_damped_sinusoid, fit_ring},
};
use std::f64::consts::{PI, TAU};

const BIAS_V: f64 = 150.0;
const SWING_V: f64 = 130.0;
const HENRY: f64 = 1e-3;

/// Capacitance in farad at a voltage.
type Law = fn(f64) -> f64;

/// `C0 / (1 + v/Vj)^m`, the depletion capacitance of a junction (the form of every SPICE manual).
fn junction(v: f64, c0: f64, vj: f64, m: f64) -> f64 {
    c0 * (1.0 + v.max(-0.9 * vj) / vj).powf(-m)
}

const LAWS: [(&str, Law); 8] = [
    ("junction m 0.3", |v| junction(v, 300e-12, 1.0, 0.3)),
    ("junction m 0.5", |v| junction(v, 300e-12, 1.0, 0.5)),
    ("junction m 0.5 and 60 pF", |v| 60e-12 + junction(v, 300e-12, 20.0, 0.5)),
    ("junction m 0.75", |v| junction(v, 900e-12, 5.0, 0.75)),
    ("junction m 1", |v| junction(v, 900e-12, 5.0, 1.0)),
    ("junction m 1 and 60 pF", |v| 60e-12 + junction(v, 900e-12, 5.0, 1.0)),
    ("junction m 1.5", |v| junction(v, 900e-12, 10.0, 1.5)),
    // Falls eightfold about 45 V, as the cells of a superjunction transistor are emptied: no power of the voltage does.
    ("knee", |v| 50e-12 + 400e-12 / (1.0 + (v.max(0.0) / 45.0).powi(4))),
];

/// The parallel loss of a core whose power goes with the 2.5th power of flux density, and a series resistance, as shares of the decay
/// at the first swing.
struct Losses {
    series: f64,
    core: f64,
}

/// `C(v) v' = i`, `L i' = Vb - v - (R + core) i` by the classical Runge-Kutta method at 256 steps a sample; `decay` at the start.
fn made(law: Law, quality: f64, periods: f64, points: f64, losses: &Losses) -> Made {
    let at_bias = law(BIAS_V);
    let angular = 1.0 / (HENRY * at_bias).sqrt();
    let decay_per_s = angular / (2.0 * quality);
    let interval_s = TAU / angular / points;
    let peak = SWING_V * angular * at_bias;
    // Loss per cycle of a force c |i|^1.5 sign(i) over that of R i: the ratio of mean |sin|^2.5 to mean sin^2.
    let shape = mean_power(2.5) / mean_power(2.0);
    let rate = |v: f64, i: f64| {
        let core = losses.core / shape * (i.abs() / peak).sqrt();
        (i / law(v), (BIAS_V - v) / HENRY - 2.0 * decay_per_s * (losses.series + core) * i)
    };
    let (mut v, mut i) = (BIAS_V + SWING_V, 0.0);
    let steps = 32;
    let h = interval_s / f64::from(steps);
    let mut volts = Vec::new();
    for _ in 0..(periods * points) as usize {
        volts.push(v);
        for _ in 0..steps {
            let k1 = rate(v, i);
            let k2 = rate(v + 0.5 * h * k1.0, i + 0.5 * h * k1.1);
            let k3 = rate(v + 0.5 * h * k2.0, i + 0.5 * h * k2.1);
            let k4 = rate(v + h * k3.0, i + h * k3.1);
            v += h / 6.0 * (k1.0 + 2.0 * k2.0 + 2.0 * k3.0 + k4.0);
            i += h / 6.0 * (k1.1 + 2.0 * k2.1 + 2.0 * k3.1 + k4.1);
        }
    }
    let frequency_hz = angular / TAU;
    Made { interval_s, volts, step_v: None, frequency_hz, decay_per_s, what: String::new() }
}

/// Mean of `|sin|^power` over a period.
fn mean_power(power: f64) -> f64 {
    (0..100_000).map(|n| (PI * (f64::from(n) + 0.5) / 1e5).sin().powf(power)).sum::<f64>() / 1e5
}

const SERIES: Losses = Losses { series: 1.0, core: 0.0 };

/// Relative error of the capacitance that goes with a frequency.
fn off(made: &Made, frequency_hz: f64) -> f64 {
    (made.frequency_hz / frequency_hz).powi(2) - 1.0
}

/// What a plain damped sinusoid over the whole record gives.
fn plain(made: &Made) -> (f64, f64) {
    let count = made.volts.len() as f64;
    let span = count * made.interval_s;
    let fit =
        fit_damped_sinusoid(&made.volts, [made.decay_per_s * span, TAU * made.frequency_hz * span], Base::Straight);
    let fit = fit.unwrap();
    (fit.angle.hypot(fit.decay) / TAU / span, fit.decay / span)
}

fn fit(made: &Made) -> Accepted {
    fit_ring(&made.record(), RingKind::Relaxation).unwrap_or_else(|refusal| panic!("{:?}", refusal.doubt))
}

#[test]
fn capacitance_of_small_swings_comes_out_of_a_clean_large_one() {
    for (name, law) in LAWS {
        for quality in [10.0, 15.0, 30.0] {
            let made = made(law, quality, 12.0, 100.0, &SERIES);
            let ours = off(&made, fit(&made).ring.frequency_hz.value);
            let theirs = off(&made, plain(&made).0);
            println!(
                "{name:26} Q {quality:2}: C off by {:+.4} %, by a plain fit {:+.3} %",
                100.0 * ours,
                100.0 * theirs
            );
            assert!(ours.abs() < 5e-4, "{name}");
            assert!(ours.abs() < theirs.abs() / 30.0, "{name}");
        }
    }
}

#[test]
fn decay_at_the_start_is_told_where_the_core_loses() {
    for (name, law) in [("constant", (|_| 80e-12) as Law), LAWS[1], LAWS[4]] {
        for quality in [10.0, 15.0, 30.0] {
            let made = made(law, quality, 12.0, 100.0, &Losses { series: 0.5, core: 0.5 });
            let ours = fit(&made).ring.decay_per_s.value / made.decay_per_s - 1.0;
            let theirs = plain(&made).1 / made.decay_per_s - 1.0;
            println!(
                "{name:16} Q {quality:2}: decay off by {:+.2} %, by a plain fit {:+.1} %",
                100.0 * ours,
                100.0 * theirs
            );
            assert!(ours.abs() < 0.03, "{name}");
        }
    }
}

/// With noise the interval holds the small-signal frequency as often as it says; the model is chosen by evidence each time.
#[test]
fn intervals_hold_the_small_signal_frequency_under_noise() {
    let (mut inside, mut cases) = (0, 0);
    for (name, law) in [LAWS[1], LAWS[4], LAWS[7]] {
        for ratio in [30.0, 100.0, 300.0] {
            let clean = made(law, 15.0, 12.0, 100.0, &SERIES);
            let (mut own, mut width, count) = (0, 0.0, 30);
            for seed in 0..count {
                let mut noisy = clean.clone();
                Maker::new(31 * cases + seed).add_noise(&mut noisy, SWING_V / ratio, None);
                let got = fit(&noisy).ring.frequency_hz;
                own += u32::from((got.value - clean.frequency_hz).abs() < 1.96 * got.standard_uncertainty);
                width += got.relative_uncertainty() / count as f64;
            }
            println!("{name:16} A/s {ratio:3}: {own} of {count} inside, standard uncertainty {:.4} %", 100.0 * width);
            (inside, cases) = (inside + own, cases + count);
        }
    }
    // 95 % of 270 less two and a half standard deviations of a binomial count.
    assert!(inside >= 247, "{inside} of {cases}");
}
