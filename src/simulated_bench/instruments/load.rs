//! A programmable load: constant current in two ranges or constant resistance, with setting and reading errors and a small
//! leakage while its input is off. Settings need remote control, as on a serial line. Below its minimum operating voltage
//! it draws less than it is set to, down to nothing; the equations of the output hold that.

use super::{
    bench::{Draw, SharedBench, quirk, random},
    device::{Dialect, Form, Reply},
    error::ScpiError,
    parameter::{Call, Unit, nr1, nr3},
};
use crate::converter::LoadDemand;
use rand::RngExt;

const MAXIMUM_A: f64 = 30.0;
const LOW_RANGE_A: f64 = 3.0;
const MAXIMUM_W: f64 = 150.0;
const RESISTANCE_OHM: std::ops::RangeInclusive<f64> = 0.1..=10e3;

/// Commands of the load.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Command {
    /// Remote control.
    Remote,
    /// Local control.
    Local,
    /// Input on or off.
    Input,
    /// Constant current or constant resistance.
    Function,
    /// Current level.
    Current,
    /// Current range.
    CurrentRange,
    /// Resistance level.
    Resistance,
    /// Reads a voltage.
    MeasureVoltage,
    /// Reads a current.
    MeasureCurrent,
    /// Reads a power.
    MeasurePower,
}

#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Function {
    Current,
    Resistance,
}

/// The load.
pub struct Load {
    bench: SharedBench,
    seed: u64,
    remote: bool,
    settings: Settings,
    readings: u64,
}

#[derive(Debug, Clone, Copy, PartialEq)]
struct Settings {
    on: bool,
    function: Function,
    current_a: f64,
    range_a: f64,
    resistance_ohm: f64,
}

impl Default for Settings {
    fn default() -> Self {
        Self { on: false, function: Function::Current, current_a: 0.0, range_a: MAXIMUM_A, resistance_ohm: 10e3 }
    }
}

impl Load {
    /// The load across the output of the bench's board, input off, under local control.
    pub fn new(bench: SharedBench, seed: u64) -> Self {
        let load = Self { bench, seed, remote: false, settings: Settings::default(), readings: 0 };
        load.apply();
        load
    }

    fn quirk(&self, index: u64) -> f64 {
        let range = u64::from(self.settings.range_a > LOW_RANGE_A);
        quirk(self.seed, "load", 16 * range + index)
    }

    /// What it really draws: 0.1 % of setting and 0.05 % of range.
    fn demand(&self) -> LoadDemand {
        let Settings { function, current_a, range_a, resistance_ohm, .. } = self.settings;
        match function {
            Function::Current if current_a == 0.0 => LoadDemand::Off,
            Function::Current => {
                let drawn_a = current_a * (1.0 + 1e-3 * self.quirk(0)) + 5e-4 * range_a * self.quirk(1);
                LoadDemand::Current(drawn_a.max(0.0))
            }
            Function::Resistance => LoadDemand::Resistance(resistance_ohm * (1.0 + 5e-3 * self.quirk(2))),
        }
    }

    fn apply(&self) {
        // Between 100 kilohm and 1 megohm: some 10 to 100 microampere at the usual outputs.
        let leakage_ohm = 550e3 + 450e3 * quirk(self.seed, "load leakage", 0);
        let draw = Draw { on: self.settings.on, demand: self.demand(), leakage_ohm };
        self.bench.now().set_draw(draw);
    }

    /// Voltage and current as its meters show them: 0.05 % of reading, some digits of noise.
    fn read(&mut self) -> (f64, f64) {
        self.readings += 1;
        let mut noise = random(&[self.seed, self.readings, 0x10ad]);
        let mut wiggle = |size: f64| size * noise.random_range(-1.0..1.0);
        let (voltage_v, current_a) = {
            let bench = self.bench.now();
            (bench.plant().output_voltage(), bench.plant().output_current())
        };
        let shown_v = voltage_v * (1.0 + 5e-4 * quirk(self.seed, "load meter", 0)) + wiggle(1e-3);
        let shown_a = current_a * (1.0 + 5e-4 * self.quirk(3)) + wiggle(2e-5 * self.settings.range_a);
        (shown_v.max(0.0), shown_a.max(0.0))
    }

    fn set(&mut self, command: Command, call: &Call<'_>) -> Result<(), ScpiError> {
        let mut next = self.settings;
        match command {
            Command::Input => next.on = call.switch()?,
            Command::Function => {
                let choices = [("CURRent", Function::Current), ("RESistance", Function::Resistance)];
                next.function = call.choice(&choices)?;
            }
            Command::Current => next.current_a = call.number(Unit::A, 0.0..=next.range_a)?,
            Command::CurrentRange => {
                let wanted_a = call.number(Unit::A, 0.0..=MAXIMUM_A)?;
                next.range_a = if wanted_a <= LOW_RANGE_A { LOW_RANGE_A } else { MAXIMUM_A };
                if next.current_a > next.range_a {
                    return Err(ScpiError::settings_conflict("the current set is above that range"));
                }
            }
            Command::Resistance => next.resistance_ohm = call.number(Unit::Ohm, RESISTANCE_OHM)?,
            _ => return Err(ScpiError::undefined_header("")),
        }
        let power_w = self.bench.now().plant().output_voltage() * next.current_a;
        if next.on && next.function == Function::Current && power_w > MAXIMUM_W {
            return Err(ScpiError::out_of_range("above the power the load can take"));
        }
        self.settings = next;
        self.apply();
        Ok(())
    }

    fn answer(&mut self, command: Command) -> Option<String> {
        let Settings { on, function, current_a, range_a, resistance_ohm } = self.settings;
        Some(match command {
            Command::Input => nr1(on),
            Command::Function => String::from(if function == Function::Current { "CURR" } else { "RES" }),
            Command::Current => nr3(current_a),
            Command::CurrentRange => nr3(range_a),
            Command::Resistance => nr3(resistance_ohm),
            Command::MeasureVoltage => nr3(self.read().0),
            Command::MeasureCurrent => nr3(self.read().1),
            Command::MeasurePower => {
                let (voltage_v, current_a) = self.read();
                nr3(voltage_v * current_a)
            }
            Command::Remote | Command::Local => return None,
        })
    }
}

impl Dialect for Load {
    type Command = Command;

    const COMMANDS: &'static [(&'static str, Form, Command)] = &[
        ("SYSTem:REMote", Form::Set, Command::Remote),
        ("SYSTem:LOCal", Form::Set, Command::Local),
        ("INPut[:STATe]", Form::Both, Command::Input),
        ("FUNCtion", Form::Both, Command::Function),
        ("CURRent[:LEVel]", Form::Both, Command::Current),
        ("CURRent:RANGe", Form::Both, Command::CurrentRange),
        ("RESistance[:LEVel]", Form::Both, Command::Resistance),
        ("MEASure:VOLTage", Form::Query, Command::MeasureVoltage),
        ("MEASure:CURRent", Form::Query, Command::MeasureCurrent),
        ("MEASure:POWer", Form::Query, Command::MeasurePower),
    ];

    fn identity(&self) -> String {
        format!("SIMULATED BENCH,LOAD-150,L{:06},1.0", self.seed)
    }

    fn execute(&mut self, command: Command, call: &Call<'_>) -> Reply {
        if call.query {
            return Ok(self.answer(command).map(String::into_bytes));
        }
        match command {
            Command::Remote | Command::Local => {
                call.nothing()?;
                self.remote = command == Command::Remote;
            }
            _ if !self.remote => return Err(ScpiError::command_protected("send SYSTem:REMote first")),
            _ => self.set(command, call)?,
        }
        Ok(None)
    }

    fn reset(&mut self) {
        self.settings = Settings::default();
        self.apply();
    }
}
