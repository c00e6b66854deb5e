//! Propagation of distributions by Monte Carlo (JCGM 101:2008), and whether it confirms the law of propagation.

use super::{
    BudgetError,
    data::{Budget, Distribution, Input, Method},
    model::Model,
};
use nalgebra::{DMatrix, DVector};
use rand_chacha::{
    ChaCha8Rng,
    rand_core::{Rng, SeedableRng},
};

/// Fewest trials from which a 95 % interval is read.
const FEWEST_TRIALS: usize = 1000;

/// Coverage probability of the intervals.
const COVERAGE: f64 = 0.95;

/// Ends of an interval lie within so many of their standard uncertainties from chance alone.
const CHANCE: f64 = 3.0;

/// What the trials gave, in the unit of the result.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct MonteCarlo {
    /// Number of trials.
    pub trials: usize,
    /// Mean of the trials.
    pub mean: f64,
    /// Standard deviation of the trials. It grows with their number, and says nothing, where an input of two or fewer
    /// degrees of freedom dominates, whose distribution has no variance (JCGM 101:2008, 6.4.9.4); the intervals hold.
    pub standard_uncertainty: f64,
    /// Probabilistically symmetric 95 % interval (JCGM 101:2008, 7.7.2).
    pub symmetric: [f64; 2],
    /// Shortest 95 % interval (JCGM 101:2008, 7.7.3, note).
    pub shortest: [f64; 2],
    /// Standard uncertainty of the ends of the symmetric interval from the number of trials alone.
    pub end_uncertainty: [f64; 2],
}

impl MonteCarlo {
    /// Whether the ends of the other interval lie within the numerical tolerance of the symmetric one
    /// (JCGM 101:2008, 8.1), beyond what the number of trials may have moved them. Two digits can be told apart with about
    /// a million trials; fewer call a model nonlinear only where it is grossly so.
    pub fn confirms(&self, budget: &Budget, significant_digits: u32) -> bool {
        let tolerance = numerical_tolerance(self.standard_uncertainty, significant_digits);
        let ends = [budget.low, budget.high].into_iter().zip(self.symmetric).zip(self.end_uncertainty);
        ends.into_iter().all(|((theirs, ours), spread)| (theirs - ours).abs() <= tolerance + CHANCE * spread)
    }

    /// Whether the first-order law is not enough: its interval differs in the second significant digit of the standard
    /// uncertainty.
    pub fn nonlinear(&self, first_order: &Budget) -> bool {
        !self.confirms(first_order, 2)
    }

    /// The budget with value, uncertainty and interval from the trials; sensitivities and degrees of freedom stay those of
    /// the first order.
    pub fn budget(&self, first_order: &Budget) -> Budget {
        let [low, high] = self.symmetric;
        let budget = Budget { value: self.mean, method: Method::MonteCarlo, ..first_order.clone() };
        let budget = budget.with_standard_uncertainty(self.standard_uncertainty);
        let width = (high - low) / 2.0;
        let coverage_factor = if width > 0.0 { width / self.standard_uncertainty } else { budget.coverage_factor };
        Budget { low, high, coverage_factor, ..budget }
    }
}

/// Half of the last of so many significant digits of a standard uncertainty (JCGM 101:2008, 7.9.2).
pub fn numerical_tolerance(standard_uncertainty: f64, significant_digits: u32) -> f64 {
    let last_digit = |exponent: f64| 10f64.powf(exponent - f64::from(significant_digits) + 1.0);
    let mut exponent = standard_uncertainty.log10().floor();
    // 9.96 is 10 in two digits, and its last digit a place higher.
    if (standard_uncertainty / last_digit(exponent)).round() >= 10f64.powf(f64::from(significant_digits)) {
        exponent += 1.0;
    }
    0.5 * last_digit(exponent)
}

impl<F: Fn(&[f64]) -> f64> Model<F> {
    /// Draws the inputs from their distributions and takes the model through so many trials. The same seed gives the same
    /// trials on every machine. Correlated inputs must be normal.
    ///
    /// # Errors
    /// Fewer than 1000 trials, correlated inputs that are not normal, a trial without a finite value, or an input or
    /// correlation that cannot be.
    pub fn monte_carlo(&self, trials: usize, seed: u64) -> Result<MonteCarlo, BudgetError> {
        if trials < FEWEST_TRIALS {
            return Err(BudgetError::TooFewTrials { trials, least: FEWEST_TRIALS });
        }
        let correlated: Vec<bool> = (0..self.inputs.len()).map(|n| self.is_correlated(n)).collect();
        let root = self.root_of_correlation(&correlated)?;
        let mut draw = Draw(ChaCha8Rng::seed_from_u64(seed));
        let mut values = self.values();
        let mut results = Vec::with_capacity(trials);
        for _ in 0..trials {
            let together = root.as_ref().map(|root| root * DVector::from_fn(root.ncols(), |_, _| draw.normal()));
            for (n, input) in self.inputs.iter().enumerate() {
                let deviation = match &together {
                    Some(together) if correlated[n] => together[n],
                    _ => draw.standardised(input),
                };
                values[n] = input.value + input.standard_uncertainty * deviation;
            }
            results.push(self.evaluate(&values, || format!("in a trial with the inputs at {values:?}"))?);
        }
        Ok(summary(results))
    }

    /// A matrix whose product with its transpose is the correlation, from the eigenvectors, so that fully correlated inputs
    /// are no special case; `None` where nothing is correlated.
    fn root_of_correlation(&self, correlated: &[bool]) -> Result<Option<DMatrix<f64>>, BudgetError> {
        let matrix = self.checked_correlation()?;
        if !correlated.contains(&true) {
            return Ok(None);
        }
        let shaped = |(input, correlated): (&Input, &bool)| *correlated && input.distribution != Distribution::Normal;
        if let Some((input, _)) = self.inputs.iter().zip(correlated).find(|pair| shaped(*pair)) {
            let what = format!("`{}` is drawn together with others and must be stated as normal", input.name);
            return Err(BudgetError::Correlation { result: self.result.clone(), what });
        }
        let eigen = matrix.symmetric_eigen();
        let scale = DMatrix::from_diagonal(&eigen.eigenvalues.map(|value| value.max(0.0).sqrt()));
        Ok(Some(eigen.eigenvectors * scale))
    }
}

/// The stream of random numbers.
struct Draw(ChaCha8Rng);

impl Draw {
    /// Between 0 and 1, ends excluded.
    fn uniform(&mut self) -> f64 {
        ((self.0.next_u64() >> 12) as f64 + 0.5) / (1u64 << 52) as f64
    }

    fn normal(&mut self) -> f64 {
        self.student_t(f64::INFINITY)
    }

    /// Student's t by the polar method (Bailey, Mathematics of Computation 62, 1994), which for infinite degrees of freedom
    /// is Marsaglia's for the normal distribution.
    fn student_t(&mut self, degrees_of_freedom: f64) -> f64 {
        loop {
            let [x, y] = [(); 2].map(|()| 2.0 * self.uniform() - 1.0);
            let square = x * x + y * y;
            if square < 1.0 {
                let exponential = -2.0 * square.ln();
                let stretched = if degrees_of_freedom.is_finite() {
                    degrees_of_freedom * (exponential / degrees_of_freedom).exp_m1()
                } else {
                    exponential
                };
                return x * (stretched / square).sqrt();
            }
        }
    }

    /// A deviation from the best estimate in standard uncertainties.
    fn standardised(&mut self, input: &Input) -> f64 {
        match input.distribution {
            Distribution::Normal => self.normal(),
            Distribution::Rectangular => 3f64.sqrt() * (2.0 * self.uniform() - 1.0),
            Distribution::StudentT => self.student_t(input.degrees_of_freedom),
        }
    }
}

fn summary(mut results: Vec<f64>) -> MonteCarlo {
    let count = results.len() as f64;
    let mean = results.iter().sum::<f64>() / count;
    let squares: f64 = results.iter().map(|x| (x - mean).powi(2)).sum();
    results.sort_unstable_by(f64::total_cmp);
    let inside = (COVERAGE * count).round() as usize;
    let outside = results.len() - inside;
    let interval = |low: usize| [results[low], results[low + inside - 1]];
    let width = |low: &usize| interval(*low)[1] - interval(*low)[0];
    let shortest = (0..=outside).min_by(|a, b| width(a).total_cmp(&width(b))).unwrap_or(0);
    // The rank of a quantile is binomial: one standard deviation of it to either side.
    let tail = (1.0 - COVERAGE) / 2.0;
    let ranks = (count * tail * (1.0 - tail)).sqrt().ceil() as usize;
    let low = outside / 2;
    let spread = |rank: usize| (results[rank + ranks] - results[rank - ranks]) / 2.0;
    MonteCarlo {
        trials: results.len(),
        mean,
        standard_uncertainty: (squares / (count - 1.0)).sqrt(),
        symmetric: interval(low),
        shortest: interval(shortest),
        end_uncertainty: [low, low + inside - 1].map(spread),
    }
}
