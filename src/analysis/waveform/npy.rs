//! Samples from a NumPy array file (`.npy`, format versions 1 to 3 as the NumPy documentation describes them): any real
//! numeric type in either byte order, one dimension or one column of two.

use super::{Samples, SamplesError, TimeAxis};
use thiserror::Error;

/// What an array file does not say itself.
#[derive(Debug, Clone, PartialEq)]
pub struct NpyOptions {
    /// Sample interval in seconds.
    pub interval_s: f64,
    /// Time of the first sample in seconds.
    pub start_s: f64,
    /// Volts = scale * sample + offset.
    pub scale: f64,
    /// Volts at sample value zero.
    pub offset: f64,
    /// Column of a two-dimensional array, counted from one; the last one where not stated.
    pub column: Option<usize>,
}

/// Why an array file gives no samples.
#[derive(Debug, Clone, PartialEq, Error)]
pub enum NpyError {
    /// Not an array file, or cut inside its header.
    #[error("not a NumPy array file: {0}")]
    Header(String),
    /// A type that holds no real numbers.
    #[error("arrays of type {0:?} are not supported: real numbers only (integers, float16, float32, float64, bool)")]
    Type(String),
    /// More dimensions than two, or a column that is not there.
    #[error("the array has shape {shape:?}: {problem}")]
    Shape {
        /// Shape of the array.
        shape: Vec<usize>,
        /// What is wrong with it.
        problem: String,
    },
    /// Fewer bytes than the header promises.
    #[error("the file holds {found} bytes of data where its header promises {expected}: it was cut short")]
    Cut {
        /// Bytes the header promises.
        expected: usize,
        /// Bytes there are.
        found: usize,
    },
    /// The scaled values are no samples.
    #[error(transparent)]
    Samples(#[from] SamplesError),
}

/// Reads one voltage column of an array file.
///
/// # Errors
/// [`NpyError`] where the bytes are no array of real numbers or the column is not there.
pub fn decode_npy(bytes: &[u8], options: &NpyOptions) -> Result<Samples, NpyError> {
    let (header, data) = split(bytes)?;
    let element = Element::parse(&text_of(header, "descr")?)?;
    let fortran = value_of(header, "fortran_order")?.starts_with("True");
    let shape = shape_of(header)?;
    let strided = Strided::new(&shape, fortran, options.column)?;
    let expected = shape.iter().try_fold(element.bytes, |size, &n| size.checked_mul(n));
    let expected = expected.ok_or_else(|| shape_error(&shape, "it is larger than any memory"))?;
    if data.len() < expected {
        return Err(NpyError::Cut { expected, found: data.len() });
    }
    let value = |index: usize| {
        let at = (strided.first + index * strided.stride) * element.bytes;
        options.scale * element.read(&data[at..at + element.bytes]) + options.offset
    };
    let volts: Vec<f64> = (0..strided.count).map(value).collect();
    let step_v = element.integer.then_some(options.scale.abs()).filter(|&step| step > 0.0);
    let time = TimeAxis::Even { start_s: options.start_s, interval_s: options.interval_s };
    Ok(Samples::new(time, volts)?.with_range(step_v, None)?)
}

/// Where the wanted column lies, in elements.
struct Strided {
    first: usize,
    stride: usize,
    count: usize,
}

impl Strided {
    fn new(shape: &[usize], fortran: bool, column: Option<usize>) -> Result<Self, NpyError> {
        let (rows, columns) = match *shape {
            [rows] => (rows, 1),
            [rows, columns] => (rows, columns),
            _ => return Err(shape_error(shape, "one or two dimensions are needed")),
        };
        let column = column.unwrap_or(columns);
        if column == 0 || column > columns {
            return Err(shape_error(shape, &format!("there is no column {column}")));
        }
        Ok(if fortran {
            Self { first: (column - 1).saturating_mul(rows), stride: 1, count: rows }
        } else {
            Self { first: column - 1, stride: columns, count: rows }
        })
    }
}

fn shape_error(shape: &[usize], problem: &str) -> NpyError {
    NpyError::Shape { shape: shape.to_vec(), problem: problem.to_owned() }
}

fn bad(problem: &str) -> NpyError {
    NpyError::Header(problem.to_owned())
}

fn split(bytes: &[u8]) -> Result<(&str, &[u8]), NpyError> {
    let rest = bytes.strip_prefix(b"\x93NUMPY").ok_or_else(|| bad("it does not begin with \\x93NUMPY"))?;
    let (length, rest) = match rest {
        [1, _, a, b, rest @ ..] => (usize::from(u16::from_le_bytes([*a, *b])), rest),
        [2 | 3, _, a, b, c, d, rest @ ..] => (u32::from_le_bytes([*a, *b, *c, *d]) as usize, rest),
        [1..=3, ..] | [] => return Err(bad("it is cut inside its header")),
        [version, ..] => return Err(bad(&format!("format version {version} is not known"))),
    };
    let (header, data) = rest.split_at_checked(length).ok_or_else(|| bad("it is cut inside its header"))?;
    let header = std::str::from_utf8(header).map_err(|_| bad("its header is no text"))?;
    Ok((header, data))
}

/// What follows `'key':` in the header's dictionary literal.
fn value_of<'a>(header: &'a str, key: &str) -> Result<&'a str, NpyError> {
    let found = [format!("'{key}'"), format!("\"{key}\"")].into_iter().find_map(|quoted| {
        let (_, rest) = header.split_once(&quoted)?;
        rest.trim_start().strip_prefix(':').map(str::trim_start)
    });
    found.ok_or_else(|| bad(&format!("its header does not state {key}")))
}

fn text_of(header: &str, key: &str) -> Result<String, NpyError> {
    let value = value_of(header, key)?;
    let quote = value.chars().next().filter(|c| matches!(c, '\'' | '"'));
    let Some(quote) = quote else { return Err(NpyError::Type(value.chars().take(40).collect())) };
    let text = value[1..].split_once(quote).ok_or_else(|| bad("its header is cut inside a text"))?.0;
    Ok(text.to_owned())
}

fn shape_of(header: &str) -> Result<Vec<usize>, NpyError> {
    let value = value_of(header, "shape")?;
    let inside =
        value.strip_prefix('(').and_then(|rest| rest.split_once(')')).ok_or_else(|| bad("its shape is none"))?.0;
    let sizes = inside.split(',').map(str::trim).filter(|size| !size.is_empty());
    sizes.map(|size| size.trim_end_matches('L').parse().map_err(|_| bad("its shape is none"))).collect()
}

#[derive(Clone, Copy)]
struct Element {
    big_endian: bool,
    kind: char,
    bytes: usize,
    integer: bool,
}

impl Element {
    fn parse(descr: &str) -> Result<Self, NpyError> {
        let unknown = || NpyError::Type(descr.to_owned());
        let mut letters = descr.chars();
        let order = letters.next().filter(|c| matches!(c, '<' | '>' | '|' | '='));
        let kind = if order.is_some() { letters.next() } else { descr.chars().next() }.ok_or_else(unknown)?;
        let digits = descr.trim_start_matches(|c: char| !c.is_ascii_digit());
        let bytes: usize = digits.parse().map_err(|_| unknown())?;
        let known = match kind {
            'i' | 'u' => matches!(bytes, 1 | 2 | 4 | 8),
            'f' => matches!(bytes, 2 | 4 | 8),
            'b' => bytes == 1,
            _ => false,
        };
        let integer = matches!(kind, 'i' | 'u' | 'b');
        if known { Ok(Self { big_endian: order == Some('>'), kind, bytes, integer }) } else { Err(unknown()) }
    }

    fn read(self, bytes: &[u8]) -> f64 {
        let mut word = [0_u8; 8];
        word[..self.bytes].copy_from_slice(bytes);
        if self.big_endian {
            word[..self.bytes].reverse();
        }
        let raw = u64::from_le_bytes(word);
        let shift = 64 - 8 * self.bytes as u32;
        match (self.kind, self.bytes) {
            ('i', _) => (((raw << shift) as i64) >> shift) as f64,
            ('f', 2) => half(raw as u16),
            ('f', 4) => f64::from(f32::from_bits(raw as u32)),
            ('f', _) => f64::from_bits(raw),
            _ => raw as f64,
        }
    }
}

/// IEEE 754 binary16.
fn half(bits: u16) -> f64 {
    let sign = if bits >> 15 == 1 { -1.0 } else { 1.0 };
    let exponent = i32::from(bits >> 10 & 0x1f);
    let fraction = f64::from(bits & 0x3ff) / 1024.0;
    match exponent {
        0 => sign * fraction * 2_f64.powi(-14),
        31 if fraction == 0.0 => sign * f64::INFINITY,
        31 => f64::NAN,
        _ => sign * (1.0 + fraction) * 2_f64.powi(exponent - 15),
    }
}
