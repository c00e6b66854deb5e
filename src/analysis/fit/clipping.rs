//! Whether samples stand at the end of the vertical range.

use super::RingRecord;

/// What clipping looks like in the record.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Clipping {
    /// Samples at the limit.
    pub(super) samples: usize,
    /// The limit in volts.
    pub(super) limit_v: f64,
}

/// Clipped samples in the record. `period` is the ring's in samples, `amplitude_v` the fitted one: a flat top longer than the
/// converter's step makes of a sinusoid's crest is no crest.
pub(super) fn clipping(record: &RingRecord<'_>, period: f64, amplitude_v: f64, noise_v: f64) -> Option<Clipping> {
    let volts = record.volts;
    let (low, high) = volts.iter().fold((f64::INFINITY, f64::NEG_INFINITY), |(l, h), &v| (l.min(v), h.max(v)));
    let step = record.step_v.unwrap_or_else(|| smallest_step(volts));
    let known = |limit_v: f64| {
        let samples = volts.iter().filter(|&&v| (v - limit_v).abs() <= 0.51 * step).count();
        (samples >= 2).then_some(Clipping { samples, limit_v })
    };
    if let Some((bottom, top)) = record.clip_v {
        return known(top).or_else(|| known(bottom));
    }
    [high, low].into_iter().find_map(|limit_v| {
        let at = |v: &f64| (v - limit_v).abs() < 1e-9 * (high - low);
        let samples = volts.iter().filter(|v| at(v)).count();
        let next = volts.iter().filter(|&&v| (v - limit_v).abs() <= 1.5 * step && !at(&v)).count();
        let longest = volts.split(|v| !at(v)).map(<[f64]>::len).max().unwrap_or(0);
        // Half the angle that a crest spends within one step of its top.
        let crest = (1.0 - (step / amplitude_v.max(step)).min(1.0)).acos();
        let expected = period * crest / std::f64::consts::PI;
        let flat = longest as f64 > 1.35 * expected + 2.0;
        // Noise blurs a crest over several steps, but piles up against a limit.
        let piled = samples >= 6 && noise_v > 0.6 * step && samples as f64 > 1.5 * next as f64;
        (flat || piled).then_some(Clipping { samples, limit_v })
    })
}

/// The smallest difference between neighbouring samples that occurs; 0 where nearly all differ.
pub(super) fn smallest_step(volts: &[f64]) -> f64 {
    let mut sorted = volts.to_vec();
    sorted.sort_by(f64::total_cmp);
    let span = sorted.last().copied().unwrap_or(0.0) - sorted.first().copied().unwrap_or(0.0);
    let gaps = || sorted.windows(2).map(|pair| pair[1] - pair[0]).filter(|gap| *gap > 1e-9 * span);
    let distinct = gaps().count() + 1;
    if distinct * 4 > volts.len() * 3 { 0.0 } else { gaps().fold(f64::INFINITY, f64::min).min(span) }
}
