//! Nonlinear least squares by variable projection (Golub & Pereyra 1973, in Kaufman's form): the linear parameters are solved exactly
//! at every trial, the others by damped Gauss-Newton steps with analytic derivatives, all through orthogonal factors.

use nalgebra::{DMatrix, DVector};

/// A curve that is linear in some of its parameters.
pub trait Curve {
    /// The linear parameters' columns, one row a time.
    fn columns(&self, nonlinear: &[f64], times: &[f64]) -> DMatrix<f64>;
    /// The derivatives by the nonlinear parameters, one column each, with the linear ones known.
    fn derivatives(&self, nonlinear: &[f64], linear: &[f64], times: &[f64]) -> DMatrix<f64>;
    /// Whether the nonlinear parameters are within reason.
    fn allows(&self, nonlinear: &[f64]) -> bool;
}

/// Why an iteration stopped.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Stopped {
    /// The step is far below the uncertainty of the parameters.
    Converged,
    /// No step lowers the sum of squares any further.
    NoDescent,
    /// The limit of iterations.
    Iterations,
}

impl Stopped {
    /// For a reader.
    pub fn sentence(self) -> &'static str {
        match self {
            Self::Converged => "converged: the last step is far below the uncertainty",
            Self::NoDescent => "converged: no step lowers the sum of squares",
            Self::Iterations => "gave up at the limit of iterations",
        }
    }
}

/// A least-squares solution.
#[derive(Debug, Clone)]
pub struct Solution {
    /// Nonlinear parameters.
    pub nonlinear: Vec<f64>,
    /// Linear parameters.
    pub linear: Vec<f64>,
    /// What the curve leaves of each sample.
    pub residual: Vec<f64>,
    /// Residual sum of squares.
    pub squares: f64,
    /// Covariance of all parameters for noise of unit variance, nonlinear ones first.
    pub inverse: DMatrix<f64>,
    /// Why it stopped.
    pub stopped: Stopped,
}

/// A step is small where what it promises is this share of a residual variance.
const SMALL: f64 = 1e-14;
/// Sums of squares are not told apart closer than this.
const ROUNDING: f64 = 1e-13;

/// Linear parameters at given nonlinear ones, and what is left. `None` where the columns are not independent.
pub fn project(curve: &impl Curve, times: &[f64], samples: &[f64], nonlinear: &[f64]) -> Option<(Vec<f64>, Vec<f64>)> {
    let columns = curve.columns(nonlinear, times);
    let count = columns.ncols();
    if samples.len() < count {
        return None;
    }
    let wanted = DVector::from_column_slice(samples);
    let factors = columns.clone().qr();
    let mut rotated = wanted.clone();
    factors.q_tr_mul(&mut rotated);
    let linear = factors.r().solve_upper_triangular(&rotated.rows(0, count).into_owned())?;
    let residual = wanted - columns * &linear;
    let sound = linear.iter().chain(&residual).all(|x| x.is_finite());
    sound.then(|| (linear.as_slice().to_vec(), residual.as_slice().to_vec()))
}

/// The curve at its best for a set of nonlinear parameters, linearised.
struct Place {
    linear: Vec<f64>,
    residual: Vec<f64>,
    squares: f64,
}

impl Place {
    fn of(curve: &impl Curve, times: &[f64], samples: &[f64], nonlinear: &[f64]) -> Option<Self> {
        let (linear, residual) = project(curve, times, samples, nonlinear)?;
        let squares = residual.iter().map(|r| r * r).sum();
        Some(Self { linear, residual, squares })
    }

    /// Upper triangular factor of all columns, and the residual in its terms.
    fn factor(&self, curve: &impl Curve, times: &[f64], nonlinear: &[f64]) -> (DMatrix<f64>, DVector<f64>) {
        let derivatives = curve.derivatives(nonlinear, &self.linear, times);
        let columns = curve.columns(nonlinear, times);
        let (first, size) = (derivatives.ncols(), derivatives.ncols() + columns.ncols());
        let all = DMatrix::from_fn(times.len(), size, |row, column| match column.checked_sub(first) {
            None => derivatives[(row, column)],
            Some(linear) => columns[(row, linear)],
        });
        let factors = all.qr();
        let mut rotated = DVector::from_column_slice(&self.residual);
        factors.q_tr_mul(&mut rotated);
        (factors.r(), rotated.rows(0, size).into_owned())
    }
}

/// The damped step of the nonlinear parameters, and the gain it promises.
fn damped_step(factor: &DMatrix<f64>, residual: &DVector<f64>, damping: f64, count: usize) -> Option<(Vec<f64>, f64)> {
    let size = factor.ncols();
    let mut tall = DMatrix::<f64>::zeros(size + count, size);
    tall.rows_mut(0, size).copy_from(factor);
    for n in 0..count {
        tall[(size + n, n)] = (damping * factor.column(n).norm_squared()).sqrt();
    }
    let mut right = DVector::<f64>::zeros(size + count);
    right.rows_mut(0, size).copy_from(residual);
    let factors = tall.qr();
    factors.q_tr_mul(&mut right);
    let gain = right.rows(0, size).norm_squared();
    let step = factors.r().solve_upper_triangular(&right.rows(0, size).into_owned())?;
    step.iter().all(|d| d.is_finite()).then(|| (step.as_slice()[..count].to_vec(), gain))
}

/// What the curve at those nonlinear parameters leaves of the sum of squares, and what a full step from there promises to gain: the
/// score test of the parameters that are new. `None` as for [`solve`].
pub fn promised_gain(curve: &impl Curve, times: &[f64], samples: &[f64], nonlinear: &[f64]) -> Option<(f64, f64)> {
    let place =
        Place::of(curve, times, samples, nonlinear).filter(|p| samples.len() > nonlinear.len() + p.linear.len())?;
    let (factor, rotated) = place.factor(curve, times, nonlinear);
    let (_, gain) = damped_step(&factor, &rotated, 0.0, nonlinear.len())?;
    Some((place.squares, gain))
}

/// Iterates from the start values. `None` where the curve cannot be had there, its parameters cannot be told apart, or the samples are
/// no more than they.
pub fn solve(curve: &impl Curve, times: &[f64], samples: &[f64], start: &[f64], iterations: usize) -> Option<Solution> {
    let mut nonlinear = start.to_vec();
    let mut place = Place::of(curve, times, samples, start).filter(|p| samples.len() > start.len() + p.linear.len())?;
    let (mut factor, mut rotated) = place.factor(curve, times, &nonlinear);
    let freedom = samples.len().saturating_sub(factor.ncols()).max(1) as f64;
    let mut damping = 1e-4;
    let mut stopped = Stopped::Iterations;
    for _ in 0..iterations {
        let (step, gain) = damped_step(&factor, &rotated, damping, nonlinear.len())?;
        let trial: Vec<f64> = nonlinear.iter().zip(&step).map(|(x, d)| x + d).collect();
        let small = gain < SMALL * place.squares / freedom
            || step.iter().zip(&nonlinear).all(|(d, x)| d.abs() < 1e-14 * x.abs().max(1e-3));
        let there = curve.allows(&trial).then(|| Place::of(curve, times, samples, &trial)).flatten();
        match there.filter(|there| there.squares <= place.squares * (1.0 + ROUNDING)) {
            Some(there) => {
                (nonlinear, place) = (trial, there);
                (factor, rotated) = place.factor(curve, times, &nonlinear);
                damping = f64::max(damping * 0.1, 1e-12);
                if small {
                    stopped = Stopped::Converged;
                    break;
                }
            }
            None if small || damping > 1e9 => {
                stopped = if small { Stopped::Converged } else { Stopped::NoDescent };
                break;
            }
            None => damping *= 10.0,
        }
    }
    let size = factor.ncols();
    let back = factor.solve_upper_triangular(&DMatrix::identity(size, size))?;
    let inverse = &back * back.transpose();
    let Place { linear, residual, squares } = place;
    Some(Solution { nonlinear, linear, residual, squares, inverse, stopped })
}
