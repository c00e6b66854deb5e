//! The curves that are fitted: one damped sinusoid, and the same with a frequency that moves with its amplitude.

/// A curve that is linear in some of its parameters, for variable projection.
pub(super) trait Curve {
    /// Number of linear parameters.
    fn linear(&self) -> usize;
    /// The linear parameters' columns at a time.
    fn basis(&self, nonlinear: &[f64], time: f64, out: &mut [f64]);
    /// The derivatives by the nonlinear parameters at a time, with the linear ones known.
    fn derivatives(&self, nonlinear: &[f64], linear: &[f64], time: f64, basis: &[f64], out: &mut [f64]);
    /// Whether the nonlinear parameters are within reason.
    fn allows(&self, nonlinear: &[f64]) -> bool;
}

/// Highest decay over the span: the ring lives for a two-hundredth of it.
const DECAY_LIMIT: f64 = 400.0;

/// Offset, slope and nothing else.
pub(super) struct Line;

impl Curve for Line {
    fn linear(&self) -> usize {
        2
    }

    fn basis(&self, _nonlinear: &[f64], time: f64, out: &mut [f64]) {
        out[0] = 1.0;
        out[1] = time - 0.5;
    }

    fn derivatives(&self, _: &[f64], _: &[f64], _: f64, _: &[f64], _: &mut [f64]) {}

    fn allows(&self, _: &[f64]) -> bool {
        true
    }
}

/// `exp(-a t) (c cos w t + s sin w t) + offset + slope (t - 1/2)`; nonlinear `a, w`, linear `c, s, offset, slope`.
pub(super) struct DampedSinusoid;

impl Curve for DampedSinusoid {
    fn linear(&self) -> usize {
        4
    }

    fn basis(&self, nonlinear: &[f64], time: f64, out: &mut [f64]) {
        let envelope = (-nonlinear[0] * time).exp();
        let (sin, cos) = (nonlinear[1] * time).sin_cos();
        out[0] = envelope * cos;
        out[1] = envelope * sin;
        out[2] = 1.0;
        out[3] = time - 0.5;
    }

    fn derivatives(&self, _nonlinear: &[f64], linear: &[f64], time: f64, basis: &[f64], out: &mut [f64]) {
        out[0] = -time * (linear[0] * basis[0] + linear[1] * basis[1]);
        out[1] = time * (linear[1] * basis[0] - linear[0] * basis[1]);
    }

    fn allows(&self, nonlinear: &[f64]) -> bool {
        nonlinear[0] > -5.0 && nonlinear[0] < DECAY_LIMIT && nonlinear[1] > 0.5
    }
}

/// A ring on a voltage-dependent capacitance, to second order (Lindstedt-Poincaré): the frequency is shifted by the square of the
/// amplitude and a second harmonic goes with it. With `th = w t + k (1 - exp(-2 a t)) / 2 a`:
/// `exp(-a t) (c cos th + s sin th) + exp(-2 a t) (p cos 2 th + q sin 2 th) + offset + slope (t - 1/2)`;
/// nonlinear `a, w, k`, linear `c, s, offset, slope, p, q`.
pub(super) struct ShiftedSinusoid;

impl ShiftedSinusoid {
    /// `(1 - exp(-2 a t)) / 2 a` and its derivative by `a`.
    fn shift(decay: f64, time: f64) -> (f64, f64) {
        let x = 2.0 * decay * time;
        if x.abs() < 1e-6 {
            return (time * (1.0 - 0.5 * x), -time * time);
        }
        let shift = -(-x).exp_m1() / (2.0 * decay);
        (shift, ((-x).exp() * time - shift) / decay)
    }
}

impl Curve for ShiftedSinusoid {
    fn linear(&self) -> usize {
        6
    }

    fn basis(&self, nonlinear: &[f64], time: f64, out: &mut [f64]) {
        let (decay, angular, chirp) = (nonlinear[0], nonlinear[1], nonlinear[2]);
        let envelope = (-decay * time).exp();
        let (sin, cos) = (angular * time + chirp * Self::shift(decay, time).0).sin_cos();
        let (cos, sin) = (envelope * cos, envelope * sin);
        out[0] = cos;
        out[1] = sin;
        out[2] = 1.0;
        out[3] = time - 0.5;
        out[4] = cos * cos - sin * sin;
        out[5] = 2.0 * cos * sin;
    }

    fn derivatives(&self, nonlinear: &[f64], linear: &[f64], time: f64, basis: &[f64], out: &mut [f64]) {
        let first = linear[0] * basis[0] + linear[1] * basis[1];
        let second = linear[4] * basis[4] + linear[5] * basis[5];
        let by_angle =
            linear[1] * basis[0] - linear[0] * basis[1] + 2.0 * (linear[5] * basis[4] - linear[4] * basis[5]);
        let (shift, shift_by_decay) = Self::shift(nonlinear[0], time);
        out[0] = -time * (first + 2.0 * second) + by_angle * nonlinear[2] * shift_by_decay;
        out[1] = time * by_angle;
        out[2] = shift * by_angle;
    }

    fn allows(&self, nonlinear: &[f64]) -> bool {
        DampedSinusoid.allows(nonlinear) && nonlinear[2].abs() < 0.25 * nonlinear[1]
    }
}
