//! The edge trigger: level with hysteresis, slope, and a holdoff that every edge of this kind starts anew, so that only an
//! edge after a quiet stretch of at least that length is accepted.

use super::settings::Slope;

/// An edge detector.
#[derive(Debug, Clone, Copy)]
pub struct EdgeDetector {
    sign: f64,
    level_v: f64,
    hysteresis_v: f64,
    holdoff_s: f64,
    primed: bool,
    previous: Option<(f64, f64)>,
    last_edge_s: f64,
}

/// An edge: when, and how steep.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Edge {
    /// Time of the crossing.
    pub time_s: f64,
    /// Magnitude of the slope.
    pub slope_v_per_s: f64,
    /// Whether the holdoff has passed.
    pub accepted: bool,
}

impl EdgeDetector {
    /// A detector; the holdoff counts from `start_s` at first.
    pub fn new(level_v: f64, slope: Slope, hysteresis_v: f64, holdoff_s: f64, start_s: f64) -> Self {
        let sign = if slope == Slope::Positive { 1.0 } else { -1.0 };
        let level_v = sign * level_v;
        Self { sign, level_v, hysteresis_v, holdoff_s, primed: false, previous: None, last_edge_s: start_s }
    }

    /// Takes the next point of the signal.
    pub fn next(&mut self, time_s: f64, volts: f64) -> Option<Edge> {
        let now = self.sign * volts;
        let (before_s, before) = self.previous.replace((time_s, now))?;
        if now < self.level_v - self.hysteresis_v {
            self.primed = true;
        }
        if !self.primed || now < self.level_v {
            return None;
        }
        self.primed = false;
        let rise = now - before;
        let part = if rise > 0.0 { ((self.level_v - before) / rise).clamp(0.0, 1.0) } else { 1.0 };
        let edge_s = before_s + part * (time_s - before_s);
        let accepted = edge_s - self.last_edge_s >= self.holdoff_s;
        self.last_edge_s = edge_s;
        Some(Edge { time_s: edge_s, slope_v_per_s: rise.abs() / (time_s - before_s).max(1e-15), accepted })
    }
}
