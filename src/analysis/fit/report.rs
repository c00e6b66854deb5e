//! A solution as the plain data that leaves this module: SI parameters from the start of the window, with their covariance.

use super::{RingRecord, Times, series::Series, solve::Solution};
use crate::findings::{RingFit, RingKind};
use nalgebra::{DMatrix, Matrix6};
use realfft::num_complex::Complex64;
use std::f64::consts::TAU;

/// The solution of a damped sinusoid, or its shifted kin, whose parameters begin alike, as a fit. `nonlinear` counts the
/// nonlinear parameters; `variance` is that of the noise as the ring feels it.
pub(super) fn ring_fit(
    record: &RingRecord<'_>,
    kind: RingKind,
    series: &Series,
    solution: &Solution,
    variance: f64,
) -> RingFit {
    let (start_s, end_s) = match record.times_s {
        Times::Even { start_s, interval_s } => (start_s, start_s + interval_s * (record.volts.len() as f64 - 1.0)),
        Times::Uneven(times) => (times[0], times[times.len() - 1]),
    };
    let span = series.span_s;
    let (decay, angular) = (solution.nonlinear[0], solution.nonlinear[1]);
    let (offset, slope) = (solution.linear[2], solution.linear[3]);
    let mean = Complex64::new(solution.linear[0], -solution.linear[1]);
    let block = series.block_factor(Complex64::new(-decay, angular));
    let complex = mean / block;
    let (amplitude, phase) = complex.to_polar();
    let covariance = covariance(solution, span, mean, 1.0 / block.norm()) * variance;
    RingFit {
        kind,
        start_s,
        end_s,
        parameters: [amplitude, decay / span, angular / TAU / span, phase, offset - 0.5 * slope, slope / span],
        covariance: covariance.transpose().as_slice().to_vec(),
        residual_v: 0.0,
        stopped: solution.stopped.sentence().to_owned(),
        accepted: false,
    }
}

/// Covariance of the reported parameters for noise of unit variance, by the law of propagation (JCGM 100, 5.2.2).
fn covariance(solution: &Solution, span: f64, mean: Complex64, gain: f64) -> Matrix6<f64> {
    let first = solution.nonlinear.len();
    let squared = mean.norm_sqr();
    let amplitude = squared.sqrt();
    let mut by = DMatrix::<f64>::zeros(6, solution.inverse.ncols());
    let (c, s, offset, slope) = (first, first + 1, first + 2, first + 3);
    by[(0, c)] = gain * mean.re / amplitude;
    by[(0, s)] = -gain * mean.im / amplitude;
    by[(1, 0)] = 1.0 / span;
    by[(2, 1)] = 1.0 / (TAU * span);
    // phase = atan2(-s, c)
    by[(3, c)] = -mean.im / squared;
    by[(3, s)] = -mean.re / squared;
    by[(4, offset)] = 1.0;
    by[(4, slope)] = -0.5;
    by[(5, slope)] = 1.0 / span;
    let full = &by * &solution.inverse * by.transpose();
    Matrix6::from_fn(|row, column| full[(row, column)])
}

/// Standard deviation of the residuals at the full rate. On even time the oscillation is a complex recurrence.
pub(super) fn residual_v(record: &RingRecord<'_>, fit: &RingFit) -> f64 {
    let [amplitude, decay, frequency, phase, offset, slope] = fit.parameters;
    let freedom = record.volts.len().saturating_sub(6).max(1) as f64;
    let squares: f64 = match record.times_s {
        Times::Uneven(times) => {
            record.volts.iter().zip(times).map(|(v, t)| (v - fit.model_v(t - fit.start_s)).powi(2)).sum()
        }
        Times::Even { interval_s, .. } => {
            let rate = Complex64::new(-decay, TAU * frequency);
            let turn = (rate * interval_s).exp();
            let chunk = |(index, volts): (usize, &[f64])| {
                // Started afresh every so often, so that rounding does not pile up.
                let begin = index * FRESH;
                let mut ring = Complex64::from_polar(amplitude, phase) * (rate * (begin as f64 * interval_s)).exp();
                let mut squares = 0.0;
                for (n, volt) in volts.iter().enumerate() {
                    let line = offset + slope * interval_s * (begin + n) as f64;
                    let residual = volt - line - ring.re;
                    squares += residual * residual;
                    ring *= turn;
                }
                squares
            };
            record.volts.chunks(FRESH).enumerate().map(chunk).sum()
        }
    };
    (squares / freedom).sqrt()
}

/// Samples between fresh starts of the recurrence.
const FRESH: usize = 1024;
