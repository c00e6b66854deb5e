//! The fit's values and uncertainties against closed forms, the circuit equation and another least-squares library.

use crate::{
    generate::{Made, Maker},
    need::need_python,
};
use ringstep_analysis::{
    findings::RingKind,
    fit::{Accepted, Base, fit_damped_sinusoid, fit_ring},
};
use std::{f64::consts::TAU, process::Command};

fn fit(made: &Made) -> Accepted {
    fit_ring(&made.record(), RingKind::Relaxation).unwrap_or_else(|refusal| panic!("{:?}", refusal.doubt))
}

/// The ring of the covariance vector: 1000 samples, decay 0.004 and angle 0.04 pi a sample, phase 0.3, amplitude 1.
fn vector(seed: u64, noise: f64, band: Option<f64>) -> Made {
    let volts: Vec<f64> =
        (0..1000).map(f64::from).map(|n| (-0.004 * n).exp() * (0.125_663_706_143_591_7 * n + 0.3).cos()).collect();
    let mut made =
        Made { interval_s: 1.0, volts, step_v: None, frequency_hz: 0.02, decay_per_s: 0.004, what: String::new() };
    Maker::new(seed).add_noise(&mut made, noise, band);
    made
}

/// Exact five-parameter covariance (inverse Fisher matrix, computed independently) for noise 0.01: amplitude 1.81590e-3, decay
/// 1.02819e-5, angular frequency 1.01677e-5, phase 1.77187e-3. The slope as a sixth parameter costs a few per cent at most.
#[test]
fn covariance_agrees_with_the_fisher_matrix() {
    let seeds = 40;
    let mut mean = [0.0; 4];
    for seed in 0..seeds {
        let covariance = fit(&vector(seed, 0.01, None)).fit.covariance;
        (0..4).for_each(|n| mean[n] += covariance[n * 7].sqrt() / f64::from(seeds as u32));
    }
    for (got, exact) in mean.into_iter().zip([1.81590e-3, 1.02819e-5, 1.01677e-5 / TAU, 1.77187e-3]) {
        println!("{got:.5e} against {exact:.5e}: {:.4}", got / exact);
        assert!((0.97..1.06).contains(&(got / exact)));
    }
}

/// Cramér-Rao bound of the frequency from the same Fisher matrix, scaled by the noise.
#[test]
fn errors_are_at_the_bound_and_intervals_hold_the_truth() {
    for (ratio, band) in [(20.0, None), (50.0, None), (100.0, Some(0.1))] {
        let seeds = 1500;
        let (mut squares, mut sum, mut inside) = (0.0, 0.0, 0);
        let bound = 1.01677e-5 / TAU * 100.0 / ratio;
        for seed in 0..seeds {
            let got = fit(&vector(10_000 + seed, 1.0 / ratio, band)).ring.damped_frequency_hz;
            let error = got.value - 0.02;
            squares += error * error;
            sum += error;
            inside += u32::from(error.abs() < 1.96 * got.standard_uncertainty);
        }
        let (count, coverage) = (seeds as f64, f64::from(inside) / seeds as f64);
        let (rms, bias) = ((squares / count).sqrt() / bound, sum / count / bound);
        println!("A/s {ratio} band {band:?}: error {rms:.3} bounds, bias {bias:.3} bounds, coverage {coverage:.3}");
        if band.is_none() {
            assert!(rms < 1.1, "{rms}");
            assert!(bias.abs() < 0.1, "{bias}");
        }
        assert!((0.92..0.98).contains(&coverage), "{coverage}");
    }
}

/// SciPy's Levenberg-Marquardt on the same samples finds the same minimum: parameters within a fraction of their uncertainty.
#[test]
fn a_general_least_squares_library_finds_the_same_minimum() {
    if !need_python("scipy") {
        return;
    }
    for seed in 0..3 {
        let made = vector(seed, 0.02, None);
        let accepted = fit(&made);
        let samples: Vec<String> = made.volts.iter().map(|v| format!("{v:?}")).collect();
        let script = format!(
            "import numpy as np\nfrom scipy.optimize import curve_fit\ny=np.array([{}])\nt=np.arange(len(y))*1.0\n\
             f=lambda t,A,a,f,p,b,m: A*np.exp(-a*t)*np.cos(2*np.pi*f*t+p)+b+m*t\n\
             x,c=curve_fit(f,t,y,p0=[1,0.004,0.02,0.3,0,0],xtol=1e-12,ftol=1e-12)\nprint(*x,*np.sqrt(np.diag(c)))",
            samples.join(",")
        );
        let output = Command::new("python3").args(["-c", &script]).output().unwrap();
        let text = String::from_utf8(output.stdout).unwrap();
        let theirs: Vec<f64> = text.split_whitespace().map(|word| word.parse().unwrap()).collect();
        assert_eq!(theirs.len(), 12, "{}", String::from_utf8_lossy(&output.stderr));
        for n in 0..6 {
            let difference = (accepted.fit.parameters[n] - theirs[n]).abs() / theirs[6 + n];
            let uncertainty = accepted.fit.covariance[n * 7].sqrt() / theirs[6 + n];
            assert!(difference < 0.15, "parameter {n}: {difference} standard uncertainties apart");
            assert!((0.8..1.3).contains(&uncertainty), "parameter {n}: uncertainty {uncertainty} times theirs");
        }
    }
}

/// A fit of `scripts/check_fits.py`.
#[derive(serde::Deserialize)]
struct Stored {
    name: String,
    volts: Vec<f64>,
    start: [f64; 2],
    parameters: Vec<f64>,
    covariance: Vec<Vec<f64>>,
    squares: f64,
}

/// `scipy.optimize.curve_fit` 's results on the same samples, from `scripts/check_fits.py`: the same minimum to a small fraction of
/// the uncertainty, and the same covariance.
#[test]
fn parameters_and_covariance_agree_with_a_general_least_squares_library() {
    let all: Vec<Stored> = serde_json::from_str(include_str!("fits_library.json")).unwrap();
    assert!(all.len() >= 5);
    for Stored { name, volts, start, parameters, covariance, squares } in all {
        let base = if parameters.len() == 7 { Base::Bent } else { Base::Straight };
        let ours = fit_damped_sinusoid(&volts, start, base).unwrap();
        assert!(ours.converged, "{name}");
        let values: Vec<f64> = [ours.decay, ours.angle, ours.cosine, ours.sine]
            .into_iter()
            .chain(ours.base)
            .take(parameters.len())
            .collect();
        let variance = ours.squares / (volts.len() - parameters.len()) as f64;
        let deviation = |n: usize| covariance[n][n].sqrt();
        let (mut apart, mut unlike) = (0.0_f64, 0.0_f64);
        for row in 0..parameters.len() {
            apart = apart.max((values[row] - parameters[row]).abs() / deviation(row));
            for (column, theirs) in covariance[row].iter().enumerate().take(parameters.len()) {
                let difference = ours.inverse[(row, column)] * variance - theirs;
                unlike = unlike.max(difference.abs() / (deviation(row) * deviation(column)));
            }
        }
        let more = ours.squares / squares - 1.0;
        println!("{name}: {apart:.1e} uncertainties apart, covariance {unlike:.1e}, sum of squares {more:+.1e}");
        assert!(apart < 1e-3, "{name}: {apart}");
        assert!(unlike < 1e-3, "{name}: {unlike}");
        assert!(more.abs() < 1e-9, "{name}: {more}");
    }
}
