//! How a delimited text is laid out: its characters, lines, delimiter and decimal mark.

use std::borrow::Cow;

/// What stands between two fields.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Delimiter {
    /// One character; two of them enclose an empty field.
    Character(char),
    /// Any number of spaces or tabs.
    Spaces,
}

/// Delimiter and decimal mark.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) struct Layout {
    pub(super) delimiter: Delimiter,
    pub(super) decimal_comma: bool,
}

/// In order of preference where several suit equally well.
const LAYOUTS: [Layout; 6] = [
    Layout { delimiter: Delimiter::Character('\t'), decimal_comma: false },
    Layout { delimiter: Delimiter::Character('\t'), decimal_comma: true },
    Layout { delimiter: Delimiter::Character(';'), decimal_comma: false },
    Layout { delimiter: Delimiter::Character(';'), decimal_comma: true },
    Layout { delimiter: Delimiter::Character(','), decimal_comma: false },
    Layout { delimiter: Delimiter::Spaces, decimal_comma: false },
];

/// Spaces between numbers with decimal commas: only where nothing else suits.
const LAST_RESORT: Layout = Layout { delimiter: Delimiter::Spaces, decimal_comma: true };

/// Lines of the middle of a file that are looked at to tell its layout: far from any header.
const LOOKED_AT: usize = 200;

/// One line of the file that is not empty.
#[derive(Debug, Clone, Copy)]
pub(super) struct Line<'a> {
    /// Counted from one, empty lines included.
    pub(super) number: usize,
    /// Without its end, and without the comment mark.
    pub(super) text: &'a str,
    pub(super) comment: bool,
}

/// Bytes as text: UTF-8, UTF-16 with a byte order mark, and else Latin-1 (in which a lone 0xB5 is the micro sign).
pub(super) fn characters(bytes: &[u8]) -> Cow<'_, str> {
    let utf16 = |unit: fn([u8; 2]) -> u16| {
        let units: Vec<u16> = bytes[2..].chunks_exact(2).map(|pair| unit([pair[0], pair[1]])).collect();
        Cow::Owned(String::from_utf16_lossy(&units))
    };
    match bytes {
        [0xff, 0xfe, ..] => utf16(u16::from_le_bytes),
        [0xfe, 0xff, ..] => utf16(u16::from_be_bytes),
        _ => {
            let bytes = bytes.strip_prefix(b"\xef\xbb\xbf").unwrap_or(bytes);
            match std::str::from_utf8(bytes) {
                Ok(text) => Cow::Borrowed(text),
                Err(_) => Cow::Owned(bytes.iter().map(|&byte| char::from(byte)).collect()),
            }
        }
    }
}

/// The lines that are not empty; comments begin with `#`, `%`, `!` or `//`.
pub(super) fn lines(text: &str) -> Vec<Line<'_>> {
    // A lone carriage return ends a line too; one before a line feed is trimmed with the other white space.
    let split: Box<dyn Iterator<Item = &str>> =
        if text.contains('\n') { Box::new(text.split('\n')) } else { Box::new(text.split('\r')) };
    split.enumerate().filter_map(|(index, raw)| line(index + 1, raw)).collect()
}

fn line(number: usize, raw: &str) -> Option<Line<'_>> {
    let text = raw.trim_end_matches(['\r', '\0', '\x1a']);
    let trimmed = text.trim();
    if trimmed.is_empty() {
        return None;
    }
    let bare = trimmed.trim_start_matches(['#', '%', '!']);
    let bare = bare.strip_prefix("//").unwrap_or(bare);
    let comment = bare.len() < trimmed.len();
    Some(Line { number, text: if comment { bare.trim() } else { text }, comment })
}

impl Layout {
    /// The layout under which most fields of the middle lines are numbers.
    pub(super) fn detect(lines: &[Line<'_>]) -> Self {
        let data: Vec<&Line<'_>> = lines.iter().filter(|line| !line.comment).collect();
        let from = (data.len() / 2).saturating_sub(LOOKED_AT / 2);
        let middle = &data[from..data.len().min(from + LOOKED_AT)];
        let score = |layout: &Layout| middle.iter().map(|line| layout.numeric_share(line.text)).sum::<f64>();
        let mut best = (LAYOUTS[0], 0.0);
        for layout in LAYOUTS {
            let score = score(&layout);
            // A wider split wins only where it reads clearly more numbers.
            if score > best.1 * 1.02 {
                best = (layout, score);
            }
        }
        if score(&LAST_RESORT) > best.1 * 1.5 { LAST_RESORT } else { best.0 }
    }

    /// Share of the fields of a line that are numbers or dates; a line with a single field counts a little less, so that a
    /// delimiter that really divides the lines wins.
    fn numeric_share(self, line: &str) -> f64 {
        let (mut fields, mut numbers) = (0_usize, 0_usize);
        self.for_each_field(line, |_, field| {
            fields += usize::from(!field.is_empty());
            numbers += usize::from(self.number(field).is_some() || time_of_day_s(field).is_some());
        });
        if fields == 0 {
            return 0.0;
        }
        let share = numbers as f64 / fields as f64;
        if fields == 1 { share * 0.9 } else { share }
    }

    /// Calls `each` with the index (from zero) and the trimmed text of every field, without quotation marks.
    pub(super) fn for_each_field<'a>(self, line: &'a str, mut each: impl FnMut(usize, &'a str)) {
        let clean = |field: &'a str| field.trim().trim_matches('"').trim();
        match self.delimiter {
            Delimiter::Character(mark) => {
                line.split(mark).enumerate().for_each(|(index, field)| each(index, clean(field)));
            }
            Delimiter::Spaces => {
                line.split_whitespace().enumerate().for_each(|(index, field)| each(index, clean(field)));
            }
        }
    }

    /// The fields of a line.
    pub(super) fn fields(self, line: &str) -> Vec<&str> {
        let mut fields = Vec::new();
        self.for_each_field(line, |_, field| fields.push(field));
        fields
    }

    /// A field as a number; sentinels and `nan` are numbers here and refused later, with their place.
    pub(super) fn number(self, field: &str) -> Option<f64> {
        let first = field.as_bytes().first()?;
        let wordy = matches!(field.to_ascii_lowercase().as_str(), "nan" | "inf" | "-inf" | "+inf" | "-nan");
        if !(first.is_ascii_digit() || matches!(first, b'+' | b'-' | b'.' | b',') || wordy) {
            return None;
        }
        if self.decimal_comma && field.contains(',') {
            if field.contains('.') {
                return None;
            }
            return field.replacen(',', ".", 1).parse().ok();
        }
        field.parse().ok()
    }
}

/// Seconds since midnight of a field that ends in a time of day, `[date] 11:44:55.465797`.
pub(super) fn time_of_day_s(field: &str) -> Option<f64> {
    let last = field.rsplit([' ', 'T']).next()?;
    let mut parts = last.split(':');
    let (hours, minutes, seconds) = (parts.next()?, parts.next()?, parts.next()?);
    if parts.next().is_some() {
        return None;
    }
    let hours: u32 = hours.parse().ok().filter(|&h| h < 24)?;
    let minutes: u32 = minutes.parse().ok().filter(|&m| m < 60)?;
    let seconds: f64 = seconds.trim_end_matches('Z').parse().ok().filter(|s| (0.0..61.0).contains(s))?;
    Some(f64::from(hours * 3600 + minutes * 60) + seconds)
}
