//! From an acquisition as the scope sent it to samples with their scale: the one place where codes become volts.

use crate::instrument::{RawWaveform, SampleFormat};
use ringstep_analysis::waveform::{CodeOrder, CodeScale, Codes, CodesError, Samples, decode_codes};

/// Samples in volts at the probe tip.
///
/// # Errors
/// If the payload does not hold whole codes, or the scale gives no reading.
pub fn samples_of(waveform: &RawWaveform) -> Result<Samples, CodesError> {
    let (bytes, signed, order) = match waveform.format {
        SampleFormat::U8 => (1, false, CodeOrder::BigEndian),
        SampleFormat::I8 => (1, true, CodeOrder::BigEndian),
        SampleFormat::U16Be => (2, false, CodeOrder::BigEndian),
        SampleFormat::U16Le => (2, false, CodeOrder::LittleEndian),
        SampleFormat::I16Be => (2, true, CodeOrder::BigEndian),
        SampleFormat::I16Le => (2, true, CodeOrder::LittleEndian),
    };
    let scale = CodeScale {
        volts_per_code: waveform.volts_per_code,
        volts_origin: waveform.volts_origin,
        code_reference: waveform.code_reference,
        interval_s: waveform.interval_s,
        time_origin_s: waveform.time_origin_s,
        index_reference: waveform.index_reference,
        clip_codes: Some(waveform.clip_codes),
    };
    decode_codes(&waveform.payload, Codes { bytes, signed, order }, &scale)
}
