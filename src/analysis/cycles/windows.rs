//! The windows in which the two rings ring freely: the leakage ring after the clamp's release, the relaxation ring after the
//! knee and whatever the body diode cuts off.

use super::off_state::Demagnetisation;
use super::on_state::{Levels, Run};
use super::swing::{HalfCycle, half_cycles};
use super::trace::Trace;
use std::ops::Range;

/// Samples of one free ring.
#[derive(Debug, Clone, PartialEq)]
pub struct RingWindow {
    /// Samples.
    pub samples: Range<usize>,
    /// Periods that stand out of the noise.
    pub periods: f64,
    /// Period from the crossings, in seconds; 0 where there are fewer than two.
    pub period_s: f64,
    /// Centre of the ring from whole periods, in volts (of the leakage ring: the plateau).
    pub centre_v: f64,
}

/// Half-cycles of a leakage ring that are enough without its first period.
const ENOUGH: usize = 12;

/// Half-cycles kept behind the last visible crossing: they hold the centre.
const TAIL: f64 = 4.0;

/// The relaxation ring from its first fall on; the centre is found from whole periods.
pub(super) fn relaxation(
    trace: &Trace<'_>,
    fall: usize,
    end: usize,
    levels: &Levels,
    swings: &[Run],
    bulk_v: f64,
) -> Option<RingWindow> {
    let start = free_from(trace, fall, end, levels, swings, bulk_v);
    let end = end.saturating_sub(1);
    let mut centre_v = bulk_v;
    let mut halves = Vec::new();
    for _ in 0..3 {
        halves = half_cycles(trace, start..end, |_| centre_v, clear_v(trace, levels));
        match centre_of(trace, &halves) {
            Some(found_v) => centre_v = found_v,
            None => break,
        }
    }
    window(trace, start..end, &halves, centre_v)
}

/// Centre of a ring from its whole periods. The mean of a decaying ring over whole periods leans to the side of its first
/// half-cycle; the mean over as many, half a period later, leans to the other by what the ring has kept until then. Weighed so,
/// both cancel. `None` where no whole period stands.
fn centre_of(trace: &Trace<'_>, halves: &[HalfCycle]) -> Option<f64> {
    let mean_v = |halves: &[HalfCycle]| {
        let range = trace.between(halves.first()?.start_s, halves.last()?.end_s);
        Some(trace.mean_v(range.start, range.end.min(trace.len() - 1)))
    };
    let [first, _, third, ..] = halves else { return mean_v(halves).filter(|_| halves.len() == 2) };
    let whole = (halves.len() - 1) / 2 * 2;
    let (early_v, late_v) = (mean_v(&halves[..whole])?, mean_v(&halves[1..=whole])?);
    let kept = (third.height_v / first.height_v).abs().min(1.0).sqrt();
    Some((kept * early_v + late_v) / (kept + 1.0))
}

/// Where the relaxation ring is free of the body diode and of the ends of the vertical range.
fn free_from(trace: &Trace<'_>, fall: usize, end: usize, levels: &Levels, swings: &[Run], bulk_v: f64) -> usize {
    let conducts_v = levels.on_v + (0.02 * (bulk_v - levels.on_v)).max(3.0 * levels.noise_v);
    let diode = swings.iter().rev().filter(|swing| swing.start >= fall && swing.end <= end);
    let diode = diode.into_iter().find(|swing| trace.extremes_v(swing.start..swing.end).0 <= conducts_v);
    let clips = |v: f64| trace.samples.clip_v().is_some_and(|(bottom, top)| v <= bottom || v >= top);
    let clipped = (fall..end).rev().find(|&index| clips(trace.volts[index]));
    let cut = diode.map(|swing| swing.end).max(clipped);
    match cut {
        // From the next crossing of the bulk voltage on, so that the window begins free of the diode's recovery.
        Some(cut) => {
            let side = trace.volts[cut.min(end - 1)] > bulk_v;
            (cut..end).find(|&index| (trace.volts[index] > bulk_v) != side).unwrap_or(end)
        }
        None => fall,
    }
}

/// The leakage ring about the plateau, from the release of the clamp on.
pub(super) fn leakage(
    trace: &Trace<'_>,
    off: Range<usize>,
    demagnetisation: &Demagnetisation,
    levels: &Levels,
) -> Option<RingWindow> {
    let start_s = trace.time_s(off.start);
    let end_s = demagnetisation.knee_s.unwrap_or(trace.time_s(off.end - 1));
    let end = trace.samples.index_at(end_s - 0.05 * (end_s - start_s)).min(off.end);
    let plateau = demagnetisation.plateau;
    let halves = half_cycles(trace, off.start..end, |time_s| plateau.at(time_s), clear_v(trace, levels));
    let first_crest = halves.iter().position(|half| half.height_v > 0.0)?;
    let halves = &halves[first_crest..];
    // Crests alternate with troughs; the ring is free after the last crest that the clamp has flattened.
    let typical_s = median(halves.iter().skip(1).map(HalfCycle::duration_s));
    let flattened = |half: &HalfCycle| {
        half.height_v > 0.0 && (half.top_s > 0.42 * half.duration_s() || half.duration_s() > 1.3 * typical_s)
    };
    let mut released = halves.iter().take(8).rposition(flattened).unwrap_or(0);
    // The first period still carries the diode's recovery, and its swing bends the ring most: spared where enough follows.
    if halves.len() >= released + 2 + ENOUGH {
        released += 2;
    }
    let start = halves.get(released)?.end;
    window(trace, start..end, halves.get(released + 1..)?, plateau.at(trace.time_s(start)))
}

fn window(trace: &Trace<'_>, range: Range<usize>, halves: &[HalfCycle], centre_v: f64) -> Option<RingWindow> {
    let half_s = median(halves.iter().map(HalfCycle::duration_s));
    let end = match halves.last() {
        Some(last) => trace.samples.index_at(last.end_s + TAIL * half_s).min(range.end),
        None => range.end,
    };
    let periods = halves.len() as f64 / 2.0;
    let samples = range.start..end;
    (samples.len() >= 4).then_some(RingWindow { samples, periods, period_s: 2.0 * half_s, centre_v })
}

/// How far beyond the centre a swing must go to count.
fn clear_v(trace: &Trace<'_>, levels: &Levels) -> f64 {
    (2.5 * levels.noise_v).max(0.6 * trace.samples.step_v().unwrap_or(0.0))
}

fn median(values: impl Iterator<Item = f64>) -> f64 {
    let mut sorted: Vec<f64> = values.collect();
    sorted.sort_unstable_by(f64::total_cmp);
    sorted.get(sorted.len() / 2).copied().unwrap_or(0.0)
}
