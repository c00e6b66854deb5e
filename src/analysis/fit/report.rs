//! A solution as the plain data that leaves this module: the ring at small signal, and the curve with its SI parameters from the
//! start of the window.

use super::{
    RingRecord, Times, curve_v,
    evidence::{Described, Model},
    series::Series,
};
use crate::{
    findings::{FittedCurve, FittedFloor, Ring, RingFit, RingKind},
    quantity::{COVERAGE_95, Measured},
};
use nalgebra::{DMatrix, Matrix6};
use realfft::num_complex::Complex64;
use statrs::distribution::{ContinuousCDF, StudentsT};
use std::f64::consts::TAU;

/// Variance of the noise, widened so that an interval of [`COVERAGE_95`] standard uncertainties covers 95 % although the noise is only
/// known with so many degrees of freedom (Student's t, JCGM 100, G.3).
fn widened(best: &Described) -> f64 {
    let freedom = best.noise.freedom.max(1.0);
    let factor = StudentsT::new(0.0, 1.0, freedom).map_or(COVERAGE_95, |t| t.inverse_cdf(0.975));
    best.noise.variance * (factor / COVERAGE_95).powi(2)
}

/// The ring of small swings that a fit tells; decay and quality are those at the start of the window.
pub(super) fn ring(series: &Series, best: &Described) -> Ring {
    let variance = widened(best);
    let span = series.span_s;
    let solution = &best.solution;
    let (decay, angle) = (solution.nonlinear[0], solution.nonlinear[1]);
    let entry = |row: usize, column: usize| variance * solution.inverse[(row, column)];
    let propagated = |value: f64, by_decay: f64, by_angle: f64| {
        let squared = by_decay * by_decay * entry(0, 0)
            + by_angle * by_angle * entry(1, 1)
            + 2.0 * by_decay * by_angle * entry(0, 1);
        Measured { value, standard_uncertainty: squared.max(0.0).sqrt() }
    };
    // The plain fit knows the angle as it rings, the circuit equation the undamped one.
    let (undamped, damped, u_by, d_by) = match best.model {
        Model::Ringing(_) => {
            let undamped = angle.hypot(decay);
            (undamped, angle, (decay / undamped, angle / undamped), (0.0, 1.0))
        }
        Model::Circuit(_) => {
            let damped = (angle * angle - decay * decay).max(0.0).sqrt().max(1e-9 * angle);
            (angle, damped, (0.0, 1.0), (-decay / damped, angle / damped))
        }
    };
    let quality = undamped / (2.0 * decay);
    let amplitude_v = amplitude(series, best).norm();
    Ring {
        frequency_hz: propagated(undamped / TAU / span, u_by.0 / TAU / span, u_by.1 / TAU / span),
        damped_frequency_hz: propagated(damped / TAU / span, d_by.0 / TAU / span, d_by.1 / TAU / span),
        decay_per_s: propagated(decay / span, 1.0 / span, 0.0),
        quality_factor: propagated(quality, (u_by.0 - undamped / decay) / (2.0 * decay), u_by.1 / (2.0 * decay)),
        amplitude_v,
        alternative_hz: None,
    }
}

/// Complex amplitude at the start of the window, the averaging of samples undone.
fn amplitude(series: &Series, best: &Described) -> Complex64 {
    let (nonlinear, linear) = (&best.solution.nonlinear, &best.solution.linear);
    let mean = match best.model {
        Model::Ringing(_) => Complex64::new(linear[0], -linear[1]),
        Model::Circuit(_) => Complex64::from_polar(linear[0], nonlinear[2]),
    };
    mean / series.block_factor(Complex64::new(-nonlinear[0], nonlinear[1]))
}

/// The fit as plain data.
pub(super) fn ring_fit(record: &RingRecord<'_>, kind: RingKind, series: &Series, best: &Described) -> RingFit {
    let (start_s, end_s) = match record.times_s {
        Times::Even { start_s, interval_s } => (start_s, start_s + interval_s * (record.volts.len() as f64 - 1.0)),
        Times::Uneven(times) => (times[0], times[times.len() - 1]),
    };
    let span = series.span_s;
    let ring = ring(series, best);
    let (size, phase) = amplitude(series, best).to_polar();
    let curve = curve(series, best);
    let first = curve.linear.len() - best.model.floor().terms();
    let floor = &curve.linear[first..];
    let (offset, slope) = match best.model.floor() {
        FittedFloor::Straight => (floor[0] - 0.5 * floor[1], floor[1]),
        FittedFloor::Bent => (floor[0] - 0.5 * floor[1] + 0.25 * floor[2], floor[1] - floor[2]),
        FittedFloor::Drooping => (floor[0] + floor[1], -curve.nonlinear[curve.nonlinear.len() - 1] * floor[1]),
    };
    let parameters = [size, ring.decay_per_s.value, ring.damped_frequency_hz.value, phase, offset, slope / span];
    let covariance = covariance(series, best) * widened(best);
    RingFit {
        kind,
        start_s,
        end_s,
        parameters,
        covariance: covariance.transpose().as_slice().to_vec(),
        curve,
        residual_v: 0.0,
        stopped: best.solution.stopped.sentence().to_owned(),
        accepted: false,
    }
}

fn curve(series: &Series, best: &Described) -> FittedCurve {
    let mut linear = best.solution.linear.clone();
    let whole = amplitude(series, best);
    match best.model {
        Model::Ringing(_) => (linear[0], linear[1]) = (whole.re, -whole.im),
        Model::Circuit(_) => linear[0] = whole.norm() * linear[0].signum(),
    }
    let (law_degree, core_loss) = match best.model {
        Model::Ringing(_) => (None, false),
        Model::Circuit(equation) => (Some(equation.degree), equation.core_loss),
    };
    FittedCurve {
        span_s: series.span_s,
        floor: best.model.floor(),
        law_degree,
        core_loss,
        nonlinear: best.solution.nonlinear.clone(),
        linear,
    }
}

/// Covariance of the reported parameters for noise of unit variance, by the law of propagation (JCGM 100, 5.2.2).
fn covariance(series: &Series, best: &Described) -> Matrix6<f64> {
    let Described { model, solution, .. } = best;
    let (first, span) = (solution.nonlinear.len(), series.span_s);
    let mut by = DMatrix::<f64>::zeros(6, solution.inverse.ncols());
    by[(1, 0)] = 1.0 / span;
    by[(2, 1)] = 1.0 / (TAU * span);
    let floor = match model {
        Model::Ringing(_) => {
            let (c, s) = (solution.linear[0], solution.linear[1]);
            let squared = c * c + s * s;
            let gain = amplitude(series, best).norm() / squared.sqrt();
            (by[(0, first)], by[(0, first + 1)]) = (gain * c / squared.sqrt(), gain * s / squared.sqrt());
            // phase = atan2(-s, c)
            (by[(3, first)], by[(3, first + 1)]) = (s / squared, -c / squared);
            first + 2
        }
        Model::Circuit(_) => {
            by[(0, first)] = 1.0;
            by[(3, 2)] = 1.0;
            first + 1
        }
    };
    (by[(4, floor)], by[(4, floor + 1)]) = (1.0, -0.5);
    by[(5, floor + 1)] = 1.0 / span;
    if model.floor() == FittedFloor::Drooping {
        let (rate, droop) = (solution.nonlinear[first - 1], solution.linear[solution.linear.len() - 1]);
        by[(4, floor + 1)] = 1.0;
        (by[(5, floor + 1)], by[(5, first - 1)]) = (-rate / span, -droop / span);
    }
    let full = &by * &solution.inverse * by.transpose();
    Matrix6::from_fn(|row, column| full[(row, column)])
}

/// Standard deviation of the residuals at the full rate, whose squares may be known already.
pub(super) fn residual_v(record: &RingRecord<'_>, fit: &RingFit, squares: Option<f64>) -> f64 {
    let freedom = record.volts.len().saturating_sub(fit.curve.nonlinear.len() + fit.curve.linear.len()).max(1) as f64;
    if let Some(squares) = squares {
        return (squares / freedom).sqrt();
    }
    let curve = match record.times_s {
        Times::Uneven(times) => curve_v(fit, &times.iter().map(|t| t - fit.start_s).collect::<Vec<_>>()),
        Times::Even { interval_s, .. } => {
            curve_v(fit, &(0..record.volts.len()).map(|n| n as f64 * interval_s).collect::<Vec<_>>())
        }
    };
    (record.volts.iter().zip(&curve).map(|(v, c)| (v - c) * (v - c)).sum::<f64>() / freedom).sqrt()
}
