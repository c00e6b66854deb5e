//! The closed-form curves that are fitted: a straight line, and a damped sinusoid on a base that is straight, bent, or droops
//! exponentially.

use super::least_squares::Curve;
use crate::findings::FittedFloor;
use nalgebra::DMatrix;

/// Times run from 0 to about 1 over the window: straight is `offset + slope (t - 1/2)`, bent has `bend (t - 1/2)^2` beside it, drooping is
/// `offset + droop exp(-k t)` with `k` the last nonlinear parameter.
impl FittedFloor {
    pub(super) fn terms(self) -> usize {
        if self == Self::Bent { 3 } else { 2 }
    }

    /// Nonlinear parameters of its own.
    pub(super) fn rates(self) -> usize {
        usize::from(self == Self::Drooping)
    }

    /// Its term `index` at a time.
    pub(super) fn term(self, index: usize, rate: f64, time: f64) -> f64 {
        match (self, index) {
            (_, 0) => 1.0,
            (Self::Drooping, _) => (-rate * time).exp(),
            (_, power) => (time - 0.5).powi(power as i32),
        }
    }

    /// What [`FittedFloor::Drooping`] may be: from a rate that is as good as a bend to one that is over in a fiftieth of the window.
    pub(super) fn allows(self, rate: f64) -> bool {
        self != Self::Drooping || (0.02..50.0).contains(&rate)
    }
}

/// Offset, slope and nothing else.
pub(super) struct Line;

impl Curve for Line {
    fn columns(&self, _: &[f64], times: &[f64]) -> DMatrix<f64> {
        DMatrix::from_fn(times.len(), 2, |n, column| FittedFloor::Straight.term(column, 0.0, times[n]))
    }

    fn derivatives(&self, _: &[f64], _: &[f64], times: &[f64]) -> DMatrix<f64> {
        DMatrix::zeros(times.len(), 0)
    }

    fn allows(&self, _: &[f64]) -> bool {
        true
    }
}

/// Highest decay over the span: the ring lives for a four-hundredth of it.
const DECAY_LIMIT: f64 = 400.0;

/// Whether decay and angle over the span may be a ring's.
pub(super) fn swings(decay: f64, angle: f64) -> bool {
    decay > -5.0 && decay < DECAY_LIMIT && angle > 0.5
}

/// `exp(-a t) (c cos w t + s sin w t) + floor`; nonlinear `a, w` and the floor's rate, linear `c, s` and the floor's terms.
pub(super) struct Ringing(pub(super) FittedFloor);

impl Curve for Ringing {
    fn columns(&self, nonlinear: &[f64], times: &[f64]) -> DMatrix<f64> {
        let mut columns = DMatrix::zeros(times.len(), 2 + self.0.terms());
        for (n, &time) in times.iter().enumerate() {
            let envelope = (-nonlinear[0] * time).exp();
            let (sin, cos) = (nonlinear[1] * time).sin_cos();
            (columns[(n, 0)], columns[(n, 1)]) = (envelope * cos, envelope * sin);
            for term in 0..self.0.terms() {
                columns[(n, 2 + term)] = self.0.term(term, nonlinear.get(2).copied().unwrap_or(0.0), time);
            }
        }
        columns
    }

    fn derivatives(&self, nonlinear: &[f64], linear: &[f64], times: &[f64]) -> DMatrix<f64> {
        let mut derivatives = DMatrix::zeros(times.len(), nonlinear.len());
        for (n, &time) in times.iter().enumerate() {
            let envelope = time * (-nonlinear[0] * time).exp();
            let (sin, cos) = (nonlinear[1] * time).sin_cos();
            derivatives[(n, 0)] = -envelope * (linear[0] * cos + linear[1] * sin);
            derivatives[(n, 1)] = envelope * (linear[1] * cos - linear[0] * sin);
            if self.0.rates() > 0 {
                derivatives[(n, 2)] = -time * linear[3] * self.0.term(1, nonlinear[2], time);
            }
        }
        derivatives
    }

    fn allows(&self, nonlinear: &[f64]) -> bool {
        swings(nonlinear[0], nonlinear[1]) && nonlinear.get(2).is_none_or(|&rate| self.0.allows(rate))
    }
}
