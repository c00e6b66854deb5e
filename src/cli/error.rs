//! How a command ends: kinds of failure with an exit code and a hint each.

use ringstep::{files::FileErrors, record::RecordError, report::ReportError, sequence::RunError};
use serde_json::{Value, json};
use std::{io, process::ExitCode};

/// The exit codes, as the help shows them.
pub(crate) const EXIT_CODES: &str = "\
Exit codes:
    0  done
    1  failed
    2  wrong usage, or a mistake in a file
    3  analysed, but nothing in it could be measured
    4  refused before anything was energised
    5  an instrument failed
  130  stopped by the operator";

/// How a command that ran to its end came out.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(crate) enum Exit {
    /// Done.
    Done,
    /// Failed.
    Failed,
    /// Wrong usage, or a mistake in a file.
    Usage,
    /// Analysed, and nothing in it could be measured.
    NothingMeasurable,
    /// Preflight refused.
    Refused,
    /// An instrument failed, or the run with it.
    Instrument,
    /// The operator stopped the run.
    Stopped,
}

impl From<Exit> for ExitCode {
    fn from(exit: Exit) -> Self {
        Self::from(match exit {
            Exit::Done => 0,
            Exit::Failed => 1,
            Exit::Usage => 2,
            Exit::NothingMeasurable => 3,
            Exit::Refused => 4,
            Exit::Instrument => 5,
            Exit::Stopped => 130,
        })
    }
}

/// Why a command could not do its work.
#[derive(Debug, thiserror::Error)]
pub(crate) enum CliError {
    /// A file that can't be read.
    #[error("failed to read {path}: {source}")]
    Unreadable {
        /// The file.
        path: String,
        /// Why.
        source: io::Error,
    },
    /// Something the system refused.
    #[error("{0}")]
    Failed(String),
    /// An argument that can't be used.
    #[error("{0}")]
    Usage(String),
    /// Mistakes in files the user wrote; of every file at once.
    #[error("{}", joined(.0))]
    Mistakes(Vec<FileErrors>),
    /// Checks that did not pass before power.
    #[error("refused by the preflight, nothing was energised:\n  {}", .0.join("\n  "))]
    Preflight(Vec<String>),
    /// The run folder.
    #[error(transparent)]
    Record(#[from] RecordError),
    /// The report.
    #[error(transparent)]
    Report(#[from] ReportError),
    /// The run could not be kept; safe-off was reached first.
    #[error(transparent)]
    Run(#[from] RunError),
}

impl CliError {
    /// The exit code of this kind.
    pub(crate) fn exit(&self) -> Exit {
        match self {
            Self::Unreadable { .. } | Self::Failed(_) | Self::Record(_) | Self::Report(_) | Self::Run(_) => {
                Exit::Failed
            }
            Self::Preflight(_) => Exit::Refused,
            Self::Usage(_) | Self::Mistakes(_) => Exit::Usage,
        }
    }

    /// What to do next.
    fn hint(&self) -> Option<&'static str> {
        match self {
            Self::Unreadable { source, .. } => match source.kind() {
                io::ErrorKind::NotFound => Some("is the path right, seen from the folder this was started in?"),
                io::ErrorKind::InvalidData => Some("the file must be text in UTF-8"),
                _ => None,
            },
            Self::Failed(_) | Self::Record(_) | Self::Report(_) | Self::Run(_) => None,
            Self::Preflight(_) => {
                Some("change what is named above, on the bench or in the three files; `check` shows every check")
            }
            Self::Usage(_) => Some("--help shows what each option takes"),
            Self::Mistakes(_) => Some("commented examples stand in src/guide/examples, drivers in the folder drivers"),
        }
    }

    /// The error for a reader.
    pub(crate) fn render(&self, styled: bool) -> String {
        let mut text = match self {
            Self::Mistakes(files) => files.iter().map(|errors| errors.render(styled)).collect::<Vec<_>>().join("\n\n"),
            other => format!("error: {other}"),
        };
        if let Some(hint) = self.hint() {
            text = format!("{text}\nhint: {hint}");
        }
        text
    }

    /// The error for a machine.
    pub(crate) fn to_json(&self) -> Value {
        let mistakes = match self {
            Self::Mistakes(files) => files.iter().flat_map(mistakes_of).collect(),
            _ => Vec::new(),
        };
        json!({ "error": { "message": self.to_string(), "hint": self.hint(), "mistakes": mistakes } })
    }
}

fn mistakes_of(errors: &FileErrors) -> Vec<Value> {
    let one = |error: &ringstep::files::FileError| {
        json!({
            "file": errors.path, "line": error.line, "column": error.column, "key": error.key,
            "found": error.found, "expected": error.expected, "help": error.help,
        })
    };
    errors.errors.iter().map(one).collect()
}

fn joined(files: &[FileErrors]) -> String {
    files.iter().map(ToString::to_string).collect::<Vec<_>>().join("\n")
}
