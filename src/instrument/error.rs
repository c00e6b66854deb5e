//! What went wrong with an instrument: a small kind, which instrument and command, what was seen, and what to do next.

use crate::scpi::ScpiError;
use std::fmt;

/// A failed step on an instrument.
#[derive(Debug, thiserror::Error)]
pub struct InstrumentError {
    /// Which kind.
    pub kind: InstrumentErrorKind,
    /// Name of the instrument or role.
    pub instrument: String,
    /// Its address; empty for a role filled by hand.
    pub address: String,
    /// What was seen, in one clause, with the command it belongs to.
    pub detail: String,
    /// The exchange that failed, where one did.
    #[source]
    pub source: Option<Box<ScpiError>>,
}

/// Kinds of failed step.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum InstrumentErrorKind {
    /// The exchange itself failed.
    Exchange,
    /// The instrument put an error into its queue.
    Reported,
    /// A setting read back differs from the one sent.
    NotAsSet,
    /// An answer can't be what was asked for.
    Unexpected,
    /// What was asked for is outside what the instrument can do.
    OutOfRange,
    /// The output or input was found on.
    AlreadyOn,
    /// The scope does not arm.
    NotArmed,
    /// No acquisition was completed since arming.
    NotNew,
    /// The acquisition is not complete.
    Incomplete,
    /// The record is not the one promised: another count, interval or kind of acquisition.
    WrongRecord,
    /// No driver suits the instrument, or none that fills this role.
    NoDriver,
    /// A role filled by hand needs an operator, and nobody attends.
    Unattended,
    /// The operator called it off.
    CalledOff,
}

impl InstrumentErrorKind {
    fn next(self) -> &'static str {
        match self {
            Self::Exchange => "see the cause",
            Self::Reported => "check that the driver suits this instrument and that its limits allow the setting",
            Self::NotAsSet => "check the instrument's limits, and that nobody uses its front panel",
            Self::Unexpected => "check that the driver suits this instrument",
            Self::OutOfRange => "change the plan, or use another instrument",
            Self::AlreadyOn => "find out what it is feeding, switch it off by hand, then start again",
            Self::NotArmed => "check the trigger settings, and that nobody uses its front panel",
            Self::NotNew => "check the trigger level against the waveform",
            Self::Incomplete => "wait for the acquisition, or check the trigger level",
            Self::WrongRecord => "check that nobody uses its front panel, and that the driver suits this instrument",
            Self::NoDriver => {
                "list the drivers with `ringstep drivers`, add one to your folder, or state one in the station file"
            }
            Self::Unattended => "run attended at a terminal, or give this role an instrument with an interface",
            Self::CalledOff => "start again when ready",
        }
    }
}

impl fmt::Display for InstrumentErrorKind {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(match self {
            Self::Exchange => "failed an exchange",
            Self::Reported => "reported an error",
            Self::NotAsSet => "did not take a setting",
            Self::Unexpected => "gave an unexpected answer",
            Self::OutOfRange => "can't do that",
            Self::AlreadyOn => "was found switched on",
            Self::NotArmed => "did not arm",
            Self::NotNew => "holds no new acquisition",
            Self::Incomplete => "has not completed its acquisition",
            Self::WrongRecord => "sent another record than was promised",
            Self::NoDriver => "has no driver",
            Self::Unattended => "is set by hand, and nobody attends",
            Self::CalledOff => "was called off by the operator",
        })
    }
}

impl fmt::Display for InstrumentError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        if let (InstrumentErrorKind::Exchange, Some(source)) = (self.kind, &self.source) {
            return write!(f, "{source}");
        }
        write!(f, "{}", self.instrument)?;
        if !self.address.is_empty() {
            write!(f, " at {}", self.address)?;
        }
        write!(f, " {}: {}; {}", self.kind, self.detail, self.kind.next())
    }
}

impl From<Box<ScpiError>> for InstrumentError {
    fn from(source: Box<ScpiError>) -> Self {
        Self {
            kind: InstrumentErrorKind::Exchange,
            instrument: source.instrument.clone(),
            address: source.address.clone(),
            detail: String::new(),
            source: Some(source),
        }
    }
}
