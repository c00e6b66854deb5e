//! The next terms of the law of propagation, for models that bend over the uncertainty of their inputs.

use super::{
    BudgetError,
    data::{Budget, Method},
    model::Model,
};

/// Step of the second and third differences over the standard uncertainty of the input: wide, because third differences
/// lose digits fast.
const STEP: f64 = 0.5;

impl<F: Fn(&[f64]) -> f64> Model<F> {
    /// The budget with the terms of next highest order (JCGM 100:2008, 5.1.2, note; H.1.7):
    /// `sum over i, j of (f_ij^2 / 2 + f_i f_ijj) u_i^2 u_j^2`. They hold for uncorrelated inputs of symmetric, roughly
    /// normal distribution. Value and degrees of freedom stay those of the first order.
    ///
    /// # Errors
    /// As [`Model::first_order`]; also correlated inputs, and a variance that is negative with the terms added.
    pub fn second_order(&self) -> Result<Budget, BudgetError> {
        let first_order = self.first_order()?;
        let count = self.inputs.len();
        if (0..count).any(|n| self.is_correlated(n)) {
            let what = "second-order terms are for uncorrelated inputs; use Monte Carlo".to_owned();
            return Err(BudgetError::Correlation { result: self.result.clone(), what });
        }
        let values = self.values();
        let mut variance = first_order.standard_uncertainty.powi(2);
        for i in 0..count {
            let slope = first_order.components[i].sensitivity * self.inputs[i].standard_uncertainty;
            for j in 0..count {
                let (mixed, bending) = self.scaled_derivatives(&values, first_order.value, i, j)?;
                variance += mixed * mixed / 2.0 + slope * bending;
            }
        }
        if variance < 0.0 {
            return Err(BudgetError::NoVariance { result: self.result.clone() });
        }
        let budget = Budget { method: Method::SecondOrder, ..first_order };
        Ok(budget.with_standard_uncertainty(variance.sqrt()))
    }

    /// `f_ij u_i u_j` and `f_ijj u_i u_j^2` by central differences.
    fn scaled_derivatives(&self, values: &[f64], centre: f64, i: usize, j: usize) -> Result<(f64, f64), BudgetError> {
        let [a, b] = [i, j].map(|n| STEP * self.inputs[n].standard_uncertainty);
        if a == 0.0 || b == 0.0 {
            return Ok((0.0, 0.0));
        }
        let at = |x: f64, y: f64| self.moved(values, &[(i, x * a), (j, y * b)]);
        let (second, third) = if i == j {
            let (up, down) = (at(1.0, 0.0)?, at(-1.0, 0.0)?);
            (up - 2.0 * centre + down, (at(2.0, 0.0)? - 2.0 * up + 2.0 * down - at(-2.0, 0.0)?) / 2.0)
        } else {
            let [pp, pm, mp, mm] = [at(1.0, 1.0)?, at(1.0, -1.0)?, at(-1.0, 1.0)?, at(-1.0, -1.0)?];
            let (p, m) = (at(1.0, 0.0)?, at(-1.0, 0.0)?);
            ((pp - pm - mp + mm) / 4.0, ((pp - 2.0 * p + pm) - (mp - 2.0 * m + mm)) / 2.0)
        };
        Ok((second / (STEP * STEP), third / (STEP * STEP * STEP)))
    }
}
