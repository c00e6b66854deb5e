//! The budget as plain data for record and report: the result, and every input with its share.

use crate::quantity::Measured;
use serde::{Deserialize, Serialize};

/// Shape of what is known about an input.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
pub enum Distribution {
    /// Normal.
    #[serde(rename = "normal")]
    Normal,
    /// Equally likely anywhere within the square root of three standard uncertainties.
    #[serde(rename = "rectangular")]
    Rectangular,
    /// Scaled and shifted Student t of the input's degrees of freedom; the standard uncertainty is its scale, so that it
    /// spreads wider (JCGM 101:2008, 6.4.9).
    #[serde(rename = "t")]
    StudentT,
}

/// How a standard uncertainty was come by (JCGM 100:2008, 2.3.2 and 2.3.3).
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
pub enum Evaluation {
    /// From the statistics of a series of observations.
    A,
    /// By any other means: a data sheet, a certificate, a tolerance.
    B,
}

/// How the standard uncertainty of a result was come by.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
pub enum Method {
    /// Law of propagation (JCGM 100:2008, 5.1.2 and 5.2.2).
    #[serde(rename = "first order")]
    FirstOrder,
    /// Law of propagation with the next terms of the series (JCGM 100:2008, 5.1.2, note).
    #[serde(rename = "second order")]
    SecondOrder,
    /// Propagation of distributions (JCGM 101:2008).
    #[serde(rename = "Monte Carlo")]
    MonteCarlo,
}

/// One input of a result.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Input {
    /// Name in plain words, such as "nominal inductance"; no two of one result are alike.
    pub name: String,
    /// Unit of value and uncertainty, as text.
    pub unit: String,
    /// Best estimate.
    pub value: f64,
    /// Standard uncertainty in the same unit, never negative.
    pub standard_uncertainty: f64,
    /// Shape of what is known.
    pub distribution: Distribution,
    /// How the uncertainty was come by.
    pub evaluation: Evaluation,
    /// Degrees of freedom of the uncertainty, at least 1; infinite (`null` in JSON) where it is taken as known exactly.
    #[serde(deserialize_with = "null_is_infinite")]
    pub degrees_of_freedom: f64,
    /// Whether one and the same error enters every result of the same station or board under this name, so that it
    /// cancels when two of them are compared.
    pub common: bool,
}

impl Input {
    /// Known from elsewhere with a standard uncertainty: normal, type B.
    pub fn normal(name: &str, unit: impl ToString, measured: Measured) -> Self {
        Self {
            name: name.to_owned(),
            unit: unit.to_string(),
            value: measured.value,
            standard_uncertainty: measured.standard_uncertainty,
            distribution: Distribution::Normal,
            evaluation: Evaluation::B,
            degrees_of_freedom: f64::INFINITY,
            common: false,
        }
    }

    /// Known to lie within `half_width` and nothing more: rectangular, type B (JCGM 100:2008, 4.3.7).
    pub fn rectangular(name: &str, unit: impl ToString, value: f64, half_width: f64) -> Self {
        let distribution = Distribution::Rectangular;
        Self { distribution, ..Self::normal(name, unit, Measured::within(value, half_width)) }
    }

    /// From a statistic with so many degrees of freedom, such as a fit: Student t, type A.
    pub fn observed(name: &str, unit: impl ToString, measured: Measured, degrees_of_freedom: f64) -> Self {
        let (distribution, evaluation) = (Distribution::StudentT, Evaluation::A);
        Self { distribution, evaluation, degrees_of_freedom, ..Self::normal(name, unit, measured) }
    }

    /// The mean of repeated observations: Student t, type A (JCGM 100:2008, 4.2). Fewer than two leave no uncertainty,
    /// which [`Model`](super::Model) refuses.
    pub fn mean_of(name: &str, unit: impl ToString, observations: &[f64]) -> Self {
        let count = observations.len() as f64;
        let value = observations.iter().sum::<f64>() / count;
        let squares: f64 = observations.iter().map(|x| (x - value).powi(2)).sum();
        let standard_uncertainty = (squares / (count - 1.0) / count).sqrt();
        Self::observed(name, unit, Measured { value, standard_uncertainty }, count - 1.0)
    }

    /// The same with an uncertainty that is itself only known so well (JCGM 100:2008, G.4.2).
    #[must_use]
    pub fn with_degrees_of_freedom(self, degrees_of_freedom: f64) -> Self {
        Self { degrees_of_freedom, ..self }
    }

    /// The same, marked as cancelling between results of one station or board: see [`Input::common`].
    #[must_use]
    pub fn in_common(self) -> Self {
        Self { common: true, ..self }
    }
}

/// An input and what it does to the result.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Component {
    /// The input.
    #[serde(flatten)]
    pub input: Input,
    /// Partial derivative of the result with respect to the input, in the unit of the result over that of the input;
    /// zero, because nothing tells how far to look, for an input that is exactly zero.
    pub sensitivity: f64,
    /// Magnitude of sensitivity times standard uncertainty, in the unit of the result.
    pub contribution: f64,
    /// Square of the contribution over the variance of the result. The shares sum to one in a first-order budget of
    /// uncorrelated inputs; what is missing elsewhere is correlation and nonlinearity.
    pub share: f64,
}

/// A result, its uncertainty and what they rest on.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Budget {
    /// Name of the result in plain words.
    pub result: String,
    /// Its unit, as text.
    pub unit: String,
    /// Best estimate.
    pub value: f64,
    /// Combined standard uncertainty in the same unit.
    pub standard_uncertainty: f64,
    /// Effective degrees of freedom by the Welch-Satterthwaite formula (JCGM 100:2008, G.4.1); `null` in JSON where
    /// infinite.
    #[serde(deserialize_with = "null_is_infinite")]
    pub effective_degrees_of_freedom: f64,
    /// Half-width of the 95 % interval over the standard uncertainty: that of Student's t, or as Monte Carlo found it.
    pub coverage_factor: f64,
    /// Lower end of the 95 % interval.
    pub low: f64,
    /// Upper end of the 95 % interval.
    pub high: f64,
    /// How the uncertainty was come by.
    pub method: Method,
    /// The inputs in the order in which the model takes them.
    pub components: Vec<Component>,
}

impl Budget {
    /// Value and standard uncertainty alone.
    pub fn measured(&self) -> Measured {
        Measured { value: self.value, standard_uncertainty: self.standard_uncertainty }
    }
}

/// JSON has no infinity: it is written as `null`.
fn null_is_infinite<'de, D: serde::Deserializer<'de>>(deserializer: D) -> Result<f64, D::Error> {
    Ok(Option::<f64>::deserialize(deserializer)?.unwrap_or(f64::INFINITY))
}
