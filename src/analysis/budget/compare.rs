//! Two results against each other: before and after, board against board. Errors that enter both are counted once.

use super::{BudgetError, data::Budget};
use crate::quantity::Measured;
use serde::{Deserialize, Serialize};

/// One result against another.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Comparison {
    /// First over second.
    pub ratio: Measured,
    /// First less second, in their unit.
    pub difference: Measured,
    /// Names of the inputs that both have in common.
    pub common: Vec<String>,
}

impl Budget {
    /// Compares this result with another of the same unit. An input that both budgets mark as common under one name is one
    /// and the same error in both: what it does to the one it takes from the other (JCGM 100:2008, 5.2.2 and F.1.2.3, with
    /// a correlation of 1). A gain or a nominal inductance so cancels in the ratio, an offset in the difference;
    /// whatever does not cancel stays. All other inputs are independent, also of the common ones.
    ///
    /// # Errors
    /// Different units, or a ratio to zero.
    pub fn compared_with(&self, other: &Self) -> Result<Comparison, BudgetError> {
        let refuse = |what: String| BudgetError::NotComparable {
            first: self.result.clone(),
            second: other.result.clone(),
            what,
        };
        if self.unit != other.unit {
            return Err(refuse(format!("one is in `{}`, the other in `{}`", self.unit, other.unit)));
        }
        if other.value == 0.0 {
            return Err(refuse("the second is zero, and there is no ratio to it".to_owned()));
        }
        let shared =
            |name: &str| other.components.iter().find(|theirs| theirs.input.common && theirs.input.name == name);
        let ours = self.components.iter().filter(|ours| ours.input.common);
        let pairs: Vec<_> = ours.filter_map(|ours| Some((ours, shared(&ours.input.name)?))).collect();
        let covariance: f64 = pairs.iter().map(|(ours, theirs)| ours.signed() * theirs.signed()).sum();
        let difference = |first: f64, second: f64| {
            let variance = (first * self.standard_uncertainty).powi(2) + (second * other.standard_uncertainty).powi(2)
                - 2.0 * first * second * covariance;
            variance.max(0.0).sqrt()
        };
        let ratio = self.value / other.value;
        Ok(Comparison {
            ratio: Measured { value: ratio, standard_uncertainty: difference(1.0 / other.value, ratio / other.value) },
            difference: Measured { value: self.value - other.value, standard_uncertainty: difference(1.0, 1.0) },
            common: pairs.iter().map(|(ours, _)| ours.input.name.clone()).collect(),
        })
    }
}

impl super::Component {
    /// Contribution with the sign of the sensitivity.
    fn signed(&self) -> f64 {
        self.sensitivity * self.input.standard_uncertainty
    }
}
