//! Definite-length blocks of IEEE 488.2 (`#15HELLO`) over bytes. Incomplete is not malformed: more bytes may follow.

/// What the bytes so far hold.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Parsed<T> {
    /// The whole value, and how many bytes it took.
    Complete {
        /// The value.
        value: T,
        /// Bytes used.
        used: usize,
    },
    /// Right so far; more bytes are needed.
    Incomplete,
    /// No bytes that follow could make it right.
    Malformed(String),
}

/// Header of a definite-length block.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct BlockHeader {
    /// Bytes of payload that follow the header.
    pub length: usize,
}

/// Parses the header of a block. `#0` (indefinite length) is refused: it ends with a signal that streams don't carry.
pub fn parse_header(bytes: &[u8]) -> Parsed<BlockHeader> {
    match bytes.first() {
        None => return Parsed::Incomplete,
        Some(b'#') => {}
        Some(_) => return Parsed::Malformed("a block begins with `#`".to_owned()),
    }
    let digits = match bytes.get(1) {
        None => return Parsed::Incomplete,
        Some(b'0') => {
            return Parsed::Malformed(
                "`#0` is a block of indefinite length, whose end this wire does not signal".to_owned(),
            );
        }
        Some(digit @ b'1'..=b'9') => usize::from(digit - b'0'),
        Some(_) => return Parsed::Malformed("a digit follows the `#` of a block".to_owned()),
    };
    let written = &bytes[2..bytes.len().min(2 + digits)];
    if !written.iter().all(u8::is_ascii_digit) {
        return Parsed::Malformed("the length of a block is made of digits".to_owned());
    }
    if written.len() < digits {
        return Parsed::Incomplete;
    }
    // At most nine digits, which bounds it to a gigabyte.
    let length = written.iter().fold(0, |length, digit| length * 10 + usize::from(digit - b'0'));
    Parsed::Complete { value: BlockHeader { length }, used: 2 + digits }
}

/// Parses a whole block; the payload is the value. A newline that some instruments append is not part of it.
pub fn parse_block(bytes: &[u8]) -> Parsed<&[u8]> {
    match parse_header(bytes) {
        Parsed::Complete { value, used } => match bytes.get(used..used + value.length) {
            Some(payload) => Parsed::Complete { value: payload, used: used + value.length },
            None => Parsed::Incomplete,
        },
        Parsed::Incomplete => Parsed::Incomplete,
        Parsed::Malformed(reason) => Parsed::Malformed(reason),
    }
}
