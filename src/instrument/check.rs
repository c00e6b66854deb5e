//! One validator for every driver file, embedded or a user's: all mistakes at once, each with its line, its key and what
//! was expected.

use super::definition::{
    Command, Converter, Definition, Facts, LoadFacts, PreambleField, RoleKind, Rule, ScopeFacts, SourceFacts, Use,
};
use crate::{
    files::{Document, FileErrors, Table, Value},
    transport::{Parity, SerialOptions, StopBits},
};
use regex::Regex;
use std::{collections::BTreeMap, time::Duration};

/// Version of the driver files this program reads.
pub const VERSION: u32 = 1;

/// Reads a driver file; `path` is how it is named in messages.
pub fn check(path: &str, text: &str) -> Result<Definition, FileErrors> {
    let document = Document::parse(path, text);
    let definition = {
        let root = document.root();
        document.format(&root, "driver", VERSION);
        let definition = definition(&root);
        root.finish();
        definition
    };
    document.finish(definition)
}

fn definition(root: &Table<'_, '_>) -> Option<Definition> {
    let name = root.required("name", |value| value.text());
    let about = root.required("about", |value| value.text());
    let roles = [("scope", RoleKind::Scope), ("load", RoleKind::Load), ("source", RoleKind::Source)];
    let role = root.required("role", |value| value.choice(&roles));
    let identity = root.required("identity", |value| {
        let table = value.table()?;
        let (maker, model) = (pattern(&table, "maker"), pattern(&table, "model"));
        table.finish();
        Some((maker?, model?))
    });
    let link = root.required("link", link);
    let serial = root.optional("serial", serial);
    // What else belongs into the file depends on the role.
    let role = role?;
    let facts = facts(root, role);
    let commands = root.required("commands", |value| commands(&value.table()?, role));
    let ((maker, model), (terminator, reply_timeout, stall_timeout)) = (identity?, link?);
    Some(Definition {
        name: name?,
        about: about?,
        maker,
        model,
        terminator,
        reply_timeout,
        stall_timeout,
        serial: serial?.unwrap_or_default(),
        facts: facts?,
        commands: commands?,
    })
}

fn pattern(table: &Table<'_, '_>, key: &'static str) -> Option<Regex> {
    let text = table.required(key, |value| value.text())?;
    match Regex::new(&text) {
        Ok(pattern) if text.starts_with('^') && text.ends_with('$') => Some(pattern),
        Ok(_) => {
            let expected = "expected a regular expression from ^ to $, so that it can't match by accident";
            table.refuse(key, format!("found {text:?}"), expected);
            None
        }
        Err(error) => {
            let why = error.to_string().lines().last().unwrap_or_default().trim().to_owned();
            table.refuse(key, format!("found {text:?}"), format!("expected a regular expression: {why}"));
            None
        }
    }
}

fn link(value: Value<'_, '_>) -> Option<(String, Duration, Duration)> {
    let table = value.table()?;
    let terminators = [("newline", "\n"), ("carriage return and newline", "\r\n")];
    let terminator = table.required("terminator", |value| value.choice(&terminators));
    let reply = table.required("reply_timeout_s", |value| value.number(0.05..=60.0));
    let stall = table.required("stall_timeout_s", |value| value.number(0.05..=60.0));
    table.finish();
    Some((terminator?.to_owned(), Duration::from_secs_f64(reply?), Duration::from_secs_f64(stall?)))
}

fn serial(value: Value<'_, '_>) -> Option<SerialOptions> {
    let table = value.table()?;
    let baud = table.required("baud", |value| value.count(300..=4_000_000));
    let data_bits = table.required("data_bits", |value| value.count(7..=8));
    let parities = [("none", Parity::None), ("even", Parity::Even), ("odd", Parity::Odd)];
    let parity = table.required("parity", |value| value.choice(&parities));
    let stop_bits = table.required("stop_bits", |value| value.count(1..=2));
    table.finish();
    let stop_bits = if stop_bits? == 2 { StopBits::Two } else { StopBits::One };
    Some(SerialOptions { baud: baud?, data_bits: u8::try_from(data_bits?).ok()?, parity: parity?, stop_bits })
}

fn facts(root: &Table<'_, '_>, role: RoleKind) -> Option<Facts> {
    match role {
        RoleKind::Scope => root.required("scope", scope).map(Facts::Scope),
        RoleKind::Load => root.required("load", load).map(Facts::Load),
        RoleKind::Source => root.required("source", source).map(Facts::Source),
    }
}

fn scope(value: Value<'_, '_>) -> Option<ScopeFacts> {
    let table = value.table()?;
    let channels = table.required("channels", |value| value.count(1..=16));
    let vertical_divisions = table.required("vertical_divisions", |value| value.number(1.0..=100.0));
    let horizontal_divisions = table.required("horizontal_divisions", |value| value.number(1.0..=100.0));
    let memory_points = table.required("memory_points", |value| value.count(100..=1_000_000_000));
    let plain_type = table.required("plain_type", |value| value.number(-1e6..=1e6));
    let preamble = table.required("preamble", |value| value.list(|item| item.choice(&PreambleField::NAMES)));
    if let Some(preamble) = &preamble {
        check_preamble(&table, preamble);
    }
    let converters = table.required("converters", |value| value.list(converter));
    table.finish();
    Some(ScopeFacts {
        channels: u8::try_from(channels?).ok()?,
        vertical_divisions: vertical_divisions?,
        horizontal_divisions: horizontal_divisions?,
        memory_points: memory_points?,
        preamble: preamble?,
        plain_type: plain_type?,
        converters: converters?,
    })
}

fn check_preamble(table: &Table<'_, '_>, preamble: &[PreambleField]) {
    for (name, field) in PreambleField::NAMES {
        let times = preamble.iter().filter(|listed| **listed == field).count();
        if times != 1 && !matches!(field, PreambleField::Ignored | PreambleField::Count) {
            table.refuse("preamble", format!("found {name:?} {times} times"), format!("expected {name:?} once"));
        }
    }
}

fn converter(value: Value<'_, '_>) -> Option<Converter> {
    let table = value.table()?;
    let model = pattern(&table, "model");
    let words = table.required("format", |value| value.choice(&[("byte", false), ("word", true)]));
    let preamble_format = table.required("preamble_format", |value| value.number(-1e6..=1e6));
    let clip_codes = table.required("clip_codes", |value| value.span(|item| item.number(0.0..=65535.0)));
    if let (Some(false), Some([_, highest])) = (words, clip_codes)
        && highest > 255.0
    {
        table.refuse("clip_codes", format!("found {highest}"), "expected codes up to 255, since samples are bytes");
    }
    table.finish();
    Some(Converter { model: model?, words: words?, preamble_format: preamble_format?, clip_codes: clip_codes? })
}

fn load(value: Value<'_, '_>) -> Option<LoadFacts> {
    let table = value.table()?;
    let smallest_current_a = table.required("smallest_current_a", |value| value.number(0.0..=1000.0));
    let current_ranges_a = ranges(&table, "current_ranges_a");
    table.finish();
    Some(LoadFacts { smallest_current_a: smallest_current_a?, current_ranges_a: current_ranges_a? })
}

fn source(value: Value<'_, '_>) -> Option<SourceFacts> {
    let table = value.table()?;
    let voltage_ranges_v = ranges(&table, "voltage_ranges_v");
    let limiting_mask = table.required("limiting_mask", |value| value.count(1..=0xFFFF));
    table.finish();
    Some(SourceFacts { voltage_ranges_v: voltage_ranges_v?, limiting_mask: limiting_mask? })
}

fn ranges(table: &Table<'_, '_>, key: &'static str) -> Option<Vec<f64>> {
    let ranges = table.required(key, |value| value.list(|item| item.number(1e-6..=1e6)))?;
    if !ranges.is_sorted_by(|low, high| low < high) {
        table.refuse(key, format!("found {ranges:?}"), "expected the smallest range first");
    }
    Some(ranges)
}

fn commands(table: &Table<'_, '_>, role: RoleKind) -> Option<BTreeMap<&'static str, Command>> {
    let read = role.rules().iter().map(|rule| {
        let command = table.required(rule.key, |value| command(&value.table()?, *rule))?;
        Some((rule.key, command))
    });
    let read = read.collect::<Vec<_>>();
    table.finish();
    read.into_iter().collect()
}

fn command(table: &Table<'_, '_>, rule: Rule) -> Option<Command> {
    let (sets, asks) = match rule.use_ {
        Use::Action => (Some(None), false),
        Use::Number => (Some(Some("{value}")), true),
        Use::Word(_) => (Some(Some("{word}")), true),
        Use::Channel => (Some(Some("{channel}")), true),
        Use::Question | Use::WordQuestion(_) => (None, true),
    };
    let channel = rule.per_channel.then_some("{channel}");
    let mut command = Command::default();
    if let Some(value) = sets {
        let places: Vec<&str> = channel.into_iter().chain(value).collect();
        command.set = Some(template(table, "set", &places, false)?);
    }
    if asks {
        let places: Vec<&str> = channel.into_iter().collect();
        command.get = Some(template(table, "get", &places, true)?);
    }
    if rule.use_ == Use::Channel {
        command.answer = Some(template(table, "answer", &["{channel}"], false)?);
    }
    if let Use::Word(ours) | Use::WordQuestion(ours) = rule.use_ {
        command.words = table.required("words", |value| words(&value.table()?, ours))?;
    }
    table.finish();
    Some(command)
}

fn words(table: &Table<'_, '_>, ours: &'static [&'static str]) -> Option<BTreeMap<&'static str, Vec<String>>> {
    let read = ours.iter().map(|word| Some((*word, table.required(word, |value| value.list(|item| item.text()))?)));
    let read = read.collect::<Vec<_>>();
    table.finish();
    read.into_iter().collect()
}

/// A template with exactly the places it must have.
fn template(table: &Table<'_, '_>, key: &'static str, places: &[&str], question: bool) -> Option<String> {
    let text = table.required(key, |value| value.text())?;
    let mut rest = text.clone();
    for place in places {
        if text.matches(place).count() != 1 {
            table.refuse(key, format!("found {text:?}"), format!("expected {place} in it, once"));
            return None;
        }
        rest = rest.replace(place, "");
    }
    let expected = if !rest.bytes().all(|byte| byte.is_ascii_graphic() || byte == b' ') {
        "expected printable ASCII characters on one line".to_owned()
    } else if rest.contains(['{', '}']) {
        match places {
            [] => "expected no {place} in it".to_owned(),
            _ => format!("expected no other place than {}", places.join(" and ")),
        }
    } else if question && !text.split(' ').next().is_some_and(|header| header.ends_with('?')) {
        "expected a question, its header ending in `?`".to_owned()
    } else if !question && text.contains('?') {
        "expected no question".to_owned()
    } else {
        return Some(text);
    };
    table.refuse(key, format!("found {text:?}"), expected);
    None
}
