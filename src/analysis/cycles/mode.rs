//! Conduction mode of every cycle: gaps counted in switching periods, and what looks like protection or restart.

use super::Segment;
use crate::findings::{BoardFacts, CycleMode};

/// Periods from turn-on to turn-on at which a cycle counts as skipped: one was left out, whatever the dither.
const SKIPPED: f64 = 1.6;

/// Switching periods a gap may last in regulation. Bursts at no load come some thousand periods apart at most; restart after
/// protection takes a hundred milliseconds and more.
const LONGEST_GAP: f64 = 5000.0;

/// Turns discontinuous cycles into skipped ones where the next turn-on came at least one switching period late.
pub(super) fn classify(segments: &mut [Segment], turn_ons_s: &[f64], facts: &BoardFacts) {
    if facts.skips_cycles == Some(false) {
        return;
    }
    let Some(period_s) = period_s(turn_ons_s, facts) else { return };
    for segment in segments.iter_mut().filter(|segment| segment.cycle.mode == CycleMode::Discontinuous) {
        if segment.cycle.end_s - segment.cycle.start_s >= SKIPPED * period_s {
            segment.cycle.mode = CycleMode::Skipped;
        }
    }
}

/// Unit in which gaps are counted: stated, or the shortest period in the record.
fn period_s(turn_ons_s: &[f64], facts: &BoardFacts) -> Option<f64> {
    let shortest = || turn_ons_s.windows(2).map(|pair| pair[1] - pair[0]).min_by(f64::total_cmp);
    facts.switching_period_s.or_else(shortest).filter(|&period_s| period_s > 0.0)
}

/// Signs of protection or restart: a gap far longer than any regulation, or a burst in which the reflected voltage grows as
/// it does while an output is charged from zero.
pub(super) fn collapse(segments: &[Segment], turn_ons_s: &[f64], facts: &BoardFacts) -> Option<String> {
    let period_s = period_s(turn_ons_s, facts)?;
    let gap_s = segments.iter().map(|segment| segment.cycle.end_s - segment.cycle.start_s).fold(0.0, f64::max);
    if gap_s > LONGEST_GAP * period_s {
        let periods = gap_s / period_s;
        return Some(format!("the switch stays off for {:.1} ms, {periods:.0} switching periods", gap_s * 1e3));
    }
    let mut burst: Vec<f64> = Vec::new();
    for segment in segments {
        let period = segment.cycle.end_s - segment.cycle.start_s;
        burst.extend(segment.reflected_v);
        if period > 20.0 * period_s {
            if let Some(sentence) = growth(&burst) {
                return Some(sentence);
            }
            burst.clear();
        }
    }
    growth(&burst)
}

fn growth(reflected_v: &[f64]) -> Option<String> {
    let third = reflected_v.len() / 3;
    if third < 3 {
        return None;
    }
    let mean = |part: &[f64]| part.iter().sum::<f64>() / part.len() as f64;
    let (early, late) = (mean(&reflected_v[..third]), mean(&reflected_v[reflected_v.len() - third..]));
    (early < 0.5 * late).then(|| {
        format!("the reflected voltage grows from {early:.1} V to {late:.1} V within one burst, as in a start-up")
    })
}
