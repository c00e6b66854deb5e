//! Nonlinear least squares by variable projection (Golub & Pereyra 1973): the linear parameters are solved exactly at every trial,
//! the others by damped Gauss-Newton steps with analytic derivatives.

use super::{model::Curve, series::Series};
use nalgebra::{DMatrix, DVector};

/// Why an iteration stopped.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Stopped {
    /// The step is far below the uncertainty of the parameters.
    Converged,
    /// No step lowers the sum of squares any further.
    NoDescent,
    /// The limit of iterations.
    Iterations,
}

impl Stopped {
    pub(super) fn sentence(self) -> &'static str {
        match self {
            Self::Converged => "converged: the last step is far below the uncertainty",
            Self::NoDescent => "converged: no step lowers the sum of squares",
            Self::Iterations => "gave up at the limit of iterations",
        }
    }
}

/// A least-squares solution.
#[derive(Debug, Clone)]
pub(super) struct Solution {
    pub(super) nonlinear: Vec<f64>,
    pub(super) linear: Vec<f64>,
    /// Residual sum of squares.
    pub(super) squares: f64,
    /// Inverse of the normal matrix, nonlinear parameters first: the covariance for noise of unit variance.
    pub(super) inverse: DMatrix<f64>,
    pub(super) stopped: Stopped,
}

/// Linear parameters at given nonlinear ones, and the residual sum of squares.
pub(super) fn project(curve: &impl Curve, series: &Series, nonlinear: &[f64]) -> Option<(Vec<f64>, f64)> {
    let count = curve.linear();
    let mut normal = [[0.0; MOST]; MOST];
    let mut right = [0.0; MOST];
    let mut basis = [0.0; MOST];
    // Sums are taken about the first sample, so that a large offset does not eat the digits of the sum of squares.
    let level = series.volts.first().copied().unwrap_or(0.0);
    let mut total = 0.0;
    for (&time, &volt) in series.times.iter().zip(&series.volts) {
        curve.basis(nonlinear, time, &mut basis);
        let volt = volt - level;
        total += volt * volt;
        for row in 0..count {
            right[row] += basis[row] * volt;
            for column in 0..=row {
                normal[row][column] += basis[row] * basis[column];
            }
        }
    }
    let normal = DMatrix::from_fn(count, count, |r, c| if c <= r { normal[r][c] } else { normal[c][r] });
    let right = DVector::from_fn(count, |r, _| right[r]);
    let mut linear = normal.cholesky()?.solve(&right);
    let squares = total - linear.dot(&right);
    if count > 2 {
        linear[2] += level;
    } else {
        linear[0] += level;
    }
    linear.iter().all(|x| x.is_finite()).then(|| (linear.as_slice().to_vec(), squares.max(0.0)))
}

/// Most columns of any curve.
const MOST: usize = 10;

/// Residuals of the curve.
pub(super) fn residuals(curve: &impl Curve, series: &Series, nonlinear: &[f64], linear: &[f64]) -> Vec<f64> {
    let mut basis = [0.0; MOST];
    let one = |(&time, &volt): (&f64, &f64)| {
        curve.basis(nonlinear, time, &mut basis);
        volt - linear.iter().zip(&basis).map(|(l, b)| l * b).sum::<f64>()
    };
    series.times.iter().zip(&series.volts).map(one).collect()
}

/// Normal matrix of all parameters, the gradient, and the residual sum of squares.
fn normal_equations(
    curve: &impl Curve,
    series: &Series,
    nonlinear: &[f64],
    linear: &[f64],
) -> (DMatrix<f64>, DVector<f64>, f64) {
    let (first, count) = (nonlinear.len(), nonlinear.len() + linear.len());
    let mut normal = [[0.0; MOST]; MOST];
    let mut right = [0.0; MOST];
    let mut squares = 0.0;
    let mut row_of = [0.0; MOST];
    for (&time, &volt) in series.times.iter().zip(&series.volts) {
        let (derivatives, basis) = row_of.split_at_mut(first);
        curve.basis(nonlinear, time, basis);
        curve.derivatives(nonlinear, linear, time, basis, derivatives);
        let residual = volt - linear.iter().zip(&*basis).map(|(l, b)| l * b).sum::<f64>();
        squares += residual * residual;
        for row in 0..count {
            right[row] += row_of[row] * residual;
            for column in 0..=row {
                normal[row][column] += row_of[row] * row_of[column];
            }
        }
    }
    let normal = DMatrix::from_fn(count, count, |r, c| if c <= r { normal[r][c] } else { normal[c][r] });
    (normal, DVector::from_fn(count, |r, _| right[r]), squares)
}

/// Iterates from the start values. `None` where the normal matrix cannot be inverted.
pub(super) fn solve(curve: &impl Curve, series: &Series, start: &[f64], iterations: usize) -> Option<Solution> {
    let count = start.len();
    let mut nonlinear = start.to_vec();
    let (mut linear, _) = project(curve, series, &nonlinear)?;
    let (mut normal, mut gradient, mut squares) = normal_equations(curve, series, &nonlinear, &linear);
    let mut damping = 1e-4;
    let mut stopped = Stopped::Iterations;
    for _ in 0..iterations {
        let mut damped = normal.clone();
        for n in 0..count {
            damped[(n, n)] *= 1.0 + damping;
        }
        let step = damped.cholesky()?.solve(&gradient);
        let trial: Vec<f64> = nonlinear.iter().zip(step.iter()).map(|(x, d)| x + d).collect();
        let freedom = series.len().saturating_sub(normal.nrows()).max(1) as f64;
        let gain = step.dot(&gradient);
        let small = gain < 1e-9 * squares / freedom
            || step.iter().zip(&nonlinear).all(|(d, x)| d.abs() < 1e-13 * x.abs().max(1.0));
        let better = curve.allows(&trial).then(|| project(curve, series, &trial)).flatten().map(|(linear, _)| {
            let (normal, gradient, squares) = normal_equations(curve, series, &trial, &linear);
            (linear, normal, gradient, squares)
        });
        match better.filter(|(.., trial_squares)| *trial_squares <= squares) {
            Some((l, n, g, s)) => {
                (nonlinear, linear, normal, gradient, squares) = (trial, l, n, g, s);
                damping = f64::max(damping * 0.1, 1e-9);
                if small {
                    stopped = Stopped::Converged;
                    break;
                }
            }
            None if small || damping > 1e7 => {
                stopped = if small { Stopped::Converged } else { Stopped::NoDescent };
                break;
            }
            None => damping *= 10.0,
        }
    }
    let inverse = normal.cholesky()?.inverse();
    Some(Solution { nonlinear, linear, squares, inverse, stopped })
}
