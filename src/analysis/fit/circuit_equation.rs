//! The ring of an inductance on a voltage-dependent capacitance, with a loss that may depend on amplitude: the circuit equation
//! itself, integrated with the derivatives by its parameters.

use super::{curves::swings, least_squares::Curve};
use crate::findings::FittedFloor;
use nalgebra::DMatrix;
use std::f64::consts::TAU;

/// Highest degree of the capacitance law.
pub(super) const MOST_DEGREES: usize = 6;
/// Excursion, over the swing at the start of the window, at which the law's logarithm has its pole: beyond the first trough.
const POLE: f64 = 1.25;
/// Loss in ferrite grows with flux density to some power near 2.5 (common practice), so that the decay grows with this power of
/// the amplitude.
const LOSS_POWER: f64 = 0.5;
/// Steps of the integration a period: the method of Runge and Kutta of fourth order is then right to some 1e-6 in frequency.
const STEPS: f64 = 48.0;

/// `u' = w s / g(u)`, `s' = -w u - 2 a(h) s`, with `u` the excursion from the centre and `s` the current times the ring's impedance,
/// both over the swing at the start; `g = C(v)/C(centre) = exp(-b1 y - b2 y^2 ...)` with `y = ln(1 + u/1.25)`, and, with core loss,
/// `a(h) = a (1 - r + r sqrt h)` where `h^2 = u^2 + s^2`. The sample is `A u` and the floor.
///
/// Nonlinear `a, w, phase`, with core loss `r`, then `b1, b2 ...`, then the floor's rate; linear `A` and the floor's terms. `w` is the undamped angular
/// frequency of small swings, `a` the decay at the start of the window.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct CircuitEquation {
    pub(super) degree: usize,
    pub(super) core_loss: bool,
    pub(super) floor: FittedFloor,
    /// Angle over the span of the plain fit: the ring's own is not far from it.
    pub(super) about: f64,
}

/// Largest ratio of the small-signal angle to that of a plain fit, either way.
const FARTHEST: f64 = 1.5;

/// Most nonlinear parameters.
const MOST: usize = 4 + MOST_DEGREES;

/// A step of the integration this much longer than allowed is not divided.
const SLACK: f64 = 1e-9;

/// Excursion and current with their derivatives by the parameters.
#[derive(Clone, Copy)]
struct State {
    u: f64,
    s: f64,
    du: [f64; MOST],
    ds: [f64; MOST],
}

impl State {
    fn moved(&self, rate: &Self, by: f64, count: usize) -> Self {
        let mut moved = *self;
        moved.u += by * rate.u;
        moved.s += by * rate.s;
        for n in 0..count {
            moved.du[n] += by * rate.du[n];
            moved.ds[n] += by * rate.ds[n];
        }
        moved
    }
}

impl CircuitEquation {
    /// First parameter of the law.
    pub(super) fn law(self) -> usize {
        3 + usize::from(self.core_loss)
    }

    /// Parameters of the ring: all but the floor's.
    fn own(self) -> usize {
        self.law() + self.degree
    }

    fn degrees(self, nonlinear: &[f64]) -> &[f64] {
        &nonlinear[self.law()..self.own()]
    }

    /// Relative capacitance `g` at an excursion over the swing.
    pub(super) fn relative_capacitance(self, nonlinear: &[f64], excursion: f64) -> f64 {
        let y = (1.0 + excursion / POLE).max(1e-3).ln();
        (-self.degrees(nonlinear).iter().rev().fold(0.0, |sum, b| (sum + b) * y)).exp()
    }

    fn start(self, phase: f64) -> State {
        let (sin, cos) = phase.sin_cos();
        let mut state = State { u: cos, s: -sin, du: [0.0; MOST], ds: [0.0; MOST] };
        (state.du[2], state.ds[2]) = (-sin, -cos);
        state
    }

    /// Rates of the state and of its first `count` derivatives (none or all).
    fn rates(self, p: &[f64], state: &State, count: usize) -> State {
        let (decay, angle) = (p[0], p[1]);
        let (u, s) = (state.u, state.s);
        let inside = (1.0 + u / POLE).max(1e-3);
        let y = if self.degree > 0 { inside.ln() } else { 0.0 };
        let (mut sum, mut slope) = (0.0, 0.0);
        for &b in self.degrees(p).iter().rev() {
            slope = slope * y + sum + b;
            sum = (sum + b) * y;
        }
        let by_u = slope / (POLE * inside);
        let inverse = sum.exp();
        let swing = (u * u + s * s).sqrt().max(1e-12);
        let share = if self.core_loss { p[3] } else { 0.0 };
        let root = if self.core_loss { swing.powf(LOSS_POWER) } else { 1.0 };
        let loss = 1.0 - share + share * root;
        let mut rate =
            State { u: angle * s * inverse, s: -angle * u - 2.0 * decay * loss * s, du: [0.0; MOST], ds: [0.0; MOST] };
        if count == 0 {
            return rate;
        }
        let (u_by_u, u_by_s) = (rate.u * by_u, angle * inverse);
        let loss_by_swing = LOSS_POWER * share * root / (swing * swing);
        let s_by_u = -angle - 2.0 * decay * s * loss_by_swing * u;
        let s_by_s = -2.0 * decay * (loss + s * loss_by_swing * s);
        for n in 0..count {
            rate.du[n] = u_by_u * state.du[n] + u_by_s * state.ds[n];
            rate.ds[n] = s_by_u * state.du[n] + s_by_s * state.ds[n];
        }
        rate.ds[0] -= 2.0 * loss * s;
        rate.du[1] += s * inverse;
        rate.ds[1] -= u;
        if self.core_loss {
            rate.ds[3] -= 2.0 * decay * (root - 1.0) * s;
        }
        let mut power = 1.0;
        for n in self.law()..count {
            power *= y;
            rate.du[n] += rate.u * power;
        }
        rate
    }

    /// The excursion at each time, handed on with its derivatives where those are asked for.
    fn follow(self, p: &[f64], times: &[f64], derivatives: bool, mut each: impl FnMut(usize, &State)) {
        let count = if derivatives { self.own() } else { 0 };
        let mut state = self.start(p[2]);
        let mut now = 0.0;
        for (n, &time) in times.iter().enumerate() {
            let steps = ((time - now) * p[1] / TAU * STEPS - SLACK).ceil().max(0.0);
            let step = if steps > 0.0 { (time - now) / steps } else { 0.0 };
            for _ in 0..steps as usize {
                let k1 = self.rates(p, &state, count);
                let k2 = self.rates(p, &state.moved(&k1, 0.5 * step, count), count);
                let k3 = self.rates(p, &state.moved(&k2, 0.5 * step, count), count);
                let k4 = self.rates(p, &state.moved(&k3, step, count), count);
                state = state.moved(&k1, step / 6.0, count).moved(&k2, step / 3.0, count);
                state = state.moved(&k3, step / 3.0, count).moved(&k4, step / 6.0, count);
            }
            now = time;
            each(n, &state);
        }
    }
}

impl Curve for CircuitEquation {
    fn columns(&self, nonlinear: &[f64], times: &[f64]) -> DMatrix<f64> {
        let floor = self.floor;
        let mut columns = DMatrix::from_fn(times.len(), 1 + floor.terms(), |n, column| {
            column.checked_sub(1).map_or(0.0, |term| floor.term(term, nonlinear[nonlinear.len() - 1], times[n]))
        });
        self.follow(nonlinear, times, false, |n, state| columns[(n, 0)] = state.u);
        columns
    }

    fn derivatives(&self, nonlinear: &[f64], linear: &[f64], times: &[f64]) -> DMatrix<f64> {
        let mut derivatives = DMatrix::zeros(times.len(), nonlinear.len());
        self.follow(nonlinear, times, true, |n, state| {
            for (k, by) in state.du.iter().take(self.own()).enumerate() {
                derivatives[(n, k)] = linear[0] * by;
            }
        });
        if self.floor.rates() > 0 {
            let last = nonlinear.len() - 1;
            for (n, &time) in times.iter().enumerate() {
                derivatives[(n, last)] = -time * linear[2] * self.floor.term(1, nonlinear[last], time);
            }
        }
        derivatives
    }

    fn allows(&self, nonlinear: &[f64]) -> bool {
        let share = if self.core_loss { nonlinear[3] } else { 0.0 };
        // Where the law runs away inside the swing there is no capacitance any more.
        let bounded =
            [-0.8, -0.5, 0.5, 0.9].iter().all(|&u| (0.005..200.0).contains(&self.relative_capacitance(nonlinear, u)));
        swings(nonlinear[0], nonlinear[1])
            && (-0.5..=1.0).contains(&share)
            && self.degrees(nonlinear).iter().all(|b| b.abs() < 30.0)
            && (self.about / FARTHEST..self.about * FARTHEST).contains(&nonlinear[1])
            && self.floor.allows(nonlinear[nonlinear.len() - 1])
            && bounded
    }
}
