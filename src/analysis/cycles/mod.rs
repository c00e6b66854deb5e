//! Where each switching cycle, plateau, knee and ring of a drain waveform begins and ends, and the conduction mode of every
//! cycle.

mod fall;
mod mode;
mod off_state;
mod on_state;
mod swing;
mod trace;
mod windows;

pub use windows::RingWindow;

use crate::findings::{BoardFacts, Cycle, CycleMode};
use crate::waveform::Samples;
use off_state::{Demagnetisation, demagnetisation};
use on_state::{Levels, OnState, OnStates};
use std::ops::Range;
use trace::Trace;

/// One cycle with what was seen in it.
#[derive(Debug, Clone, PartialEq)]
pub struct Segment {
    /// Times and conduction mode.
    pub cycle: Cycle,
    /// Bulk voltage: mean over the cycle or the nearest whole one, or centre of its ring.
    pub bulk_v: f64,
    /// Plateau above the bulk voltage at the knee; `None` in continuous conduction.
    pub reflected_v: Option<f64>,
    /// Relaxation ring.
    pub relaxation: Option<RingWindow>,
    /// Leakage ring.
    pub leakage: Option<RingWindow>,
}

/// The anatomy of a record.
#[derive(Debug, Clone, PartialEq)]
pub struct Segmentation {
    /// Every cycle, in order; the first and the last may be incomplete.
    pub segments: Vec<Segment>,
    /// Turn-ons, in order.
    pub turn_ons_s: Vec<f64>,
    /// Voltage of the conducting switch.
    pub on_v: f64,
    /// Standard deviation of the noise in volts.
    pub noise_v: f64,
    /// Whether every on-state has enough samples that none can have been missed.
    pub turn_ons_resolved: bool,
    /// What looks like protection or restart rather than regulation, in words; `None` where nothing does.
    pub collapse: Option<String>,
}

/// Reads the anatomy of a drain waveform; `None` where no switching cycle stands in it. Linear in the number of samples.
pub fn segment(samples: &Samples, facts: &BoardFacts) -> Option<Segmentation> {
    let trace = Trace::new(samples);
    let found = on_state::find(&trace)?;
    let offs = off_ranges(&found);
    let whole = whole_cycle_means(&trace, &found);
    let mut segments: Vec<Segment> = Vec::with_capacity(offs.len());
    for off in &offs {
        segments.push(read(&trace, &found, off, &whole));
    }
    let turn_ons_s: Vec<f64> = found.list.iter().filter(|on| !on.cut_at_start).map(|on| on.turn_on_s).collect();
    mode::classify(&mut segments, &turn_ons_s, facts);
    let collapse = mode::collapse(&segments, &turn_ons_s, facts);
    let turn_ons_resolved = found.are_resolved();
    let Levels { on_v, noise_v, .. } = found.levels;
    Some(Segmentation { segments, turn_ons_s, on_v, noise_v, turn_ons_resolved, collapse })
}

/// One off-state: the on-state before it (`None` at the beginning of the record) and its samples.
struct Off {
    on: Option<OnState>,
    range: Range<usize>,
    /// Turn-on that ends it; `None` at the end of the record.
    next_s: Option<f64>,
}

fn off_ranges(found: &OnStates) -> Vec<Off> {
    let mut offs = Vec::with_capacity(found.list.len() + 1);
    if let Some(first) = found.list.first().filter(|on| !on.cut_at_start) {
        offs.push(Off { on: None, range: 0..first.edge + 1, next_s: Some(first.turn_on_s) });
    }
    for (index, on) in found.list.iter().enumerate() {
        let next = found.list.get(index + 1);
        let end = next.map_or(found.end, |next| next.edge + 1);
        let range = on.end.min(end)..end;
        offs.push(Off { on: Some(*on), range, next_s: next.map(|next| next.turn_on_s) });
    }
    offs
}

/// Mean drain voltage of every whole cycle with the index at which it begins: the bulk voltage, because the primary's
/// volt-seconds balance over a cycle.
fn whole_cycle_means(trace: &Trace<'_>, found: &OnStates) -> Vec<(usize, f64)> {
    let whole = found.list.windows(2).filter(|pair| !pair[0].cut_at_start);
    whole.map(|pair| (pair[0].start, trace.mean_v(pair[0].start, pair[1].start))).collect()
}

fn read(trace: &Trace<'_>, found: &OnStates, off: &Off, whole: &[(usize, f64)]) -> Segment {
    let nearest = whole.iter().min_by_key(|(start, _)| start.abs_diff(off.on.map_or(0, |on| on.start)));
    let mut bulk_v = nearest.map_or_else(|| tail_level(trace, off.range.clone()), |&(_, mean_v)| mean_v);
    let built = |bulk_v: f64| {
        let on = off.on.filter(|on| !on.cut_at_start && !on.cut_at_end)?;
        Some(-trace.area_vs(on.start, on.end.min(trace.len() - 1), bulk_v))
    };
    let mut seen: Option<Demagnetisation> = None;
    let mut relaxation = None;
    for _ in 0..2 {
        seen = demagnetisation(trace, off.range.clone(), &found.levels, bulk_v, built(bulk_v));
        relaxation = seen
            .and_then(|seen| seen.fall)
            .and_then(|fall| windows::relaxation(trace, fall, off.range.end, &found.levels, &found.swings, bulk_v));
        let Some(window) = relaxation.as_ref().filter(|window: &&RingWindow| window.periods >= 1.0) else { break };
        bulk_v = window.centre_v;
    }
    let leakage = seen
        .filter(|_| off.on.is_some())
        .and_then(|seen| windows::leakage(trace, off.range.clone(), &seen, &found.levels));
    let knee_s = seen.and_then(|seen| seen.knee_s);
    let start_s = trace.time_s(0);
    let end_s = off.next_s.unwrap_or_else(|| trace.time_s(trace.len() - 1));
    let cycle = Cycle {
        start_s: off.on.map_or(start_s, |on| on.turn_on_s),
        turn_off_s: off.on.map_or(start_s, |on| on.turn_off_s),
        end_of_demagnetisation_s: knee_s,
        end_s,
        mode: match (off.on.is_some_and(|on| !on.cut_at_start), off.next_s, knee_s) {
            (true, Some(_), Some(_)) => CycleMode::Discontinuous,
            (true, Some(_), None) => CycleMode::Continuous,
            _ => CycleMode::Incomplete,
        },
    };
    let reflected_v =
        seen.zip(knee_s).map(|(seen, knee_s)| seen.plateau.at(knee_s) - bulk_v).filter(|_| off.on.is_some());
    Segment { cycle, bulk_v, reflected_v, relaxation, leakage }
}

/// Median of the last third of a range: the ring's centre where it has had time to ring.
fn tail_level(trace: &Trace<'_>, range: Range<usize>) -> f64 {
    let from = range.start + range.len() * 2 / 3;
    let tail = &trace.volts[from.min(range.end)..range.end];
    if tail.is_empty() {
        return trace.mean_v(0, trace.len() - 1);
    }
    let mut tail: Vec<f64> = tail.iter().copied().step_by(tail.len() / 4000 + 1).collect();
    let middle = tail.len() / 2;
    *tail.select_nth_unstable_by(middle, f64::total_cmp).1
}
