//! An acquisition as it goes out: codes as bytes or words, the preamble that scales them, the definite-length block around
//! them (IEEE 488.2, 8.7.9).
//!
//! Words hold the code in their upper bits, bytes its upper eight. `volts = (code - yreference) * yincrement + yorigin`,
//! `seconds = (index - xreference) * xincrement + xorigin`, zero being the trigger.

use super::{
    acquisition::{AVERAGES, Record},
    settings::{AcquisitionType, Model},
};
use crate::instruments::{error::ScpiError, parameter::nr3};

/// Bytes or words.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Format {
    /// One byte a code.
    Byte,
    /// Two bytes a code.
    Word,
}

impl Format {
    /// Keywords and what they mean.
    pub const CHOICES: [(&'static str, Self); 2] = [("BYTE", Self::Byte), ("WORD", Self::Word)];
}

/// Order of the bytes of a word.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum ByteOrder {
    /// Most significant first.
    Most,
    /// Least significant first.
    Least,
}

impl ByteOrder {
    /// Keywords and what they mean.
    pub const CHOICES: [(&'static str, Self); 2] = [("MSBFirst", Self::Most), ("LSBFirst", Self::Least)];
}

/// How waveforms are handed out.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Output {
    /// Channel, from 0.
    pub channel: usize,
    /// Bytes or words.
    pub format: Format,
    /// Order of the bytes of a word.
    pub order: ByteOrder,
    /// Unsigned codes.
    pub unsigned: bool,
}

impl Default for Output {
    fn default() -> Self {
        Self { channel: 0, format: Format::Byte, order: ByteOrder::Most, unsigned: true }
    }
}

impl Output {
    fn codes<'a>(&self, record: &'a Record) -> Result<&'a [u16], ScpiError> {
        let codes = record.codes[self.channel].as_deref();
        codes.ok_or_else(|| ScpiError::stale_data("the channel was not shown when it was acquired"))
    }

    /// `format,type,points,count,xincrement,xorigin,xreference,yincrement,yorigin,yreference`.
    ///
    /// # Errors
    /// -230 if the channel was not acquired.
    pub fn preamble(&self, record: &Record) -> Result<String, ScpiError> {
        let points = self.codes(record)?.len();
        let settings = &record.settings;
        let channel = &settings.channels[self.channel];
        let (format, bits) = match self.format {
            Format::Byte => (0, 8),
            Format::Word => (1, 16),
        };
        let (kind, count) = match settings.kind {
            AcquisitionType::Normal => (0, 1),
            AcquisitionType::Peak => (1, 1),
            AcquisitionType::Average => (2, AVERAGES),
        };
        let codes_per_division = Model::of_bits(8).map_or(25.0, |model| model.codes_per_division());
        let increment_v = channel.scale_v / codes_per_division / f64::from(1_u32 << (bits - 8));
        let reference = if self.unsigned { 1_u32 << (bits - 1) } else { 0 };
        Ok(format!(
            "{format},{kind},{points},{count},{},{},0,{},{},{reference}",
            nr3(record.interval_s()),
            exact(settings.start_s()),
            exact(increment_v),
            exact(channel.offset_v),
        ))
    }

    /// The codes in a definite-length block.
    ///
    /// # Errors
    /// -230 if the channel was not acquired.
    pub fn block(&self, record: &Record) -> Result<Vec<u8>, ScpiError> {
        Ok(definite_block(&self.payload(self.codes(record)?, record.bits)))
    }

    fn payload(&self, codes: &[u16], bits: u32) -> Vec<u8> {
        let flip = if self.unsigned { 0 } else { 0x8000 };
        // Left-aligned in 16 bits, offset binary or, with the top bit turned over, two's complement.
        let words = codes.iter().map(|code| (code << (16 - bits)) ^ flip);
        match (self.format, self.order) {
            (Format::Byte, _) => words.map(|word| (word >> 8) as u8).collect(),
            (Format::Word, ByteOrder::Most) => words.flat_map(u16::to_be_bytes).collect(),
            (Format::Word, ByteOrder::Least) => words.flat_map(u16::to_le_bytes).collect(),
        }
    }
}

/// A payload as a definite-length block: `#`, the number of digits, the length in so many digits, the bytes.
pub fn definite_block(payload: &[u8]) -> Vec<u8> {
    let digits = payload.len().to_string();
    [format!("#{}{digits}", digits.len()).as_bytes(), payload].concat()
}

/// A number with all the digits it needs: scales must not be rounded.
fn exact(value: f64) -> String {
    format!("{value:E}")
}
