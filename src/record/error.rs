//! What can go wrong with a run folder: which file, which line, and what to do next.

use std::{io, path::PathBuf};

/// A run folder could not be written or read.
#[derive(Debug, thiserror::Error)]
#[non_exhaustive]
pub enum RecordError {
    /// The operating system refused.
    #[error("failed to {action} {}: {source}{}", path.display(), hint(source))]
    Io {
        /// What was being done.
        action: &'static str,
        /// To which file or folder.
        path: PathBuf,
        /// The system's reason.
        source: io::Error,
    },
    /// The folder already holds something; a record is never overwritten.
    #[error("failed to start a record in {}: the folder is not empty; name a new one", path.display())]
    FolderInUse {
        /// The folder.
        path: PathBuf,
    },
    /// The folder is no run of this program.
    #[error("{} holds no run: there is no {} in it", path.display(), super::MANIFEST)]
    NotARun {
        /// The folder.
        path: PathBuf,
    },
    /// A newer program wrote it.
    #[error(
        "{} has format version {found}; this program reads up to version {} and leaves it as it is: \
         use a newer ringstep",
        path.display(),
        super::FORMAT_VERSION
    )]
    Newer {
        /// The file that states the version.
        path: PathBuf,
        /// The version it states.
        found: u32,
    },
    /// A file does not hold what its format asks for.
    #[error("{}{} is broken: {reason}", path.display(), at(*line))]
    Broken {
        /// The file.
        path: PathBuf,
        /// Line, from 1, in a file of lines.
        line: Option<usize>,
        /// What is wrong.
        reason: String,
    },
    /// A file is not the one that was written.
    #[error(
        "{} was altered after it was written: its SHA-256 is {found}, the record states {expected}; \
         restore it from a copy",
        path.display()
    )]
    Altered {
        /// The file.
        path: PathBuf,
        /// SHA-256 in the record.
        expected: String,
        /// SHA-256 of the file.
        found: String,
    },
    /// No such capture in the run.
    #[error("the run in {} has no capture number {number}", path.display())]
    NoSuchCapture {
        /// The run's folder.
        path: PathBuf,
        /// The number asked for.
        number: usize,
    },
    /// A value that the format cannot hold.
    #[error("failed to write {what} into the record: {reason}")]
    Unwritable {
        /// What was to be written.
        what: String,
        /// Why it cannot be.
        reason: String,
    },
}

impl RecordError {
    pub(crate) fn io(action: &'static str, path: impl Into<PathBuf>) -> impl FnOnce(io::Error) -> RecordError {
        let path = path.into();
        move |source| RecordError::Io { action, path, source }
    }

    pub(crate) fn broken(path: impl Into<PathBuf>, reason: impl ToString) -> RecordError {
        RecordError::Broken { path: path.into(), line: None, reason: reason.to_string() }
    }
}

fn at(line: Option<usize>) -> String {
    line.map(|line| format!(":{line}")).unwrap_or_default()
}

fn hint(source: &io::Error) -> &'static str {
    match source.kind() {
        io::ErrorKind::StorageFull | io::ErrorKind::QuotaExceeded => "; free some space, or choose another folder",
        io::ErrorKind::PermissionDenied | io::ErrorKind::ReadOnlyFilesystem => "; choose a folder you may write to",
        io::ErrorKind::NotADirectory => "; a file stands where the folder should be",
        _ => "",
    }
}
