//! Where a free ring-down begins and ends in a record that may start before the event and hold the next one.

use super::{RingRecord, Times, attempt::plain_attempt, verdict};
use crate::findings::RingKind;
use std::ops::Range;

/// Cells of the coarse grid of starts and ends.
const CELLS: usize = 12;
/// Departure of a real ring from the model that is no reason to leave part of it out, over half the record's swing.
const MODEL_ERROR: f64 = 0.004;
/// How far swings before the window may be from the ring, over its amplitude there, to belong to it.
const ROUGHLY: f64 = 0.35;
/// Samples that the search keeps.
const SEARCHED: usize = 4096;

/// The samples of the free ring in a bare ring-down: the window in which a damped sinusoid, judged by what it leaves, pins the
/// frequency down best. A window that holds the event is punished by what it leaves, one too short by what it lacks. What it
/// leaves counts as at least a fraction of the record's swing: no circuit follows the model more closely than that, and the late
/// small swings of a record would otherwise be preferred for being purer. `None` where no window holds a ring.
pub fn find_ring_down(record: &RingRecord<'_>) -> Option<Range<usize>> {
    let count = record.volts.len();
    let block = match record.times_s {
        Times::Even { .. } => count.div_ceil(SEARCHED).max(1),
        Times::Uneven(_) => 1,
    };
    let volts: Vec<f64> =
        record.volts.chunks_exact(block).map(|chunk| chunk.iter().sum::<f64>() / block as f64).collect();
    let times_s = match record.times_s {
        Times::Even { start_s, interval_s } => Times::Even { start_s, interval_s: interval_s * block as f64 },
        uneven => uneven,
    };
    let thinned = RingRecord { times_s, volts: &volts, ..*record };
    let found = search(&thinned)?;
    let end = if found.end == volts.len() { count } else { found.end * block };
    Some(found.start * block..end)
}

fn search(record: &RingRecord<'_>) -> Option<Range<usize>> {
    let count = record.volts.len();
    let extremes = record.volts.iter().fold((f64::INFINITY, f64::NEG_INFINITY), |(l, h), &v| (l.min(v), h.max(v)));
    let floor = MODEL_ERROR * 0.5 * (extremes.1 - extremes.0);
    let uncertainty = |window| uncertainty(record, window, floor);
    let cut = |cell: usize| cell * count / CELLS;
    let windows = (0..CELLS).flat_map(|first| (first + 1..=CELLS).map(move |last| cut(first)..cut(last)));
    let judged = windows.filter_map(|window| Some((uncertainty(window.clone())?, window)));
    let (mut best, mut window) = judged.min_by(|a, b| a.0.total_cmp(&b.0))?;
    let mut stride = count / CELLS / 2;
    while stride > 0 {
        let Range { start, end } = window;
        let moves = [
            start.saturating_sub(stride)..end,
            start + stride..end,
            start..end.saturating_sub(stride),
            start..(end + stride).min(count),
        ];
        let better = moves.into_iter().filter_map(|moved| Some((uncertainty(moved.clone())?, moved)));
        match better.min_by(|a, b| a.0.total_cmp(&b.0)).filter(|(trial, _)| *trial < best) {
            Some((trial, moved)) => (best, window) = (trial, moved),
            None => stride /= 2,
        }
    }
    let start = swinging_before(record, &window);
    Some(start..window.end)
}

/// Where the swings before the window begin: as far back as they still follow the ring roughly. Swings that belong to the ring but
/// do not fit it are not left out to make it look better.
fn swinging_before(record: &RingRecord<'_>, window: &Range<usize>) -> usize {
    let Some(tried) = plain_attempt(&record.part(window.clone()), RingKind::Relaxation) else { return window.start };
    let time = |n: usize| match record.times_s {
        Times::Even { start_s, interval_s } => start_s + n as f64 * interval_s,
        Times::Uneven(times) => times[n],
    };
    let [amplitude, decay, frequency, ..] = tried.fit.parameters;
    let stride = ((window.len() as f64 / (tried.fit.end_s - tried.fit.start_s) / frequency) as usize / 2).max(2);
    let mut start = window.start;
    while start >= stride {
        let block = start - stride..start;
        let squares: f64 =
            block.clone().map(|n| (record.volts[n] - tried.fit.model_v(time(n) - tried.fit.start_s)).powi(2)).sum();
        let envelope = amplitude * (-decay * (time(start) - tried.fit.start_s)).exp();
        if (squares / stride as f64).sqrt() > ROUGHLY * envelope {
            break;
        }
        start = block.start;
    }
    start
}

/// Relative uncertainty of the frequency from that window; `None` where it holds no ring.
fn uncertainty(record: &RingRecord<'_>, window: Range<usize>, floor: f64) -> Option<f64> {
    if window.len() < verdict::FEWEST_SAMPLES {
        return None;
    }
    let tried = plain_attempt(&record.part(window), RingKind::Relaxation)?;
    let rings = verdict::plausible(&tried).is_ok();
    let widened = (1.0 + floor * floor / tried.variance).sqrt();
    rings.then(|| tried.ring.damped_frequency_hz.relative_uncertainty() * widened)
}
