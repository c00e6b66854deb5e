//! A measurement model with its inputs, and the first-order law of propagation of uncertainty over it.

use super::{
    BudgetError,
    coverage::{coverage_factor_95, effective_degrees_of_freedom},
    data::{Budget, Component, Input, Method},
};
use nalgebra::DMatrix;

/// Step of the numerical derivatives over the standard uncertainty of the input.
const STEP: f64 = 0.25;

/// Least step over the value of the input: below it the last digits of the value are lost.
const LEAST_STEP: f64 = 1e-6;

/// Eigenvalues of a correlation matrix may fall this far below zero by rounding of its coefficients.
const EIGENVALUE_TOLERANCE: f64 = 1e-9;

/// How a result follows from its inputs: `function` takes their values in the order of `inputs`.
pub struct Model<F> {
    pub(super) result: String,
    unit: String,
    pub(super) inputs: Vec<Input>,
    correlations: Vec<(usize, usize, f64)>,
    function: F,
}

impl<F: Fn(&[f64]) -> f64> Model<F> {
    /// A model of uncorrelated inputs. It should be pure and smooth over a few standard uncertainties of every input.
    pub fn new(result: &str, unit: impl ToString, inputs: Vec<Input>, function: F) -> Self {
        Self { result: result.to_owned(), unit: unit.to_string(), inputs, correlations: Vec::new(), function }
    }

    /// The same with two of its inputs, counted from zero, correlated.
    #[must_use]
    pub fn correlated(mut self, first: usize, second: usize, coefficient: f64) -> Self {
        self.correlations.push((first, second, coefficient));
        self
    }

    /// The budget by the law of propagation (JCGM 100:2008, 5.1.2, with correlations 5.2.2).
    ///
    /// The Welch-Satterthwaite formula is for independent parts. Inputs that are correlated, directly or through others,
    /// are therefore one part with the variance they make together and the fewest degrees of freedom among them: exact
    /// for quantities observed together, cautious otherwise.
    ///
    /// # Errors
    /// An input or a correlation that cannot be, or a model without a finite value nearby.
    pub fn first_order(&self) -> Result<Budget, BudgetError> {
        let correlation = self.checked_correlation()?;
        let values = self.values();
        let value = self.evaluate(&values, || "at the best estimates of its inputs".to_owned())?;
        let sensitivities =
            (0..self.inputs.len()).map(|n| self.sensitivity(&values, n)).collect::<Result<Vec<_>, _>>()?;
        let signed: Vec<f64> =
            sensitivities.iter().zip(&self.inputs).map(|(c, x)| c * x.standard_uncertainty).collect();
        let parts = self.independent_parts(&signed, &correlation);
        let variance = parts.iter().map(|part| part.0).sum::<f64>().max(0.0);
        let degrees_of_freedom = effective_degrees_of_freedom(variance, parts.into_iter());
        let components = self.inputs.iter().zip(sensitivities).map(|(input, sensitivity)| Component {
            input: input.clone(),
            sensitivity,
            contribution: (sensitivity * input.standard_uncertainty).abs(),
            share: 0.0,
        });
        let budget = Budget {
            result: self.result.clone(),
            unit: self.unit.clone(),
            value,
            standard_uncertainty: 0.0,
            effective_degrees_of_freedom: degrees_of_freedom,
            coverage_factor: coverage_factor_95(degrees_of_freedom),
            low: value,
            high: value,
            method: Method::FirstOrder,
            components: components.collect(),
        };
        Ok(budget.with_standard_uncertainty(variance.sqrt()))
    }

    /// The first-order budget where Monte Carlo confirms it to two significant digits of the standard uncertainty
    /// (JCGM 101:2008, 8), the Monte Carlo budget elsewhere.
    ///
    /// # Errors
    /// As [`Model::first_order`] and [`Model::monte_carlo`].
    pub fn budget(&self, trials: usize, seed: u64) -> Result<Budget, BudgetError> {
        let first_order = self.first_order()?;
        let monte_carlo = self.monte_carlo(trials, seed)?;
        Ok(if monte_carlo.nonlinear(&first_order) { monte_carlo.budget(&first_order) } else { first_order })
    }

    pub(super) fn values(&self) -> Vec<f64> {
        self.inputs.iter().map(|input| input.value).collect()
    }

    pub(super) fn evaluate(&self, values: &[f64], place: impl FnOnce() -> String) -> Result<f64, BudgetError> {
        let value = (self.function)(values);
        let error = || BudgetError::NotFinite { result: self.result.clone(), place: place() };
        if value.is_finite() { Ok(value) } else { Err(error()) }
    }

    /// The model with inputs moved away from their estimates.
    pub(super) fn moved(&self, values: &[f64], moves: &[(usize, f64)]) -> Result<f64, BudgetError> {
        let mut at = values.to_vec();
        moves.iter().for_each(|&(n, step)| at[n] += step);
        self.evaluate(&at, || {
            let names: Vec<_> = moves.iter().map(|&(n, _)| format!("`{}`", self.inputs[n].name)).collect();
            format!("near the best estimate of {}", names.join(" and "))
        })
    }

    /// Partial derivative by central differences of fourth order.
    fn sensitivity(&self, values: &[f64], n: usize) -> Result<f64, BudgetError> {
        let input = &self.inputs[n];
        let step = (STEP * input.standard_uncertainty).max(LEAST_STEP * input.value.abs());
        if step == 0.0 {
            return Ok(0.0);
        }
        // The step as the arithmetic sees it: the sum is rounded, the difference of the two is not.
        let step = (input.value + step) - input.value;
        let difference = |times: f64| -> Result<f64, BudgetError> {
            Ok(self.moved(values, &[(n, times * step)])? - self.moved(values, &[(n, -times * step)])?)
        };
        Ok((8.0 * difference(1.0)? - difference(2.0)?) / (12.0 * step))
    }

    /// Variances of the result that are independent of each other, with their degrees of freedom.
    fn independent_parts(&self, signed: &[f64], correlation: &DMatrix<f64>) -> Vec<(f64, f64)> {
        let mut group: Vec<usize> = (0..signed.len()).collect();
        for &(a, b, coefficient) in &self.correlations {
            if coefficient != 0.0 {
                let (kept, merged) = (group[a], group[b]);
                group.iter_mut().filter(|g| **g == merged).for_each(|g| *g = kept);
            }
        }
        let part = |members: Vec<usize>| {
            let covariance = |i: usize| members.iter().map(move |&j| (i, j));
            let variance =
                members.iter().flat_map(|&i| covariance(i)).map(|(i, j)| correlation[(i, j)] * signed[i] * signed[j]);
            let fewest = members.iter().map(|&i| self.inputs[i].degrees_of_freedom).fold(f64::INFINITY, f64::min);
            (variance.sum::<f64>(), fewest)
        };
        let members = |g: usize| (0..signed.len()).filter(|&n| group[n] == g).collect::<Vec<_>>();
        (0..signed.len()).map(members).filter(|members| !members.is_empty()).map(part).collect()
    }

    /// The correlation matrix, after checking it and the inputs.
    pub(super) fn checked_correlation(&self) -> Result<DMatrix<f64>, BudgetError> {
        for (n, input) in self.inputs.iter().enumerate() {
            let twin = self.inputs[..n].iter().any(|other| other.name == input.name);
            let wrong = if twin {
                "stands twice in the budget; give each input its own name"
            } else if !input.value.is_finite() {
                "its value is not finite"
            } else if !(input.standard_uncertainty >= 0.0 && input.standard_uncertainty.is_finite()) {
                "its standard uncertainty must be finite and not negative; a mean needs at least two observations"
            } else if !(1.0..=f64::INFINITY).contains(&input.degrees_of_freedom) {
                "its degrees of freedom must be 1 or more; repeat the observation"
            } else {
                continue;
            };
            let (result, name) = (self.result.clone(), input.name.clone());
            return Err(BudgetError::Input { result, name, what: wrong.to_owned() });
        }
        let count = self.inputs.len();
        let refuse = |what: &str| BudgetError::Correlation { result: self.result.clone(), what: what.to_owned() };
        let mut matrix = DMatrix::identity(count, count);
        for &(a, b, coefficient) in &self.correlations {
            if a >= count || b >= count || a == b {
                return Err(refuse("each must name two different inputs"));
            }
            if !(-1.0..=1.0).contains(&coefficient) {
                return Err(refuse("a coefficient must lie between -1 and 1"));
            }
            matrix[(a, b)] = coefficient;
            matrix[(b, a)] = coefficient;
        }
        let possible = self.correlations.is_empty()
            || matrix.clone().symmetric_eigenvalues().iter().all(|value| *value > -EIGENVALUE_TOLERANCE);
        if possible {
            Ok(matrix)
        } else {
            Err(refuse("the coefficients contradict each other; take them from one fit"))
        }
    }

    /// Whether the input is correlated with any other.
    pub(super) fn is_correlated(&self, n: usize) -> bool {
        self.correlations.iter().any(|&(a, b, coefficient)| coefficient != 0.0 && (a == n || b == n))
    }
}

impl Budget {
    /// The same with another standard uncertainty, on which shares and interval follow.
    pub(super) fn with_standard_uncertainty(mut self, standard_uncertainty: f64) -> Self {
        self.standard_uncertainty = standard_uncertainty;
        let half_width = self.coverage_factor * standard_uncertainty;
        (self.low, self.high) = (self.value - half_width, self.value + half_width);
        for component in &mut self.components {
            let ratio = component.contribution / standard_uncertainty;
            component.share = if standard_uncertainty > 0.0 { ratio * ratio } else { 0.0 };
        }
        self
    }
}
