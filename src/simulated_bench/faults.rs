//! Faults on purpose: an instrument drops its link, answers garbage, falls silent, sends half an answer, or is gone. Chosen
//! by the message at which they strike, counted over all links of the instrument.

use std::{fmt, str::FromStr};

/// Which instrument.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum InstrumentName {
    /// The oscilloscope.
    Scope,
    /// The load.
    Load,
    /// The line source.
    Source,
}

/// What goes wrong.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum FaultKind {
    /// The link closes before the message is executed; the next connection works.
    Drop,
    /// The message is executed, and the answer is nonsense.
    Garbage,
    /// The message is not executed and not answered.
    Silent,
    /// Half of the answer is sent.
    Truncate,
    /// It never answers again and refuses connections.
    Gone,
}

/// A fault: which instrument, what, and at which message.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Fault {
    /// Which instrument.
    pub instrument: InstrumentName,
    /// What goes wrong.
    pub kind: FaultKind,
    /// At its how manieth message, from 1.
    pub message: u64,
}

/// A fault that cannot be understood.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
#[error(
    "fault `{0}` is not of the form INSTRUMENT:KIND@MESSAGE, for instance source:drop@12 \
         (scope, load, source; drop, garbage, silent, truncate, gone; a serial link cannot drop)"
)]
pub struct FaultError(String);

impl FromStr for Fault {
    type Err = FaultError;

    fn from_str(text: &str) -> Result<Self, FaultError> {
        parse(text).ok_or_else(|| FaultError(text.to_owned()))
    }
}

fn parse(text: &str) -> Option<Fault> {
    let (instrument, rest) = text.split_once(':')?;
    let (kind, message) = rest.split_once('@')?;
    let instrument = match instrument {
        "scope" => InstrumentName::Scope,
        "load" => InstrumentName::Load,
        "source" => InstrumentName::Source,
        _ => return None,
    };
    let kind = match kind {
        "drop" if instrument != InstrumentName::Load => FaultKind::Drop,
        "garbage" => FaultKind::Garbage,
        "silent" => FaultKind::Silent,
        "truncate" => FaultKind::Truncate,
        "gone" => FaultKind::Gone,
        _ => return None,
    };
    let message = message.parse().ok().filter(|message| *message > 0)?;
    Some(Fault { instrument, kind, message })
}

impl fmt::Display for InstrumentName {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(match self {
            Self::Scope => "scope",
            Self::Load => "load",
            Self::Source => "source",
        })
    }
}

/// The faults of one instrument, and how many messages it has had.
#[derive(Debug)]
pub struct FaultPlan {
    faults: Vec<Fault>,
    messages: u64,
}

impl FaultPlan {
    /// The faults that are meant for this instrument.
    pub fn new(faults: &[Fault], instrument: InstrumentName) -> Self {
        let faults = faults.iter().filter(|fault| fault.instrument == instrument).copied().collect();
        Self { faults, messages: 0 }
    }

    /// Counts a message; what goes wrong with it.
    pub fn next_message(&mut self) -> Option<FaultKind> {
        self.messages += 1;
        self.faults.iter().find(|fault| fault.message == self.messages).map(|fault| fault.kind)
    }
}
