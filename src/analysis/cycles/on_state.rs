//! Where the switch conducts: levels by histogram mode (IEEE 181), runs at the lower level, and which of those runs are
//! on-states and not a ring that swings down to the body diode.

use super::trace::Trace;
use std::ops::Range;

/// Levels of the record.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Levels {
    /// Voltage of the conducting switch.
    pub(super) on_v: f64,
    /// Mean of the record: near the bulk voltage, because the primary's volt-seconds balance.
    pub(super) mean_v: f64,
    /// Standard deviation of the noise, at least that of the vertical step.
    pub(super) noise_v: f64,
}

/// One conduction of the switch, in indices of samples.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct OnState {
    /// Last sample before the falling edge.
    pub(super) edge: usize,
    /// First sample at the lower level.
    pub(super) start: usize,
    /// First sample that has left it.
    pub(super) end: usize,
    /// When the voltage fell to the lower level.
    pub(super) turn_on_s: f64,
    /// When it left it.
    pub(super) turn_off_s: f64,
    /// The record begins inside.
    pub(super) cut_at_start: bool,
    /// The record ends inside.
    pub(super) cut_at_end: bool,
}

/// A run at the lower level.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Run {
    pub(super) start: usize,
    pub(super) end: usize,
}

/// What was found.
pub(super) struct OnStates {
    pub(super) levels: Levels,
    pub(super) list: Vec<OnState>,
    /// Runs that are no on-states: a ring swings this low.
    pub(super) swings: Vec<Run>,
    /// End of what can be told: the record's end, or the last fall whose nature the record does not show.
    pub(super) end: usize,
}

/// Share of the way from the on-state to the mean below which a run begins, and above which it ends.
const ENTER: f64 = 0.25;
const LEAVE: f64 = 0.35;

/// Shares of that way from which a fall is timed down to where the run begins: the edge may start from a ring's trough.
const HIGH: [f64; 3] = [0.75, 0.6, 0.45];

/// An edge steeper than a ring of this swing and quarter period by this factor is a switch that closes.
const STEEP: f64 = 3.0;

/// Length of a turn-on's edge, from its beginning to a quarter of its height, over the time of its middle half: a switch that
/// closes against the recovering rectifier begins slowly.
const EDGE: f64 = 4.0;

/// Samples within the middle half of an edge from which on its beginning is told by time and not by sample.
const RESOLVED: f64 = 3.0;

/// Share of the crest before a run by which the voltage behind it must at least rise.
const HIGHER: f64 = 1.03;

/// Four times the steepness of a sine's half-cycle: half the square of pi.
const ABRUPT: f64 = 20.0;

/// Share of the way from the on-state to the mean that the voltage must stay above the mean for that to be told from a drift.
const HIGH_ENOUGH: f64 = 0.2;

/// Share of the way from the on-state to the mean above which a ring's valley can be told from the on-state.
const VALLEY: f64 = 0.05;

/// Samples below which most on-states are not told from noise.
const BLIP: usize = 3;

/// Share of the way from the on-state to the mean within which a level is one, and share of an on-state's samples that stand there.
const ONE_LEVEL: f64 = 0.12;
const FLAT: f64 = 0.7;

/// Samples in the shortest on-state from which on none is missed.
const SHORTEST: usize = 4;

/// Volt-seconds that a run adds over volt-seconds that the swing before it took: at most 1.5 for a ring that touches zero
/// (the body diode carries no more than the ring brought), a multiple of that where the switch takes up energy.
const ENERGISING: f64 = 3.0;

/// The on-states of a record; `None` where there is no lower level that stands clear of the noise.
pub(super) fn find(trace: &Trace<'_>) -> Option<OnStates> {
    let (on_v, mean_v) = levels(trace)?;
    let step_noise_v = trace.samples.step_v().unwrap_or(0.0) / 12_f64.sqrt();
    let runs = runs(trace, on_v + ENTER * (mean_v - on_v), on_v + LEAVE * (mean_v - on_v));
    let noise_v = noise(trace, &runs).max(step_noise_v);
    if mean_v - on_v < 8.0 * noise_v.max(1e-12 * mean_v.abs()) {
        return None;
    }
    let mut found =
        OnStates { levels: Levels { on_v, mean_v, noise_v }, list: Vec::new(), swings: Vec::new(), end: trace.len() };
    for run in runs {
        found.take(trace, run);
    }
    (!found.list.is_empty() && found.is_one_level(trace)).then_some(found)
}

impl OnStates {
    /// Samples in each on-state that is seen whole, in order of length.
    fn lengths(&self) -> Vec<usize> {
        let whole = self.list.iter().filter(|on| !on.cut_at_start && !on.cut_at_end);
        let mut lengths: Vec<usize> = whole.map(|on| on.end - on.start).collect();
        lengths.sort_unstable();
        lengths
    }

    /// Whether most on-states last some samples and stay at one level, as no noise does.
    fn is_one_level(&self, trace: &Trace<'_>) -> bool {
        let lengths = self.lengths();
        if lengths.get(lengths.len() / 2).is_some_and(|&middle| middle < BLIP) {
            return false;
        }
        let flat = self.list.iter().filter(|on| self.flat_share(trace, on.start..on.end) > FLAT).count();
        4 * flat > 3 * self.list.len()
    }

    fn is_flat(&self, trace: &Trace<'_>, run: Run) -> bool {
        run.end - run.start >= BLIP && self.flat_share(trace, run.start..run.end) > 0.9
    }

    /// Share of samples that stand at the on-state's level.
    fn flat_share(&self, trace: &Trace<'_>, range: Range<usize>) -> f64 {
        let Levels { on_v, mean_v, noise_v } = self.levels;
        let near_v = (ONE_LEVEL * (mean_v - on_v)).max(1.5 * noise_v);
        let count = range.len() as f64;
        trace.volts[range].iter().filter(|&&v| (v - on_v).abs() < near_v).count() as f64 / count
    }

    /// Whether no on-state is so short in samples that another may have been missed.
    pub(super) fn are_resolved(&self) -> bool {
        self.lengths().first().is_none_or(|&shortest| shortest >= SHORTEST)
    }

    fn take(&mut self, trace: &Trace<'_>, run: Run) {
        let Levels { on_v, mean_v, .. } = self.levels;
        let floor = self.list.last().map_or(0, |on| on.end).max(self.swings.last().map_or(0, |swing| swing.end));
        let (cut_at_start, cut_at_end) = (run.start == 0, run.end == trace.len());
        let fall = Fall::read(trace, run.start, floor, &self.levels);
        let taken_vs = above_vs(trace, fall.crest, run.start, mean_v);
        let added_vs = -trace.area_vs(run.start, run.end.min(trace.len() - 1), mean_v);
        // A sample more or less of a coarse crest, and of a crest cut by the record's beginning it is not known what it took.
        let slack_vs = (trace.volts[fall.crest] - mean_v).max(0.0) * trace.samples.mean_interval_s();
        let energised = (fall.is_whole(trace, run, &self.levels) && added_vs >= ENERGISING * (taken_vs + slack_vs))
            || fall.is_steep(trace, &self.levels)
            || fall.rises_higher(trace, run, &self.levels)
            || opens(trace, run.end, &self.levels);
        // A ring may begin in its trough.
        let energised =
            if cut_at_start { opens(trace, run.end, &self.levels) || self.is_flat(trace, run) } else { energised };
        if !energised {
            if cut_at_end {
                self.end = fall.crest + 1;
            }
            self.swings.push(run);
            return;
        }
        let valley = fall.valley_end(trace, run, &self.levels).filter(|_| !cut_at_start);
        let (edge, start, turn_on_s) = match valley {
            _ if cut_at_start => (0, run.start, trace.time_s(0)),
            Some(low) => (low - 1, low, trace.time_s(low - 1)),
            None => (fall.edge(trace, run.start, &self.levels), run.start, fall.low_s),
        };
        let turn_off_s = if cut_at_end {
            trace.time_s(trace.len() - 1)
        } else {
            trace.crossing_s(run.end, on_v + LEAVE * (mean_v - on_v))
        };
        let on = OnState { edge, start, end: run.end, turn_on_s, turn_off_s, cut_at_start, cut_at_end };
        match self.list.last_mut().filter(|last| is_spike(trace, last, &on, mean_v)) {
            Some(last) => (last.end, last.turn_off_s, last.cut_at_end) = (on.end, on.turn_off_s, on.cut_at_end),
            None => self.list.push(on),
        }
    }
}

/// A fall to the lower level.
struct Fall {
    /// First sample it can have come from.
    floor: usize,
    /// Sample it came from.
    crest: usize,
    /// Last sample above the mean; the crest where that is none.
    crossing: usize,
    /// When the run begins.
    low_s: f64,
    /// Steepest way down to there.
    slope_v_per_s: f64,
    /// Time in which that slope falls by half of the mean.
    half_s: f64,
}

impl Fall {
    fn read(trace: &Trace<'_>, start: usize, floor: usize, levels: &Levels) -> Self {
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
    fn valley_end(&self, trace: &Trace<'_>, run: Run, levels: &Levels) -> Option<usize> {
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
    fn edge(&self, trace: &Trace<'_>, start: usize, levels: &Levels) -> usize {
        if self.half_s.is_finite() && self.half_s > RESOLVED * trace.samples.mean_interval_s() {
            return trace.samples.index_at(self.low_s - EDGE * self.half_s).saturating_sub(1).max(self.floor);
        }
        edge_before(trace, self.floor, self.crest, start, levels.noise_v)
    }

    /// Whether it is faster than a ring of its own swing could be, whose steepest slope is its swing times its angular frequency.
    fn is_steep(&self, trace: &Trace<'_>, levels: &Levels) -> bool {
        let swing_v = trace.volts[self.crest] - levels.mean_v;
        let quarter_s = trace.time_s(self.crossing) - trace.time_s(self.crest);
        let ring_v_per_s = swing_v.max(0.0) * std::f64::consts::FRAC_PI_2 / quarter_s;
        quarter_s > 0.0 && self.slope_v_per_s > STEEP * ring_v_per_s
    }

    /// Whether the record shows the crest from its top on: a ring comes down from there in half the time it stays below.
    fn is_whole(&self, trace: &Trace<'_>, run: Run, levels: &Levels) -> bool {
        let seen_s = trace.time_s(self.crossing) - trace.time_s(0);
        let length_s = trace.time_s(run.end.min(trace.len() - 1)) - trace.time_s(run.start);
        self.floor > 0
            || seen_s > 0.8 * length_s
            || trace.volts[..self.crest].iter().any(|&v| v < levels.mean_v - 3.0 * levels.noise_v)
    }

    /// Whether the voltage rises clearly higher behind the run than the whole crest before it: a ring left to itself only decays.
    fn rises_higher(&self, trace: &Trace<'_>, run: Run, levels: &Levels) -> bool {
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
fn opens(trace: &Trace<'_>, end: usize, levels: &Levels) -> bool {
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

/// Whether what lies between two runs is a spike inside one on-state: short, and without volt-seconds to speak of.
fn is_spike(trace: &Trace<'_>, before: &OnState, after: &OnState, mean_v: f64) -> bool {
    let between_s = after.turn_on_s - before.turn_off_s;
    let longer_s = (before.turn_off_s - before.turn_on_s).max(after.turn_off_s - after.turn_on_s);
    let last = trace.len() - 1;
    let added_vs = -trace.area_vs(before.start, before.end.min(last), mean_v)
        - trace.area_vs(after.start, after.end.min(last), mean_v);
    let returned_vs = above_vs(trace, before.end.min(last), after.start, mean_v);
    between_s < 0.15 * longer_s && returned_vs < 0.15 * added_vs
}

/// Lower level by histogram mode, and mean of the record.
fn levels(trace: &Trace<'_>) -> Option<(f64, f64)> {
    const BINS: usize = 64;
    let mean_v = trace.mean_v(0, trace.len() - 1);
    let (lowest, _) = trace.extremes_v(0..trace.len());
    let width = 0.35 * (mean_v - lowest) / BINS as f64;
    if width <= 0.0 {
        return None;
    }
    let bin_of = |v: f64| ((v - lowest) / width) as usize;
    let mut counts = [0_usize; BINS];
    for bin in trace.volts.iter().map(|&v| bin_of(v)).filter(|&bin| bin < BINS) {
        counts[bin] += 1;
    }
    let mode = (0..BINS).max_by_key(|&bin| counts[bin])?;
    let near = |v: &&f64| bin_of(**v).abs_diff(mode) <= 1;
    let (sum, count) = trace.volts.iter().filter(near).fold((0.0, 0_usize), |(sum, n), v| (sum + v, n + 1));
    (count > 0).then(|| (sum / count as f64, mean_v))
}

fn runs(trace: &Trace<'_>, enter_v: f64, leave_v: f64) -> Vec<Run> {
    let mut runs = Vec::new();
    let mut start = None;
    for (index, &v) in trace.volts.iter().enumerate() {
        match start {
            None if v < enter_v => start = Some(index),
            Some(first) if v > leave_v => {
                runs.push(Run { start: first, end: index });
                start = None;
            }
            _ => {}
        }
    }
    runs.extend(start.map(|first| Run { start: first, end: trace.len() }));
    runs
}

/// Noise from second differences inside the longest runs, where the voltage is a straight line.
fn noise(trace: &Trace<'_>, runs: &[Run]) -> f64 {
    let longest = runs.iter().map(|run| run.end - run.start).max().unwrap_or(0);
    let mut differences = Vec::new();
    for run in runs.iter().filter(|run| (run.end - run.start) * 2 >= longest) {
        let margin = 1 + (run.end - run.start) / 5;
        for index in run.start + margin..run.end.saturating_sub(margin) {
            let Some(window) = trace.volts.get(index - 1..=index + 1) else { continue };
            differences.push((window[0] - 2.0 * window[1] + window[2]).abs());
        }
        if differences.len() > 20_000 {
            break;
        }
    }
    if differences.is_empty() {
        return 0.0;
    }
    let middle = differences.len() / 2;
    let (_, median, _) = differences.select_nth_unstable_by(middle, f64::total_cmp);
    *median / (0.6745 * 6_f64.sqrt())
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

/// Volt-seconds above the mean between two samples; what lies below does not count.
fn above_vs(trace: &Trace<'_>, from: usize, to: usize, mean_v: f64) -> f64 {
    let piece = |index: usize| {
        let height_v = 0.5 * (trace.volts[index] + trace.volts[index + 1]) - mean_v;
        height_v.max(0.0) * (trace.time_s(index + 1) - trace.time_s(index))
    };
    (from..to).map(piece).sum()
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
