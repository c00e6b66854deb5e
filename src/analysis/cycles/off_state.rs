//! What happens while the switch is off: plateau, demagnetisation knee, and the first fall of the relaxation ring.

use super::on_state::Levels;
use super::trace::{Line, Trace};
use std::ops::Range;

/// The reflected plateau, and the knee at its end where it was seen.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Demagnetisation {
    /// Plateau as a straight line.
    pub(super) plateau: Line,
    /// End of demagnetisation; `None` where the secondary still conducted at the end.
    pub(super) knee_s: Option<f64>,
    /// First fall of the relaxation ring through the bulk voltage: first sample below.
    pub(super) fall: Option<usize>,
}

/// A fall through the bulk voltage.
#[derive(Debug, Clone, Copy)]
struct Fall {
    at: usize,
    /// Volt-seconds returned since the switch opened.
    returned_vs: f64,
    /// Time spent below.
    below_s: f64,
    lowest_v: f64,
    /// Whether the voltage came back above.
    came_back: bool,
}

/// Falls looked at: a leakage ring adds some, and none follow once the relaxation ring has begun.
const FALLS: usize = 64;

/// Samples at the end of the plateau that are averaged at least, and the share of its length where there are more.
const BLOCK: usize = 3;
const BLOCK_SHARE: f64 = 0.006;
/// Share of the plateau's height by which the voltage must have left it.
const DROP: f64 = 0.06;

/// Share of a cosine's height within which its samples tell its phase well.
const PHASED: f64 = 0.85;

/// Reads one off-state. `built_vs` are the volt-seconds of the on-state before it, where the record shows all of it.
/// `None` where the range is too short for a plateau.
pub(super) fn demagnetisation(
    trace: &Trace<'_>,
    off: Range<usize>,
    levels: &Levels,
    bulk_v: f64,
    built_vs: Option<f64>,
) -> Option<Demagnetisation> {
    if off.len() < 3 {
        return None;
    }
    let noise_v = levels.noise_v;
    let step_v = trace.samples.step_v().unwrap_or(0.0);
    let falls = falls(trace, off.clone(), bulk_v, (3.0 * noise_v).max(0.6 * step_v));
    let longest_s = falls.iter().map(|fall| fall.below_s).fold(0.0, f64::max);
    let is_ring = |fall: &&Fall| {
        let plateau_v = middle_level(trace, off.start..fall.at);
        let deep = bulk_v - fall.lowest_v > (0.1 * (plateau_v - bulk_v)).max(5.0 * noise_v).max(1.6 * step_v);
        let reset = match built_vs {
            Some(built_vs) => fall.returned_vs > 0.5 * built_vs,
            None => fall.below_s > 0.4 * longest_s || !fall.came_back,
        };
        deep && reset
    };
    match falls.iter().find(is_ring).map(|fall| fall.at) {
        Some(fall) => with_ring(trace, off, bulk_v, fall),
        None => without_ring(trace, off, levels, bulk_v),
    }
}

/// Knee from the ring's first fall: where the cosine through its samples has its crest.
fn with_ring(trace: &Trace<'_>, off: Range<usize>, bulk_v: f64, fall: usize) -> Option<Demagnetisation> {
    let start_s = trace.time_s(off.start);
    let mut plateau_v = middle_level(trace, off.start..fall);
    let mut knee_s = trace.crossing_s(fall, bulk_v);
    let mut plateau = trace.line(off.start..fall)?;
    for _ in 0..2 {
        knee_s = crest_s(trace, off.clone(), fall, bulk_v, plateau_v - bulk_v).max(start_s);
        let length_s = knee_s - start_s;
        let late = trace.between(start_s + 0.5 * length_s, knee_s - 0.08 * length_s);
        plateau = trace.line(late).or_else(|| trace.line(off.start..fall))?;
        // Not at the knee: what is left of the leakage ring tilts a short line.
        plateau_v = plateau.middle_v();
    }
    Some(Demagnetisation { plateau, knee_s: Some(knee_s), fall: Some(fall) })
}

/// When a cosine of this height about the bulk voltage, whose fall leads through sample `fall`, had its crest: from the line of
/// its phase over time, or, where too few samples stand in the fall, from the crossings of half its height and of the bulk
/// voltage, a third and the whole of a quarter period before.
fn crest_s(trace: &Trace<'_>, off: Range<usize>, fall: usize, bulk_v: f64, height_v: f64) -> f64 {
    let last_above = |v: f64| (off.start..fall).rev().find(|&index| trace.volts[index] >= v).unwrap_or(off.start);
    let share = |index: usize| (trace.volts[index] - bulk_v) / height_v;
    let first = last_above(bulk_v + PHASED * height_v) + 1;
    let last = (fall..off.end).find(|&index| share(index) < -0.3).unwrap_or(off.end);
    let points = (first..last).filter(|&index| share(index).abs() < PHASED);
    let (mut count, mut sum, mut sum_s, mut square, mut product) = (0.0, 0.0, 0.0, 0.0, 0.0);
    let fall_s = trace.crossing_s(fall, bulk_v);
    for index in points {
        let (phase, time_s) = (share(index).acos(), trace.time_s(index) - fall_s);
        count += 1.0;
        sum += phase;
        sum_s += time_s;
        square += phase * phase;
        product += phase * time_s;
    }
    let seconds_per_radian = (count * product - sum * sum_s) / (count * square - sum * sum);
    if count >= 4.0 && seconds_per_radian > 0.0 {
        return fall_s + (sum_s - seconds_per_radian * sum) / count;
    }
    let half_v = bulk_v + 0.5 * height_v;
    fall_s - 3.0 * (fall_s - trace.crossing_s(last_above(half_v) + 1, half_v))
}

/// No fall through the bulk voltage: either the secondary conducts to the end, or the knee has just been passed. Right before
/// the turn-on the voltage stands clear of the plateau then, by the beginning of a cosine, which is a parabola.
fn without_ring(trace: &Trace<'_>, off: Range<usize>, levels: &Levels, bulk_v: f64) -> Option<Demagnetisation> {
    let (start_s, end_s) = (trace.time_s(off.start), trace.time_s(off.end - 1));
    let length_s = end_s - start_s;
    let before = trace.between(start_s + 0.5 * length_s, start_s + 0.85 * length_s);
    let points = before.len() as f64;
    let plateau = trace.line(before)?;
    let block = ((BLOCK_SHARE * off.len() as f64) as usize).max(BLOCK);
    let drop_v = |end: usize| {
        let range = end.saturating_sub(block).max(off.start)..end;
        let sum: f64 = range.clone().map(|index| plateau.at(trace.time_s(index)) - trace.volts[index]).sum();
        sum / range.len().max(1) as f64
    };
    let last_v = drop_v(off.end);
    let height_v = plateau.at(end_s) - bulk_v;
    // Noise of the block's mean, and of the line there, which lies 0.325 lengths beyond the middle of its 0.35.
    let blur_v = levels.noise_v * (1.0 / block as f64 + (1.0 + 12.0 * (0.325_f64 / 0.35).powi(2)) / points).sqrt();
    // The last sample may already stand in the edge: what comes before it must have begun to fall as well.
    if last_v < (DROP * height_v).max(5.0 * blur_v) || drop_v(off.end - 1) < 2.0 * blur_v {
        let late = trace.between(start_s + 0.5 * length_s, end_s);
        let plateau = trace.line(late).unwrap_or(plateau);
        return Some(Demagnetisation { plateau, knee_s: None, fall: None });
    }
    // A parabola has a quarter of its depth halfway.
    let quarter = (off.start + 1..off.end).rev().find(|&index| drop_v(index) < 0.25 * last_v);
    let knee_s = quarter.map(|quarter| 2.0 * trace.time_s(quarter - 1) - end_s);
    Some(Demagnetisation { plateau, knee_s: knee_s.map(|knee_s| knee_s.max(start_s)), fall: None })
}

/// Median of the middle of a range: the plateau, whatever rings at its beginning.
fn middle_level(trace: &Trace<'_>, range: Range<usize>) -> f64 {
    let (from, to) = (range.start + range.len() * 3 / 10, range.start + (range.len() * 8).div_ceil(10));
    let stride = (to - from) / 500 + 1;
    let mut middle: Vec<f64> = trace.volts[from..to.max(from + 1)].iter().copied().step_by(stride).collect();
    let half = middle.len() / 2;
    *middle.select_nth_unstable_by(half, f64::total_cmp).1
}

fn falls(trace: &Trace<'_>, off: Range<usize>, bulk_v: f64, clear_v: f64) -> Vec<Fall> {
    let mut falls: Vec<Fall> = Vec::new();
    let mut above = false;
    let mut below: Option<Fall> = None;
    for index in off.clone() {
        let v = trace.volts[index];
        if let Some(fall) = &mut below {
            fall.lowest_v = fall.lowest_v.min(v);
            if v > bulk_v + clear_v {
                fall.below_s = trace.time_s(index) - trace.time_s(fall.at);
                fall.came_back = true;
                falls.extend(below.take());
                above = true;
            }
        } else if above && v < bulk_v {
            let returned_vs = trace.area_vs(off.start, index, bulk_v);
            below = Some(Fall { at: index, returned_vs, below_s: 0.0, lowest_v: v, came_back: false });
            above = false;
        } else if v > bulk_v + clear_v {
            above = true;
        }
        if falls.len() >= FALLS {
            return falls;
        }
    }
    falls.extend(below.map(|fall| Fall { below_s: trace.time_s(off.end - 1) - trace.time_s(fall.at), ..fall }));
    falls
}
