//! Writes a run folder while the run goes on: everything is opened before anything is energised, appended, and
//! synchronised to disk event by event.

use super::{
    CAPTURES, EXCHANGE, INPUTS, Inputs, JOURNAL, RecordError, capture_file, capture_name, durable,
    journal::{self, Entry},
    manifest::Manifest,
    results::{self, Results},
};
use crate::sequence::event::{Capture, Event};
use std::{
    fs::{self, File, OpenOptions},
    io::Write,
    path::{Path, PathBuf},
    sync::{Arc, Mutex, PoisonError},
    time::Instant,
};

/// The writer of one run. Calls block until the disk has what they wrote.
#[derive(Debug)]
pub struct RunWriter {
    folder: PathBuf,
    journal: File,
    exchange: ExchangeLog,
    manifest: Manifest,
    started: Instant,
    sequence: u64,
    simulated: bool,
}

impl RunWriter {
    /// Starts a record in a new or empty folder, with the input files exactly as used. Fails where the folder holds
    /// anything, cannot be written, or the disk is full: call it before anything is energised.
    pub fn create(folder: &Path, inputs: &Inputs, run_id: uuid::Uuid) -> Result<RunWriter, RecordError> {
        fs::create_dir_all(folder).map_err(RecordError::io("create the folder", folder))?;
        let mut content = fs::read_dir(folder).map_err(RecordError::io("read the folder", folder))?;
        if content.next().is_some() {
            return Err(RecordError::FolderInUse { path: folder.to_owned() });
        }
        let captures = folder.join(CAPTURES);
        fs::create_dir(&captures).map_err(RecordError::io("create the folder", &captures))?;
        let journal = create_new(&folder.join(JOURNAL))?;
        let exchange = ExchangeLog::create(folder.join(EXCHANGE))?;
        let mut manifest = Manifest::new(run_id.to_string());
        for (name, text) in INPUTS.iter().zip([&inputs.plan, &inputs.station, &inputs.board]) {
            manifest.keep(folder, name, text.as_bytes())?;
        }
        manifest.write(folder)?;
        if let Some(parent) = folder.parent() {
            durable::sync_folder(parent)?;
        }
        let (folder, started) = (folder.to_owned(), Instant::now());
        Ok(RunWriter { folder, journal, exchange, manifest, started, sequence: 0, simulated: false })
    }

    /// The folder.
    pub fn folder(&self) -> &Path {
        &self.folder
    }

    /// The exchange log, to be handed to the instruments' links.
    pub fn exchange_log(&self) -> ExchangeLog {
        self.exchange.clone()
    }

    /// Appends an event to the journal; when it returns, the disk has it and every exchange before it.
    pub fn event(&mut self, event: &Event) -> Result<(), RecordError> {
        self.simulated |= match event {
            Event::RunStarted { simulated, .. } => *simulated,
            Event::InstrumentIdentified { identity, .. } => identity.simulated,
            _ => false,
        };
        let (time, elapsed_s) = (jiff::Timestamp::now(), self.started.elapsed().as_secs_f64());
        let entry = Entry { sequence: self.sequence, time, elapsed_s, event: event.clone() };
        let line = entry.encode().map_err(|reason| RecordError::Unwritable {
            what: format!("event {}", self.sequence),
            reason: format!("{reason} (is a number in it not finite?)"),
        })?;
        self.exchange.sync()?;
        let written = self.journal.write_all(&line).and_then(|()| self.journal.sync_data());
        written.map_err(RecordError::io("append to", self.folder.join(JOURNAL)))?;
        self.sequence += 1;
        Ok(())
    }

    /// Writes the capture's file from `capture.waveform` and fills in its `sha256`; the event
    /// [`Captured`](Event::Captured) is then the caller's to append.
    pub fn capture(&mut self, capture: &mut Capture) -> Result<(), RecordError> {
        let name = capture_name(capture.number);
        if self.manifest.sha256.contains_key(&name) {
            let reason = "that number is already taken".to_owned();
            return Err(RecordError::Unwritable { what: name, reason });
        }
        let file = capture_file::encode(capture, self.simulated, &self.manifest.run)
            .map_err(|reason| RecordError::Unwritable { what: name.clone(), reason })?;
        capture.sha256 = self.manifest.keep(&self.folder, &name, &file)?;
        Ok(())
    }

    /// Closes the record: results and table from the journal as it stands on disk, and the manifest with every checksum.
    pub fn finish(mut self) -> Result<Results, RecordError> {
        self.exchange.sync()?;
        for name in [JOURNAL, EXCHANGE] {
            let path = self.folder.join(name);
            let bytes = fs::read(&path).map_err(RecordError::io("read", &path))?;
            self.manifest.sha256.insert(name.to_owned(), durable::sha256(&bytes));
        }
        let path = self.folder.join(JOURNAL);
        let bytes = fs::read(&path).map_err(RecordError::io("read", &path))?;
        let journal = journal::read(&bytes).map_err(|(line, reason)| {
            let path = path.clone();
            RecordError::Broken { path, line: Some(line), reason }
        })?;
        let results = results::from_events(journal.entries.iter().map(|entry| &entry.event));
        let json = serde_json::to_vec_pretty(&results)
            .map_err(|error| RecordError::Unwritable { what: "results.json".to_owned(), reason: error.to_string() })?;
        self.manifest.keep(&self.folder, "results.json", &json)?;
        self.manifest.keep(&self.folder, "points.csv", results.to_csv().as_bytes())?;
        self.manifest.finished = true;
        self.manifest.write(&self.folder)?;
        Ok(results)
    }
}

/// The exchange log: one JSON line a message to or from an instrument. Cheap to clone; lines of many tasks never mix.
#[derive(Debug, Clone)]
pub struct ExchangeLog {
    file: Arc<Mutex<File>>,
    path: Arc<PathBuf>,
}

impl ExchangeLog {
    fn create(path: PathBuf) -> Result<ExchangeLog, RecordError> {
        Ok(ExchangeLog { file: Arc::new(Mutex::new(create_new(&path)?)), path: Arc::new(path) })
    }

    /// Appends one message; it survives a crash of the program at once, and of the machine from the next event on.
    pub fn append(&self, message: &serde_json::Value) -> Result<(), RecordError> {
        let line = format!("{message}\n");
        let mut file = self.file.lock().unwrap_or_else(PoisonError::into_inner);
        file.write_all(line.as_bytes()).map_err(RecordError::io("append to", self.path.as_path()))
    }

    fn sync(&self) -> Result<(), RecordError> {
        let file = self.file.lock().unwrap_or_else(PoisonError::into_inner);
        file.sync_data().map_err(RecordError::io("synchronise", self.path.as_path()))
    }
}

fn create_new(path: &Path) -> Result<File, RecordError> {
    OpenOptions::new().append(true).create_new(true).open(path).map_err(RecordError::io("create", path))
}
