//! What can be set on the scope, its limits, and what follows from the settings: window, sample rate, points, key.

use crate::instruments::bench::key;
use serde::Serialize;
use std::ops::RangeInclusive;

/// Divisions from left to right.
pub const TIME_DIVISIONS: f64 = 10.0;

/// Highest sample rate.
const MAXIMUM_RATE_HZ: f64 = 1e9;

/// Memory depths there are.
const DEPTHS: [usize; 3] = [10_000, 100_000, 1_000_000];

/// A model of oscilloscope.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Model {
    /// Bits of its converter.
    pub bits: u32,
    /// Bandwidth at -3 dB.
    pub bandwidth_hz: f64,
    /// Noise in divisions, root mean square.
    pub noise_divisions: f64,
    /// Noise at the connector, root mean square, in the most sensitive ranges.
    pub noise_v: f64,
}

impl Model {
    /// The model with 8 or 12 bits.
    pub fn of_bits(bits: u8) -> Option<Self> {
        match bits {
            8 => Some(Self { bits: 8, bandwidth_hz: 100e6, noise_divisions: 0.02, noise_v: 250e-6 }),
            12 => Some(Self { bits: 12, bandwidth_hz: 350e6, noise_divisions: 0.005, noise_v: 120e-6 }),
            _ => None,
        }
    }

    /// Codes a division: 25 of the 256 there are, or 400 of 4096, so that the converter reaches a little beyond the screen.
    pub fn codes_per_division(&self) -> f64 {
        25.0 * f64::from(1_u32 << (self.bits - 8))
    }
}

/// The probe on the drain node as it really is.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Probe {
    /// Attenuation.
    pub factor: f64,
    /// Capacitance at its tip.
    pub capacitance_f: f64,
    /// Error of its offset at the tip.
    pub offset_v: f64,
    /// Relative error of its gain at high frequency.
    pub miscompensation: f64,
}

macro_rules! choices {
    ($(#[$doc:meta])* $name:ident { $($(#[$variant_doc:meta])* $variant:ident = $keyword:literal,)* }) => {
        $(#[$doc])*
        #[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
        #[serde(rename_all = "snake_case")]
        pub enum $name { $($(#[$variant_doc])* $variant,)* }

        impl $name {
            /// Keywords and what they mean.
            pub const CHOICES: [(&'static str, Self); [$($keyword),*].len()] = [$(($keyword, Self::$variant)),*];
        }
    };
}

choices! {
    /// Coupling of a channel.
    Coupling {
        /// Direct.
        Dc = "DC",
        /// Without the mean.
        Ac = "AC",
    }
}

choices! {
    /// How samples become a record.
    AcquisitionType {
        /// As sampled.
        Normal = "NORMal",
        /// Mean of several acquisitions.
        Average = "AVERage",
        /// Lowest and highest of each pair of intervals.
        Peak = "PEAK",
    }
}

choices! {
    /// Slope of the trigger edge.
    Slope {
        /// Rising.
        Positive = "POSitive",
        /// Falling.
        Negative = "NEGative",
    }
}

choices! {
    /// What happens without a trigger.
    Sweep {
        /// Acquires anyway after a while.
        Auto = "AUTO",
        /// Waits.
        Normal = "NORMal",
    }
}

/// Settings of a channel.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct Channel {
    /// Shown, and acquired.
    pub display: bool,
    /// Volts a division at the probe tip.
    pub scale_v: f64,
    /// Volts at the centre of the screen.
    pub offset_v: f64,
    /// Probe factor.
    pub probe_factor: f64,
    /// Coupling.
    pub coupling: Coupling,
    /// 20 MHz limit.
    pub bandwidth_limit: bool,
}

impl Channel {
    /// Changes the factor and everything that is stated at the tip with it: the connector sees the same range.
    pub fn set_probe_factor(&mut self, factor: f64) {
        let ratio = factor / self.probe_factor;
        (self.probe_factor, self.scale_v, self.offset_v) = (factor, self.scale_v * ratio, self.offset_v * ratio);
    }

    /// The range of the attenuator in use, by number: 1-2-5 steps at the connector.
    pub fn range(&self) -> u64 {
        let steps = (3.0 * (snap_up(self.scale_v / self.probe_factor) / 1e-3).log10()).round();
        steps.max(0.0) as u64
    }
}

/// Settings of the trigger.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct Trigger {
    /// Channel, from 0.
    pub channel: usize,
    /// Level at the probe tip.
    pub level_v: f64,
    /// Slope.
    pub slope: Slope,
    /// What happens without a trigger.
    pub sweep: Sweep,
    /// Time without an edge of this kind before one is accepted.
    pub holdoff_s: f64,
}

/// All settings that an acquisition depends on.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Settings {
    /// Channels.
    pub channels: [Channel; 2],
    /// Seconds a division.
    pub time_scale_s: f64,
    /// Time of the centre of the screen after the trigger.
    pub time_position_s: f64,
    /// Kind of acquisition.
    pub kind: AcquisitionType,
    /// Memory to use, in points.
    pub memory: usize,
    /// Trigger.
    pub trigger: Trigger,
}

impl Default for Settings {
    fn default() -> Self {
        let channel = Channel {
            display: true,
            scale_v: 1.0,
            offset_v: 0.0,
            probe_factor: 1.0,
            coupling: Coupling::Dc,
            bandwidth_limit: false,
        };
        Self {
            channels: [channel, Channel { display: false, ..channel }],
            time_scale_s: 1e-6,
            time_position_s: 0.0,
            kind: AcquisitionType::Normal,
            memory: DEPTHS[0],
            trigger: Trigger { channel: 0, level_v: 0.0, slope: Slope::Positive, sweep: Sweep::Auto, holdoff_s: 0.0 },
        }
    }
}

impl Settings {
    /// Length of the window.
    pub fn window_s(&self) -> f64 {
        TIME_DIVISIONS * self.time_scale_s
    }

    /// Time of the first sample after the trigger.
    pub fn start_s(&self) -> f64 {
        self.time_position_s - self.window_s() / 2.0
    }

    /// Sample rate: the highest of the 1-2-5 steps at which the window fits the memory.
    pub fn rate_hz(&self) -> f64 {
        // A hair above, so that a window that fits exactly is not lost to rounding.
        let fitting_hz = self.memory as f64 / self.window_s() * (1.0 + 1e-9);
        snap_down(fitting_hz.min(MAXIMUM_RATE_HZ * (1.0 + 1e-9)))
    }

    /// Points of the next acquisition.
    pub fn points(&self) -> usize {
        ((self.window_s() * self.rate_hz()).round() as usize).min(self.memory)
    }

    /// Identifies these settings.
    pub fn key(&self) -> u64 {
        let text = serde_json::to_string(self).unwrap_or_default();
        let words: Vec<u64> = text.bytes().map(u64::from).collect();
        key(&words)
    }
}

/// Limits of the settings.
pub struct Limits;

impl Limits {
    /// Seconds a division.
    pub const TIME_SCALE_S: RangeInclusive<f64> = 2e-9..=5e-3;
    /// Centre of the screen after the trigger.
    pub const TIME_POSITION_S: RangeInclusive<f64> = -25e-3..=25e-3;
    /// Holdoff.
    pub const HOLDOFF_S: RangeInclusive<f64> = 0.0..=1.0;
    /// Memory in points.
    pub const MEMORY: RangeInclusive<f64> = 1.0..=1e6;
    /// Probe factor.
    pub const PROBE_FACTOR: RangeInclusive<f64> = 0.1..=1000.0;

    /// Volts a division at the tip: 1 mV to 10 V at the connector.
    pub fn scale_v(factor: f64) -> RangeInclusive<f64> {
        1e-3 * factor..=10.0 * factor
    }

    /// Volts at the centre at the tip: 40 V either way at the connector.
    pub fn offset_v(factor: f64) -> RangeInclusive<f64> {
        -40.0 * factor..=40.0 * factor
    }
}

/// The smallest memory depth that holds so many points.
pub fn memory(points: f64) -> usize {
    DEPTHS.into_iter().find(|depth| *depth as f64 >= points).unwrap_or(DEPTHS[2])
}

/// The smallest value of the 1-2-5 sequence at or above `value`.
pub fn snap_up(value: f64) -> f64 {
    steps(value).find(|step| *step >= value * (1.0 - 1e-9)).unwrap_or(value)
}

/// The largest value of the 1-2-5 sequence at or below `value`.
fn snap_down(value: f64) -> f64 {
    steps(value).filter(|step| *step <= value).last().unwrap_or(value)
}

fn steps(value: f64) -> impl Iterator<Item = f64> {
    let exponent = value.log10().floor() as i32;
    // Parsed from decimal text, so that 2 us a division is exactly the number a client sends and reads back.
    (exponent - 1..=exponent + 1)
        .flat_map(|power| [1, 2, 5].map(|digit| format!("{digit}e{power}").parse().unwrap_or(f64::NAN)))
}
