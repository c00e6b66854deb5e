//! The fit of one damped sinusoid on a straight or bent base to evenly spaced samples, at their full rate: every step is a linear
//! problem of a few columns whose sums come from one pass over the samples and closed forms.

use super::{
    least_squares::Solution,
    moments::{Instructions, Moments, block_means, doubled, geometric, moments, powers},
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
/// A step this small against the uncertainty ends the search, as a share of its square: the step itself is still made, and what it
/// leaves is smaller again by as much. On block means no more is worth it, since they lie a dozenth of the uncertainty away.
const SMALL: f64 = 1e-8;
const SMALL_AFTER_MEANS: f64 = 1e-3;
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
        let problem = Problem::new(arch, samples, level, base);
        return problem.found(problem.search(start, SMALL)?);
    };
    let level = thin.iter().sum::<f64>() / thin.len() as f64;
    let share = (thin.len() * block) as f64 / count as f64;
    let coarse = Problem::new(arch, &thin, level, base).search(start.map(|x| x * share), SMALL_ON_MEANS)?;
    let problem = Problem::new(arch, samples, level, base);
    problem.found(problem.search(coarse.at.map(|x| x / share), SMALL_AFTER_MEANS)?)
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

/// Where a search ended: decay and angle, the linear values and the sum of squares there, and the linear problem of its last step.
struct End {
    at: [f64; 2],
    linear: Vector,
    squares: f64,
    last: Step,
    converged: bool,
}

impl<'a> Problem<'a> {
    fn new(arch: Arch, samples: &'a [f64], level: f64, base: Base) -> Self {
        let sums: [f64; 5] = doubled(1.0, samples.len());
        let scale: [f64; 5] = powers(1.0 / samples.len() as f64);
        let powers = std::array::from_fn(|k| sums[k] * scale[k]);
        let [scale @ .., _] = scale;
        Self { arch, samples, level, base, powers, scale }
    }

    fn size(&self) -> usize {
        RING + self.base.terms()
    }

    fn search(&self, start: [f64; 2], least: f64) -> Option<End> {
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
                let (linear, squares) = (here.whole, here.squares - here.gain);
                return Some(End { at: trial, linear, squares, last: here, converged: true });
            }
            match allowed.then(|| self.about(trial)).flatten() {
                Some(there) if there.squares <= here.squares => (at, here, scale) = (trial, there, 1.0),
                _ if small || scale < 1e-6 => return Some(End::at(at, here, small)),
                _ => scale *= 0.25,
            }
        }
        Some(End::at(at, here, false))
    }

    fn about(&self, at: [f64; 2]) -> Option<Step> {
        let gram = self.gram(at);
        let (size, head) = (self.size(), self.size() - 2);
        let (right, total) = self.right(at);
        let lower = factor(&gram, size)?;
        let rotated = forward(&lower, &right, size);
        let (projected, whole) = (back(&lower, &rotated, head), back(&lower, &rotated, size));
        let squares = total - rotated[..head].iter().map(|x| x * x).sum::<f64>();
        let gain = rotated[head] * rotated[head] + rotated[head + 1] * rotated[head + 1];
        let ([c, s, ..], p, r) = (projected, whole[head], whole[head + 1]);
        let power = c * c + s * s;
        let step = [-(c * p + s * r) / power, (s * p - c * r) / power];
        let fine = step.iter().all(|d| d.is_finite()) && power > 0.0;
        fine.then_some(Step { projected, squares: squares.max(0.0), whole, step, gain, gram })
    }

    /// Inner products of the columns with the samples, and of the samples with themselves.
    fn right(&self, at: [f64; 2]) -> (Vector, f64) {
        let z = (Complex64::new(-at[0], at[1]) * self.scale[1]).exp();
        let Moments { ring: [zeroth, first], plain, total } = moments(self.arch, self.samples, self.level, z);
        let (mut right, terms) = ([0.0; MOST], self.base.terms());
        (right[0], right[1]) = (zeroth.re, zeroth.im);
        (0..terms).for_each(|k| right[2 + k] = plain[k] * self.scale[k]);
        (right[2 + terms], right[3 + terms]) = (first.re * self.scale[1], first.im * self.scale[1]);
        (right, total)
    }

    /// Inner products of the columns with each other: the lower triangle.
    fn gram(&self, at: [f64; 2]) -> Matrix {
        let number = self.samples.len();
        let log = Complex64::new(-at[0], at[1]) * self.scale[1];
        let (z, last) = (log.exp(), Complex64::new(-at[0], at[1]).exp());
        let envelope: [f64; 3] = doubled(z.norm_sqr(), number);
        let double: [Complex64; 3] = geometric(z * z, last * last, number);
        let single: [Complex64; 4] = geometric(z, last, number);
        let terms = self.base.terms();
        let mut gram = [[0.0; MOST]; MOST];
        // The ring's columns, times x to the power of `k` in all, from a pair of columns on.
        let mut ring = |row: usize, column: usize, k: usize| {
            let scale = 0.5 * self.scale[k];
            gram[row][column] = scale * (envelope[k] + double[k].re);
            gram[row + 1][column + 1] = scale * (envelope[k] - double[k].re);
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

    fn found(&self, end: End) -> Option<DampedSinusoid> {
        let End { at: [decay, angle], linear, squares, last, converged } = end;
        let (c, s, size, terms) = (linear[0], linear[1], self.size(), self.base.terms());
        let inverse = covariance(&last.gram, size, c, s)?;
        let mut base = [0.0; 3];
        base[..terms].copy_from_slice(&linear[2..2 + terms]);
        base[0] += self.level;
        Some(DampedSinusoid { decay, angle, cosine: c, sine: s, base, squares: squares.max(0.0), inverse, converged })
    }
}

/// Inverse of the Gram matrix in terms of decay, angle, cosine, sine, base: the step of decay and angle is a rotation of the
/// coefficients of the columns times `x`, and everything else stands where it stood.
fn covariance(gram: &Matrix, size: usize, c: f64, s: f64) -> Option<DMatrix<f64>> {
    let mut inverse = [[0.0; MOST]; MOST];
    let lower = factor(gram, size)?;
    for column in 0..size {
        let mut unit = [0.0; MOST];
        unit[column] = 1.0;
        let solved = back(&lower, &forward(&lower, &unit, size), size);
        (0..size).for_each(|row| inverse[row][column] = solved[row]);
    }
    let (power, moved) = (c * c + s * s, size - 2);
    let turned = |row: usize, of: &dyn Fn(usize) -> f64| match row {
        0 => -(c * of(moved) + s * of(moved + 1)) / power,
        1 => (s * of(moved) - c * of(moved + 1)) / power,
        _ => of(row - 2),
    };
    Some(DMatrix::from_fn(size, size, |r, k| turned(r, &|row| turned(k, &|column| inverse[row][column]))))
}

impl End {
    fn at(at: [f64; 2], last: Step, converged: bool) -> Self {
        Self { at, linear: last.projected, squares: last.squares, last, converged }
    }
}

/// Cholesky factor of the leading `size` rows. `None` where the columns are not independent.
fn factor(gram: &Matrix, size: usize) -> Option<Matrix> {
    let mut lower = [[0.0; MOST]; MOST];
    for row in 0..size {
        for column in 0..=row {
            let known: f64 = (0..column).map(|k| lower[row][k] * lower[column][k]).sum();
            let left = gram[row][column] - known;
            lower[row][column] = if row > column { left / lower[column][column] } else { left.sqrt() };
        }
        if lower[row][row].is_nan() || lower[row][row] <= 0.0 {
            return None;
        }
    }
    Some(lower)
}

/// The right side in terms of the factor.
fn forward(lower: &Matrix, right: &Vector, size: usize) -> Vector {
    let mut rotated = [0.0; MOST];
    for row in 0..size {
        let known: f64 = (0..row).map(|k| lower[row][k] * rotated[k]).sum();
        rotated[row] = (right[row] - known) / lower[row][row];
    }
    rotated
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
