//! The fit of one damped sinusoid on a straight or bent base to evenly spaced samples, at their full rate: every step is a linear
//! problem of a few columns whose sums come from one pass over the samples and closed forms.

use super::{
    least_squares::Solution,
    moments::{block_means, geometric, moments, power_moments},
};
use nalgebra::{DMatrix, DVector};
use realfft::num_complex::Complex64;

/// What the ring stands on.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Base {
    /// Offset and slope.
    Straight,
    /// Offset, slope and curvature.
    Bent,
}

impl Base {
    pub(super) fn terms(self) -> usize {
        match self {
            Self::Straight => 2,
            Self::Bent => 3,
        }
    }
}

/// Least-squares values of `exp(-a x) (c cos w x + s sin w x) + offset + slope x + curvature x^2` with `x` from 0 to 1 over the
/// samples (sample `n` of `N` at `n/N`).
#[derive(Debug, Clone)]
pub struct DampedSinusoid {
    /// Decay over the record.
    pub decay: f64,
    /// Angle over the record.
    pub angle: f64,
    /// Cosine and sine at the first sample.
    pub cosine: f64,
    /// See [`DampedSinusoid::cosine`].
    pub sine: f64,
    /// Offset, slope and curvature.
    pub base: [f64; 3],
    /// Residual sum of squares.
    pub squares: f64,
    /// Covariance for noise of unit variance, in the order decay, angle, cosine, sine, base.
    pub inverse: DMatrix<f64>,
    /// Whether the last step was far below the uncertainty.
    pub converged: bool,
}

/// Points a period that the search keeps before the last steps at the full rate.
const POINTS: f64 = 24.0;
const ITERATIONS: usize = 40;
/// A step this small against the uncertainty ends the search, as a share of its square.
const SMALL: f64 = 1e-8;
/// The decay within reason: growing by `exp(5)`, or gone in a four-hundredth of the record.
const DECAY: std::ops::Range<f64> = -5.0..400.0;

/// Fits evenly spaced samples from a decay and an angle over the record. Searches on block means, which follow the same curve, and
/// ends with steps at the full rate, so that nothing of what the samples tell is lost. `None` where the samples hold no such curve.
pub fn fit_damped_sinusoid(samples: &[f64], start: [f64; 2], base: Base) -> Option<DampedSinusoid> {
    let count = samples.len();
    let periods = start[1].abs() / std::f64::consts::TAU;
    let block = (count as f64 / (periods.max(1.0) * POINTS)).floor().max(1.0) as usize;
    let mut start = start;
    if block > 1 && count / block > 24 {
        let thin = Problem::new(block_means(samples, block), base);
        let share = (thin.samples.len() * block) as f64 / count as f64;
        let coarse = thin.search([start[0] * share, start[1] * share])?;
        start = [coarse.decay / share, coarse.angle / share];
    }
    let mean = block_means(samples, count)[0];
    Problem::new(samples.iter().map(|v| v - mean).collect(), base).search(start).map(|found| found.raised(mean))
}

impl DampedSinusoid {
    /// The same as a general solution whose base is counted from the middle. `noise` is the variance of one sample of unit noise in
    /// the series that `coarse` stands for, which lends its residuals.
    pub(super) fn solution(&self, noise: f64, coarse: Solution) -> Solution {
        let terms = self.inverse.nrows() - RING;
        let mut to = DMatrix::<f64>::identity(RING + terms, RING + terms);
        // x = t + 1/2: offset + slope x + curvature x^2 about the middle.
        to[(RING, RING + 1)] = 0.5;
        if terms > 2 {
            (to[(RING, RING + 2)], to[(RING + 1, RING + 2)]) = (0.25, 1.0);
        }
        let base = [self.base[0] + 0.5 * self.base[1] + 0.25 * self.base[2], self.base[1] + self.base[2], self.base[2]];
        Solution {
            nonlinear: vec![self.decay, self.angle],
            linear: [self.cosine, self.sine].into_iter().chain(base.into_iter().take(terms)).collect(),
            inverse: &to * &self.inverse * to.transpose() * noise,
            ..coarse
        }
    }

    fn raised(mut self, level: f64) -> Self {
        self.base[0] += level;
        self
    }
}

/// Columns of the linear problem: the ring's cosine and sine, both times `x`, and the base.
const RING: usize = 4;

struct Problem {
    samples: Vec<f64>,
    base: Base,
    /// `sum x^k y` and `sum y^2`.
    plain: [f64; 3],
    total: f64,
    /// `sum x^k`.
    powers: [f64; 5],
}

/// The solution of the linear problem about a decay and an angle.
struct Step {
    /// Cosine, sine and base without the columns times `x`, and their sum of squares.
    projected: DVector<f64>,
    squares: f64,
    /// Step of decay and angle, and what it is expected to gain.
    step: [f64; 2],
    gain: f64,
    gram: DMatrix<f64>,
}

impl Problem {
    fn new(samples: Vec<f64>, base: Base) -> Self {
        let count = samples.len() as f64;
        let (mut plain, total) = power_moments(&samples);
        plain.iter_mut().enumerate().for_each(|(k, sum)| *sum /= count.powi(k as i32));
        let sums: [Complex64; 5] = geometric(Complex64::new(1.0, 0.0), samples.len());
        let powers = std::array::from_fn(|k| sums[k].re / count.powi(k as i32));
        Self { samples, base, plain, total, powers }
    }

    fn search(&self, start: [f64; 2]) -> Option<DampedSinusoid> {
        let mut at = start;
        let mut here = self.about(at)?;
        let mut scale = 1.0;
        for _ in 0..ITERATIONS {
            let freedom = (self.samples.len() as f64 - (RING + self.base.terms()) as f64).max(1.0);
            let small = here.gain <= SMALL * here.squares / freedom
                || here.step.iter().zip(&at).all(|(d, x)| d.abs() < 1e-14 * x.abs().max(1.0));
            let trial = [at[0] + scale * here.step[0], at[1] + scale * here.step[1]];
            let there = (DECAY.contains(&trial[0]) && trial[1] > 0.5).then(|| self.about(trial)).flatten();
            match there {
                Some(there) if small || there.squares <= here.squares => (at, here, scale) = (trial, there, 1.0),
                _ if small => return self.found(at, &here, true),
                _ if scale < 1e-6 => return self.found(at, &here, false),
                _ => scale *= 0.25,
            }
            if small {
                return self.found(at, &here, true);
            }
        }
        self.found(at, &here, false)
    }

    fn about(&self, at: [f64; 2]) -> Option<Step> {
        let gram = self.gram(at);
        let right = self.right(at);
        let size = gram.nrows();
        // Without the columns times x: order cosine, sine, base.
        let kept: Vec<usize> = [0, 1].into_iter().chain(RING..size).collect();
        let small = DMatrix::from_fn(kept.len(), kept.len(), |r, c| gram[(kept[r], kept[c])]);
        let small_right = DVector::from_fn(kept.len(), |r, _| right[kept[r]]);
        let projected = small.cholesky()?.solve(&small_right);
        let squares = self.total - projected.dot(&small_right);
        let whole = gram.clone().cholesky()?.solve(&right);
        let gain = self.total - whole.dot(&right);
        let (c, s, p, r) = (projected[0], projected[1], whole[2], whole[3]);
        let power = c * c + s * s;
        let step = [-(c * p + s * r) / power, (s * p - c * r) / power];
        let fine = step.iter().all(|d| d.is_finite()) && power > 0.0;
        fine.then_some(Step { projected, squares: squares.max(0.0), step, gain: squares - gain, gram })
    }

    /// Inner products of the columns with the samples.
    fn right(&self, at: [f64; 2]) -> DVector<f64> {
        let count = self.samples.len() as f64;
        let [zeroth, first] = moments(&self.samples, (Complex64::new(-at[0], at[1]) / count).exp());
        let ring = [zeroth.re, zeroth.im, first.re / count, first.im / count];
        DVector::from_iterator(
            RING + self.base.terms(),
            ring.into_iter().chain(self.plain).take(RING + self.base.terms()),
        )
    }

    /// Inner products of the columns with each other.
    fn gram(&self, at: [f64; 2]) -> DMatrix<f64> {
        let (number, count) = (self.samples.len(), self.samples.len() as f64);
        let log = Complex64::new(-at[0], at[1]) / count;
        let [envelope, double, single] = [Complex64::new(2.0 * log.re, 0.0), 2.0 * log, log].map(Complex64::exp);
        let envelope: [Complex64; 3] = geometric(envelope, number);
        let double: [Complex64; 3] = geometric(double, number);
        let single: [Complex64; 4] = geometric(single, number);
        let size = RING + self.base.terms();
        let entry = |row: usize, column: usize| {
            // Columns 0 to 3: cosine, sine, and both times x; 4 on: powers of x.
            if row >= RING {
                return self.powers[row - RING + column - RING];
            }
            let sine = row % 2 == 1;
            if column >= RING {
                let k = row / 2 + column - RING;
                let sum = single[k] / count.powi(k as i32);
                return if sine { sum.im } else { sum.re };
            }
            let k = row / 2 + column / 2;
            let scale = 0.5 / count.powi(k as i32);
            scale
                * match (sine, column % 2 == 1) {
                    (false, false) => envelope[k].re + double[k].re,
                    (true, true) => envelope[k].re - double[k].re,
                    _ => double[k].im,
                }
        };
        DMatrix::from_fn(size, size, |r, c| if r <= c { entry(r, c) } else { entry(c, r) })
    }

    fn found(&self, at: [f64; 2], step: &Step, converged: bool) -> Option<DampedSinusoid> {
        let (c, s) = (step.projected[0], step.projected[1]);
        let size = step.gram.nrows();
        // From the columns of the linear problem to decay, angle, cosine, sine, base.
        let mut to = DMatrix::<f64>::zeros(size, size);
        (to[(2, 0)], to[(3, 0)], to[(2, 1)], to[(3, 1)]) = (-c, -s, s, -c);
        (to[(0, 2)], to[(1, 3)]) = (1.0, 1.0);
        (RING..size).for_each(|n| to[(n, n)] = 1.0);
        let inverse = (to.transpose() * &step.gram * &to).cholesky()?.inverse();
        let base = std::array::from_fn(|k| step.projected.get(2 + k).copied().unwrap_or(0.0));
        Some(DampedSinusoid {
            decay: at[0],
            angle: at[1],
            cosine: c,
            sine: s,
            base,
            squares: step.squares,
            inverse,
            converged,
        })
    }
}
