//! A straight line through points that are uncertain in both coordinates, with whatever part of that uncertainty several
//! points share: errors in variables by generalised least squares, of which the solution of York et al. (American Journal of
//! Physics 72, 367, 2004) is the case of independent points.

use nalgebra::{DMatrix, DVector, Matrix2, Vector2};

/// Steps after which a line that still moves is given up.
const STEPS: usize = 200;
/// Relative movement of the slope at which the line stands.
const STANDS: f64 = 1e-13;

/// A line `y = intercept + slope x`, in the units of the points.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct StraightLine {
    /// Value at `x = 0`.
    pub intercept: f64,
    /// Slope.
    pub slope: f64,
    /// Covariance of intercept and slope, in that order; not enlarged by a line that fits badly.
    pub covariance: [[f64; 2]; 2],
    /// Weighted sum of squared residuals: chi-square of `degrees_of_freedom` where line and uncertainties are right.
    pub chi_square: f64,
    /// Points less two.
    pub degrees_of_freedom: usize,
}

impl StraightLine {
    /// The line nearest to the points, by the covariances of their coordinates (x with y uncorrelated). `None` where there are
    /// fewer than two points, the covariances leave a point without weight, or the line does not come to rest.
    pub fn through(
        x: &[f64],
        y: &[f64],
        covariance_x: &DMatrix<f64>,
        covariance_y: &DMatrix<f64>,
    ) -> Option<StraightLine> {
        let count = x.len();
        // Farad and second squared lie 20 decades from one: the normal equations need unit scales.
        let [unit_x, unit_y] = [x, y].map(|values| values.iter().fold(0.0, |most: f64, value| most.max(value.abs())));
        if count < 2 || y.len() != count || !(unit_x.is_normal() && unit_y.is_normal()) {
            return None;
        }
        let scaled = Points {
            x: DVector::from_iterator(count, x.iter().map(|x| x / unit_x)),
            y: DVector::from_iterator(count, y.iter().map(|y| y / unit_y)),
            covariance_x: covariance_x / (unit_x * unit_x),
            covariance_y: covariance_y / (unit_y * unit_y),
        };
        let (line, normal, chi_square) = scaled.line()?;
        let covariance = normal.try_inverse()?;
        let scale = Vector2::new(unit_y, unit_y / unit_x);
        let entry = |row: usize, column: usize| covariance[(row, column)] * scale[row] * scale[column];
        Some(StraightLine {
            intercept: line[0] * scale[0],
            slope: line[1] * scale[1],
            covariance: [[entry(0, 0), entry(0, 1)], [entry(1, 0), entry(1, 1)]],
            chi_square,
            degrees_of_freedom: count - 2,
        })
    }
}

struct Points {
    x: DVector<f64>,
    y: DVector<f64>,
    covariance_x: DMatrix<f64>,
    covariance_y: DMatrix<f64>,
}

impl Points {
    /// Intercept and slope, the normal matrix there, and the weighted sum of squared residuals.
    ///
    /// With the covariance `V = Vy + slope^2 Vx` of a residual, the nearest true abscissae are `x + slope Vx V^-1 residual`;
    /// a Gauss-Newton step taken there, not at the measured abscissae, comes to rest where the sum of squares is least.
    fn line(&self) -> Option<(Vector2<f64>, Matrix2<f64>, f64)> {
        let mut line = Vector2::new(0.0, self.first_slope()?);
        for _ in 0..STEPS {
            let (step, normal) = self.step(line)?;
            line += step;
            if !line.iter().all(|value| value.is_finite()) {
                return None;
            }
            if step[1].abs() <= STANDS * line[1].abs() && step[0].abs() <= STANDS * (line[0].abs() + line[1].abs()) {
                let residual = self.residual(line);
                let weighted = self.spread(line[1]).cholesky()?.solve(&residual);
                return Some((line, normal, residual.dot(&weighted)));
            }
        }
        None
    }

    fn step(&self, line: Vector2<f64>) -> Option<(Vector2<f64>, Matrix2<f64>)> {
        let weights = self.spread(line[1]).cholesky()?;
        let residual = self.residual(line);
        let weighted = weights.solve(&residual);
        let abscissae = &self.x + &self.covariance_x * &weighted * line[1];
        let ones = DVector::from_element(self.x.len(), 1.0);
        let [ones_weighted, abscissae_weighted] = [&ones, &abscissae].map(|column| weights.solve(column));
        let cross = ones.dot(&abscissae_weighted);
        let normal = Matrix2::new(ones.dot(&ones_weighted), cross, cross, abscissae.dot(&abscissae_weighted));
        let right = Vector2::new(ones.dot(&weighted), abscissae.dot(&weighted));
        Some((normal.try_inverse()? * right, normal))
    }

    fn residual(&self, line: Vector2<f64>) -> DVector<f64> {
        &self.y - (&self.x * line[1]).add_scalar(line[0])
    }

    /// Covariance of the residuals at a slope.
    fn spread(&self, slope: f64) -> DMatrix<f64> {
        &self.covariance_y + &self.covariance_x * (slope * slope)
    }

    /// Slope of the plain regression, to begin with.
    fn first_slope(&self) -> Option<f64> {
        let (mean_x, mean_y) = (self.x.mean(), self.y.mean());
        let away = self.x.add_scalar(-mean_x);
        let slope = away.dot(&self.y.add_scalar(-mean_y)) / away.norm_squared();
        slope.is_finite().then_some(slope)
    }
}
