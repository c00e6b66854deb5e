//! Mistakes in a file: each with its place, what was found and what was expected, printed as one line or drawn beneath
//! the line of the file it stands in.

use annotate_snippets::{AnnotationKind, Group, Level, Renderer, Snippet};
use std::{fmt, ops::Range};

/// Kinds of mistake.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub enum Mistake {
    /// Not TOML.
    Syntax,
    /// A key that must be there is not.
    Missing,
    /// A key that means nothing here.
    Unknown,
    /// A value of another type, or a text that does not read as what it should be.
    Unreadable,
    /// A value outside its range, or at odds with another value.
    Refused,
}

/// One mistake in a file.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct FileError {
    /// Kind.
    pub mistake: Mistake,
    /// Line, from one.
    pub line: usize,
    /// Column in characters, from one.
    pub column: usize,
    /// The key with its tables, as `probe.capacitance`; empty where no key can be named.
    pub key: String,
    /// What stands there.
    pub found: String,
    /// What should stand there.
    pub expected: String,
    /// What to do next, where that can be guessed.
    pub help: Option<String>,
    /// Bytes of the file it is about.
    pub span: Range<usize>,
}

impl FileError {
    fn headline(&self) -> String {
        if self.key.is_empty() { self.found.clone() } else { format!("{}: {}", self.key, self.found) }
    }
}

/// Every mistake in one file, in the order of the file.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
pub struct FileErrors {
    /// The file as it was named.
    pub path: String,
    /// The mistakes; never empty.
    pub errors: Vec<FileError>,
    text: String,
}

impl FileErrors {
    pub(super) fn new(path: &str, text: &str, errors: Vec<FileError>) -> Self {
        Self { path: path.to_owned(), text: text.to_owned(), errors }
    }

    /// The mistakes drawn beneath the lines they stand in; `styled` uses the colours of a terminal.
    pub fn render(&self, styled: bool) -> String {
        let renderer = if styled { Renderer::styled() } else { Renderer::plain() };
        let drawn = self.errors.iter().map(|error| {
            let mut group = Group::with_title(Level::ERROR.primary_title(error.headline()));
            group = group.element(
                Snippet::source(self.text.as_str())
                    .path(self.path.as_str())
                    .annotation(AnnotationKind::Primary.span(error.span.clone()).label(error.expected.as_str())),
            );
            if let Some(help) = &error.help {
                group = group.element(Level::HELP.message(help.as_str()));
            }
            renderer.render(&[group])
        });
        drawn.collect::<Vec<_>>().join("\n\n")
    }
}

impl fmt::Display for FileErrors {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        for (index, error) in self.errors.iter().enumerate() {
            if index > 0 {
                writeln!(f)?;
            }
            let FileError { line, column, expected, .. } = error;
            write!(f, "{}:{line}:{column}: {}: {expected}", self.path, error.headline())?;
            if let Some(help) = &error.help {
                write!(f, " ({help})")?;
            }
        }
        Ok(())
    }
}
