//! One value of the file, asked for what it should be.

use std::ops::{Range, RangeInclusive};

use hushwatch_quantity::Span;
use jiff::SpanRelativeTo;
use jiff::fmt::friendly::SpanParser;
use toml::Spanned;
use toml::de::DeValue;

use super::dimension::NoQuantity;
use super::{Collector, Dimension, Table, kind_of, suggestion};
use crate::faults::Fault;

/// A year in `1 per 5 years`: the mean one of the Julian calendar, 365.25 days.
const YEAR: Span = Span::from_hours(8766);

/// A name may have this many letters.
const LONGEST_NAME: usize = 64;

/// A value with the key under which it stands. Each question answers `None` after it has told what is wrong.
#[derive(Clone, Copy, Debug)]
pub struct Value<'a> {
    key: &'a str,
    node: &'a Spanned<DeValue<'a>>,
    collector: &'a Collector,
}

impl<'a> Value<'a> {
    pub(super) fn new(key: &'a str, node: &'a Spanned<DeValue<'a>>, collector: &'a Collector) -> Self {
        Self { key, node, collector }
    }

    /// The key, or that of the list in which it stands.
    pub fn key(&self) -> &'a str {
        self.key
    }

    /// Its place in the text.
    pub fn span(&self) -> Range<usize> {
        self.node.span()
    }

    /// Where faults are gathered.
    pub fn collector(&self) -> &'a Collector {
        self.collector
    }

    /// Is it a table?
    pub fn is_table(&self) -> bool {
        self.node.get_ref().is_table()
    }

    /// Is it a text?
    pub fn is_text(&self) -> bool {
        self.node.get_ref().is_str()
    }

    /// Is it a list?
    pub fn is_list(&self) -> bool {
        self.node.get_ref().is_array()
    }

    /// Tells a fault at this value and answers `None`.
    pub fn refuse<T>(&self, what: impl Into<String>, help: impl Into<String>) -> Option<T> {
        self.collector.push(Fault::new(self.span(), what).with_help(help));
        None
    }

    /// Tells a warning at this value.
    pub fn warn(&self, what: impl Into<String>, help: impl Into<String>) {
        self.collector.push(Fault::warning(self.span(), what).with_help(help));
    }

    /// Tells that this name is not known, with the nearest one that is. `what` as in "no probe is named".
    pub fn refuse_name<T>(&self, what: &str, name: &str, known: impl IntoIterator<Item = &'a str>) -> Option<T> {
        self.refuse(format!("{what} `{}`", name.escape_debug()), suggestion(name, known))
    }

    fn refuse_kind<T>(&self, wanted: &str, example: &str) -> Option<T> {
        let found = kind_of(self.node.get_ref());
        let fault = Fault::new(self.span(), format!("`{}` must be {wanted}, not {found}", self.key));
        self.collector.push(fault.with_help(format!("write it as in `{example}`")));
        None
    }

    /// A text, as it stands.
    pub fn text(&self) -> Option<&'a str> {
        match self.node.get_ref() {
            DeValue::String(text) => Some(text.as_ref()),
            _ => self.refuse_kind("a text in quotes", &format!("{} = \"...\"", self.key)),
        }
    }

    /// A text for people: not empty, one line, without control characters.
    pub fn line(&self) -> Option<&'a str> {
        let text = self.text()?;
        if text.trim().is_empty() {
            return self.refuse(format!("`{}` is empty", self.key), "write a few words, or leave the line out");
        }
        if text.chars().any(char::is_control) {
            return self.refuse(
                format!("`{}` has a control character in it", self.key),
                "write plain text on one line: no tabs, line ends or escapes",
            );
        }
        Some(text)
    }

    /// A name by which people and scripts call something: 1 to 64 letters (of any language), digits and
    /// `_ - + . : / = #`, which covers the reference designations of IEC 81346.
    pub fn name(&self) -> Option<&'a str> {
        let text = self.text()?;
        let wrong = |letter: &char| !letter.is_alphanumeric() && !"_-+.:/=#".contains(*letter);
        if let Some(letter) = text.chars().find(wrong) {
            return self.refuse(
                format!("the name `{}` has {} in it", text.escape_debug(), describe(letter)),
                "a name has letters, digits and `_ - + . : / = #`",
            );
        }
        match text.chars().count() {
            1..=LONGEST_NAME => Some(text),
            0 => self.refuse(format!("`{}` is empty", self.key), "a name has at least one letter"),
            long => self.refuse(format!("this name has {long} letters"), format!("{LONGEST_NAME} are the most")),
        }
    }

    /// A whole number within limits.
    pub fn integer(&self, limits: RangeInclusive<i64>) -> Option<i64> {
        let DeValue::Integer(integer) = self.node.get_ref() else {
            return self.refuse(
                format!("`{}` must be a whole number, not {}", self.key, kind_of(self.node.get_ref())),
                format!("write a number from {} to {}, without quotes", limits.start(), limits.end()),
            );
        };
        match i64::from_str_radix(integer.as_str(), integer.radix()) {
            Ok(number) if limits.contains(&number) => Some(number),
            _ => self.refuse(
                format!("`{}` must lie between {} and {}", self.key, limits.start(), limits.end()),
                "write a whole number within these limits",
            ),
        }
    }

    /// A whole number within limits that fit into 32 bits.
    pub fn count(&self, limits: RangeInclusive<u32>) -> Option<u32> {
        let number = self.integer(i64::from(*limits.start())..=i64::from(*limits.end()))?;
        u32::try_from(number).ok()
    }

    /// A number within limits, with or without a decimal point.
    pub fn number(&self, limits: RangeInclusive<f64>) -> Option<f64> {
        let number = match self.node.get_ref() {
            DeValue::Integer(integer) => i64::from_str_radix(integer.as_str(), integer.radix()).ok().map(|n| n as f64),
            DeValue::Float(float) => float.as_str().parse().ok(),
            _ => {
                let what = format!("`{}` must be a number, not {}", self.key, kind_of(self.node.get_ref()));
                return self.refuse(what, "write it without quotes");
            }
        };
        match number {
            Some(number) if limits.contains(&number) => Some(number),
            _ => self.refuse(
                format!("`{}` must lie between {} and {}", self.key, limits.start(), limits.end()),
                "write a number within these limits",
            ),
        }
    }

    /// `true` or `false`.
    pub fn boolean(&self) -> Option<bool> {
        match self.node.get_ref() {
            DeValue::Boolean(value) => Some(*value),
            _ => self.refuse_kind("true or false", &format!("{} = true", self.key)),
        }
    }

    /// A calendar date without time of day.
    pub fn date(&self) -> Option<jiff::civil::Date> {
        let example = format!("{} = 2026-11-20", self.key);
        let DeValue::Datetime(written) = self.node.get_ref() else { return self.refuse_kind("a date", &example) };
        let (Some(date), None) = (written.date, written.time) else { return self.refuse_kind("a date", &example) };
        let number = |value: u8| i8::try_from(value).unwrap_or(0);
        match jiff::civil::Date::new(i16::try_from(date.year).unwrap_or(0), number(date.month), number(date.day)) {
            Ok(date) => Some(date),
            Err(_) => self.refuse("there is no such day", format!("write it as in `{example}`")),
        }
    }

    /// A list; the values in it are called by its key.
    pub fn list(&self) -> Option<Vec<Value<'a>>> {
        match self.node.get_ref() {
            DeValue::Array(values) => {
                Some(values.iter().map(|value| Value::new(self.key, value, self.collector)).collect())
            }
            _ => self.refuse_kind("a list", &format!("{} = [...]", self.key)),
        }
    }

    /// A list of exactly `N` values; `example` is how it could look.
    pub fn tuple<const N: usize>(&self, example: &str) -> Option<[Value<'a>; N]> {
        let values = match self.node.get_ref() {
            DeValue::Array(_) => self.list()?,
            _ => return self.refuse_kind(&format!("a list of {N} values"), example),
        };
        let found = values.len();
        values.try_into().ok().or_else(|| {
            self.refuse(format!("here {N} values belong, not {found}"), format!("write it as in `{example}`"))
        })
    }

    /// A table, read by the closure.
    pub fn table<T>(&self, read: impl FnOnce(&mut Table<'a>) -> Option<T>) -> Option<T> {
        match self.node.get_ref() {
            DeValue::Table(entries) => Table::new(entries, self.span(), self.collector).read(read),
            _ => self.refuse_kind("a table", &format!("{} = {{ ... }}", self.key)),
        }
    }

    /// One of several words, each standing for something.
    pub fn choice<T: Clone>(&self, words: &[(&'static str, T)]) -> Option<T> {
        let text = self.text()?;
        if let Some((_, meaning)) = words.iter().find(|(word, _)| *word == text) {
            return Some(meaning.clone());
        }
        let what = format!("`{}` cannot be `{}`", self.key, text.escape_debug());
        self.refuse(what, suggestion(text, words.iter().map(|(word, _)| *word)))
    }

    /// A quantity in the dimension's base unit.
    pub fn quantity(&self, dimension: &'static Dimension) -> Option<f64> {
        self.quantity_and_unit(dimension).map(|(value, _)| value)
    }

    /// A quantity and the unit in which it was written.
    pub fn quantity_and_unit(&self, dimension: &'static Dimension) -> Option<(f64, &'static str)> {
        let Dimension { name, example, .. } = dimension;
        let DeValue::String(text) = self.node.get_ref() else {
            let number = matches!(self.node.get_ref(), DeValue::Integer(_) | DeValue::Float(_));
            if number {
                return self.refuse(format!("`{}` is {name} and needs its unit", self.key), like(example));
            }
            return self.refuse_kind(name, &format!("\"{example}\""));
        };
        let no_quantity = match dimension.parse(text) {
            Ok(quantity) => return Some(quantity),
            Err(no_quantity) => no_quantity,
        };
        let what = format!("`{}` is not {name}", text.escape_debug());
        match no_quantity {
            NoQuantity::NoUnit => {
                self.refuse(format!("`{}` is {name} and needs its unit", text.escape_debug()), like(example))
            }
            NoQuantity::Comma => self.refuse(what, "write a decimal point, not a comma"),
            NoQuantity::OtherUnit(Some(unit)) => self.refuse(what, format!("the unit is written `{unit}`")),
            NoQuantity::OtherUnit(None) | NoQuantity::NoNumber => self.refuse(what, like(example)),
        }
    }

    /// A quantity within limits, in the dimension's base unit.
    pub fn quantity_within(&self, dimension: &'static Dimension, limits: RangeInclusive<f64>) -> Option<f64> {
        let value = self.quantity(dimension)?;
        if limits.contains(&value) {
            return Some(value);
        }
        let (least, most) = (dimension.write(*limits.start()), dimension.write(*limits.end()));
        self.refuse(
            format!("`{}` must lie between {least} and {most}, not at {}", self.key, dimension.write(value)),
            "write a value within these limits",
        )
    }

    /// A quantity with its unit, or a bare number where the unit goes without saying (columns of a table).
    pub fn quantity_or_number(&self, dimension: &'static Dimension) -> Option<f64> {
        match self.node.get_ref() {
            DeValue::Integer(_) | DeValue::Float(_) => self.number(-1e12..=1e12),
            _ => self.quantity(dimension),
        }
    }

    /// A span of time within limits, as in `3 s`, `20 ms`, `2h 30min`, `400 days`. A day has 24 hours and a week
    /// seven days; months and years have no fixed length and are refused.
    pub fn duration(&self, limits: RangeInclusive<Span>) -> Option<Span> {
        let DeValue::String(text) = self.node.get_ref() else {
            let number = matches!(self.node.get_ref(), DeValue::Integer(_) | DeValue::Float(_));
            if number {
                return self.refuse(format!("`{}` is a span of time and needs its unit", self.key), like("10 s"));
            }
            return self.refuse_kind("a span of time", "\"10 s\"");
        };
        if text.trim().parse::<f64>().is_ok() {
            return self
                .refuse(format!("`{}` is a span of time and needs its unit", text.escape_debug()), like("10 s"));
        }
        let span = match parse_span(text) {
            Ok((0, span)) => span,
            Ok(_) => return self.refuse("years have no fixed length", "write it in days, as in `400 days`"),
            Err(help) => return self.refuse(format!("`{}` is not a span of time", text.escape_debug()), help),
        };
        if limits.contains(&span) {
            return Some(span);
        }
        self.refuse(
            format!("`{}` must lie between {} and {}, not at {span}", self.key, limits.start(), limits.end()),
            "write a span within these limits",
        )
    }

    /// So many per span of time, as in `1 per 5 years`: the number, above nought, and the span. A year is taken as
    /// 365.25 days here.
    pub fn rate(&self) -> Option<(f64, Span)> {
        const EXAMPLE: &str = "1 per 5 years";
        let DeValue::String(text) = self.node.get_ref() else { return self.refuse_kind("a rate", "\"1 per 5 years\"") };
        let what = || format!("`{}` is not a rate", text.escape_debug());
        let Some((count, span)) = text.split_once(" per ") else { return self.refuse(what(), like(EXAMPLE)) };
        let count = count.trim().parse().ok().filter(|count: &f64| *count > 0.0 && *count <= 1e6);
        let Some(count) = count else {
            return self.refuse(what(), "before `per` stands a number above nought, as in `1 per 5 years`");
        };
        // `per year` is as good as `per 1 year`.
        let span = span.trim();
        let span =
            if span.starts_with(|letter: char| letter.is_alphabetic()) { format!("1 {span}") } else { span.into() };
        match parse_span(&span) {
            Ok((years, rest)) => {
                let whole = Span::from_micros(YEAR.as_micros().saturating_mul(years)) + rest;
                if whole > Span::ZERO {
                    return Some((count, whole));
                }
                self.refuse(what(), "the span behind `per` must be longer than nothing")
            }
            Err(help) => self.refuse(what(), help),
        }
    }
}

fn like(example: &str) -> String {
    format!("write it as in `\"{example}\"`")
}

fn describe(letter: char) -> String {
    match letter {
        ' ' => String::from("a space"),
        letter if letter.is_control() || letter.is_whitespace() => String::from("a control character"),
        letter => format!("`{letter}`"),
    }
}

/// Whole years apart from the rest, for those alone who take years; or what would be right.
fn parse_span(text: &str) -> Result<(i64, Span), String> {
    static PARSER: SpanParser = SpanParser::new();
    let wrong = || like("10 s");
    let parsed = PARSER.parse_span(text.trim()).map_err(|_| wrong())?;
    if parsed.is_negative() {
        return Err(String::from("a span of time is not negative here"));
    }
    if parsed.get_months() != 0 {
        return Err(String::from("months have no fixed length: write it in days, as in `30 days`"));
    }
    let years = i64::from(parsed.get_years());
    let rest = parsed.try_years(0).map_err(|_| wrong())?;
    let length = rest.to_duration(SpanRelativeTo::days_are_24_hours()).map_err(|_| wrong())?;
    let micros = i64::try_from(length.as_micros()).map_err(|_| wrong())?;
    Ok((years, Span::from_micros(micros)))
}
