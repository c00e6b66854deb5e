//! A TOML file being read: tables are asked for their keys, mistakes collect, and what nobody asked for is unknown.

use super::{FileError, FileErrors, Mistake, Value, closest};
use std::{
    cell::{Cell, RefCell},
    ops::Range,
};
use toml::{Spanned, de::DeTable};

/// A file being read.
pub struct Document<'t> {
    path: &'t str,
    text: &'t str,
    root: Spanned<DeTable<'t>>,
    errors: RefCell<Vec<FileError>>,
    /// Set where further complaints would only follow from one already made.
    closed: Cell<bool>,
}

impl<'t> Document<'t> {
    /// Parses the text of a file. Mistakes in the syntax are kept, and reading goes on with what could be understood.
    pub fn parse(path: &'t str, text: &'t str) -> Self {
        let (root, syntax) = DeTable::parse_recoverable(text);
        let document = Self { path, text, root, errors: RefCell::default(), closed: Cell::new(false) };
        for error in syntax {
            let span = error.span().unwrap_or(0..0);
            let help = document.help_with_syntax(&span);
            let found = error.message().lines().next().unwrap_or("not TOML").to_owned();
            document.report(Mistake::Syntax, span, String::new(), found, "this is not valid TOML".into(), help);
        }
        document
    }

    /// The outermost table.
    pub fn root(&self) -> Table<'_, 't> {
        Table::new(self, String::new(), 0..0, self.root.get_ref())
    }

    /// Reads the key `format`, such as `"ringstep board 1"`. Where it names another kind of file or another version, that
    /// is the only mistake reported: nothing else in the file could be judged.
    pub fn format(&self, table: &Table<'_, 't>, kind: &str, version: u32) {
        let wanted = format!("ringstep {kind} {version}");
        if !table.has("format") {
            table.missing("format", Some(format!("format = {wanted:?}")));
            return;
        }
        let Some(stated) = table.required("format", Value::text) else { return };
        if stated == wanted {
            return;
        }
        let words: Vec<&str> = stated.split_whitespace().collect();
        let help = match words.as_slice() {
            ["ringstep", other, _] if *other != kind => Some(format!("a {kind} file is wanted here")),
            ["ringstep", _, stated] if stated.parse::<u32>().is_ok_and(|stated| stated > version) => {
                Some("the file was written for a newer version of this program".into())
            }
            _ => None,
        };
        self.errors.borrow_mut().retain(|error| error.mistake == Mistake::Syntax);
        table.refuse_with("format", format!("found {stated:?}"), format!("expected {wanted:?}"), help);
        self.closed.set(true);
    }

    /// Ends the reading: the value, or every mistake in the order of the file.
    pub fn finish<T>(self, value: Option<T>) -> Result<T, FileErrors> {
        let mut errors = self.errors.into_inner();
        let broken: Vec<usize> =
            errors.iter().filter(|error| error.mistake == Mistake::Syntax).map(|error| error.line).collect();
        if !broken.is_empty() {
            // What a broken line should have said is not missing, and what it did say is not worth judging.
            errors.retain(|error| {
                error.mistake == Mistake::Syntax || error.mistake != Mistake::Missing && !broken.contains(&error.line)
            });
        }
        errors.sort_by_key(|error| (error.span.start, error.key.clone()));
        match value {
            Some(value) if errors.is_empty() => Ok(value),
            _ => Err(FileErrors::new(self.path, self.text, errors)),
        }
    }

    pub(super) fn report(
        &self,
        mistake: Mistake,
        span: Range<usize>,
        key: String,
        found: String,
        expected: String,
        help: Option<String>,
    ) {
        if self.closed.get() {
            return;
        }
        let start = floor_boundary(self.text, span.start);
        let end = floor_boundary(self.text, span.end).max(start);
        let before = &self.text[..start];
        let line = before.matches('\n').count() + 1;
        let column = before.rsplit('\n').next().unwrap_or("").chars().count() + 1;
        let error = FileError { mistake, line, column, key, found, expected, help, span: start..end };
        self.errors.borrow_mut().push(error);
    }

    /// The commonest slip: a quantity without its quotes.
    fn help_with_syntax(&self, span: &Range<usize>) -> Option<String> {
        let start = floor_boundary(self.text, span.start);
        let head = self.text[..start].rsplit('\n').next().unwrap_or("");
        let tail = self.text[start..].lines().next().unwrap_or("");
        let value = format!("{head}{tail}");
        let value = value.split_once('=')?.1.trim();
        let unquoted = value.starts_with(|c: char| c.is_ascii_digit()) && value.contains(|c: char| c.is_alphabetic());
        unquoted.then(|| format!("quantities stand in quotes: \"{value}\""))
    }
}

/// The nearest place at or before `at` where a character begins.
fn floor_boundary(text: &str, at: usize) -> usize {
    let mut at = at.min(text.len());
    while !text.is_char_boundary(at) {
        at -= 1;
    }
    at
}

/// One table of a file. Keys are asked for by name; [`Table::finish`] reports those that were not.
pub struct Table<'d, 't> {
    document: &'d Document<'t>,
    path: String,
    header: Range<usize>,
    entries: &'d DeTable<'t>,
    asked: RefCell<Vec<&'static str>>,
}

impl<'d, 't> Table<'d, 't> {
    pub(super) fn new(
        document: &'d Document<'t>,
        path: String,
        header: Range<usize>,
        entries: &'d DeTable<'t>,
    ) -> Self {
        Self { document, path, header, entries, asked: RefCell::default() }
    }

    /// The value of a key that must be there, read by `read`.
    pub fn required<T>(&self, key: &'static str, read: impl FnOnce(Value<'d, 't>) -> Option<T>) -> Option<T> {
        match self.value(key) {
            Some(value) => read(value),
            None => {
                self.missing(key, None);
                None
            }
        }
    }

    /// The value of a key that may be left out: outer `None` where it could not be read, inner `None` where it is absent.
    pub fn optional<T>(&self, key: &'static str, read: impl FnOnce(Value<'d, 't>) -> Option<T>) -> Option<Option<T>> {
        match self.value(key) {
            Some(value) => read(value).map(Some),
            None => Some(None),
        }
    }

    /// Whether the key is there.
    pub fn has(&self, key: &'static str) -> bool {
        self.value(key).is_some()
    }

    /// Reports that a key is missing, with what would mend it.
    pub fn missing(&self, key: &'static str, help: Option<String>) {
        self.asked.borrow_mut().push(key);
        let place = if self.path.is_empty() { "the file".to_owned() } else { format!("the table `{}`", self.path) };
        let expected = format!("{place} needs the key `{key}`");
        self.document.report(Mistake::Missing, self.header.clone(), self.full(key), "missing".into(), expected, help);
    }

    /// Reports that the value of a key can't be accepted, though it reads.
    pub fn refuse(&self, key: &'static str, found: impl Into<String>, expected: impl Into<String>) {
        self.refuse_with(key, found.into(), expected.into(), None);
    }

    /// Ends the table: every key that was not asked for is unknown.
    pub fn finish(&self) {
        let asked = self.asked.borrow();
        for name in self.entries.keys() {
            let word = name.get_ref().as_ref();
            if asked.contains(&word) {
                continue;
            }
            let free = asked.iter().copied().filter(|known| !self.entries.contains_key(*known));
            let meant = closest(word, free).or_else(|| closest(word, asked.iter().copied()));
            let help = meant.map(|known| format!("did you mean `{known}`?"));
            let mut known = asked.clone();
            known.sort_unstable();
            known.dedup();
            let expected = format!("not a key of this table, which knows {}", known.join(", "));
            self.document.report(Mistake::Unknown, name.span(), self.full(word), "unknown key".into(), expected, help);
        }
    }

    fn refuse_with(&self, key: &'static str, found: String, expected: String, help: Option<String>) {
        let span = self.entries.get(key).map_or(self.header.clone(), Spanned::span);
        self.document.report(Mistake::Refused, span, self.full(key), found, expected, help);
    }

    fn value(&self, key: &'static str) -> Option<Value<'d, 't>> {
        self.asked.borrow_mut().push(key);
        let entry = self.entries.get(key)?;
        Some(Value::new(self.document, self.full(key), entry))
    }

    fn full(&self, key: &str) -> String {
        if self.path.is_empty() { key.to_owned() } else { format!("{}.{key}", self.path) }
    }
}
