//! Every message to and from an instrument with its time in the run: one shared log, written to a sink that the record
//! provides. Of a block only header, length and checksum; its payload is in the capture.

use serde::{Deserialize, Serialize};
use std::sync::{Arc, Mutex, PoisonError};
use tokio::time::Instant;

/// Way a message went.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum Direction {
    /// To the instrument.
    Sent,
    /// From the instrument.
    Received,
    /// What the session did of its own accord: opened, drained, resynchronised, closed.
    Noted,
}

/// One message; one JSON line each.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct ExchangeEntry {
    /// Seconds since the start of the run.
    pub time_s: f64,
    /// Name of the instrument.
    pub instrument: String,
    /// Which way.
    pub direction: Direction,
    /// The message without its terminator; bytes that are not text stand as `\xNN`.
    pub text: String,
    /// What stands in place of a block's payload.
    #[serde(skip_serializing_if = "Option::is_none", default)]
    pub block: Option<BlockNote>,
}

/// A block without its payload.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize)]
pub struct BlockNote {
    /// Header as it came, for instance `#800020000`.
    pub header: String,
    /// Bytes in the payload.
    pub length: usize,
    /// CRC-32 of the payload (ISO-HDLC, as in zip), hexadecimal.
    pub crc32: String,
}

impl BlockNote {
    /// The note on a payload.
    pub fn new(header: &[u8], payload: &[u8]) -> Self {
        let crc32 = format!("{:08x}", crc32fast::hash(payload));
        Self { header: printable(header), length: payload.len(), crc32 }
    }
}

/// Where entries go. Called between exchanges of an instrument: it must not block for long.
pub trait ExchangeSink: Send + Sync {
    /// Takes one entry.
    fn exchanged(&self, entry: ExchangeEntry);
}

/// A sink that keeps entries until they are taken.
#[derive(Debug, Default)]
pub struct CollectedExchanges(Mutex<Vec<ExchangeEntry>>);

impl CollectedExchanges {
    /// Takes what has been collected since the last call.
    pub fn take(&self) -> Vec<ExchangeEntry> {
        std::mem::take(&mut *self.0.lock().unwrap_or_else(PoisonError::into_inner))
    }
}

impl ExchangeSink for CollectedExchanges {
    fn exchanged(&self, entry: ExchangeEntry) {
        self.0.lock().unwrap_or_else(PoisonError::into_inner).push(entry);
    }
}

/// Handle on the log of a run; clones write to the same sink with the same time.
#[derive(Clone)]
pub struct ExchangeLog {
    start: Instant,
    sink: Arc<dyn ExchangeSink>,
}

impl ExchangeLog {
    /// A log whose time begins at the start of the run.
    pub fn new(start: Instant, sink: Arc<dyn ExchangeSink>) -> Self {
        Self { start, sink }
    }

    /// Logs one message.
    pub fn message(&self, instrument: &str, direction: Direction, bytes: &[u8]) {
        self.entry(instrument, direction, printable(bytes), None);
    }

    /// Logs a received block.
    pub fn block(&self, instrument: &str, note: BlockNote) {
        self.entry(instrument, Direction::Received, note.header.clone(), Some(note));
    }

    fn entry(&self, instrument: &str, direction: Direction, text: String, block: Option<BlockNote>) {
        let time_s = self.start.elapsed().as_secs_f64();
        self.sink.exchanged(ExchangeEntry { time_s, instrument: instrument.to_owned(), direction, text, block });
    }
}

/// The bytes as text without their terminator; what is not text stands as `\xNN`.
pub(crate) fn printable(bytes: &[u8]) -> String {
    let bytes = bytes.strip_suffix(b"\n").unwrap_or(bytes);
    let bytes = bytes.strip_suffix(b"\r").unwrap_or(bytes);
    match std::str::from_utf8(bytes) {
        Ok(text) if !text.chars().any(char::is_control) => text.to_owned(),
        _ => bytes.escape_ascii().to_string(),
    }
}
