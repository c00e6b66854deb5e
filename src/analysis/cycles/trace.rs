//! A record with its running integral: areas, means and crossings in constant or linear time.

use crate::waveform::Samples;
use std::ops::Range;

/// Samples with the integral of the voltage from the first sample on (trapezoids).
pub(super) struct Trace<'a> {
    pub(super) samples: &'a Samples,
    pub(super) volts: &'a [f64],
    integral_vs: Vec<f64>,
}

/// A straight line through samples.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Line {
    at_s: f64,
    at_v: f64,
    slope_v_per_s: f64,
}

impl Line {
    pub(super) fn at(&self, time_s: f64) -> f64 {
        self.at_v + self.slope_v_per_s * (time_s - self.at_s)
    }

    /// Mean of the samples it was laid through.
    pub(super) fn middle_v(&self) -> f64 {
        self.at_v
    }
}

impl<'a> Trace<'a> {
    pub(super) fn new(samples: &'a Samples) -> Self {
        let volts = samples.volts();
        let mut integral_vs = Vec::with_capacity(volts.len());
        let (mut sum, mut before_s, mut before_v) = (0.0, samples.start_s(), volts[0]);
        for (index, &v) in volts.iter().enumerate() {
            let time_s = samples.time_s(index);
            sum += 0.5 * (v + before_v) * (time_s - before_s);
            integral_vs.push(sum);
            (before_s, before_v) = (time_s, v);
        }
        Self { samples, volts, integral_vs }
    }

    pub(super) fn len(&self) -> usize {
        self.volts.len()
    }

    pub(super) fn time_s(&self, index: usize) -> f64 {
        self.samples.time_s(index)
    }

    /// Integral of the voltage above `base_v` from sample `from` to sample `to`, in volt-seconds.
    pub(super) fn area_vs(&self, from: usize, to: usize, base_v: f64) -> f64 {
        self.integral_vs[to] - self.integral_vs[from] - base_v * (self.time_s(to) - self.time_s(from))
    }

    /// Mean from sample `from` to sample `to`; the sample itself where both are one.
    pub(super) fn mean_v(&self, from: usize, to: usize) -> f64 {
        let span_s = self.time_s(to) - self.time_s(from);
        if span_s > 0.0 { (self.integral_vs[to] - self.integral_vs[from]) / span_s } else { self.volts[from] }
    }

    /// When the voltage passed `level_v` between sample `index - 1` and sample `index`, by straight line.
    pub(super) fn crossing_s(&self, index: usize, level_v: f64) -> f64 {
        let Some(before) = index.checked_sub(1) else { return self.time_s(index) };
        let (v0, v1) = (self.volts[before], self.volts[index]);
        let part = if v1 == v0 { 1.0 } else { ((level_v - v0) / (v1 - v0)).clamp(0.0, 1.0) };
        self.time_s(before) + part * (self.time_s(index) - self.time_s(before))
    }

    /// Samples between two times.
    pub(super) fn between(&self, from_s: f64, to_s: f64) -> Range<usize> {
        let from = self.samples.index_at(from_s);
        from..self.samples.index_at(to_s).max(from)
    }

    /// Least-squares line through the samples of a range, or their mean where they are fewer than four; `None` where there
    /// are none.
    pub(super) fn line(&self, range: Range<usize>) -> Option<Line> {
        let count = range.len() as f64;
        if range.is_empty() {
            return None;
        }
        let (mut sum_t, mut sum_v) = (0.0, 0.0);
        for index in range.clone() {
            sum_t += self.time_s(index);
            sum_v += self.volts[index];
        }
        let (at_s, at_v) = (sum_t / count, sum_v / count);
        let (mut tt, mut tv) = (0.0, 0.0);
        for index in range.clone() {
            let t = self.time_s(index) - at_s;
            tt += t * t;
            tv += t * (self.volts[index] - at_v);
        }
        let slope_v_per_s = if range.len() < 4 || tt <= 0.0 { 0.0 } else { tv / tt };
        Some(Line { at_s, at_v, slope_v_per_s })
    }

    /// Lowest and highest sample of a range.
    pub(super) fn extremes_v(&self, range: Range<usize>) -> (f64, f64) {
        self.volts[range].iter().fold((f64::INFINITY, f64::NEG_INFINITY), |(low, high), &v| (low.min(v), high.max(v)))
    }
}
