//! A dialect as data: which commands a role needs, what a driver file says about each, and the facts of its models.

use crate::transport::SerialOptions;
use regex::Regex;
use std::{collections::BTreeMap, fmt, time::Duration};

/// Role an instrument can fill.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub enum RoleKind {
    /// Oscilloscope.
    Scope,
    /// Programmable load.
    Load,
    /// Line source.
    Source,
}

impl fmt::Display for RoleKind {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(match self {
            Self::Scope => "scope",
            Self::Load => "load",
            Self::Source => "source",
        })
    }
}

/// One driver file, checked.
#[derive(Debug, Clone)]
pub struct Definition {
    /// Name, as `driver = "..."` in a station file states it.
    pub name: String,
    /// One line on what it is for.
    pub about: String,
    /// What the maker field of `*IDN?` must match.
    pub maker: Regex,
    /// What the model field must match.
    pub model: Regex,
    /// What ends a message.
    pub terminator: String,
    /// Longest wait for an answer.
    pub reply_timeout: Duration,
    /// Longest pause inside a block.
    pub stall_timeout: Duration,
    /// How a serial line to it is set.
    pub serial: SerialOptions,
    /// Facts of the role.
    pub facts: Facts,
    /// Commands by key; every key of the role is there.
    pub commands: BTreeMap<&'static str, Command>,
}

/// Facts that the commands themselves don't tell.
#[derive(Debug, Clone)]
pub enum Facts {
    /// Of a scope.
    Scope(ScopeFacts),
    /// Of a load.
    Load(LoadFacts),
    /// Of a source.
    Source(SourceFacts),
}

impl Facts {
    /// Which role they belong to.
    pub fn role(&self) -> RoleKind {
        match self {
            Self::Scope(_) => RoleKind::Scope,
            Self::Load(_) => RoleKind::Load,
            Self::Source(_) => RoleKind::Source,
        }
    }
}

/// Facts of a scope.
#[derive(Debug, Clone)]
pub struct ScopeFacts {
    /// Channels, counted from one.
    pub channels: u8,
    /// Divisions from bottom to top.
    pub vertical_divisions: f64,
    /// Divisions from left to right.
    pub horizontal_divisions: f64,
    /// Largest memory depth.
    pub memory_points: u32,
    /// What each place of the preamble holds.
    pub preamble: Vec<PreambleField>,
    /// Acquisition type in the preamble of plain samples.
    pub plain_type: f64,
    /// Converters by model.
    pub converters: Vec<Converter>,
}

/// The converter of some models.
#[derive(Debug, Clone)]
pub struct Converter {
    /// What the model field of `*IDN?` must match.
    pub model: Regex,
    /// Whether samples are sent as words instead of bytes.
    pub words: bool,
    /// Format in the preamble of such samples.
    pub preamble_format: f64,
    /// Codes at or below and at or above which the range clips.
    pub clip_codes: [f64; 2],
}

/// What one place of a preamble holds.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum PreambleField {
    /// Sample format.
    Format,
    /// Acquisition type.
    Type,
    /// Number of samples.
    Points,
    /// Acquisitions put together.
    Count,
    /// Sample interval.
    XIncrement,
    /// Time of the reference sample.
    XOrigin,
    /// Index of the reference sample.
    XReference,
    /// Volts a code.
    YIncrement,
    /// Volts at the reference code.
    YOrigin,
    /// Reference code.
    YReference,
    /// Anything else.
    Ignored,
}

impl PreambleField {
    /// Names in a driver file.
    pub(super) const NAMES: [(&'static str, Self); 11] = [
        ("format", Self::Format),
        ("type", Self::Type),
        ("points", Self::Points),
        ("count", Self::Count),
        ("x_increment", Self::XIncrement),
        ("x_origin", Self::XOrigin),
        ("x_reference", Self::XReference),
        ("y_increment", Self::YIncrement),
        ("y_origin", Self::YOrigin),
        ("y_reference", Self::YReference),
        ("ignored", Self::Ignored),
    ];
}

/// Facts of a load.
#[derive(Debug, Clone)]
pub struct LoadFacts {
    /// Smallest current it can be set to.
    pub smallest_current_a: f64,
    /// Current ranges, smallest first.
    pub current_ranges_a: Vec<f64>,
}

/// Facts of a source.
#[derive(Debug, Clone)]
pub struct SourceFacts {
    /// Voltage ranges (rms), smallest first.
    pub voltage_ranges_v: Vec<f64>,
    /// Bits of the questionable condition that mean a limited current.
    pub limiting_mask: u32,
}

/// One command of a driver file.
#[derive(Debug, Clone, Default)]
pub struct Command {
    /// Template that sets or does; `{value}`, `{word}` and `{channel}` are filled in.
    pub set: Option<String>,
    /// Template that asks.
    pub get: Option<String>,
    /// Answer expected after a channel was chosen.
    pub answer: Option<String>,
    /// Words of the instrument for each of ours: the first is sent, each is understood.
    pub words: BTreeMap<&'static str, Vec<String>>,
}

/// What a role needs of one command.
#[derive(Debug, Clone, Copy)]
pub(super) struct Rule {
    pub(super) key: &'static str,
    pub(super) use_: Use,
    pub(super) per_channel: bool,
}

/// How a command is used.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Use {
    /// Does something; no value, no answer.
    Action,
    /// A number that is set and read back.
    Number,
    /// One of our words that is set and read back.
    Word(&'static [&'static str]),
    /// A channel that is chosen and read back.
    Channel,
    /// A question.
    Question,
    /// A question answered by one of our words.
    WordQuestion(&'static [&'static str]),
}

const fn rule(key: &'static str, use_: Use) -> Rule {
    Rule { key, use_, per_channel: false }
}

const fn channel_rule(key: &'static str, use_: Use) -> Rule {
    Rule { key, use_, per_channel: true }
}

const ON_OFF: Use = Use::Word(&["on", "off"]);

impl RoleKind {
    /// Every command the role needs.
    pub(super) fn rules(self) -> &'static [Rule] {
        match self {
            Self::Scope => &SCOPE,
            Self::Load => &LOAD,
            Self::Source => &SOURCE,
        }
    }
}

const SCOPE: [Rule; 28] = [
    channel_rule("display", ON_OFF),
    channel_rule("scale", Use::Number),
    channel_rule("offset", Use::Number),
    channel_rule("probe", Use::Number),
    channel_rule("coupling", Use::Word(&["dc"])),
    channel_rule("bandwidth_limit", ON_OFF),
    rule("time_scale", Use::Number),
    rule("time_position", Use::Number),
    rule("acquire_type", Use::Word(&["normal"])),
    rule("points", Use::Number),
    rule("sample_rate", Use::Question),
    rule("complete", Use::Question),
    rule("acquisitions", Use::Question),
    rule("trigger_mode", Use::Word(&["edge"])),
    rule("trigger_source", Use::Channel),
    rule("trigger_level", Use::Number),
    rule("trigger_slope", Use::Word(&["rising", "falling"])),
    rule("trigger_sweep", Use::Word(&["normal"])),
    rule("trigger_holdoff", Use::Number),
    rule("trigger_status", Use::WordQuestion(&["armed", "stopped", "free_running"])),
    rule("stop", Use::Action),
    rule("single", Use::Action),
    rule("waveform_source", Use::Channel),
    rule("waveform_format", Use::Word(&["byte", "word"])),
    rule("waveform_byte_order", Use::Word(&["most_significant_first"])),
    rule("waveform_unsigned", Use::Word(&["on"])),
    rule("waveform_preamble", Use::Question),
    rule("waveform_data", Use::Question),
];

const LOAD: [Rule; 7] = [
    rule("remote", Use::Action),
    rule("input", ON_OFF),
    rule("function", Use::Word(&["constant_current"])),
    rule("current", Use::Number),
    rule("current_range", Use::Number),
    rule("measure_voltage", Use::Question),
    rule("measure_current", Use::Question),
];

const SOURCE: [Rule; 9] = [
    rule("output", ON_OFF),
    rule("voltage", Use::Number),
    rule("voltage_range", Use::Number),
    rule("frequency", Use::Number),
    rule("current_limit", Use::Number),
    rule("measure_voltage", Use::Question),
    rule("measure_current", Use::Question),
    rule("measure_power", Use::Question),
    rule("questionable_condition", Use::Question),
];
