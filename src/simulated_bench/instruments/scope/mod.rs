//! An oscilloscope: its commands and queries. What it sees through is in `front_end`, when it triggers in `trigger`, how a
//! capture comes about in `acquisition`, and how it is handed out in `waveform`.

pub mod acquisition;
pub mod front_end;
pub mod job;
pub mod runner;
pub mod settings;
pub mod trigger;
pub mod waveform;

use super::{
    bench::SharedBench,
    device::{Dialect, Form, Reply},
    error::ScpiError,
    parameter::{Call, Unit, nr1, nr3},
};
use runner::Runner;
use settings::{AcquisitionType, Coupling, Limits, Model, Probe, Settings, Slope, Sweep};
use waveform::{ByteOrder, Format, Output};

/// Commands of the scope.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Command {
    /// Channel shown or not.
    Display,
    /// Volts a division at the probe tip.
    Scale,
    /// Volts at the centre of the screen.
    Offset,
    /// Probe factor.
    ProbeFactor,
    /// Coupling.
    Coupling,
    /// Bandwidth limit.
    BandwidthLimit,
    /// Seconds a division.
    TimeScale,
    /// Time of the centre of the screen after the trigger.
    TimePosition,
    /// Kind of acquisition.
    Type,
    /// Memory to use; answers the points of the next acquisition.
    Points,
    /// Sample rate.
    Rate,
    /// Whether the acquisition is complete.
    Complete,
    /// Acquisitions completed since power on.
    Number,
    /// Kind of trigger.
    TriggerMode,
    /// Source of the edge.
    TriggerSource,
    /// Level of the edge.
    TriggerLevel,
    /// Slope of the edge.
    TriggerSlope,
    /// What happens without a trigger.
    Sweep,
    /// Time without an edge before one counts.
    Holdoff,
    /// What the trigger is doing.
    TriggerStatus,
    /// Acquires again and again.
    Run,
    /// Stops acquiring.
    Stop,
    /// Arms one acquisition.
    Single,
    /// Channel to hand out.
    WaveformSource,
    /// Bytes or words.
    WaveformFormat,
    /// Order of the bytes of a word.
    ByteOrder,
    /// Unsigned or signed codes.
    Unsigned,
    /// Scale of the waveform.
    Preamble,
    /// The waveform.
    Data,
}

/// The scope.
pub struct Scope {
    runner: Runner,
    settings: Settings,
    output: Output,
}

impl Scope {
    /// The scope with its probe on the drain node and nothing on its second channel.
    pub fn new(bench: SharedBench, seed: u64, model: Model, probe: Probe) -> Self {
        Self {
            runner: Runner::new(bench, seed, model, probe),
            settings: Settings::default(),
            output: Output::default(),
        }
    }

    fn set(&mut self, command: Command, call: &Call<'_>) -> Result<(), ScpiError> {
        let mut next = self.settings.clone();
        match command {
            Command::Display
            | Command::Scale
            | Command::Offset
            | Command::ProbeFactor
            | Command::Coupling
            | Command::BandwidthLimit => set_channel(&mut next, command, call)?,
            Command::TriggerMode
            | Command::TriggerSource
            | Command::TriggerLevel
            | Command::TriggerSlope
            | Command::Sweep
            | Command::Holdoff => set_trigger(&mut next, command, call)?,
            Command::TimeScale => next.time_scale_s = settings::snap_up(call.number(Unit::S, Limits::TIME_SCALE_S)?),
            Command::TimePosition => next.time_position_s = call.number(Unit::S, Limits::TIME_POSITION_S)?,
            Command::Type => next.kind = call.choice(&AcquisitionType::CHOICES)?,
            Command::Points => next.memory = settings::memory(call.number(Unit::None, Limits::MEMORY)?),
            _ => return self.act(command, call),
        }
        if next != self.settings {
            self.settings = next;
            self.runner.settings_changed();
        }
        Ok(())
    }

    fn act(&mut self, command: Command, call: &Call<'_>) -> Result<(), ScpiError> {
        match command {
            Command::WaveformSource => self.output.channel = channel_choice(call)?,
            Command::WaveformFormat => self.output.format = call.choice(&Format::CHOICES)?,
            Command::ByteOrder => self.output.order = call.choice(&ByteOrder::CHOICES)?,
            Command::Unsigned => self.output.unsigned = call.switch()?,
            _ => {
                call.nothing()?;
                match command {
                    Command::Run => self.runner.run(),
                    Command::Stop => self.runner.stop(),
                    _ => self.runner.single(),
                }
            }
        }
        Ok(())
    }

    fn answer(&self, command: Command, channel: usize) -> Reply {
        let settings = &self.settings;
        let shown = &settings.channels[channel];
        let text = match command {
            Command::Display => nr1(shown.display),
            Command::Scale => nr3(shown.scale_v),
            Command::Offset => nr3(shown.offset_v),
            Command::ProbeFactor => nr3(shown.probe_factor),
            Command::Coupling => name(&Coupling::CHOICES, shown.coupling),
            Command::BandwidthLimit => nr1(shown.bandwidth_limit),
            Command::TimeScale => nr3(settings.time_scale_s),
            Command::TimePosition => nr3(settings.time_position_s),
            Command::Type => name(&AcquisitionType::CHOICES, settings.kind),
            Command::Points => settings.points().to_string(),
            Command::Rate => nr3(settings.rate_hz()),
            Command::Complete => String::from(if self.runner.is_complete() { "100" } else { "0" }),
            Command::Number => self.runner.number().to_string(),
            Command::TriggerMode => String::from("EDGE"),
            Command::TriggerSource => format!("CHAN{}", settings.trigger.channel + 1),
            Command::TriggerLevel => nr3(settings.trigger.level_v),
            Command::TriggerSlope => name(&Slope::CHOICES, settings.trigger.slope),
            Command::Sweep => name(&Sweep::CHOICES, settings.trigger.sweep),
            Command::Holdoff => nr3(settings.trigger.holdoff_s),
            Command::TriggerStatus => String::from(self.runner.status(settings.trigger.sweep)),
            Command::WaveformSource => format!("CHAN{}", self.output.channel + 1),
            Command::WaveformFormat => name(&Format::CHOICES, self.output.format),
            Command::ByteOrder => name(&ByteOrder::CHOICES, self.output.order),
            Command::Unsigned => nr1(self.output.unsigned),
            Command::Preamble => self.output.preamble(self.runner.record()?)?,
            Command::Data => return self.output.block(self.runner.record()?).map(Some),
            Command::Run | Command::Stop | Command::Single => return Err(ScpiError::undefined_header("")),
        };
        Ok(Some(text.into_bytes()))
    }
}

fn set_channel(next: &mut Settings, command: Command, call: &Call<'_>) -> Result<(), ScpiError> {
    let channel = &mut next.channels[channel_index(call.suffix)?];
    match command {
        Command::Display => channel.display = call.switch()?,
        Command::Scale => channel.scale_v = call.number(Unit::V, Limits::scale_v(channel.probe_factor))?,
        Command::Offset => channel.offset_v = call.number(Unit::V, Limits::offset_v(channel.probe_factor))?,
        Command::ProbeFactor => channel.set_probe_factor(call.number(Unit::None, Limits::PROBE_FACTOR)?),
        Command::Coupling => channel.coupling = call.choice(&Coupling::CHOICES)?,
        _ => channel.bandwidth_limit = call.switch()?,
    }
    Ok(())
}

fn set_trigger(next: &mut Settings, command: Command, call: &Call<'_>) -> Result<(), ScpiError> {
    let factor = next.channels[next.trigger.channel].probe_factor;
    let trigger = &mut next.trigger;
    match command {
        Command::TriggerMode => call.choice(&[("EDGE", ())])?,
        Command::TriggerSource => trigger.channel = channel_choice(call)?,
        Command::TriggerLevel => trigger.level_v = call.number(Unit::V, Limits::offset_v(factor))?,
        Command::TriggerSlope => trigger.slope = call.choice(&Slope::CHOICES)?,
        Command::Sweep => trigger.sweep = call.choice(&Sweep::CHOICES)?,
        _ => trigger.holdoff_s = call.number(Unit::S, Limits::HOLDOFF_S)?,
    }
    Ok(())
}

fn channel_index(suffix: u32) -> Result<usize, ScpiError> {
    match suffix {
        1 | 2 => Ok(suffix as usize - 1),
        _ => Err(ScpiError::header_suffix(suffix.to_string())),
    }
}

fn channel_choice(call: &Call<'_>) -> Result<usize, ScpiError> {
    call.choice(&[("CHANnel1", 0), ("CHAN1", 0), ("CHANnel2", 1), ("CHAN2", 1)])
}

fn name<T: PartialEq>(choices: &[(&'static str, T)], value: T) -> String {
    let keyword = choices.iter().find(|(_, choice)| *choice == value).map_or("", |(keyword, _)| keyword);
    super::pattern::short_form(keyword).to_owned()
}

impl Dialect for Scope {
    type Command = Command;

    const COMMANDS: &'static [(&'static str, Form, Command)] = &[
        ("CHANnel#:DISPlay", Form::Both, Command::Display),
        ("CHANnel#:SCALe", Form::Both, Command::Scale),
        ("CHANnel#:OFFSet", Form::Both, Command::Offset),
        ("CHANnel#:PROBe", Form::Both, Command::ProbeFactor),
        ("CHANnel#:COUPling", Form::Both, Command::Coupling),
        ("CHANnel#:BWLimit", Form::Both, Command::BandwidthLimit),
        ("TIMebase:SCALe", Form::Both, Command::TimeScale),
        ("TIMebase:POSition", Form::Both, Command::TimePosition),
        ("ACQuire:TYPE", Form::Both, Command::Type),
        ("ACQuire:POINts", Form::Both, Command::Points),
        ("ACQuire:SRATe", Form::Query, Command::Rate),
        ("ACQuire:COMPlete", Form::Query, Command::Complete),
        ("ACQuire:NUMBer", Form::Query, Command::Number),
        ("TRIGger:MODE", Form::Both, Command::TriggerMode),
        ("TRIGger:EDGE:SOURce", Form::Both, Command::TriggerSource),
        ("TRIGger:EDGE:LEVel", Form::Both, Command::TriggerLevel),
        ("TRIGger:EDGE:SLOPe", Form::Both, Command::TriggerSlope),
        ("TRIGger:SWEep", Form::Both, Command::Sweep),
        ("TRIGger:HOLDoff", Form::Both, Command::Holdoff),
        ("TRIGger:STATus", Form::Query, Command::TriggerStatus),
        ("RUN", Form::Set, Command::Run),
        ("STOP", Form::Set, Command::Stop),
        ("SINGle", Form::Set, Command::Single),
        ("WAVeform:SOURce", Form::Both, Command::WaveformSource),
        ("WAVeform:FORMat", Form::Both, Command::WaveformFormat),
        ("WAVeform:BYTeorder", Form::Both, Command::ByteOrder),
        ("WAVeform:UNSigned", Form::Both, Command::Unsigned),
        ("WAVeform:PREamble", Form::Query, Command::Preamble),
        ("WAVeform:DATA", Form::Query, Command::Data),
    ];

    fn identity(&self) -> String {
        format!("SIMULATED BENCH,SCOPE-{},{},1.0", self.runner.model().bits, self.runner.serial_number())
    }

    fn execute(&mut self, command: Command, call: &Call<'_>) -> Reply {
        if call.query {
            return self.answer(command, channel_index(call.suffix)?);
        }
        self.set(command, call).map(|()| None)
    }

    fn reset(&mut self) {
        self.settings = Settings::default();
        self.output = Output::default();
        self.runner.reset();
    }

    fn service(&mut self) {
        self.runner.service(&self.settings);
    }
}
