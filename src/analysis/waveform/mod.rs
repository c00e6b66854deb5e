//! Samples of a voltage with their time axis: validated once, so that nothing after needs to ask again; and the decoders that
//! make them from bytes.

mod codes;
mod npy;
mod quality;
mod text;
mod text_header;
mod text_layout;

pub use codes::{CodeOrder, CodeScale, Codes, CodesError, decode_codes};
pub use npy::{NpyError, NpyOptions, decode_npy};
pub use quality::{Quality, detect_step, quality};
pub use text::{Column, DecodedText, TextError, TextOptions, decode_text};
pub use text_header::parse_time_unit;

use thiserror::Error;

/// Readings at or beyond this stand for infinity (9.9E37) or not-a-number (9.91E37) in SCPI-99 7.2.1.4: never a value.
pub const SENTINEL: f64 = 9.9e37;

/// When the samples were taken.
#[derive(Debug, Clone, PartialEq)]
pub enum TimeAxis {
    /// At a constant interval.
    Even {
        /// Time of the first sample.
        start_s: f64,
        /// Interval, positive.
        interval_s: f64,
    },
    /// At stated times, strictly rising.
    Uneven(Vec<f64>),
}

/// Voltage against time; finite, ordered, at least two samples.
#[derive(Debug, Clone, PartialEq)]
pub struct Samples {
    time: TimeAxis,
    volts: Vec<f64>,
    step_v: Option<f64>,
    clip_v: Option<(f64, f64)>,
}

/// Why values are no samples.
#[derive(Debug, Clone, PartialEq, Error)]
pub enum SamplesError {
    /// Nothing to analyse.
    #[error("{0} samples: at least two are needed")]
    TooFew(usize),
    /// A sentinel or a value that is not finite.
    #[error("sample {index} is {value:e}, which stands for \"no reading\": export the record again without gaps")]
    NotAReading {
        /// Index of the sample, from zero.
        index: usize,
        /// What stands there.
        value: f64,
    },
    /// The interval is not positive and finite, or the start is not finite.
    #[error("the time axis starts at {start_s} s with an interval of {interval_s} s: the interval must be positive")]
    Interval {
        /// Start.
        start_s: f64,
        /// Interval.
        interval_s: f64,
    },
    /// A time that does not follow the one before it.
    #[error("the time of sample {index} ({time_s} s) does not follow the one before it: times must rise")]
    Order {
        /// Index of the sample, from zero.
        index: usize,
        /// Its time.
        time_s: f64,
    },
    /// Another number of times than of voltages.
    #[error("{times} times for {volts} voltages")]
    Length {
        /// Number of times.
        times: usize,
        /// Number of voltages.
        volts: usize,
    },
    /// A vertical step or range that is none.
    #[error("a vertical step of {step_v:?} V with a range of {clip_v:?} V is none")]
    Range {
        /// Vertical step.
        step_v: Option<f64>,
        /// Vertical range.
        clip_v: Option<(f64, f64)>,
    },
}

impl Samples {
    /// Checks and joins times (s) and voltages (V).
    ///
    /// # Errors
    /// [`SamplesError`] where a value is no reading, or the times do not rise.
    pub fn new(time: TimeAxis, volts: Vec<f64>) -> Result<Self, SamplesError> {
        if volts.len() < 2 {
            return Err(SamplesError::TooFew(volts.len()));
        }
        if let Some(index) = volts.iter().position(|&v| !is_reading(v)) {
            return Err(SamplesError::NotAReading { index, value: volts[index] });
        }
        match &time {
            TimeAxis::Even { start_s, interval_s } => {
                let end_s = start_s + interval_s * volts.len() as f64;
                if !(is_reading(*start_s) && *interval_s > 0.0 && is_reading(end_s)) {
                    return Err(SamplesError::Interval { start_s: *start_s, interval_s: *interval_s });
                }
            }
            TimeAxis::Uneven(times) => check_times(times, volts.len())?,
        }
        Ok(Self { time, volts, step_v: None, clip_v: None })
    }

    /// States the vertical step (V) and the voltages at and beyond which the range clips, as far as they are known.
    ///
    /// # Errors
    /// [`SamplesError::Range`] where the step is not positive or the range is empty.
    pub fn with_range(mut self, step_v: Option<f64>, clip_v: Option<(f64, f64)>) -> Result<Self, SamplesError> {
        let step_ok = step_v.is_none_or(|step| step > 0.0 && is_reading(step));
        let clip_ok = clip_v.is_none_or(|(low, high)| low < high && is_reading(low) && is_reading(high));
        if !(step_ok && clip_ok) {
            return Err(SamplesError::Range { step_v, clip_v });
        }
        self.step_v = step_v;
        self.clip_v = clip_v;
        Ok(self)
    }

    /// When the samples were taken.
    pub fn time(&self) -> &TimeAxis {
        &self.time
    }

    /// Voltages.
    pub fn volts(&self) -> &[f64] {
        &self.volts
    }

    /// Vertical step in volts, where known.
    pub fn step_v(&self) -> Option<f64> {
        self.step_v
    }

    /// Voltages at and beyond which the vertical range clips, where known.
    pub fn clip_v(&self) -> Option<(f64, f64)> {
        self.clip_v
    }

    /// Time of a sample, in seconds.
    pub fn time_s(&self, index: usize) -> f64 {
        match &self.time {
            TimeAxis::Even { start_s, interval_s } => start_s + interval_s * index as f64,
            TimeAxis::Uneven(times) => times[index],
        }
    }

    /// Time of the first sample.
    pub fn start_s(&self) -> f64 {
        self.time_s(0)
    }

    /// Time of the last sample.
    pub fn end_s(&self) -> f64 {
        self.time_s(self.volts.len() - 1)
    }

    /// Mean interval between samples.
    pub fn mean_interval_s(&self) -> f64 {
        match &self.time {
            TimeAxis::Even { interval_s, .. } => *interval_s,
            TimeAxis::Uneven(_) => (self.end_s() - self.start_s()) / (self.volts.len() - 1) as f64,
        }
    }

    /// Index of the first sample at or after a time; the number of samples where there is none.
    pub fn index_at(&self, time_s: f64) -> usize {
        match &self.time {
            TimeAxis::Even { start_s, interval_s } => {
                let index = ((time_s - start_s) / interval_s).ceil();
                (index.max(0.0) as usize).min(self.volts.len())
            }
            TimeAxis::Uneven(times) => times.partition_point(|&t| t < time_s),
        }
    }
}

/// Whether a number is a reading: finite and no sentinel.
pub(crate) fn is_reading(value: f64) -> bool {
    value.is_finite() && value.abs() < SENTINEL
}

fn check_times(times: &[f64], volts: usize) -> Result<(), SamplesError> {
    if times.len() != volts {
        return Err(SamplesError::Length { times: times.len(), volts });
    }
    if let Some(index) = times.iter().position(|&t| !is_reading(t)) {
        return Err(SamplesError::NotAReading { index, value: times[index] });
    }
    match times.windows(2).position(|pair| pair[1] <= pair[0]) {
        Some(before) => Err(SamplesError::Order { index: before + 1, time_s: times[before + 1] }),
        None => Ok(()),
    }
}
