//! One fall to the lower level: where it came from, where its edge begins, and whether a closing switch made it or a ring that swings
//! low.

use super::on_state::{ENTER, LEAVE, Levels, Run};
use super::trace::Trace;
use std::ops::Range;

/// Shares of that way from which a fall is timed down to where the run begins: the edge may start from a ring's trough.
const HIGH: [f64; 3] = [0.75, 0.6, 0.45];

/// An edge steeper than a ring of this swing and quarter period by this factor is a switch that closes.
const STEEP: f64 = 3.0;

/// Length of a turn-on's edge, from its beginning to a quarter of its height, over the time of its middle half: a switch that
/// closes against the recovering rectifier begins slowly.
const EDGE: f64 = 4.0;

/// Samples within the middle half of an edge from which on its beginning is told by time and not by sample.
const RESOLVED: f64 = 2.0;

/// Share of the crest before a run by which the voltage behind it must at least rise.
const HIGHER: f64 = 1.03;

/// Four times the steepness of a sine's half-cycle: half the square of pi.
const ABRUPT: f64 = 20.0;

/// Share of the way from the on-state to the mean that the voltage must stay above the mean for that to be told from a drift.
const HIGH_ENOUGH: f64 = 0.2;

/// Share of the way from the on-state to the mean above which a ring's valley can be told from the on-state.
const VALLEY: f64 = 0.05;

/// A fall to the lower level.
pub(super) struct Fall {
    /// First sample it can have come from.
    floor: usize,
    /// Sample it came from.
    pub(super) crest: usize,
    /// Last sample above the mean; the crest where that is none.
    crossing: usize,
    /// When the run begins.
    pub(super) low_s: f64,
    /// Steepest way down to there.
    slope_v_per_s: f64,
    /// Time in which that slope falls by half of the mean.
    half_s: f64,
}

impl Fall {
    pub(super) fn read(trace: &Trace<'_>, start: usize, floor: usize, levels: &Levels) -> Self {
        let height_v = levels.mean_v - levels.on_v;
        let crest = crest_before(trace, start, floor, levels);
        let last_above = |v: f64| (crest..start).rev().find(|&index| trace.volts[index] >= v);
        let crossing = last_above(levels.mean_v).unwrap_or(crest);
        let low_s = trace.crossing_s(start, levels.on_v + ENTER * height_v);
        let slope = |share: f64| {
            let high_v = levels.on_v + share * height_v;
            let high_s = trace.crossing_s(last_above(high_v)? + 1, high_v);
            Some((share - ENTER) * height_v / (low_s - high_s))
        };
        let slope_v_per_s = HIGH.into_iter().filter_map(slope).fold(0.0, f64::max);
        Self { floor, crest, crossing, low_s, slope_v_per_s, half_s: 0.5 * height_v / slope_v_per_s }
    }

    /// First sample at the on-state's level where a ring lay in its valley before, at which the switch has closed.
    pub(super) fn valley_end(&self, trace: &Trace<'_>, run: Run, levels: &Levels) -> Option<usize> {
        let step_v = trace.samples.step_v().unwrap_or(0.0);
        let clear_v = (VALLEY * (levels.mean_v - levels.on_v)).max(4.0 * levels.noise_v).max(1.6 * step_v);
        let low = (run.start..run.end).find(|&index| trace.volts[index] < levels.on_v + clear_v)?;
        if low < run.start + 3 || trace.time_s(low) - self.low_s < 0.5 * self.half_s {
            return None;
        }
        // The tail of an edge sags below the straight line from its beginning to its end; a valley lies above.
        let lies_v = trace.mean_v(run.start, low - 1) - levels.on_v;
        (lies_v > 0.65 * ENTER * (levels.mean_v - levels.on_v)).then_some(low)
    }

    /// Last sample before the edge of a switch that closes.
    pub(super) fn edge(&self, trace: &Trace<'_>, start: usize, levels: &Levels) -> usize {
        if self.half_s.is_finite() && self.half_s > RESOLVED * trace.samples.mean_interval_s() {
            return trace.samples.index_at(self.low_s - EDGE * self.half_s).saturating_sub(1).max(self.floor);
        }
        edge_before(trace, self.floor, self.crest, start, levels.noise_v)
    }

    /// Whether it is faster than a ring of its own swing could be, whose steepest slope is its swing times its angular frequency.
    pub(super) fn is_steep(&self, trace: &Trace<'_>, levels: &Levels) -> bool {
        let swing_v = trace.volts[self.crest] - levels.mean_v;
        let quarter_s = trace.time_s(self.crossing) - trace.time_s(self.crest);
        let ring_v_per_s = swing_v.max(0.0) * std::f64::consts::FRAC_PI_2 / quarter_s;
        quarter_s > 0.0 && self.slope_v_per_s > STEEP * ring_v_per_s
    }

    /// Whether the record shows the crest from its top on: a ring comes down from there in half the time it stays below.
    pub(super) fn is_whole(&self, trace: &Trace<'_>, run: Run, levels: &Levels) -> bool {
        let seen_s = trace.time_s(self.crossing) - trace.time_s(0);
        let length_s = trace.time_s(run.end.min(trace.len() - 1)) - trace.time_s(run.start);
        self.floor > 0
            || seen_s > 0.8 * length_s
            || trace.volts[..self.crest].iter().any(|&v| v < levels.mean_v - 3.0 * levels.noise_v)
    }

    /// Whether the voltage rises clearly higher behind the run than the whole crest before it: a ring left to itself only decays.
    pub(super) fn rises_higher(&self, trace: &Trace<'_>, run: Run, levels: &Levels) -> bool {
        let end = run.end;
        if !self.is_whole(trace, run, levels) {
            return false;
        }
        let falls_at = (end + 1..trace.len()).find(|&index| trace.volts[index] < levels.mean_v).unwrap_or(trace.len());
        let (before_v, after_v) = (summit_v(trace, self.crest..self.crossing + 1), summit_v(trace, end..falls_at));
        after_v - levels.mean_v > HIGHER * (before_v - levels.mean_v) + 3.0 * levels.noise_v
    }
}

/// Whether the rise behind a run is a switch that opens: steeper, against the mean height and the length of what it rises to, than
/// the half-cycle of a sine, where that product is half the square of pi.
pub(super) fn opens(trace: &Trace<'_>, end: usize, levels: &Levels) -> bool {
    let height_v = levels.mean_v - levels.on_v;
    let (low_v, high_v) = (levels.on_v + LEAVE * height_v, levels.mean_v);
    let Some(above) = (end..trace.len()).find(|&index| trace.volts[index] >= high_v) else { return false };
    let below = (end + 1..trace.len()).skip(above - end).find(|&index| trace.volts[index] < high_v);
    let below = below.unwrap_or(trace.len() - 1);
    let (low_s, high_s) = (trace.crossing_s(end, low_v), trace.crossing_s(above, high_v));
    let length_s = trace.time_s(below) - high_s;
    let slope_v_per_s = (high_v - low_v) / (high_s - low_s);
    let mean_height_v = trace.mean_v(above, below) - high_v;
    length_s > 0.0 && mean_height_v > HIGH_ENOUGH * height_v && slope_v_per_s * length_s > ABRUPT * mean_height_v
}

/// Highest point of a range, between samples by the parabola through a sample and its neighbours: a fast ring has few.
fn summit_v(trace: &Trace<'_>, range: Range<usize>) -> f64 {
    let summit = |index: usize| {
        let here_v = trace.volts[index];
        let neighbours = index
            .checked_sub(1)
            .zip(trace.volts.get(index + 1))
            .map(|(before, &after_v)| (trace.volts[before], after_v));
        let Some((before_v, after_v)) =
            neighbours.filter(|&(before_v, after_v)| here_v >= before_v && here_v >= after_v)
        else {
            return here_v;
        };
        let bend_v = 2.0 * here_v - before_v - after_v;
        if bend_v > 0.0 { here_v + 0.125 * (after_v - before_v).powi(2) / bend_v } else { here_v }
    };
    range.map(summit).fold(f64::NEG_INFINITY, f64::max)
}

/// A ring that swings to zero takes at most this many times as long from its crest to the mean as from the mean to the lower
/// level, even where it would swing as far below zero as it can.
const QUARTER: f64 = 3.0;

/// The crest a fall came from: going back from the fall, the highest sample before the voltage is clearly lower again, not
/// before `floor` and no further back than a ring could have come.
fn crest_before(trace: &Trace<'_>, fall: usize, floor: usize, levels: &Levels) -> usize {
    let mut crest = fall;
    let mut earliest = floor;
    for index in (floor..fall).rev() {
        let (v, crest_v) = (trace.volts[index], trace.volts[crest]);
        if v >= crest_v {
            crest = index;
        }
        if index < earliest || v < crest_v - (6.0 * levels.noise_v).max(0.1 * (crest_v - levels.on_v)) {
            break;
        }
        if earliest == floor && v > levels.mean_v {
            let mean_s = trace.crossing_s(index + 1, levels.mean_v);
            let low_s = trace.crossing_s(fall, levels.on_v + ENTER * (levels.mean_v - levels.on_v));
            earliest = trace.samples.index_at(mean_s - QUARTER * (low_s - mean_s)).max(floor);
        }
    }
    crest
}

/// Steps before an edge whose mean tells how fast the voltage falls by itself.
const APPROACH: usize = 3;

/// Last sample before the steep part of a fall.
fn edge_before(trace: &Trace<'_>, floor: usize, crest: usize, fall: usize, noise_v: f64) -> usize {
    let drop = |index: usize| trace.volts[index] - trace.volts[index + 1];
    let last = (fall + 1).min(trace.len() - 1);
    let Some(steepest) = (crest..last).max_by(|&a, &b| drop(a).total_cmp(&drop(b))) else { return crest };
    let limit = 0.15 * drop(steepest);
    let edge = (crest..=steepest).rev().find(|&index| drop(index) < limit).map_or(crest, |index| index + 1);
    let edge = edge.min(fall.saturating_sub(1));
    // A sample that leaves its neighbours abruptly already stands in the edge.
    let Some(before) = edge.checked_sub(1 + APPROACH).filter(|&before| before >= floor) else { return edge };
    let approach_v = (trace.volts[before] - trace.volts[edge - 1]).abs() / APPROACH as f64;
    if drop(edge - 1) > 2.0 * approach_v + 3.0 * noise_v { edge - 1 } else { edge }
}
