//! The roles of a station as traits: what the sequence may ask of a scope, a load and a line source. SI units.

use serde::{Deserialize, Serialize};
use std::{future::Future, pin::Pin};

/// The future of one instrument exchange.
pub type Exchange<'a, T> = Pin<Box<dyn Future<Output = Result<T, super::InstrumentError>> + Send + 'a>>;

/// Who answered at an address.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize)]
pub struct Identity {
    /// The four fields of `*IDN?` as they came.
    pub maker: String,
    /// Model.
    pub model: String,
    /// Serial number.
    pub serial_number: String,
    /// Firmware.
    pub firmware: String,
    /// Name of the driver that speaks its dialect; `by_hand` for a role filled by an operator.
    pub driver: String,
    /// Address it was reached at.
    pub address: String,
    /// Whether it declares itself simulated or played back.
    pub simulated: bool,
}

/// Vertical setting of one channel, at the probe tip.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Vertical {
    /// Lowest voltage the range can show.
    pub bottom_v: f64,
    /// Highest voltage the range can show.
    pub top_v: f64,
}

/// Horizontal setting.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Horizontal {
    /// Length of the window.
    pub window_s: f64,
    /// Time from the trigger to the start of the window; negative shows what came before the trigger.
    pub start_s: f64,
    /// Longest sample interval that will do: no more memory is used than it takes. `None` asks for all the memory there is.
    pub interval_s: Option<f64>,
}

/// Direction of an edge.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum Slope {
    /// Rising.
    Rising,
    /// Falling.
    Falling,
}

/// Edge trigger on the drain channel; always the normal mode, never automatic.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Trigger {
    /// Level at the probe tip.
    pub level_v: f64,
    /// Edge direction.
    pub slope: Slope,
    /// Time since the last edge of this kind before the trigger is accepted again.
    pub holdoff_s: f64,
}

/// What the scope really set, read back.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Timing {
    /// Sample interval.
    pub interval_s: f64,
    /// Number of samples the next acquisition holds.
    pub points: usize,
}

/// One acquisition exactly as the scope sent it, with what is needed to scale it:
/// volts = (code - code_reference) * volts_per_code + volts_origin; seconds = (index - index_reference) * interval + origin.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct RawWaveform {
    /// Payload of the block.
    #[serde(skip)]
    pub payload: Vec<u8>,
    /// How codes stand in the payload.
    pub format: SampleFormat,
    /// Volts a code at the probe tip.
    pub volts_per_code: f64,
    /// Volts at the reference code.
    pub volts_origin: f64,
    /// Reference code.
    pub code_reference: f64,
    /// Sample interval.
    pub interval_s: f64,
    /// Time of the reference sample from the trigger.
    pub time_origin_s: f64,
    /// Index of the reference sample.
    pub index_reference: f64,
    /// Codes at or below / at or above which the range clips.
    pub clip_codes: [f64; 2],
    /// The scope's own count of the acquisition: proof that it is new.
    pub acquisition: u64,
    /// The preamble as the scope sent it.
    pub preamble: String,
}

/// How codes stand in a payload.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum SampleFormat {
    /// Unsigned bytes.
    U8,
    /// Signed bytes.
    I8,
    /// Unsigned 16-bit words, most significant byte first.
    U16Be,
    /// Unsigned 16-bit words, least significant byte first.
    U16Le,
    /// Signed 16-bit words, most significant byte first.
    I16Be,
    /// Signed 16-bit words, least significant byte first.
    I16Le,
}

/// An oscilloscope with the drain node on one channel.
pub trait Scope: Send {
    /// Who it is.
    fn identity(&self) -> &Identity;
    /// Puts it into a known state without a reset of anything energised: sample mode, one channel, probe factor, DC coupling.
    fn prepare(&mut self, channel: u8, probe_factor: f64) -> Exchange<'_, ()>;
    /// Sets the vertical range to at least the one asked for; returns what the scope set.
    fn set_vertical(&mut self, wanted: Vertical) -> Exchange<'_, Vertical>;
    /// Sets the window at full memory; returns the sample interval and count read back.
    fn set_horizontal(&mut self, wanted: Horizontal) -> Exchange<'_, Timing>;
    /// Sets the trigger.
    fn set_trigger(&mut self, wanted: Trigger) -> Exchange<'_, ()>;
    /// Arms a single acquisition and proves that it is armed.
    fn arm(&mut self) -> Exchange<'_, ()>;
    /// Whether the armed acquisition is complete.
    fn is_complete(&mut self) -> Exchange<'_, bool>;
    /// Reads the completed acquisition; refuses one that is not new, not complete, or of another count or interval.
    fn read(&mut self) -> Exchange<'_, RawWaveform>;
    /// Stops acquiring.
    fn stop(&mut self) -> Exchange<'_, ()>;
}

/// What a load sees.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct LoadReading {
    /// Voltage at its terminals.
    pub voltage_v: f64,
    /// Current it draws.
    pub current_a: f64,
}

impl LoadReading {
    /// Power it draws in watt.
    pub fn power_w(&self) -> f64 {
        self.voltage_v * self.current_a
    }
}

/// A programmable load on the main output.
pub trait Load: Send {
    /// Who it is.
    fn identity(&self) -> &Identity;
    /// Takes remote control, with the input off.
    fn prepare(&mut self) -> Exchange<'_, ()>;
    /// Draws a constant current from now on; below the smallest settable current this is the same as `off`.
    fn draw(&mut self, current_a: f64) -> Exchange<'_, ()>;
    /// Input off, read back.
    fn off(&mut self) -> Exchange<'_, ()>;
    /// Reads voltage and current.
    fn read(&mut self) -> Exchange<'_, LoadReading>;
}

/// What a line source sees.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct SourceReading {
    /// Root-mean-square output voltage.
    pub voltage_v: f64,
    /// Root-mean-square current.
    pub current_a: f64,
    /// Real power; `None` where it is not measured.
    pub power_w: Option<f64>,
    /// Whether the source limits its current.
    pub limiting: bool,
}

/// A line source.
pub trait Source: Send {
    /// Who it is.
    fn identity(&self) -> &Identity;
    /// Takes control with the output off and programs the current limit, read back. An output found on is refused.
    fn prepare(&mut self, current_limit_a: f64) -> Exchange<'_, ()>;
    /// Sets voltage and frequency, read back; does not change the output state.
    fn set_line(&mut self, voltage_rms_v: f64, frequency_hz: f64) -> Exchange<'_, ()>;
    /// Output on, read back.
    fn on(&mut self) -> Exchange<'_, ()>;
    /// Output off, read back.
    fn off(&mut self) -> Exchange<'_, ()>;
    /// Reads what it delivers; `None` from a source without meters.
    fn read(&mut self) -> Exchange<'_, Option<SourceReading>>;
}
