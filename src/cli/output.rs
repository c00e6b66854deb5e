//! What commands print: tables and plain sentences for people, JSON for machines, colour only where a terminal shows it.

use comfy_table::{Attribute, Cell, ContentArrangement, Table, presets};
use ringstep::station::CAUTIONS;
use serde_json::Value;
use std::io::{IsTerminal, Write};

/// Whether that stream shows colour: a terminal, and NO_COLOR is not set.
pub(crate) fn styled(stream: &impl IsTerminal) -> bool {
    stream.is_terminal() && std::env::var_os("NO_COLOR").is_none_or(|value| value.is_empty())
}

/// Prints one line; a reader that has gone away is no error.
pub(crate) fn line(text: &str) {
    let _ = writeln!(std::io::stdout(), "{text}");
}

/// Tells whoever watches one thing on the standard error; nobody watching is no error, least of all while something is energised.
pub(crate) fn note(text: &str) {
    let _ = writeln!(std::io::stderr(), "{text}");
}

/// Prints one JSON value.
pub(crate) fn json(value: &Value) {
    line(&format!("{value:#}"));
}

/// A table with a heading, as wide as the terminal at most.
pub(crate) fn table(heading: &[&str], rows: impl IntoIterator<Item = Vec<String>>) -> String {
    let mut table = Table::new();
    table.load_style(presets::NOTHING).set_content_arrangement(ContentArrangement::Dynamic);
    let bold = styled(&std::io::stdout());
    table.set_header(heading.iter().map(|cell| {
        let cell = Cell::new(cell);
        if bold { cell.add_attribute(Attribute::Bold) } else { cell }
    }));
    table.add_rows(rows);
    table.trim_fmt()
}

/// The cautions, as a list.
pub(crate) fn cautions() -> String {
    let list: Vec<String> = CAUTIONS.iter().map(|caution| format!("  - {caution}")).collect();
    format!("Cautions:\n{}", list.join("\n"))
}
