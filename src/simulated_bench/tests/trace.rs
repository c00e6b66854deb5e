//! A stretch of drain voltage as tests look at it: stepped or simulated elsewhere, on its own times.

use ringstep_simulated_bench::{
    boards::{self, BoardModel},
    converter::{LoadDemand, Plant, Stepper, Truth},
};

/// Times and voltages.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct Trace {
    pub(crate) time_s: Vec<f64>,
    pub(crate) drain_v: Vec<f64>,
    pub(crate) bulk_v: Vec<f64>,
}

impl Trace {
    /// Steps for `window_s`.
    pub(crate) fn of(stepper: &mut Stepper, window_s: f64) -> Self {
        let mut trace = Self { time_s: vec![], drain_v: vec![], bulk_v: vec![] };
        loop {
            let point = stepper.next_point();
            trace.time_s.push(point.time_s);
            trace.drain_v.push(point.drain_v);
            trace.bulk_v.push(point.bulk_v);
            if point.time_s >= window_s {
                return trace;
            }
        }
    }

    /// Indices of the points between two times.
    pub(crate) fn between(&self, from_s: f64, to_s: f64) -> std::ops::Range<usize> {
        self.time_s.partition_point(|t| *t < from_s)..self.time_s.partition_point(|t| *t < to_s)
    }

    pub(crate) fn at(&self, time_s: f64) -> f64 {
        let next = self.time_s.partition_point(|t| *t < time_s).clamp(1, self.time_s.len() - 1);
        let share = (time_s - self.time_s[next - 1]) / (self.time_s[next] - self.time_s[next - 1]);
        self.drain_v[next - 1] + share * (self.drain_v[next] - self.drain_v[next - 1])
    }

    pub(crate) fn highest_v(&self, from_s: f64, to_s: f64) -> f64 {
        self.drain_v[self.between(from_s, to_s)].iter().copied().fold(f64::NEG_INFINITY, f64::max)
    }

    /// Mean over time, by trapezoids.
    pub(crate) fn mean_v(&self, from_s: f64, to_s: f64) -> f64 {
        let range = self.between(from_s, to_s);
        let (mut area, mut length) = (0.0, 0.0);
        for index in range.start + 1..range.end {
            let h = self.time_s[index] - self.time_s[index - 1];
            area += 0.5 * h * (self.drain_v[index] + self.drain_v[index - 1]);
            length += h;
        }
        area / length
    }

    /// Rising crossings of `level_v`, by a parabola through three points.
    pub(crate) fn rising(&self, from_s: f64, to_s: f64, level_v: f64) -> Vec<f64> {
        let range = self.between(from_s, to_s);
        let mut times = vec![];
        for i in range.start + 1..range.end.saturating_sub(1) {
            let (a, b) = (self.drain_v[i - 1] - level_v, self.drain_v[i] - level_v);
            if a < 0.0 && b >= 0.0 {
                // Inverse interpolation of time against voltage through three neighbours.
                let c = self.drain_v[i + 1] - level_v;
                let (ta, tb, tc) = (self.time_s[i - 1], self.time_s[i], self.time_s[i + 1]);
                times.push(
                    ta * b * c / ((a - b) * (a - c))
                        + tb * a * c / ((b - a) * (b - c))
                        + tc * a * b / ((c - a) * (c - b)),
                );
            }
        }
        times
    }

    /// Mean frequency from rising crossings, with the number of periods.
    pub(crate) fn frequency(&self, from_s: f64, to_s: f64, level_v: f64, most: usize) -> (f64, usize) {
        let times = self.rising(from_s, to_s, level_v);
        let periods = times.len().saturating_sub(1).min(most);
        if periods == 0 {
            return (f64::NAN, 0);
        }
        (periods as f64 / (times[periods] - times[0]), periods)
    }
}

pub(crate) fn board(name: &str) -> &'static BoardModel {
    boards::by_name(name).unwrap()
}

/// A board with a 10 pF probe, settled on line and load.
pub(crate) fn settled(name: &str, seed: u64, line_v: f64, load_a: f64) -> Plant {
    let mut plant = Plant::new(board(name), seed);
    plant.set_probe_capacitance(10e-12);
    plant.set_load(LoadDemand::Current(load_a));
    plant.set_line(true, line_v, 50.0, 4.0);
    for _ in 0..100 {
        if !plant.is_settled() {
            plant.advance(0.05);
        }
    }
    assert!(plant.is_settled(), "{name} does not settle at {line_v} V, {load_a} A");
    plant
}

/// The trace of `window_s` and its truth.
pub(crate) fn capture(plant: &Plant, key: u64, window_s: f64) -> (Trace, Truth) {
    let mut stepper = plant.stepper(key);
    let trace = Trace::of(&mut stepper, window_s);
    (trace, stepper.truth())
}
