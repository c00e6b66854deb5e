//! Half-cycles of a ring about its centre: crossings with hysteresis, extremes, and where the ring has sunk in the noise.

use super::trace::Trace;
use std::ops::Range;

/// What lies between two crossings of the centre.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct HalfCycle {
    /// Crossing at which it begins, and that at which it ends.
    pub(super) start_s: f64,
    pub(super) end_s: f64,
    /// First sample after the ending crossing.
    pub(super) end: usize,
    /// Extreme over the centre: positive for a crest, negative for a trough.
    pub(super) height_v: f64,
    /// Time spent within a tenth of the extreme.
    pub(super) top_s: f64,
}

impl HalfCycle {
    pub(super) fn duration_s(&self) -> f64 {
        self.end_s - self.start_s
    }
}

/// The half-cycles in a range about `centre(time)`; a crossing counts once the voltage is `clear_v` beyond. Ends where nothing
/// has crossed for three half-cycles.
pub(super) fn half_cycles(
    trace: &Trace<'_>,
    range: Range<usize>,
    centre: impl Fn(f64) -> f64,
    clear_v: f64,
) -> Vec<HalfCycle> {
    let mut found: Vec<HalfCycle> = Vec::new();
    let (mut above, mut last, mut crossed) = (None, None::<f64>, range.start);
    let mut typical_s = 0.0_f64;
    let (mut begun, mut begun_at) = (None::<f64>, range.start);
    for index in range.clone() {
        let time_s = trace.time_s(index);
        let height_v = trace.volts[index] - centre(time_s);
        // The crossing lies at the last change of sign; it counts only once the voltage is clear of the centre.
        if last.is_some_and(|before| before * height_v <= 0.0 && before != 0.0) {
            crossed = index;
        }
        last = Some(height_v);
        let side = if height_v > clear_v {
            Some(true)
        } else if height_v < -clear_v {
            Some(false)
        } else {
            None
        };
        if side.is_some() && above.is_some() && side != above {
            let crossing_s = trace.crossing_s(crossed, centre(trace.time_s(crossed)));
            if let Some(start_s) = begun {
                found.push(measure(trace, begun_at..crossed, &centre, (start_s, crossing_s)));
                let recent = &found[found.len().saturating_sub(4)..];
                typical_s = recent.iter().map(HalfCycle::duration_s).fold(0.0, f64::max);
            }
            (begun, begun_at) = (Some(crossing_s), crossed);
        }
        above = side.or(above);
        if begun.is_some_and(|start_s| typical_s > 0.0 && time_s - start_s > 3.0 * typical_s) {
            break;
        }
    }
    found
}

fn measure(
    trace: &Trace<'_>,
    range: Range<usize>,
    centre: &impl Fn(f64) -> f64,
    (start_s, end_s): (f64, f64),
) -> HalfCycle {
    let height = |index: usize| trace.volts[index] - centre(trace.time_s(index));
    let end = range.end;
    let height_v = range.clone().map(height).fold(0.0, |best: f64, v| if v.abs() > best.abs() { v } else { best });
    let near = |index: &usize| (height(*index) / height_v) > 0.9;
    let top_s = range.clone().filter(near).count() as f64 * (end_s - start_s) / range.len().max(1) as f64;
    HalfCycle { start_s, end_s, end, height_v, top_s }
}
