//! Reads a run folder back: versions, checksums and the journal are verified before anything is believed.

use super::{
    DERIVED, EXCHANGE, INPUTS, JOURNAL, RecordError, capture_file, capture_name, durable,
    journal::{self, Entry},
    manifest::Manifest,
    results::{self, Results},
};
use crate::{
    instrument::RawWaveform,
    sequence::{
        event::{Capture, Event},
        samples_of,
    },
};
use ringstep_analysis::waveform::Samples;
use std::{
    fs,
    path::{Path, PathBuf},
};

/// The texts of the three input files.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Inputs {
    /// The plan.
    pub plan: String,
    /// The station.
    pub station: String,
    /// The board.
    pub board: String,
}

/// The last line of a journal, as a crash left it.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct TornTail {
    /// Line number, from 1.
    pub line: usize,
    /// How many bytes stand there.
    pub bytes: usize,
    /// What is wrong with it.
    pub reason: String,
}

/// A run as its folder tells it.
#[derive(Debug)]
pub struct Run {
    folder: PathBuf,
    manifest: Manifest,
    /// The input files as used.
    pub inputs: Inputs,
    /// The journal, in order.
    pub journal: Vec<Entry>,
    /// The last line of the journal where a crash tore it; the entries before it are whole.
    pub torn: Option<TornTail>,
    /// Files that can be made again (results, table, report) and are no longer the ones that were written.
    pub altered: Vec<String>,
}

impl Run {
    /// Opens a run and verifies it: format version, input files, every journal line, every capture. A newer format, an
    /// altered file or a broken line (with its number) is an error; a torn last line and altered derived files are told.
    pub fn open(folder: &Path) -> Result<Run, RecordError> {
        let manifest = Manifest::read(folder)?;
        let [plan, station, board] = INPUTS.map(|name| read_text(folder, &manifest, name));
        let inputs = Inputs { plan: plan?, station: station?, board: board? };
        let bytes = read_verified(folder, &manifest, JOURNAL)?;
        let journal = journal::read(&bytes).map_err(|(line, reason)| RecordError::Broken {
            path: folder.join(JOURNAL),
            line: Some(line),
            reason,
        })?;
        read_verified(folder, &manifest, EXCHANGE)?;
        let torn = journal.torn.map(|(line, bytes, reason)| TornTail { line, bytes, reason });
        let altered = DERIVED
            .iter()
            .filter(|name| manifest.sha256.contains_key(**name) && read_verified(folder, &manifest, name).is_err())
            .map(|name| (*name).to_owned())
            .collect();
        let run = Run { folder: folder.to_owned(), manifest, inputs, journal: journal.entries, torn, altered };
        for capture in run.captures() {
            run.read_capture_file(capture)?;
        }
        Ok(run)
    }

    /// The folder.
    pub fn folder(&self) -> &Path {
        &self.folder
    }

    /// Identifier of the run.
    pub fn id(&self) -> &str {
        &self.manifest.run
    }

    /// Whether the record was closed; otherwise the run was cut short, or still goes on.
    pub fn finished(&self) -> bool {
        self.manifest.finished
    }

    /// The events, in order.
    pub fn events(&self) -> impl Iterator<Item = &Event> {
        self.journal.iter().map(|entry| &entry.event)
    }

    /// The captures, in order; their payloads are on disk, see [`Run::read_capture`].
    pub fn captures(&self) -> impl Iterator<Item = &Capture> {
        self.events().filter_map(|event| match event {
            Event::Captured(capture) => Some(capture),
            _ => None,
        })
    }

    /// The results, from the journal alone.
    pub fn results(&self) -> Results {
        results::from_events(self.events())
    }

    /// A capture with its payload exactly as the scope sent it.
    pub fn read_capture(&self, number: usize) -> Result<RawWaveform, RecordError> {
        let capture = self.captures().find(|capture| capture.number == number);
        let capture = capture.ok_or_else(|| RecordError::NoSuchCapture { path: self.folder.clone(), number })?;
        let file = self.read_capture_file(capture)?;
        capture_file::decode(file).map_err(|reason| RecordError::broken(self.folder.join(capture_name(number)), reason))
    }

    /// A capture in volts at the probe tip, by the scale it was sent with.
    pub fn read_samples(&self, number: usize) -> Result<Samples, RecordError> {
        let waveform = self.read_capture(number)?;
        samples_of(&waveform).map_err(|error| RecordError::broken(self.folder.join(capture_name(number)), error))
    }

    /// Adds a finished file, or replaces a derived one, and notes its checksum in the manifest.
    pub fn keep(&mut self, name: &str, bytes: &[u8]) -> Result<(), RecordError> {
        if !DERIVED.contains(&name) {
            let reason = "only derived files may be written into a finished run".to_owned();
            return Err(RecordError::Unwritable { what: name.to_owned(), reason });
        }
        self.manifest.keep(&self.folder, name, bytes)?;
        self.altered.retain(|altered| altered != name);
        self.manifest.write(&self.folder)
    }

    fn read_capture_file(&self, capture: &Capture) -> Result<Vec<u8>, RecordError> {
        let path = self.folder.join(capture_name(capture.number));
        let bytes = fs::read(&path).map_err(RecordError::io("read", &path))?;
        verify(path, &bytes, &capture.sha256)?;
        Ok(bytes)
    }
}

fn read_verified(folder: &Path, manifest: &Manifest, name: &str) -> Result<Vec<u8>, RecordError> {
    let path = folder.join(name);
    let bytes = fs::read(&path).map_err(RecordError::io("read", &path))?;
    if let Some(expected) = manifest.sha256.get(name) {
        verify(path, &bytes, expected)?;
    }
    Ok(bytes)
}

fn read_text(folder: &Path, manifest: &Manifest, name: &str) -> Result<String, RecordError> {
    String::from_utf8(read_verified(folder, manifest, name)?)
        .map_err(|error| RecordError::broken(folder.join(name), error))
}

fn verify(path: PathBuf, bytes: &[u8], expected: &str) -> Result<(), RecordError> {
    let found = durable::sha256(bytes);
    if found == expected {
        return Ok(());
    }
    Err(RecordError::Altered { path, expected: expected.to_owned(), found })
}
