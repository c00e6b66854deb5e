//! The journal's lines: an event with its number, its time and a CRC-32 over everything before it. Pure over bytes.
//!
//! A line is `{"sequence":0,"time":"…","elapsed_s":0.0,"event":{…},"crc32":"0a1b2c3d"}`; the checksum (CRC-32 as in
//! ISO-HDLC, the one of zlib) covers the bytes before `,"crc32"`.

use crate::sequence::event::Event;
use serde::{Deserialize, Serialize};

/// One line of the journal.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Entry {
    /// Number of the line, from zero, without gaps.
    pub sequence: u64,
    /// Time of day when it was written.
    pub time: jiff::Timestamp,
    /// Seconds since the record was started, from a clock that nobody sets.
    pub elapsed_s: f64,
    /// What happened.
    pub event: Event,
}

const KEY: &[u8] = b",\"crc32\":\"";
const DIGITS: usize = 8;
const END: &[u8] = b"\"}";

impl Entry {
    /// The line with its checksum and line feed; an error where an event holds a number that JSON cannot carry.
    pub fn encode(&self) -> Result<Vec<u8>, String> {
        let mut line = serde_json::to_vec(self).map_err(|error| error.to_string())?;
        line.pop();
        let checksum = crc32fast::hash(&line);
        line.extend_from_slice(KEY);
        line.extend_from_slice(format!("{checksum:08x}").as_bytes());
        line.extend_from_slice(END);
        // Infinities become `null`, which only shows when the line is read: better now than in next year's archive.
        Entry::decode(&line)?;
        line.push(b'\n');
        Ok(line)
    }

    /// Reads one line without its line feed; the error is a reason in words.
    pub fn decode(line: &[u8]) -> Result<Entry, String> {
        let length = line.len().checked_sub(KEY.len() + DIGITS + END.len()).ok_or("it is too short")?;
        let (body, tail) = line.split_at(length);
        let checksum = crc32fast::hash(body);
        let expected = [KEY, format!("{checksum:08x}").as_bytes(), END].concat();
        if tail != expected {
            return Err(format!("its checksum is not the {checksum:08x} of its content"));
        }
        let mut body = body.to_vec();
        body.push(b'}');
        serde_json::from_slice(&body).map_err(|error| format!("it holds no event this program knows: {error}"))
    }
}

/// What stands in a journal: whole entries, and what a crash left of the last line.
#[derive(Debug, Default)]
pub struct Journal {
    /// Whole entries, in order.
    pub entries: Vec<Entry>,
    /// Line number (from 1), bytes and reason of a torn last line.
    pub torn: Option<(usize, usize, String)>,
}

/// Reads a journal. A broken last line is what a crash leaves, and is told; a broken line before it is an error with its
/// line number (from 1).
pub fn read(bytes: &[u8]) -> Result<Journal, (usize, String)> {
    let mut journal = Journal::default();
    let mut rest = bytes;
    while !rest.is_empty() {
        let end = rest.iter().position(|byte| *byte == b'\n');
        let line = &rest[..end.unwrap_or(rest.len())];
        rest = end.map_or(&[], |end| &rest[end + 1..]);
        let number = journal.entries.len() + 1;
        match Entry::decode(line) {
            Ok(entry) if entry.sequence + 1 == number as u64 => journal.entries.push(entry),
            Ok(entry) => {
                return Err((number, format!("its sequence number is {}, not {}", entry.sequence, number - 1)));
            }
            Err(reason) if rest.is_empty() => journal.torn = Some((number, line.len(), reason)),
            Err(reason) => return Err((number, reason)),
        }
    }
    Ok(journal)
}
