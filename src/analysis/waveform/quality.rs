//! What the samples themselves say about how far to trust them: clipping, the vertical step, drift.

use super::Samples;

/// Quality of a record.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Quality {
    /// Share of the samples at or beyond an end of the vertical range, 0 to 1; 0 where the range is not known and no
    /// end of the record's own range is flattened.
    pub clipped_share: f64,
    /// Vertical step over the difference between highest and lowest sample; 0 where the step is not known.
    pub step_share: f64,
    /// Mean of the second half less mean of the first half, in volts.
    pub drift_v: f64,
}

/// Looks at a whole record.
pub fn quality(samples: &Samples) -> Quality {
    let volts = samples.volts();
    let (low, high) = volts.iter().fold((f64::MAX, f64::MIN), |(low, high), &v| (low.min(v), high.max(v)));
    let clipped = match samples.clip_v() {
        Some((bottom, top)) => volts.iter().filter(|&&v| v <= bottom || v >= top).count(),
        None => 0,
    };
    let (first, second) = volts.split_at(volts.len() / 2);
    let mean = |part: &[f64]| part.iter().sum::<f64>() / part.len() as f64;
    Quality {
        clipped_share: clipped as f64 / volts.len() as f64,
        step_share: samples.step_v().map_or(0.0, |step| if high > low { step / (high - low) } else { 1.0 }),
        drift_v: mean(second) - mean(first),
    }
}

/// The vertical step of quantised values: the usual distance of neighbouring values, where nearly all distances are whole
/// multiples of it. `None` where the values are not visibly quantised.
pub fn detect_step(volts: &[f64]) -> Option<f64> {
    let mut sorted = volts.to_vec();
    sorted.sort_unstable_by(f64::total_cmp);
    let range = sorted.last()? - sorted.first()?;
    // Rounding in the file (two or three digits) shifts a value by far less than a step of an 8- or 12-bit converter.
    let mut gaps: Vec<f64> =
        sorted.windows(2).map(|pair| pair[1] - pair[0]).filter(|&gap| gap > range * 1e-5).collect();
    if gaps.is_empty() || gaps.len() * 3 > volts.len() {
        return None;
    }
    gaps.sort_unstable_by(f64::total_cmp);
    let guess = gaps[gaps.len() / 4];
    let near: Vec<f64> = gaps.iter().copied().filter(|gap| (gap / guess - 1.0).abs() < 0.2).collect();
    let step = near.iter().sum::<f64>() / near.len() as f64;
    let whole = gaps.iter().filter(|&&gap| ((gap / step).round() * step - gap).abs() < 0.2 * step).count();
    (whole * 10 >= gaps.len() * 8).then_some(step)
}
