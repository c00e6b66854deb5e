//! One capture as a Parquet file: the codes exactly as the scope sent them, the scale in the file's key-value metadata.
//!
//! Apache Parquet format: one required column `code`, physical type INT32 with the integer annotation of the scope's
//! format, LZ4_RAW. `volts = (code - code_reference) * volts_per_code + volts_origin`, `seconds = (index -
//! index_reference) * interval_s + time_origin_s`.

use crate::{
    instrument::{RawWaveform, SampleFormat},
    sequence::event::Capture,
};
use bytes::Bytes;
use parquet::{
    basic::Compression,
    column::reader::get_typed_column_reader,
    data_type::Int32Type,
    errors::ParquetError,
    file::{
        metadata::KeyValue,
        properties::WriterProperties,
        reader::{FileReader, SerializedFileReader},
        writer::SerializedFileWriter,
    },
    schema::parser::parse_message_type,
};
use serde::{Serialize, de::DeserializeOwned};
use std::{collections::BTreeMap, sync::Arc};

/// The Parquet file of a capture; the error is a reason in words.
pub(crate) fn encode(capture: &Capture, simulated: bool, run: &str) -> Result<Vec<u8>, String> {
    let codes = codes(&capture.waveform)?;
    let annotation = match capture.waveform.format {
        SampleFormat::U8 => "INTEGER(8,false)",
        SampleFormat::I8 => "INTEGER(8,true)",
        SampleFormat::U16Be | SampleFormat::U16Le => "INTEGER(16,false)",
        SampleFormat::I16Be | SampleFormat::I16Le => "INTEGER(16,true)",
    };
    let schema = format!("message capture {{ REQUIRED INT32 code ({annotation}); }}");
    let properties = WriterProperties::builder()
        .set_compression(Compression::LZ4_RAW)
        .set_key_value_metadata(Some(metadata(capture, simulated, run)?))
        .build();
    let write = || -> Result<Vec<u8>, ParquetError> {
        let mut file = Vec::new();
        let schema = Arc::new(parse_message_type(&schema)?);
        let mut writer = SerializedFileWriter::new(&mut file, schema, Arc::new(properties))?;
        let mut rows = writer.next_row_group()?;
        if let Some(mut column) = rows.next_column()? {
            column.typed::<Int32Type>().write_batch(&codes, None, None)?;
            column.close()?;
        }
        rows.close()?;
        writer.close()?;
        Ok(file)
    };
    write().map_err(|error| error.to_string())
}

/// The waveform in a Parquet file, payload as the scope sent it; the error is a reason in words.
pub(crate) fn decode(file: Vec<u8>) -> Result<RawWaveform, String> {
    let read = || -> Result<(Vec<i32>, Option<Vec<KeyValue>>), ParquetError> {
        let reader = SerializedFileReader::new(Bytes::from(file))?;
        let mut codes = Vec::new();
        for group in 0..reader.num_row_groups() {
            let group = reader.get_row_group(group)?;
            let mut column = get_typed_column_reader::<Int32Type>(group.get_column_reader(0)?);
            loop {
                let (rows, _, _) = column.read_records(1 << 20, None, None, &mut codes)?;
                if rows == 0 {
                    break;
                }
            }
        }
        Ok((codes, reader.metadata().file_metadata().key_value_metadata().cloned()))
    };
    let (codes, metadata) = read().map_err(|error| error.to_string())?;
    let metadata: BTreeMap<String, String> =
        metadata.into_iter().flatten().filter_map(|pair| Some((pair.key, pair.value?))).collect();
    let format = value(&metadata, "format")?;
    Ok(RawWaveform {
        payload: payload(&codes, format)?,
        format,
        volts_per_code: value(&metadata, "volts_per_code")?,
        volts_origin: value(&metadata, "volts_origin")?,
        code_reference: value(&metadata, "code_reference")?,
        interval_s: value(&metadata, "interval_s")?,
        time_origin_s: value(&metadata, "time_origin_s")?,
        index_reference: value(&metadata, "index_reference")?,
        clip_codes: value(&metadata, "clip_codes")?,
        acquisition: value(&metadata, "acquisition")?,
        preamble: metadata.get("preamble").cloned().ok_or("it states no preamble")?,
    })
}

/// Integer codes of a payload.
fn codes(waveform: &RawWaveform) -> Result<Vec<i32>, String> {
    let bytes = &waveform.payload;
    let words = || -> Result<_, String> {
        let (words, rest) = bytes.as_chunks::<2>();
        if rest.is_empty() { Ok(words.iter().copied()) } else { Err(format!("{} bytes hold no words", bytes.len())) }
    };
    Ok(match waveform.format {
        SampleFormat::U8 => bytes.iter().map(|byte| i32::from(*byte)).collect(),
        SampleFormat::I8 => bytes.iter().map(|byte| i32::from(i8::from_ne_bytes([*byte]))).collect(),
        SampleFormat::U16Be => words()?.map(|word| i32::from(u16::from_be_bytes(word))).collect(),
        SampleFormat::U16Le => words()?.map(|word| i32::from(u16::from_le_bytes(word))).collect(),
        SampleFormat::I16Be => words()?.map(|word| i32::from(i16::from_be_bytes(word))).collect(),
        SampleFormat::I16Le => words()?.map(|word| i32::from(i16::from_le_bytes(word))).collect(),
    })
}

fn payload(codes: &[i32], format: SampleFormat) -> Result<Vec<u8>, String> {
    let outside = |error: std::num::TryFromIntError| format!("a code does not fit its format: {error}");
    let mut payload = Vec::with_capacity(codes.len() * 2);
    for code in codes.iter().copied() {
        match format {
            SampleFormat::U8 => payload.push(u8::try_from(code).map_err(outside)?),
            SampleFormat::I8 => payload.extend(i8::try_from(code).map_err(outside)?.to_ne_bytes()),
            SampleFormat::U16Be => payload.extend(u16::try_from(code).map_err(outside)?.to_be_bytes()),
            SampleFormat::U16Le => payload.extend(u16::try_from(code).map_err(outside)?.to_le_bytes()),
            SampleFormat::I16Be => payload.extend(i16::try_from(code).map_err(outside)?.to_be_bytes()),
            SampleFormat::I16Le => payload.extend(i16::try_from(code).map_err(outside)?.to_le_bytes()),
        }
    }
    Ok(payload)
}

/// Everything a stranger with this one file needs: text as it is, everything else as JSON.
fn metadata(capture: &Capture, simulated: bool, run: &str) -> Result<Vec<KeyValue>, String> {
    let waveform = &capture.waveform;
    Ok(vec![
        KeyValue::new("run".to_owned(), run.to_owned()),
        pair("format_version", super::FORMAT_VERSION)?,
        pair("number", capture.number)?,
        pair("point", capture.point)?,
        pair("repeat", capture.repeat)?,
        pair("purpose", capture.purpose)?,
        KeyValue::new("role".to_owned(), "scope".to_owned()),
        KeyValue::new("signal".to_owned(), "drain voltage at the probe tip".to_owned()),
        pair("simulated", simulated)?,
        pair("line_v", capture.line_v)?,
        pair("load_a", capture.load_a)?,
        pair("format", waveform.format)?,
        pair("volts_per_code", waveform.volts_per_code)?,
        pair("volts_origin", waveform.volts_origin)?,
        pair("code_reference", waveform.code_reference)?,
        pair("interval_s", waveform.interval_s)?,
        pair("time_origin_s", waveform.time_origin_s)?,
        pair("index_reference", waveform.index_reference)?,
        pair("clip_codes", waveform.clip_codes)?,
        pair("acquisition", waveform.acquisition)?,
        KeyValue::new("preamble".to_owned(), waveform.preamble.clone()),
    ])
}

fn pair(key: &str, value: impl Serialize) -> Result<KeyValue, String> {
    match serde_json::to_value(value).map_err(|error| error.to_string())? {
        serde_json::Value::String(text) => Ok(KeyValue::new(key.to_owned(), text)),
        serde_json::Value::Null => Err(format!("{key} is not a finite number")),
        other => Ok(KeyValue::new(key.to_owned(), other.to_string())),
    }
}

fn value<T: DeserializeOwned>(metadata: &BTreeMap<String, String>, key: &str) -> Result<T, String> {
    let text = metadata.get(key).ok_or_else(|| format!("it states no {key}"))?;
    serde_json::from_str(text)
        .or_else(|_| serde_json::from_value(serde_json::Value::String(text.clone())))
        .map_err(|error| format!("its {key} is no {key}: {error}"))
}
