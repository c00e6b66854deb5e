//! SCPI error numbers and texts (SCPI-99, volume 2, chapter 21), as the instruments put them into their queues. The class
//! of an error decides which bit of the event status register it raises.

use std::fmt;

/// An entry of an error queue.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct ScpiError {
    code: i16,
    text: &'static str,
    detail: String,
}

macro_rules! errors {
    ($($name:ident = $code:literal, $text:literal;)*) => {
        impl ScpiError {
            $(
                #[doc = concat!(stringify!($code), ", ", $text, ".")]
                pub fn $name(detail: impl Into<String>) -> Self {
                    Self { code: $code, text: $text, detail: detail.into() }
                }
            )*
        }
    };
}

errors! {
    invalid_character = -101, "Invalid character";
    syntax_error = -102, "Syntax error";
    data_type = -104, "Data type error";
    parameter_not_allowed = -108, "Parameter not allowed";
    missing_parameter = -109, "Missing parameter";
    undefined_header = -113, "Undefined header";
    header_suffix = -114, "Header suffix out of range";
    invalid_number = -121, "Invalid character in number";
    invalid_suffix = -131, "Invalid suffix";
    invalid_string = -151, "Invalid string data";
    command_protected = -203, "Command protected";
    settings_conflict = -221, "Settings conflict";
    out_of_range = -222, "Data out of range";
    illegal_value = -224, "Illegal parameter value";
    stale_data = -230, "Data corrupt or stale";
    queue_overflow = -350, "Queue overflow";
    input_overrun = -363, "Input buffer overrun";
    interrupted = -410, "Query INTERRUPTED";
    unterminated = -420, "Query UNTERMINATED";
    unterminated_after_indefinite = -440, "Query UNTERMINATED after indefinite response";
}

impl ScpiError {
    /// Its number.
    pub fn code(&self) -> i16 {
        self.code
    }

    /// Whether it is a command error: the rest of the message cannot be trusted and is dropped.
    pub fn is_command_error(&self) -> bool {
        (-199..=-100).contains(&self.code)
    }

    /// The bit it raises in the standard event status register (IEEE 488.2, 11.5.1).
    pub fn event_bit(&self) -> u8 {
        match -self.code / 100 {
            1 => 0x20,
            2 => 0x10,
            3 => 0x08,
            _ => 0x04,
        }
    }
}

impl fmt::Display for ScpiError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        if self.detail.is_empty() {
            return write!(f, "{},\"{}\"", self.code, self.text);
        }
        let detail: String = self.detail.chars().take(60).map(|c| if c == '"' { '\'' } else { c }).collect();
        write!(f, "{},\"{};{detail}\"", self.code, self.text)
    }
}
