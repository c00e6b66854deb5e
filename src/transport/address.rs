//! Addresses in the open VISA resource syntax (IVI VPP-4.3): `TCPIP::host::5025::SOCKET`, `ASRL/dev/ttyUSB0::INSTR`;
//! other kinds are recognised, so that they can be refused by name.

use std::{fmt, str::FromStr};

/// Where an instrument is.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Address {
    /// A raw TCP socket.
    Socket {
        /// Host name or address; an IPv6 address without its brackets.
        host: String,
        /// TCP port.
        port: u16,
    },
    /// A serial line, real or a pseudo-terminal.
    Serial {
        /// Device, for instance `/dev/ttyUSB0`.
        device: String,
    },
    /// A kind that only a VISA library reaches.
    Other {
        /// Which kind, in plain words.
        kind: &'static str,
    },
}

/// Why a text is not an address.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
#[error(
    "`{text}` is not an instrument address: {reason}; expected for instance `TCPIP::192.0.2.7::5025::SOCKET` or `ASRL/dev/ttyUSB0::INSTR`"
)]
pub struct AddressError {
    /// The text.
    pub text: String,
    /// What is wrong with it.
    pub reason: String,
}

impl FromStr for Address {
    type Err = AddressError;

    fn from_str(text: &str) -> Result<Self, AddressError> {
        parse(text).map_err(|reason| AddressError { text: text.to_owned(), reason })
    }
}

fn parse(text: &str) -> Result<Address, String> {
    if text.trim() != text || text.chars().any(char::is_control) {
        return Err("it has spaces around it or control characters in it".to_owned());
    }
    let (interface, rest) = match text.split_once("::") {
        Some((interface, rest)) => (interface, rest),
        None => (text, ""),
    };
    if let Some(board) = strip_prefix_ignoring_case(interface, "ASRL") {
        return serial(board, rest);
    }
    if let Some(board) = strip_prefix_ignoring_case(interface, "TCPIP") {
        require_board(board)?;
        return tcpip(rest);
    }
    for (prefix, kind) in [("USB", "USB instruments"), ("GPIB", "GPIB"), ("VXI", "VXI"), ("PXI", "PXI")] {
        if let Some(board) = strip_prefix_ignoring_case(interface, prefix) {
            require_board(board)?;
            return if rest.is_empty() {
                Err(format!("nothing stands after `{interface}`"))
            } else {
                Ok(Address::Other { kind })
            };
        }
    }
    Err("it begins with none of TCPIP, ASRL, USB, GPIB".to_owned())
}

fn serial(board: &str, rest: &str) -> Result<Address, String> {
    if !(rest.is_empty() || rest.eq_ignore_ascii_case("INSTR")) {
        return Err(format!("`{rest}` stands where `INSTR` was expected"));
    }
    if board.is_empty() {
        return Err("no device stands after `ASRL`".to_owned());
    }
    if board.bytes().all(|byte| byte.is_ascii_digit()) {
        return Err("serial lines are named by their device here, not by a number".to_owned());
    }
    Ok(Address::Serial { device: board.to_owned() })
}

fn tcpip(rest: &str) -> Result<Address, String> {
    let (host, rest) = match rest.strip_prefix('[') {
        Some(bracketed) => {
            let (host, rest) = bracketed.split_once(']').ok_or("the bracket of the host is not closed")?;
            (host, rest.strip_prefix("::").unwrap_or(rest))
        }
        None => rest.split_once("::").unwrap_or((rest, "")),
    };
    if host.is_empty() {
        return Err("the host is missing".to_owned());
    }
    let (device, class) = rest.rsplit_once("::").unwrap_or(("", rest));
    if class.eq_ignore_ascii_case("SOCKET") {
        let port = device.parse().ok().filter(|port| *port != 0);
        let port = port.ok_or_else(|| format!("`{device}` is not a port between 1 and 65535"))?;
        return Ok(Address::Socket { host: host.to_owned(), port });
    }
    let hislip = [device, class].iter().any(|part| strip_prefix_ignoring_case(part, "hislip").is_some());
    match (device, class) {
        _ if hislip => Ok(Address::Other { kind: "HiSLIP" }),
        (_, "") => Ok(Address::Other { kind: "VXI-11" }),
        _ if class.eq_ignore_ascii_case("INSTR") => Ok(Address::Other { kind: "VXI-11" }),
        _ => Err(format!("it ends in `{class}` instead of `SOCKET` or `INSTR`")),
    }
}

fn require_board(board: &str) -> Result<(), String> {
    if board.bytes().all(|byte| byte.is_ascii_digit()) {
        Ok(())
    } else {
        Err(format!("`{board}` is not a board number"))
    }
}

fn strip_prefix_ignoring_case<'a>(text: &'a str, prefix: &str) -> Option<&'a str> {
    let head = text.get(..prefix.len())?;
    head.eq_ignore_ascii_case(prefix).then(|| &text[prefix.len()..])
}

impl fmt::Display for Address {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::Socket { host, port } if host.contains(':') => write!(f, "TCPIP::[{host}]::{port}::SOCKET"),
            Self::Socket { host, port } => write!(f, "TCPIP::{host}::{port}::SOCKET"),
            Self::Serial { device } => write!(f, "ASRL{device}::INSTR"),
            Self::Other { kind } => f.write_str(kind),
        }
    }
}
