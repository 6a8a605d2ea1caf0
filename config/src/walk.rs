//! Walking a TOML tree by hand, so that every fault of a file is found and told at its place.
//!
//! [`document`] parses a text and hands the root [`Table`] to a closure. A table tells which keys it knows
//! ([`Table::keys`]) and hands out a [`Value`] for each; a value is asked for what it should be and answers `None`
//! after it has told what is wrong. So a reader goes on to the end, and a file is refused once, with everything that
//! is wrong with it. A syntax error alone is told alone: what follows it would be guesswork.

mod dimension;
mod nearest;
mod value;

use std::cell::RefCell;
use std::ops::Range;
use std::sync::Arc;

use toml::de::{DeTable, DeValue};

pub use dimension::{Dimension, FACTOR, FREQUENCY, LENGTH, MAGNETIC_FACTOR, RATIO, RESISTANCE};
pub use nearest::{nearest, suggestion};
pub use value::Value;

use crate::faults::{Fault, Faults, Source};

/// What was read, with what is to be said about it all the same.
#[derive(Debug)]
pub struct Read<T> {
    /// The file's content.
    pub value: T,
    /// Warnings only, in the order of the text.
    pub warnings: Faults,
}

/// Gathers faults while a file is walked.
#[derive(Debug)]
pub struct Collector {
    faults: RefCell<Faults>,
}

impl Collector {
    /// Adds a fault or a warning of the file that is being walked.
    pub fn push(&self, fault: Fault) {
        self.faults.borrow_mut().push(fault);
    }

    /// Adds what is wrong with a file that this one names.
    pub fn absorb(&self, faults: Faults) {
        self.faults.borrow_mut().absorb(faults);
    }
}

/// Parses the text and has its root table read. The closure answers `None` only after it has told why.
///
/// # Errors
/// All faults of the file, and its warnings, in the order of the text.
pub fn document<T>(source: &Arc<Source>, read: impl FnOnce(&mut Table<'_>) -> Option<T>) -> Result<Read<T>, Faults> {
    let mut faults = Faults::new(Arc::clone(source));
    let root = match DeTable::parse(&source.text) {
        Ok(root) => root,
        Err(error) => {
            faults.push(syntax_fault(&error, source.text.len()));
            return Err(faults);
        }
    };
    let collector = Collector { faults: RefCell::new(faults) };
    let value = Table::new(root.get_ref(), root.span(), &collector).read(read);
    let mut faults = collector.faults.into_inner().sorted();
    match value {
        Some(value) if !faults.refuses() => Ok(Read { value, warnings: faults }),
        _ => {
            debug_assert!(faults.refuses(), "a reader gave up without telling why");
            if !faults.refuses() {
                faults.push(Fault::of_file("this file was not understood"));
            }
            Err(faults)
        }
    }
}

fn syntax_fault(error: &toml::de::Error, end: usize) -> Fault {
    let span = error.span().unwrap_or(end..end);
    let fault = Fault::new(span, format!("this is not TOML: {}", error.message()));
    fault.with_help("mend this first: what else may be wrong with the file is told then")
}

/// A table of the file: the keys that it knows, and those that it has.
#[derive(Debug)]
pub struct Table<'a> {
    entries: &'a DeTable<'a>,
    span: Range<usize>,
    collector: &'a Collector,
    known: Option<&'static [&'static str]>,
    /// Known keys of which a misspelt form stands in the file: they are not told missing as well.
    misspelt: Vec<&'static str>,
}

impl<'a> Table<'a> {
    fn new(entries: &'a DeTable<'a>, span: Range<usize>, collector: &'a Collector) -> Self {
        Self { entries, span, collector, known: None, misspelt: Vec::new() }
    }

    fn read<T>(mut self, read: impl FnOnce(&mut Self) -> Option<T>) -> Option<T> {
        let value = read(&mut self);
        debug_assert!(value.is_none() || self.known.is_some(), "a table was read that does not know its keys");
        value
    }

    /// Tells which keys this table knows; every other key in it is a fault. To be called once, before the keys are
    /// asked for (a table whose keys depend on a `kind` asks for that one first).
    pub fn keys(&mut self, known: &'static [&'static str]) {
        debug_assert!(self.known.is_none(), "the keys of a table are told once");
        self.known = Some(known);
        for key in self.entries.keys() {
            let name = key.get_ref().as_ref();
            if known.contains(&name) {
                continue;
            }
            let free = known.iter().copied().filter(|known| !self.entries.contains_key(*known));
            let near = nearest(name, free);
            let help =
                near.map_or_else(|| suggestion(name, known.iter().copied()), |near| format!("did you mean `{near}`?"));
            self.misspelt.extend(near);
            self.collector.push(Fault::new(key.span(), format!("unknown key `{name}`")).with_help(help));
        }
    }

    /// The value of a key, if the table has it.
    pub fn optional(&self, key: &'static str) -> Option<Value<'a>> {
        debug_assert!(self.known.is_none_or(|known| known.contains(&key)), "`{key}` is asked for but not known");
        let (name, value) = self.entries.get_key_value(key)?;
        Some(Value::new(name.get_ref().as_ref(), value, self.collector))
    }

    /// The value of a key as the closure reads it, or another if the table has none; `None` if it is wrong.
    pub fn read_or<T>(&self, key: &'static str, other: T, read: impl FnOnce(Value<'a>) -> Option<T>) -> Option<T> {
        self.optional(key).map_or(Some(other), read)
    }

    /// The value of a key as the closure reads it, `Some(None)` if the table has none; `None` if it is wrong.
    pub fn read_if_any<T>(&self, key: &'static str, read: impl FnOnce(Value<'a>) -> Option<T>) -> Option<Option<T>> {
        self.optional(key).map_or(Some(None), |value| read(value).map(Some))
    }

    /// The value of a key that must be there; its absence is a fault. `example` is how the line could look.
    pub fn required(&self, key: &'static str, example: &str) -> Option<Value<'a>> {
        let value = self.optional(key);
        if value.is_none() && !self.misspelt.contains(&key) {
            let fault = Fault::new(self.span(), format!("`{key}` is missing here"));
            self.push(fault.with_help(format!("write it as in `{example}`")));
        }
        value
    }

    /// The tables of a `[[key]]`; none if there is none.
    pub fn tables(&self, key: &'static str) -> Vec<Value<'a>> {
        let Some(value) = self.optional(key) else { return Vec::new() };
        if value.is_table() {
            let fault = Fault::new(value.span(), format!("there may be several `{key}`: it is a list of tables"));
            self.push(fault.with_help(format!("write `[[{key}]]` with two brackets")));
            return Vec::new();
        }
        value.list().unwrap_or_default()
    }

    /// Has it this key?
    pub fn has(&self, key: &str) -> bool {
        self.entries.contains_key(key)
    }

    /// Its place: the header, the braces of an inline table, the first byte for the root.
    pub fn span(&self) -> Range<usize> {
        self.span.clone()
    }

    /// Where faults are gathered.
    pub fn collector(&self) -> &'a Collector {
        self.collector
    }

    /// Tells a fault or a warning.
    pub fn push(&self, fault: Fault) {
        self.collector.push(fault);
    }
}

/// The kind of a TOML value as it is told to people.
fn kind_of(value: &DeValue<'_>) -> &'static str {
    match value {
        DeValue::String(_) => "a text",
        DeValue::Integer(_) => "a whole number",
        DeValue::Float(_) => "a number with a decimal point",
        DeValue::Boolean(_) => "true or false",
        DeValue::Datetime(written) => match (written.date, written.time) {
            (Some(_), None) => "a date",
            (None, _) => "a time of day",
            (Some(_), Some(_)) => "a date with a time of day",
        },
        DeValue::Array(_) => "a list",
        DeValue::Table(_) => "a table",
    }
}
