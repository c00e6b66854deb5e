//! The run folder: what a run leaves on disk, format version 1, and how it is read back.
//!
//! `plan.toml`, `station.toml`, `board.toml` as used; `journal.jsonl`, one [`Event`](crate::sequence::event::Event) a
//! line, appended and synchronised to disk; `exchange.jsonl`, every message to and from an instrument;
//! `captures/0000.parquet`, raw codes as the scope sent them; `results.json` and `points.csv`, derived from the journal
//! alone; `report.html`; `manifest.json`, which states the format version and the SHA-256 of every finished file.

mod capture_file;
mod durable;
mod error;
pub mod journal;
mod manifest;
mod reader;
pub mod results;
mod writer;

pub use error::RecordError;
pub use reader::{Inputs, Run, TornTail};
pub use results::Results;
pub use writer::{ExchangeLog, RunWriter};

/// Version of the run folder's format that this program writes, and the newest it reads.
pub const FORMAT_VERSION: u32 = 1;

pub(crate) const JOURNAL: &str = "journal.jsonl";
pub(crate) const EXCHANGE: &str = "exchange.jsonl";
pub(crate) const MANIFEST: &str = "manifest.json";
pub(crate) const CAPTURES: &str = "captures";
pub(crate) const INPUTS: [&str; 3] = ["plan.toml", "station.toml", "board.toml"];
/// Files that can be made again from the journal and the captures.
pub(crate) const DERIVED: [&str; 3] = ["results.json", "points.csv", "report.html"];

pub(crate) fn capture_name(number: usize) -> String {
    format!("{CAPTURES}/{number:04}.parquet")
}
