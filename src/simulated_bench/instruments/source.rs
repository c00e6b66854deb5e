//! An AC line source: two voltage ranges, frequency, current limit, meters of its own, and a questionable status that tells
//! when the limit acts.

use super::{
    bench::{Line, SharedBench, quirk, random},
    device::{Dialect, Form, Reply},
    error::ScpiError,
    parameter::{Call, Unit, nr1, nr3},
};
use rand::RngExt;

const RANGES_V: [f64; 2] = [150.0, 300.0];
const FREQUENCY_HZ: std::ops::RangeInclusive<f64> = 45.0..=500.0;

/// Bit 1 of the questionable register: current (SCPI-99, volume 1, 9.4).
const QUESTIONABLE_CURRENT: u16 = 1 << 1;

/// Commands of the source.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Command {
    /// Output on or off.
    Output,
    /// Voltage, root mean square.
    Voltage,
    /// Voltage range.
    VoltageRange,
    /// Frequency.
    Frequency,
    /// Current limit, root mean square.
    CurrentLimit,
    /// Reads a voltage.
    MeasureVoltage,
    /// Reads a current.
    MeasureCurrent,
    /// Reads a real power.
    MeasurePower,
    /// Reads the condition of the questionable status.
    Questionable,
}

#[derive(Debug, Clone, Copy, PartialEq)]
struct Settings {
    on: bool,
    voltage_v: f64,
    range_v: f64,
    frequency_hz: f64,
    limit_a: f64,
}

impl Default for Settings {
    fn default() -> Self {
        Self { on: false, voltage_v: 0.0, range_v: RANGES_V[0], frequency_hz: 50.0, limit_a: 1.0 }
    }
}

impl Settings {
    /// Highest current: 500 VA at the end of the range.
    fn maximum_a(&self) -> f64 {
        500.0 / self.range_v
    }
}

/// The source.
pub struct Source {
    bench: SharedBench,
    seed: u64,
    settings: Settings,
    readings: u64,
}

impl Source {
    /// The source on the line terminals of the bench's board, output off.
    pub fn new(bench: SharedBench, seed: u64) -> Self {
        Self { bench, seed, settings: Settings::default(), readings: 0 }
    }

    /// What it really delivers: 0.2 % of setting and 0.1 % of range.
    fn delivered_v(&self) -> f64 {
        let Settings { voltage_v, range_v, .. } = self.settings;
        let range = u64::from(range_v > RANGES_V[0]);
        let offset_v = if voltage_v > 0.0 { 1e-3 * range_v * quirk(self.seed, "source offset", range) } else { 0.0 };
        (voltage_v * (1.0 + 2e-3 * quirk(self.seed, "source gain", range)) + offset_v).max(0.0)
    }

    fn apply(&self) {
        let Settings { on, frequency_hz, limit_a, .. } = self.settings;
        self.bench.now().set_line(Line { on, rms_v: self.delivered_v(), frequency_hz, limit_a });
    }

    fn measure(&mut self, command: Command) -> f64 {
        self.readings += 1;
        let mut noise = random(&[self.seed, self.readings, 0x50ce]);
        let mut shown = |value: f64, digit: f64| (value + digit * noise.random_range(-1.0..1.0)).max(0.0);
        let bench = self.bench.now();
        let plant = bench.plant();
        match command {
            Command::MeasureVoltage if self.settings.on => shown(self.delivered_v(), 0.05),
            Command::MeasureVoltage => shown(0.0, 0.05),
            Command::MeasureCurrent => shown(plant.line_current_rms(), 2e-4),
            _ => shown(plant.line_power(), 0.005),
        }
    }

    fn set(&mut self, command: Command, call: &Call<'_>) -> Result<(), ScpiError> {
        let mut next = self.settings;
        match command {
            Command::Output => next.on = call.switch()?,
            Command::Voltage => next.voltage_v = call.number(Unit::V, 0.0..=next.range_v)?,
            Command::VoltageRange => self.range(&mut next, call)?,
            Command::Frequency => next.frequency_hz = call.number(Unit::Hz, FREQUENCY_HZ)?,
            Command::CurrentLimit => next.limit_a = call.number(Unit::A, 0.01..=next.maximum_a())?,
            _ => return Err(ScpiError::undefined_header("")),
        }
        self.settings = next;
        self.apply();
        Ok(())
    }

    fn range(&self, next: &mut Settings, call: &Call<'_>) -> Result<(), ScpiError> {
        let wanted_v = call.number(Unit::V, 0.0..=RANGES_V[1])?;
        next.range_v = if wanted_v <= RANGES_V[0] { RANGES_V[0] } else { RANGES_V[1] };
        if next.range_v == self.settings.range_v {
            return Ok(());
        }
        if next.on {
            return Err(ScpiError::settings_conflict("the range cannot change while the output is on"));
        }
        if next.voltage_v > next.range_v {
            return Err(ScpiError::settings_conflict("the voltage set is above that range"));
        }
        next.limit_a = next.limit_a.min(next.maximum_a());
        Ok(())
    }

    fn condition(&self) -> u16 {
        if self.bench.now().plant().line_limiting() { QUESTIONABLE_CURRENT } else { 0 }
    }
}

impl Dialect for Source {
    type Command = Command;

    const COMMANDS: &'static [(&'static str, Form, Command)] = &[
        ("OUTPut[:STATe]", Form::Both, Command::Output),
        ("VOLTage[:LEVel]", Form::Both, Command::Voltage),
        ("VOLTage:RANGe", Form::Both, Command::VoltageRange),
        ("FREQuency", Form::Both, Command::Frequency),
        ("CURRent:LIMit", Form::Both, Command::CurrentLimit),
        ("MEASure:VOLTage", Form::Query, Command::MeasureVoltage),
        ("MEASure:CURRent", Form::Query, Command::MeasureCurrent),
        ("MEASure:POWer", Form::Query, Command::MeasurePower),
        ("STATus:QUEStionable:CONDition", Form::Query, Command::Questionable),
    ];

    fn identity(&self) -> String {
        format!("SIMULATED BENCH,SOURCE-500,P{:06},1.0", self.seed)
    }

    fn execute(&mut self, command: Command, call: &Call<'_>) -> Reply {
        if !call.query {
            return self.set(command, call).map(|()| None);
        }
        let Settings { on, voltage_v, range_v, frequency_hz, limit_a } = self.settings;
        let answer = match command {
            Command::Output => nr1(on),
            Command::Voltage => nr3(voltage_v),
            Command::VoltageRange => nr3(range_v),
            Command::Frequency => nr3(frequency_hz),
            Command::CurrentLimit => nr3(limit_a),
            Command::Questionable => self.condition().to_string(),
            _ => nr3(self.measure(command)),
        };
        Ok(Some(answer.into_bytes()))
    }

    fn reset(&mut self) {
        self.settings = Settings::default();
        self.apply();
    }

    fn is_questionable(&self) -> bool {
        self.condition() != 0
    }
}
