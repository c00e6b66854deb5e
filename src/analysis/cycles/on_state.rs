//! Where the switch conducts: levels by histogram mode (IEEE 181), runs at the lower level, and which of those runs are
//! on-states and not a ring that swings down to the body diode.

use super::fall::{Fall, opens};
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
pub(super) const ENTER: f64 = 0.25;
pub(super) const LEAVE: f64 = 0.35;

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

/// Volt-seconds above the mean between two samples; what lies below does not count.
fn above_vs(trace: &Trace<'_>, from: usize, to: usize, mean_v: f64) -> f64 {
    let piece = |index: usize| {
        let height_v = 0.5 * (trace.volts[index] + trace.volts[index + 1]) - mean_v;
        height_v.max(0.0) * (trace.time_s(index + 1) - trace.time_s(index))
    };
    (from..to).map(piece).sum()
}
