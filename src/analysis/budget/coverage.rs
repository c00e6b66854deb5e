//! From variances and their degrees of freedom to the factor of a 95 % interval.

use crate::quantity::COVERAGE_95;
use statrs::distribution::{ContinuousCDF, StudentsT};

/// Degrees of freedom above which two terms of the series about the normal quantile are right to eight digits. The
/// quantile of the library loses digits there, all but four of them at a million.
const LARGE: f64 = 1000.0;

/// Half-width of the central 95 % of Student's t of unit scale (JCGM 100:2008, table G.2); degrees of freedom need not
/// be whole, and may be infinite. For large ones by the series of Abramowitz & Stegun, 26.7.5.
pub fn coverage_factor_95(degrees_of_freedom: f64) -> f64 {
    if degrees_of_freedom > LARGE {
        let (z, square) = (COVERAGE_95, COVERAGE_95 * COVERAGE_95);
        let first = z * (square + 1.0) / 4.0;
        let second = z * ((5.0 * square + 16.0) * square + 3.0) / 96.0;
        return z + (first + second / degrees_of_freedom) / degrees_of_freedom;
    }
    StudentsT::new(0.0, 1.0, degrees_of_freedom).map_or(f64::NAN, |t| t.inverse_cdf(0.975))
}

/// Welch-Satterthwaite formula (JCGM 100:2008, G.4.1) over independent parts, each a variance of the result and its
/// degrees of freedom.
pub(super) fn effective_degrees_of_freedom(variance: f64, parts: impl Iterator<Item = (f64, f64)>) -> f64 {
    let spread: f64 = parts.map(|(part, degrees_of_freedom)| part * (part / variance) / degrees_of_freedom).sum();
    if spread > 0.0 { variance / spread } else { f64::INFINITY }
}
