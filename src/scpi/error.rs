//! What can go wrong in an exchange: a small kind with instrument, address, command, answer and time beside it.

use crate::transport::{LinkError, LinkErrorKind};
use std::{fmt, time::Duration};

/// A failed exchange.
#[derive(Debug, thiserror::Error)]
pub struct ScpiError {
    /// Which kind.
    pub kind: ScpiErrorKind,
    /// Name of the instrument.
    pub instrument: String,
    /// Its address.
    pub address: String,
    /// The command or question; empty where the link was being opened.
    pub command: String,
    /// What had come back, as far as it is worth showing.
    pub reply: Option<String>,
    /// Time since the exchange began.
    pub elapsed: Duration,
    /// What the wire reported.
    #[source]
    pub source: Option<LinkError>,
}

/// Kinds of failed exchange.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum ScpiErrorKind {
    /// The link could not be opened.
    Unreachable,
    /// No whole answer came before the deadline.
    NoAnswer,
    /// The link broke or was given up.
    Lost,
    /// What came back is no answer to the question.
    Garbled,
    /// An earlier answer is still missing, and the instrument answers no marker either.
    OutOfStep,
    /// Another instrument answers at this address than before.
    OtherInstrument,
    /// The command can't be sent: it holds a newline.
    Unsendable,
}

impl ScpiErrorKind {
    fn next(self) -> &'static str {
        match self {
            Self::Unreachable => "check that it is switched on, the cable, and the address in the station file",
            Self::NoAnswer => "check that it is not busy, locked or waiting at its front panel",
            Self::Lost => "check its power and cable, then connect again",
            Self::Garbled => "check baud rate, terminator and that the driver suits this instrument",
            Self::OutOfStep => "switch it off and on again, or connect again",
            Self::OtherInstrument => "check which instrument is on this address; nothing was sent to it but `*IDN?`",
            Self::Unsendable => "correct the driver file",
        }
    }
}

impl fmt::Display for ScpiErrorKind {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(match self {
            Self::Unreachable => "could not be reached",
            Self::NoAnswer => "did not answer in time",
            Self::Lost => "lost its link",
            Self::Garbled => "gave no valid answer",
            Self::OutOfStep => "is out of step with its questions",
            Self::OtherInstrument => "is not the instrument it was",
            Self::Unsendable => "can't be sent this command",
        })
    }
}

impl fmt::Display for ScpiError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "{} at {} {}", self.instrument, self.address, self.kind)?;
        if !self.command.is_empty() {
            write!(f, ": `{}`", self.command)?;
        }
        if let Some(reply) = &self.reply {
            write!(f, ", got `{reply}`")?;
        }
        write!(f, " after {:.3} s", self.elapsed.as_secs_f64())?;
        if let Some(source) = &self.source {
            write!(f, " ({source})")?;
        }
        write!(f, "; {}", self.kind.next())
    }
}

/// A failure inside the owner task, before it is told which exchange it belongs to.
#[derive(Debug)]
pub(super) struct Failure {
    pub(super) kind: ScpiErrorKind,
    pub(super) reply: Option<String>,
    pub(super) source: Option<LinkError>,
}

impl Failure {
    pub(super) fn new(kind: ScpiErrorKind) -> Self {
        Self { kind, reply: None, source: None }
    }

    pub(super) fn with_reply(kind: ScpiErrorKind, bytes: &[u8]) -> Self {
        const SHOWN: usize = 120;
        let shown = crate::transport::printable(&bytes[..bytes.len().min(SHOWN)]);
        let reply = if bytes.len() > SHOWN { format!("{shown}... ({} bytes)", bytes.len()) } else { shown };
        Self { kind, reply: Some(reply), source: None }
    }
}

impl From<LinkError> for Failure {
    fn from(error: LinkError) -> Self {
        let kind = match error.kind {
            LinkErrorKind::Timeout => ScpiErrorKind::NoAnswer,
            _ => ScpiErrorKind::Lost,
        };
        Self { kind, reply: None, source: Some(error) }
    }
}
