//! A fitted ring as a curve again.

use super::{circuit_equation::CircuitEquation, evidence::Model, least_squares::Curve};
use crate::findings::RingFit;

/// The fitted curve in volts at times in seconds from the start of the fit's window, ascending.
pub fn curve_v(fit: &RingFit, times_s: &[f64]) -> Vec<f64> {
    let curve = &fit.curve;
    if curve.linear.is_empty() {
        return times_s.iter().map(|&t| fit.model_v(t)).collect();
    }
    let floor = curve.floor;
    let model = match curve.law_degree {
        None => Model::Ringing(floor),
        Some(degree) => {
            Model::Circuit(CircuitEquation { degree, core_loss: curve.core_loss, floor, about: curve.nonlinear[1] })
        }
    };
    let times: Vec<f64> = times_s.iter().map(|t| t / curve.span_s).collect();
    let columns = model.columns(&curve.nonlinear, &times);
    let volts = columns * nalgebra::DVector::from_column_slice(&curve.linear);
    volts.as_slice().to_vec()
}
