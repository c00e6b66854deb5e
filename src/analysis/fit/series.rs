//! The samples as the solver takes them: times from the start of the window in units of its length, block means where that
//! loses nothing.

use super::{RingRecord, Times};
use realfft::num_complex::Complex64;

/// Samples with their times. Times run from 0 to about 1: seconds over [`Series::span_s`].
#[derive(Debug, Clone)]
pub(super) struct Series {
    /// Time of each sample from the start of the window, over the span.
    pub(super) times: Vec<f64>,
    /// Samples in volts.
    pub(super) volts: Vec<f64>,
    /// Unit of the times in seconds.
    pub(super) span_s: f64,
    /// Samples averaged into one.
    pub(super) block: usize,
    /// Interval between the (averaged) samples in units of the span; `None` where uneven.
    pub(super) interval: Option<f64>,
}

impl Series {
    /// The record as it is.
    pub(super) fn of(record: &RingRecord<'_>) -> Self {
        let volts = record.volts.to_vec();
        match record.times_s {
            Times::Even { interval_s, .. } => {
                let span_s = interval_s * volts.len() as f64;
                let interval = 1.0 / volts.len().max(1) as f64;
                let times = (0..volts.len()).map(|n| n as f64 * interval).collect();
                Self { times, volts, span_s, block: 1, interval: Some(interval) }
            }
            Times::Uneven(at) => {
                let first = at.first().copied().unwrap_or(0.0);
                let span_s = at.last().copied().unwrap_or(0.0) - first;
                let times = at.iter().map(|t| (t - first) / span_s).collect();
                Self { times, volts, span_s, block: 1, interval: None }
            }
        }
    }

    pub(super) fn len(&self) -> usize {
        self.volts.len()
    }

    /// Sampling rate over the span: samples a unit of time.
    pub(super) fn rate(&self) -> f64 {
        self.interval.map_or(self.len() as f64, |interval| 1.0 / interval)
    }

    /// Means of blocks of samples, such that at least `points` are left a period of `frequency` (in cycles a span). The block mean
    /// of a damped exponential is the same exponential with another complex amplitude, so that nothing is approximated.
    pub(super) fn thinned(&self, frequency: f64, points: f64) -> Self {
        let block = (self.rate() / (frequency * points)).floor().max(1.0) as usize;
        let Some(interval) = self.interval.filter(|_| block > 1) else { return self.clone() };
        let volts: Vec<f64> =
            self.volts.chunks_exact(block).map(|chunk| chunk.iter().sum::<f64>() / block as f64).collect();
        let middle = 0.5 * (block - 1) as f64;
        let times = (0..volts.len()).map(|n| ((n * block) as f64 + middle) * interval).collect();
        let interval = Some(interval * block as f64);
        Self { times, volts, span_s: self.span_s, block: self.block * block, interval }
    }

    /// The same samples on an even grid: what a spectrum needs. Linear between uneven samples.
    pub(super) fn even(&self) -> Self {
        if self.interval.is_some() {
            return self.clone();
        }
        let count = self.len();
        let interval = 1.0 / count as f64;
        let times: Vec<f64> = (0..count).map(|n| n as f64 * interval).collect();
        let mut right = 1;
        let volts = times.iter().map(|&t| {
            while right + 1 < count && self.times[right] < t {
                right += 1;
            }
            let (t0, t1) = (self.times[right - 1], self.times[right]);
            let share = if t1 > t0 { ((t - t0) / (t1 - t0)).clamp(0.0, 1.0) } else { 0.0 };
            self.volts[right - 1] * (1.0 - share) + self.volts[right] * share
        });
        let volts = volts.collect();
        Self { times, volts, span_s: self.span_s, block: 1, interval: Some(interval) }
    }

    /// The samples from `start` to `end` with the times of the whole.
    pub(super) fn with_volts(&self, volts: Vec<f64>) -> Self {
        Self { volts, ..self.clone() }
    }

    /// Factor by which block means change the complex amplitude of `exp(rate t)`, `rate` per span.
    pub(super) fn block_factor(&self, rate: Complex64) -> Complex64 {
        let Some(interval) = self.interval.filter(|_| self.block > 1) else { return Complex64::new(1.0, 0.0) };
        let half = rate * (0.5 * interval);
        half.sinh() / ((half / self.block as f64).sinh() * self.block as f64)
    }
}
