//! The manifest: the version of the format, whose run it is, and the SHA-256 of every finished file.

use super::{FORMAT_VERSION, MANIFEST, RecordError, durable};
use serde::{Deserialize, Serialize};
use std::{collections::BTreeMap, fs, io, path::Path};

/// Content of `manifest.json`.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub(crate) struct Manifest {
    /// Version of the run folder's format.
    pub(crate) format_version: u32,
    /// Identifier of the run.
    pub(crate) run: String,
    /// Version of the program that wrote it.
    pub(crate) software_version: String,
    /// Whether the record was closed; otherwise journal and exchange log may still grow.
    pub(crate) finished: bool,
    /// SHA-256 by path in the folder.
    pub(crate) sha256: BTreeMap<String, String>,
}

/// What every version of the manifest states.
#[derive(Deserialize)]
struct Version {
    format_version: u32,
}

impl Manifest {
    pub(crate) fn new(run: String) -> Manifest {
        let software_version = env!("CARGO_PKG_VERSION").to_owned();
        Manifest { format_version: FORMAT_VERSION, run, software_version, finished: false, sha256: BTreeMap::new() }
    }

    pub(crate) fn read(folder: &Path) -> Result<Manifest, RecordError> {
        let path = folder.join(MANIFEST);
        let bytes = fs::read(&path).map_err(|source| match source.kind() {
            io::ErrorKind::NotFound => RecordError::NotARun { path: folder.to_owned() },
            _ => RecordError::Io { action: "read", path: path.clone(), source },
        })?;
        let broken = |error: serde_json::Error| RecordError::broken(&path, error);
        let Version { format_version } = serde_json::from_slice(&bytes).map_err(broken)?;
        if format_version > FORMAT_VERSION {
            return Err(RecordError::Newer { path, found: format_version });
        }
        serde_json::from_slice(&bytes).map_err(broken)
    }

    pub(crate) fn write(&self, folder: &Path) -> Result<(), RecordError> {
        let bytes = serde_json::to_vec_pretty(self)
            .map_err(|error| RecordError::Unwritable { what: MANIFEST.to_owned(), reason: error.to_string() })?;
        durable::write(&folder.join(MANIFEST), &bytes)
    }

    /// Writes a finished file and notes its checksum; the manifest itself is written by the caller.
    pub(crate) fn keep(&mut self, folder: &Path, name: &str, bytes: &[u8]) -> Result<String, RecordError> {
        durable::write(&folder.join(name), bytes)?;
        let sum = durable::sha256(bytes);
        self.sha256.insert(name.to_owned(), sum.clone());
        Ok(sum)
    }
}
