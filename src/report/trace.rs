//! The voltage of a capture against time, and thinned to what a drawing can show.

use super::axes::Axes;
use crate::{
    record::{RecordError, Run},
    sequence::event::Capture,
};

/// Evenly sampled voltage.
#[derive(Debug)]
pub(super) struct Trace {
    pub(super) start_s: f64,
    pub(super) interval_s: f64,
    pub(super) volts: Vec<f64>,
}

impl Trace {
    pub(super) fn read(run: &Run, capture: &Capture) -> Result<Trace, RecordError> {
        let samples = run.read_samples(capture.number)?;
        let interval_s = samples.mean_interval_s();
        Ok(Trace { start_s: samples.start_s(), interval_s, volts: samples.volts().to_vec() })
    }

    pub(super) fn end_s(&self) -> f64 {
        self.start_s + self.interval_s * self.volts.len() as f64
    }

    pub(super) fn between(&self, from_s: f64, to_s: f64) -> impl Iterator<Item = (f64, f64)> + '_ {
        let index = |time_s: f64| ((time_s - self.start_s) / self.interval_s).ceil().max(0.0) as usize;
        let (first, end) = (index(from_s), index(to_s).min(self.volts.len()));
        let volts = self.volts.get(first..end).unwrap_or_default();
        volts.iter().enumerate().map(move |(n, volts)| (self.start_s + (first + n) as f64 * self.interval_s, *volts))
    }

    /// Time and voltage of the highest sample between two times.
    pub(super) fn highest(&self, from_s: f64, to_s: f64) -> Option<(f64, f64)> {
        self.between(from_s, to_s).max_by(|a, b| a.1.total_cmp(&b.1))
    }
}

/// Points of a curve on the drawing: where many samples share a pixel column, the first, lowest, highest and last of them,
/// so that no peak is lost.
pub(super) fn thinned(axes: &Axes, samples: impl Iterator<Item = (f64, f64)>) -> Vec<[f64; 2]> {
    let mut points: Vec<[f64; 2]> = Vec::new();
    let mut column: Vec<[f64; 2]> = Vec::new();
    for (x, y) in samples {
        let place = axes.place(x, y);
        if column.first().is_some_and(|first| place[0].floor() > first[0].floor()) {
            flush(&mut column, &mut points);
        }
        column.push(place);
    }
    flush(&mut column, &mut points);
    points
}

fn flush(column: &mut Vec<[f64; 2]>, points: &mut Vec<[f64; 2]>) {
    if column.len() <= 3 {
        points.append(column);
        return;
    }
    let by_height = |a: &&[f64; 2], b: &&[f64; 2]| a[1].total_cmp(&b[1]);
    if let (Some(low), Some(high)) = (column.iter().min_by(by_height), column.iter().max_by(by_height)) {
        let (first, second) = if low[0] <= high[0] { (low, high) } else { (high, low) };
        points.extend([*first, *second]);
    }
    column.clear();
}
