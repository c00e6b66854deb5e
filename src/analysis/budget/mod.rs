//! Uncertainty budgets: what a result rests on, how much each input contributes, and the interval that follows, by the
//! law of propagation (JCGM 100:2008) or by Monte Carlo where that law is not enough (JCGM 101:2008).

mod compare;
mod coverage;
mod data;
mod model;
mod monte_carlo;
mod second_order;
mod table;

pub use compare::Comparison;
pub use coverage::coverage_factor_95;
pub use data::{Budget, Component, Distribution, Evaluation, Input, Method};
pub use model::Model;
pub use monte_carlo::{MonteCarlo, numerical_tolerance};
pub use table::COLUMNS;

/// Why no budget could be drawn up.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum BudgetError {
    /// An input cannot be what it says.
    #[error("input `{name}` of {result}: {what}")]
    Input {
        /// Result the budget is for.
        result: String,
        /// Which input.
        name: String,
        /// What is wrong with it, and what would be right.
        what: String,
    },
    /// The correlations contradict each other or name no input.
    #[error("correlations of {result}: {what}")]
    Correlation {
        /// Result the budget is for.
        result: String,
        /// What is wrong with them, and what would be right.
        what: String,
    },
    /// The model has no finite value where it was asked.
    #[error("{result} has no finite value {place}; narrow the inputs or widen the model")]
    NotFinite {
        /// Result the budget is for.
        result: String,
        /// Where it was asked.
        place: String,
    },
    /// The second-order terms take away more variance than there is.
    #[error("the second-order terms leave {result} no positive variance; use Monte Carlo")]
    NoVariance {
        /// Result the budget is for.
        result: String,
    },
    /// Too few trials for a 95 % interval.
    #[error("{trials} Monte Carlo trials are too few for a 95 % interval; take at least {least}")]
    TooFewTrials {
        /// Trials asked for.
        trials: usize,
        /// Least that will do.
        least: usize,
    },
    /// Two results cannot be compared.
    #[error("{first} and {second} cannot be compared: {what}")]
    NotComparable {
        /// One result.
        first: String,
        /// The other.
        second: String,
        /// Why not.
        what: String,
    },
}
