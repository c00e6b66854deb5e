//! A measured value with its standard uncertainty, and quantities as people write them: `"1.2 mH +- 5 %"`.

use serde::{Deserialize, Serialize};

/// A value in SI units with its standard uncertainty (JCGM 100), in the same unit.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Measured {
    /// Best estimate.
    pub value: f64,
    /// Standard uncertainty, one standard deviation, never negative.
    pub standard_uncertainty: f64,
}
