//! Program messages taken apart as IEEE 488.2 and SCPI-99 (volume 1, chapters 6 and 7) define them: message units, headers
//! with the tree walk of chained commands, parameters. Pure, over bytes.

use super::error::ScpiError;

/// One message unit: a full header and its parameters as text.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Unit {
    /// The header from the root of the tree; a common command is the one mnemonic with its asterisk.
    pub header: Vec<String>,
    /// Whether it ends in a question mark.
    pub query: bool,
    /// Parameters, trimmed.
    pub parameters: Vec<String>,
}

impl Unit {
    /// The header as text, for error details.
    pub fn text(&self) -> String {
        format!("{}{}", self.header.join(":"), if self.query { "?" } else { "" })
    }
}

/// Splits a message (without its terminator) into units; the first syntax error ends it.
pub fn units(message: &[u8]) -> Vec<Result<Unit, ScpiError>> {
    let Some(text) = printable(message) else {
        return vec![Err(ScpiError::invalid_character(""))];
    };
    let parts = match split(&text, ';') {
        Ok(parts) => parts,
        Err(error) => return vec![Err(error)],
    };
    if parts.len() == 1 && parts[0].is_empty() {
        return vec![];
    }
    let mut path = vec![];
    let mut units = vec![];
    for part in parts {
        let unit = unit(part, &mut path);
        let failed = unit.is_err();
        units.push(unit);
        if failed {
            break;
        }
    }
    units
}

fn printable(message: &[u8]) -> Option<String> {
    let text = std::str::from_utf8(message).ok()?.trim_matches(|c: char| c.is_ascii_whitespace());
    text.chars().all(|c| c == '\t' || (' '..='~').contains(&c)).then(|| text.to_owned())
}

/// Splits at a separator outside quoted strings; the parts are trimmed.
fn split(text: &str, separator: char) -> Result<Vec<&str>, ScpiError> {
    let mut quote = None;
    let mut parts = vec![];
    let mut start = 0;
    for (at, c) in text.char_indices() {
        match quote {
            Some(open) if c == open => quote = None,
            Some(_) => {}
            None if c == '"' || c == '\'' => quote = Some(c),
            None if c == separator => {
                parts.push(text[start..at].trim());
                start = at + 1;
            }
            None => {}
        }
    }
    if quote.is_some() {
        return Err(ScpiError::invalid_string(text));
    }
    parts.push(text[start..].trim());
    Ok(parts)
}

fn unit(part: &str, path: &mut Vec<String>) -> Result<Unit, ScpiError> {
    let (header, rest) = match part.find([' ', '\t']) {
        Some(at) => (&part[..at], part[at..].trim()),
        None => (part, ""),
    };
    let (header, query) = match header.strip_suffix('?') {
        Some(header) => (header, true),
        None => (header, false),
    };
    let header = full_header(header, path)?;
    let parameters = if rest.is_empty() { vec![] } else { split(rest, ',')? };
    if parameters.iter().any(|parameter| parameter.is_empty()) {
        return Err(ScpiError::syntax_error(part));
    }
    Ok(Unit { header, query, parameters: parameters.into_iter().map(str::to_owned).collect() })
}

/// Completes a header from the current path, and moves the path (SCPI-99, volume 1, 6.2.4).
fn full_header(header: &str, path: &mut Vec<String>) -> Result<Vec<String>, ScpiError> {
    if let Some(common) = header.strip_prefix('*') {
        return if is_mnemonic(common) {
            Ok(vec![header.to_ascii_uppercase()])
        } else {
            Err(ScpiError::syntax_error(header))
        };
    }
    let relative = match header.strip_prefix(':') {
        Some(rest) => {
            path.clear();
            rest
        }
        None => header,
    };
    let nodes: Vec<String> = relative.split(':').map(str::to_ascii_uppercase).collect();
    if !nodes.iter().all(|node| is_mnemonic(node)) {
        return Err(ScpiError::syntax_error(header));
    }
    path.extend(nodes);
    let full = path.clone();
    path.pop();
    Ok(full)
}

fn is_mnemonic(node: &str) -> bool {
    node.starts_with(|c: char| c.is_ascii_alphabetic()) && node.chars().all(|c| c.is_ascii_alphanumeric() || c == '_')
}
