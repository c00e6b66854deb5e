//! Answers as bytes: where a message ends, and the numbers, words, strings and error entries in it.

use super::block::Parsed;

/// Longest line that is believed to be an answer.
pub const LONGEST_LINE: usize = 64 * 1024;

/// Parses one message up to its newline; a carriage return before it is dropped.
pub fn parse_line(bytes: &[u8]) -> Parsed<&[u8]> {
    match bytes.iter().position(|byte| *byte == b'\n') {
        Some(end) => {
            let line = &bytes[..end];
            Parsed::Complete { value: line.strip_suffix(b"\r").unwrap_or(line), used: end + 1 }
        }
        None if bytes.len() > LONGEST_LINE => {
            Parsed::Malformed(format!("no newline in {} bytes: this is no answer", bytes.len()))
        }
        None => Parsed::Incomplete,
    }
}

/// Why a text is not a number that was measured.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
pub enum NumberError {
    /// It is not a decimal number.
    #[error("`{0}` is not a number")]
    NotANumber(String),
    /// It is a sentinel of SCPI-99 7.2.1.4: 9.9E37 infinity, 9.91E37 not a number.
    #[error("`{0}` stands for a value that could not be measured")]
    Sentinel(String),
}

/// Parses a decimal number (NR1, NR2 or NR3). The sentinels of infinity and not-a-number are never values.
pub fn number(text: &str) -> Result<f64, NumberError> {
    let trimmed = text.trim();
    let decimal = trimmed.starts_with(|first: char| first.is_ascii_digit() || "+-.".contains(first))
        && trimmed.bytes().all(|byte| byte.is_ascii_digit() || b"+-.eE".contains(&byte));
    let value: f64 = match trimmed.parse() {
        Ok(value) if decimal => value,
        _ if ["NAN", "INF", "+INF", "-INF", "NINF", "INFINITY", "NINFINITY"]
            .iter()
            .any(|word| trimmed.eq_ignore_ascii_case(word)) =>
        {
            return Err(NumberError::Sentinel(trimmed.to_owned()));
        }
        _ => return Err(NumberError::NotANumber(text.to_owned())),
    };
    // Everything from 9.9E37 on: overflow is no value either.
    if value.abs() >= 9.899_999e37 { Err(NumberError::Sentinel(trimmed.to_owned())) } else { Ok(value) }
}

/// Parses a whole number; `1.0E+03` counts as one.
pub fn integer(text: &str) -> Result<i64, NumberError> {
    let value = number(text)?;
    // 2^53: beyond it a double no longer tells neighbours apart.
    if value.fract() == 0.0 && value.abs() <= 9_007_199_254_740_992.0 {
        Ok(value as i64)
    } else {
        Err(NumberError::NotANumber(text.to_owned()))
    }
}

/// Parses a quoted string; a doubled quote stands for one. Returns the text and what follows it.
pub fn quoted(text: &str) -> Option<(String, &str)> {
    let quote = text.chars().next().filter(|first| matches!(first, '"' | '\''))?;
    let mut value = String::new();
    let mut characters = text[1..].char_indices();
    while let Some((index, character)) = characters.next() {
        if character != quote {
            value.push(character);
            continue;
        }
        let rest = &text[1 + index + 1..];
        if !rest.starts_with(quote) {
            return Some((value, rest));
        }
        characters.next();
        value.push(quote);
    }
    None
}

/// Whether an answer is the word of a pattern such as `POSitive`: its short form (the capitals) or its long form, in any
/// case.
pub fn is_word(pattern: &str, answer: &str) -> bool {
    let answer = answer.trim();
    let short_end = pattern.find(|character: char| character.is_ascii_lowercase()).unwrap_or(pattern.len());
    // Digits after the lower-case part belong to both forms, as in CHANnel1.
    let suffix = &pattern[pattern.trim_end_matches(|character: char| character.is_ascii_digit()).len()..];
    let short =
        if short_end < pattern.len() { format!("{}{suffix}", &pattern[..short_end]) } else { pattern.to_owned() };
    answer.eq_ignore_ascii_case(pattern) || answer.eq_ignore_ascii_case(&short)
}

/// One entry of an instrument's error queue.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct ErrorEntry {
    /// Number: 0 none, negative standard, positive of the instrument.
    pub code: i32,
    /// Description, with the detail that may follow a semicolon.
    pub message: String,
}

impl ErrorEntry {
    /// Whether the queue was empty.
    pub fn is_none(&self) -> bool {
        self.code == 0
    }
}

impl std::fmt::Display for ErrorEntry {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        write!(f, "{} {}", self.code, self.message)
    }
}

/// Parses the answer to `SYSTem:ERRor?`, for instance `-113,"Undefined header"`; some instruments send `+0` or no text.
pub fn error_entry(line: &str) -> Option<ErrorEntry> {
    let line = line.trim();
    let (code, message) = match line.split_once(',') {
        Some((code, message)) => (code, message.trim()),
        None => (line, ""),
    };
    let code = i32::try_from(integer(code).ok()?).ok()?;
    let message = match quoted(message) {
        Some((message, "")) => message,
        Some(_) => return None,
        None if message.starts_with('"') => return None,
        None => message.to_owned(),
    };
    Some(ErrorEntry { code, message })
}
