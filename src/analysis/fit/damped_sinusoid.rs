//! The fit of one damped sinusoid on a straight or bent base to evenly spaced samples, at their full rate: every step is a linear
//! problem of a few columns whose sums come from one pass over the samples and closed forms.

use super::{
    least_squares::Solution,
    moments::{Instructions, block_means, geometric, moments, power_moments, powers},
};
use nalgebra::DMatrix;
use pulp::Arch;
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
/// A step this small against the uncertainty ends the search, as a share of its square: at the full rate, and on block means, which
/// lie a dozenth of the uncertainty away anyhow.
const SMALL: f64 = 1e-8;
const SMALL_ON_MEANS: f64 = 1e-3;
/// The decay within reason: growing by `exp(5)`, or gone in a four-hundredth of the record.
const DECAY: std::ops::Range<f64> = -5.0..400.0;

/// Fits evenly spaced samples from a decay and an angle over the record. Searches on block means, which follow the same curve, and
/// ends with steps at the full rate, so that nothing of what the samples tell is lost. `None` where the samples hold no such curve.
pub fn fit_damped_sinusoid(samples: &[f64], start: [f64; 2], base: Base) -> Option<DampedSinusoid> {
    fit_damped_sinusoid_with(Instructions::Detected, samples, start, base)
}

/// [`fit_damped_sinusoid`] with a choice of instructions.
pub fn fit_damped_sinusoid_with(
    instructions: Instructions,
    samples: &[f64],
    start: [f64; 2],
    base: Base,
) -> Option<DampedSinusoid> {
    let arch = instructions.arch();
    let count = samples.len();
    let periods = start[1].abs() / std::f64::consts::TAU;
    let block = (count as f64 / (periods.max(1.0) * POINTS)).floor().max(1.0) as usize;
    let Some(thin) = (block > 1 && count / block > 24).then(|| block_means(arch, samples, block)) else {
        let level = block_means(arch, samples, count.max(1)).first().copied()?;
        return Problem::new(arch, samples, level, base).search(start, SMALL);
    };
    let level = thin.iter().sum::<f64>() / thin.len() as f64;
    let share = (thin.len() * block) as f64 / count as f64;
    let coarse = Problem::new(arch, &thin, level, base).search(start.map(|x| x * share), SMALL_ON_MEANS)?;
    Problem::new(arch, samples, level, base).search([coarse.decay / share, coarse.angle / share], SMALL)
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
}

/// Columns of the linear problem that the ring takes: cosine and sine first, both times `x` last, the base between.
const RING: usize = 4;
/// Columns at most.
const MOST: usize = 7;
type Matrix = [[f64; MOST]; MOST];
type Vector = [f64; MOST];

struct Problem<'a> {
    arch: Arch,
    samples: &'a [f64],
    /// What the samples are counted from, so that little cancels.
    level: f64,
    base: Base,
    /// `sum x^k y` and `sum y^2`.
    plain: [f64; 3],
    total: f64,
    /// `sum x^k`.
    powers: [f64; 5],
    /// `N^-k`.
    scale: [f64; 4],
}

/// The solution of the linear problem about a decay and an angle.
struct Step {
    /// Cosine, sine and base without the columns times `x`, and what they leave of the sum of squares.
    projected: Vector,
    squares: f64,
    /// The same with all columns: the values after the step, to first order.
    whole: Vector,
    /// Step of decay and angle, and what it is expected to gain.
    step: [f64; 2],
    gain: f64,
    gram: Matrix,
}

impl<'a> Problem<'a> {
    fn new(arch: Arch, samples: &'a [f64], level: f64, base: Base) -> Self {
        let (mut plain, total) = power_moments(arch, samples, level);
        let sums: [Complex64; 5] = geometric(Complex64::new(1.0, 0.0), samples.len());
        let scale: [f64; 5] = powers(1.0 / samples.len() as f64);
        plain.iter_mut().zip(scale).for_each(|(sum, scale)| *sum *= scale);
        let powers = std::array::from_fn(|k| sums[k].re * scale[k]);
        let [scale @ .., _] = scale;
        Self { arch, samples, level, base, plain, total, powers, scale }
    }

    fn size(&self) -> usize {
        RING + self.base.terms()
    }

    fn search(&self, start: [f64; 2], least: f64) -> Option<DampedSinusoid> {
        let mut at = start;
        let mut here = self.about(at)?;
        let mut scale = 1.0;
        let freedom = (self.samples.len() as f64 - self.size() as f64).max(1.0);
        for _ in 0..ITERATIONS {
            let trial = [at[0] + scale * here.step[0], at[1] + scale * here.step[1]];
            let allowed = DECAY.contains(&trial[0]) && trial[1] > 0.5;
            let small = here.gain <= least * here.squares / freedom
                || here.step.iter().zip(&at).all(|(d, x)| d.abs() < 1e-14 * x.abs().max(1.0));
            if small && allowed && scale == 1.0 {
                return self.found(trial, &here, &here.whole, here.squares - here.gain, true);
            }
            match allowed.then(|| self.about(trial)).flatten() {
                Some(there) if there.squares <= here.squares => (at, here, scale) = (trial, there, 1.0),
                _ if small || scale < 1e-6 => return self.found(at, &here, &here.projected, here.squares, small),
                _ => scale *= 0.25,
            }
        }
        self.found(at, &here, &here.projected, here.squares, false)
    }

    fn about(&self, at: [f64; 2]) -> Option<Step> {
        let gram = self.gram(at);
        let (size, head) = (self.size(), self.size() - 2);
        let (lower, rotated) = factor(&gram, &self.right(at), size)?;
        let (projected, whole) = (back(&lower, &rotated, head), back(&lower, &rotated, size));
        let squares = self.total - rotated[..head].iter().map(|x| x * x).sum::<f64>();
        let gain = rotated[head] * rotated[head] + rotated[head + 1] * rotated[head + 1];
        let ([c, s, ..], p, r) = (projected, whole[head], whole[head + 1]);
        let power = c * c + s * s;
        let step = [-(c * p + s * r) / power, (s * p - c * r) / power];
        let fine = step.iter().all(|d| d.is_finite()) && power > 0.0;
        fine.then_some(Step { projected, squares: squares.max(0.0), whole, step, gain, gram })
    }

    /// Inner products of the columns with the samples.
    fn right(&self, at: [f64; 2]) -> Vector {
        let z = (Complex64::new(-at[0], at[1]) * self.scale[1]).exp();
        let [zeroth, first] = moments(self.arch, self.samples, self.level, z);
        let (mut right, terms) = ([0.0; MOST], self.base.terms());
        (right[0], right[1]) = (zeroth.re, zeroth.im);
        right[2..2 + terms].copy_from_slice(&self.plain[..terms]);
        (right[2 + terms], right[3 + terms]) = (first.re * self.scale[1], first.im * self.scale[1]);
        right
    }

    /// Inner products of the columns with each other: the lower triangle.
    fn gram(&self, at: [f64; 2]) -> Matrix {
        let number = self.samples.len();
        let log = Complex64::new(-at[0], at[1]) * self.scale[1];
        let (z, envelope) = (log.exp(), Complex64::new((2.0 * log.re).exp(), 0.0));
        let envelope: [Complex64; 3] = geometric(envelope, number);
        let double: [Complex64; 3] = geometric(z * z, number);
        let single: [Complex64; 4] = geometric(z, number);
        let terms = self.base.terms();
        let mut gram = [[0.0; MOST]; MOST];
        // The ring's columns, times x to the power of `k` in all, from a pair of columns on.
        let mut ring = |row: usize, column: usize, k: usize| {
            let scale = 0.5 * self.scale[k];
            gram[row][column] = scale * (envelope[k].re + double[k].re);
            gram[row + 1][column + 1] = scale * (envelope[k].re - double[k].re);
            (gram[row + 1][column], gram[row][column + 1]) = (scale * double[k].im, scale * double[k].im);
        };
        ring(0, 0, 0);
        ring(2 + terms, 0, 1);
        ring(2 + terms, 2 + terms, 2);
        for n in 0..terms {
            (0..=n).for_each(|m| gram[2 + n][2 + m] = self.powers[n + m]);
            let (plain, moved) = (single[n] * self.scale[n], single[n + 1] * self.scale[n + 1]);
            (gram[2 + n][0], gram[2 + n][1]) = (plain.re, plain.im);
            (gram[2 + terms][2 + n], gram[3 + terms][2 + n]) = (moved.re, moved.im);
        }
        gram
    }

    fn found(
        &self,
        at: [f64; 2],
        step: &Step,
        linear: &Vector,
        squares: f64,
        converged: bool,
    ) -> Option<DampedSinusoid> {
        let (c, s, size, terms) = (linear[0], linear[1], self.size(), self.base.terms());
        // From the columns of the linear problem to decay, angle, cosine, sine, base.
        let mut to = DMatrix::<f64>::zeros(size, size);
        let moved = 2 + terms;
        (to[(moved, 0)], to[(moved + 1, 0)], to[(moved, 1)], to[(moved + 1, 1)]) = (-c, -s, s, -c);
        (0..moved).for_each(|n| to[(n, n + 2)] = 1.0);
        let gram = DMatrix::from_fn(size, size, |r, c| step.gram[r.max(c)][r.min(c)]);
        let inverse = (to.transpose() * gram * &to).cholesky()?.inverse();
        let mut base = [0.0; 3];
        base[..terms].copy_from_slice(&linear[2..moved]);
        base[0] += self.level;
        let [decay, angle] = at;
        Some(DampedSinusoid { decay, angle, cosine: c, sine: s, base, squares: squares.max(0.0), inverse, converged })
    }
}

/// Cholesky factor of the leading `size` rows, and the right side in its terms. `None` where the columns are not independent.
fn factor(gram: &Matrix, right: &Vector, size: usize) -> Option<(Matrix, Vector)> {
    let (mut lower, mut rotated) = ([[0.0; MOST]; MOST], [0.0; MOST]);
    for row in 0..size {
        for column in 0..=row {
            let known: f64 = (0..column).map(|k| lower[row][k] * lower[column][k]).sum();
            let left = gram[row][column] - known;
            lower[row][column] = if row > column { left / lower[column][column] } else { left.sqrt() };
        }
        let pivot = lower[row][row];
        if pivot.is_nan() || pivot <= 0.0 {
            return None;
        }
        rotated[row] = (right[row] - (0..row).map(|k| lower[row][k] * rotated[k]).sum::<f64>()) / pivot;
    }
    Some((lower, rotated))
}

/// Solves for the leading `size` unknowns.
fn back(lower: &Matrix, rotated: &Vector, size: usize) -> Vector {
    let mut solved = [0.0; MOST];
    for row in (0..size).rev() {
        let known: f64 = (row + 1..size).map(|k| lower[k][row] * solved[k]).sum();
        solved[row] = (rotated[row] - known) / lower[row][row];
    }
    solved
}
