//! Samples from the payload of an instrument: integer codes with a linear scale.

use super::{Samples, SamplesError, TimeAxis};
use thiserror::Error;

/// Order of the bytes in a word.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum CodeOrder {
    /// Most significant byte first.
    BigEndian,
    /// Least significant byte first.
    LittleEndian,
}

/// How codes stand in a payload.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Codes {
    /// Bytes a code: 1 or 2.
    pub bytes: usize,
    /// Two's complement, or unsigned.
    pub signed: bool,
    /// Order of the two bytes.
    pub order: CodeOrder,
}

/// Scale of codes: volts = (code - reference) * step + origin; seconds = (index - index_reference) * interval + time_origin.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct CodeScale {
    /// Volts a code at the probe tip; negative where the channel is inverted.
    pub volts_per_code: f64,
    /// Volts at the reference code.
    pub volts_origin: f64,
    /// Reference code.
    pub code_reference: f64,
    /// Sample interval in seconds.
    pub interval_s: f64,
    /// Time of the reference sample in seconds.
    pub time_origin_s: f64,
    /// Index of the reference sample.
    pub index_reference: f64,
    /// Lowest and highest code inside the range: at and beyond them the range clips.
    pub clip_codes: Option<[f64; 2]>,
}

/// Why a payload gives no samples.
#[derive(Debug, Clone, PartialEq, Error)]
pub enum CodesError {
    /// The payload ends inside a code.
    #[error("{0} bytes are not a whole number of two-byte codes: the transfer was cut short or the format is another")]
    Cut(usize),
    /// Codes have one or two bytes.
    #[error("codes of {0} bytes are not supported: one or two")]
    Width(usize),
    /// The scaled values are no samples.
    #[error(transparent)]
    Samples(#[from] SamplesError),
}

/// Scales the codes of a payload.
///
/// # Errors
/// [`CodesError`] where the payload ends inside a code or the scale is not usable.
pub fn decode_codes(payload: &[u8], codes: Codes, scale: &CodeScale) -> Result<Samples, CodesError> {
    if !(1..=2).contains(&codes.bytes) {
        return Err(CodesError::Width(codes.bytes));
    }
    if !payload.len().is_multiple_of(codes.bytes) {
        return Err(CodesError::Cut(payload.len()));
    }
    let volts_of = |code: f64| (code - scale.code_reference) * scale.volts_per_code + scale.volts_origin;
    let volts = payload.chunks_exact(codes.bytes).map(|bytes| volts_of(code_of(bytes, codes))).collect();
    let start_s = scale.time_origin_s - scale.index_reference * scale.interval_s;
    let clip_v = scale.clip_codes.map(|[low, high]| {
        let (a, b) = (volts_of(low), volts_of(high));
        (a.min(b), a.max(b))
    });
    let samples = Samples::new(TimeAxis::Even { start_s, interval_s: scale.interval_s }, volts)?;
    Ok(samples.with_range(Some(scale.volts_per_code.abs()), clip_v)?)
}

fn code_of(bytes: &[u8], codes: Codes) -> f64 {
    let word = match (bytes, codes.order) {
        (&[byte], _) => return if codes.signed { f64::from(byte as i8) } else { f64::from(byte) },
        (&[a, b, ..], CodeOrder::BigEndian) => u16::from_be_bytes([a, b]),
        (&[a, b, ..], CodeOrder::LittleEndian) => u16::from_le_bytes([a, b]),
        (&[], _) => 0,
    };
    if codes.signed { f64::from(word as i16) } else { f64::from(word) }
}
