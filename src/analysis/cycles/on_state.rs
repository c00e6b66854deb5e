//! Where the switch conducts: levels by histogram mode (IEEE 181), runs at the lower level, and which of those runs are
//! on-states and not a ring that swings down to the body diode.

use super::trace::Trace;

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
    (!found.list.is_empty()).then_some(found)
}

impl OnStates {
    fn take(&mut self, trace: &Trace<'_>, run: Run) {
        let Levels { on_v, mean_v, noise_v } = self.levels;
        let floor = self.list.last().map_or(0, |on| on.end).max(self.swings.last().map_or(0, |swing| swing.end));
        let crest = crest_before(trace, run.start, floor, mean_v, noise_v);
        let taken_vs = above_vs(trace, crest, run.start, mean_v);
        let added_vs = -trace.area_vs(run.start, run.end.min(trace.len() - 1), mean_v);
        let (cut_at_start, cut_at_end) = (run.start == 0, run.end == trace.len());
        if cut_at_end && !cut_at_start && added_vs < ENERGISING * taken_vs {
            self.end = crest + 1;
            self.swings.push(run);
            return;
        }
        if added_vs < ENERGISING * taken_vs && !cut_at_start {
            self.swings.push(run);
            return;
        }
        let edge = if cut_at_start { 0 } else { edge_before(trace, crest, run.start) };
        let turn_on_s =
            if cut_at_start { trace.time_s(0) } else { trace.crossing_s(run.start, on_v + ENTER * (mean_v - on_v)) };
        let turn_off_s = if cut_at_end {
            trace.time_s(trace.len() - 1)
        } else {
            trace.crossing_s(run.end, on_v + LEAVE * (mean_v - on_v))
        };
        let on = OnState { edge, start: run.start, end: run.end, turn_on_s, turn_off_s, cut_at_start, cut_at_end };
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

/// Walks back from a fall to the crest it came from: the last sample near the highest of the swing, not before `floor`.
fn crest_before(trace: &Trace<'_>, fall: usize, floor: usize, mean_v: f64, noise_v: f64) -> usize {
    let (mut crest, mut crest_v) = (fall, trace.volts[fall]);
    for index in (floor..fall).rev() {
        let v = trace.volts[index];
        let swing_v = (crest_v - mean_v).max(0.0);
        let clear_v = (3.0 * noise_v).max(0.03 * swing_v);
        if v > crest_v + clear_v || index + 1 == fall {
            (crest, crest_v) = (index, v.max(crest_v));
        } else if v < crest_v - 2.0 * clear_v - 0.05 * swing_v || index + 3 + 4 * (fall - crest) < crest {
            break;
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

/// Last sample before the steep part of a fall.
fn edge_before(trace: &Trace<'_>, crest: usize, fall: usize) -> usize {
    let drop = |index: usize| trace.volts[index] - trace.volts[index + 1];
    let last = (fall + 1).min(trace.len() - 1);
    let Some(steepest) = (crest..last).max_by(|&a, &b| drop(a).total_cmp(&drop(b))) else { return crest };
    let limit = 0.15 * drop(steepest);
    (crest..=steepest)
        .rev()
        .find(|&index| drop(index) < limit)
        .map_or(crest, |index| index + 1)
        .min(fall.saturating_sub(1))
}
