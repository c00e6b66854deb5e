//! What can be known of a ring in noise at all: the linearised maximum-likelihood estimate at the true parameters, the Cramér-Rao
//! bound from the Fisher information with every nuisance parameter, and exact least squares started at the truth. Shares no code
//! with the fits that are held against it.

use nalgebra::{DMatrix, DVector};
use std::f64::consts::{PI, TAU};

/// What the ring stands on, `x` from 0 to 1 over the record.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(crate) enum Floor {
    /// `offset + slope x`
    Straight,
    /// `offset + slope x + bend x^2`
    Bent,
    /// `offset + droop exp(-rate x)`
    Drooping,
}

/// A ring of `count` samples. Parameters: angle and decay over the record, amplitude, phase, then the floor's.
#[derive(Debug, Clone)]
pub(crate) struct Truth {
    pub(crate) floor: Floor,
    pub(crate) count: usize,
    pub(crate) parameters: Vec<f64>,
}

impl Truth {
    pub(crate) fn new(floor: Floor, periods: f64, points: f64, quality: f64, phase: f64, base: &[f64]) -> Self {
        let count = (periods * points).round() as usize;
        let angle = TAU * count as f64 / points;
        let mut parameters = vec![angle, angle / (2.0 * quality), 1.0, phase];
        parameters.extend_from_slice(base);
        Self { floor, count, parameters }
    }

    pub(crate) fn volts(&self) -> Vec<f64> {
        (0..self.count).map(|n| self.at(n, &self.parameters).0).collect()
    }

    /// Value and derivatives by the parameters at sample `n`.
    fn at(&self, n: usize, p: &[f64]) -> (f64, [f64; 7]) {
        let x = n as f64 / self.count as f64;
        let envelope = (-p[1] * x).exp();
        let (sin, cos) = (p[0] * x + p[3]).sin_cos();
        let (along, across) = (p[2] * envelope * cos, -p[2] * envelope * sin);
        let mut by = [x * across, -x * along, envelope * cos, across, 1.0, x, 0.0];
        let floor = match self.floor {
            Floor::Straight => p[4] + p[5] * x,
            Floor::Bent => {
                by[6] = x * x;
                p[4] + p[5] * x + p[6] * x * x
            }
            Floor::Drooping => {
                by[5] = (-p[6] * x).exp();
                by[6] = -x * p[5] * by[5];
                p[4] + p[5] * by[5]
            }
        };
        (along + floor, by)
    }

    /// Derivatives at parameters, and what those leave of samples.
    fn linearised(&self, p: &[f64], samples: &[f64]) -> (DMatrix<f64>, DVector<f64>) {
        let mut slopes = DMatrix::zeros(self.count, p.len());
        let mut left = DVector::zeros(self.count);
        for (n, sample) in samples.iter().enumerate() {
            let (value, by) = self.at(n, p);
            left[n] = sample - value;
            (0..p.len()).for_each(|k| slopes[(n, k)] = by[k]);
        }
        (slopes, left)
    }
}

/// The first-order estimate `x0 + (J^T J)^-1 J^T (y - model(x0))` at the truth, for angle, decay and amplitude.
pub(crate) struct Oracle {
    weights: DMatrix<f64>,
    /// Cramér-Rao bound of the standard deviations for white noise of unit variance.
    pub(crate) bound: [f64; 3],
}

impl Oracle {
    pub(crate) fn of(truth: &Truth) -> Self {
        let (slopes, _) = truth.linearised(&truth.parameters, &vec![0.0; truth.count]);
        let inverse = inverse(&slopes);
        let weights = inverse.rows(0, 3) * slopes.transpose();
        Self { weights, bound: std::array::from_fn(|k| inverse[(k, k)].sqrt()) }
    }

    /// Errors of the first-order estimate for that noise.
    pub(crate) fn errors(&self, noise: &[f64]) -> [f64; 3] {
        let errors = &self.weights * DVector::from_column_slice(noise);
        [errors[0], errors[1], errors[2]]
    }
}

/// `(J^T J)^-1`, the columns brought to one length first.
fn inverse(slopes: &DMatrix<f64>) -> DMatrix<f64> {
    let lengths: Vec<f64> = slopes.column_iter().map(|c| c.norm()).collect();
    let gram = slopes.tr_mul(slopes);
    let scaled = DMatrix::from_fn(gram.nrows(), gram.ncols(), |r, c| gram[(r, c)] / lengths[r] / lengths[c]);
    let inverse = scaled.try_inverse().unwrap();
    DMatrix::from_fn(gram.nrows(), gram.ncols(), |r, c| inverse[(r, c)] / lengths[r] / lengths[c])
}

/// Exact least squares: Gauss-Newton with step halving on all parameters at once, from the truth. Angle, decay and amplitude.
pub(crate) fn exact_least_squares(truth: &Truth, samples: &[f64]) -> [f64; 3] {
    let mut at = truth.parameters.clone();
    for _ in 0..200 {
        let (slopes, left) = truth.linearised(&at, samples);
        let squares = left.norm_squared();
        let step = inverse(&slopes) * slopes.tr_mul(&left);
        let promised = step.dot(&slopes.tr_mul(&left));
        let mut share = 1.0;
        let next = loop {
            let trial: Vec<f64> = at.iter().zip(step.iter()).map(|(x, d)| x + share * d).collect();
            let there = (0..truth.count).map(|n| (samples[n] - truth.at(n, &trial).0).powi(2)).sum::<f64>();
            if there <= squares || share < 1e-9 {
                break trial;
            }
            share *= 0.5;
        };
        at = next;
        if promised < 1e-10 * squares / truth.count as f64 {
            break;
        }
    }
    [at[0], at[1], at[2].abs()]
}

/// How noise is limited in bandwidth.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(crate) enum Band {
    White,
    /// Two first-order poles at that share of the sampling rate.
    TwoPoles(f64),
    /// Butterworth of second order, by the bilinear transform.
    Butterworth(f64),
}

impl Band {
    /// Noise of unit variance from independent normal deviates.
    pub(crate) fn noise(self, count: usize, mut normal: impl FnMut() -> f64) -> Vec<f64> {
        // y[n] = g (x[n] + m x[n-1] + k x[n-2]) - a y[n-1] - b y[n-2]
        let (m, k, a, b) = match self {
            Self::White => return (0..count).map(|_| normal()).collect(),
            Self::TwoPoles(share) => {
                let pole = (-TAU * share).exp();
                (0.0, 0.0, -2.0 * pole, pole * pole)
            }
            Self::Butterworth(share) => {
                let w = (PI * share).tan();
                let norm = 1.0 + 2.0_f64.sqrt() * w + w * w;
                (2.0, 1.0, 2.0 * (w * w - 1.0) / norm, (1.0 - 2.0_f64.sqrt() * w + w * w) / norm)
            }
        };
        let filter = |inputs: &mut dyn FnMut(usize) -> f64, count: usize| -> Vec<f64> {
            let (mut x, mut y) = ([0.0; 2], [0.0; 2]);
            (0..count)
                .map(|n| {
                    let now = inputs(n);
                    let out = now + m * x[0] + k * x[1] - a * y[0] - b * y[1];
                    (x, y) = ([now, x[0]], [out, y[0]]);
                    out
                })
                .collect()
        };
        const SETTLED: usize = 2000;
        let response = filter(&mut |n| f64::from(u8::from(n == 0)), SETTLED);
        let gain = response.iter().map(|h| h * h).sum::<f64>().sqrt().recip();
        filter(&mut |_| normal(), SETTLED + count).split_off(SETTLED).iter().map(|v| gain * v).collect()
    }
}
