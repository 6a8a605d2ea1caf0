//! Operating states: what the machine is doing, as levels are compared only with like.

use std::path::{Path, PathBuf};

use jiff::civil::{Time, Weekday};

use crate::faults::Fault;
use crate::walk::{Table, Value, suggestion};

/// Minutes of a day and of a week.
const DAY: u16 = 24 * 60;
const WEEK: u16 = 7 * DAY;

const DAYS: [&str; 7] = ["Mon", "Tue", "Wed", "Thu", "Fri", "Sat", "Sun"];

/// How it is known what the machine is doing.
#[derive(Clone, Debug, PartialEq)]
pub enum OperatingStates {
    /// It is not: all levels are of the state [`OperatingStates::ANY`].
    Untold,
    /// By day of the week and time of day, in the site's zone. The first line that fits counts.
    Calendar {
        /// At least one.
        lines: Vec<CalendarLine>,
        /// The state when no line fits.
        otherwise: String,
    },
    /// By a file that the machine's controller writes.
    File {
        /// Its path.
        path: PathBuf,
        /// What stands in it.
        reading: FileReading,
        /// The state when the file is not there or says nothing known.
        otherwise: String,
    },
    /// Told by people.
    Manual {
        /// The states that there are; the first is the one at the start. At least one.
        states: Vec<String>,
    },
}

/// A line of the calendar.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct CalendarLine {
    /// The operating state.
    pub state: String,
    /// On which days it begins, Monday first.
    pub days: [bool; 7],
    /// From this minute of the day on, 0 to 1439 ...
    pub from: u16,
    /// ... up to, not including, this one, 0 to 1440; if it is below `from` it lies on the next day.
    pub to: u16,
}

/// What stands in the file of an operating state.
#[derive(Clone, Debug, PartialEq)]
pub enum FileReading {
    /// The state's name; only these are taken, or any if there are none.
    Word(Vec<String>),
    /// A number, as a speed or a load; the ranges do not overlap.
    Ranges(Vec<StateRange>),
}

/// A range of a number that means an operating state.
#[derive(Clone, Debug, PartialEq)]
pub struct StateRange {
    /// The operating state.
    pub state: String,
    /// From this number on ...
    pub from: f64,
    /// ... up to, not including, this one.
    pub to: f64,
}

impl OperatingStates {
    /// The state of all levels where none is told.
    pub const ANY: &'static str = "any";

    /// The state when it cannot be known.
    pub const UNKNOWN: &'static str = "unknown";

    /// The state at a local day of the week and time of day; `None` if no calendar tells it.
    pub fn state_at(&self, weekday: Weekday, time: Time) -> Option<&str> {
        match self {
            Self::Untold => Some(Self::ANY),
            Self::Calendar { lines, otherwise } => {
                let minute = i16::from(time.hour()) * 60 + i16::from(time.minute());
                let day = weekday.to_monday_zero_offset();
                let minute = u16::try_from(i16::from(day) * DAY as i16 + minute).unwrap_or(0);
                Some(lines.iter().find(|line| line.fits(minute)).map_or(otherwise, |line| &line.state))
            }
            Self::File { .. } | Self::Manual { .. } => None,
        }
    }

    /// The state that the content of the file tells; `None` if no file tells it.
    pub fn state_in_file<'a>(&'a self, content: &'a str) -> Option<&'a str> {
        let Self::File { reading, otherwise, .. } = self else { return None };
        Some(reading.state_in(content.trim()).unwrap_or(otherwise))
    }

    /// All states that can be told from the site file alone, each once.
    pub fn names(&self) -> Vec<&str> {
        let mut names: Vec<&str> = match self {
            Self::Untold => vec![Self::ANY],
            Self::Calendar { lines, otherwise } => {
                lines.iter().map(|line| line.state.as_str()).chain([otherwise.as_str()]).collect()
            }
            Self::File { reading: FileReading::Word(words), otherwise, .. } => {
                words.iter().chain([otherwise]).map(String::as_str).collect()
            }
            Self::File { reading: FileReading::Ranges(ranges), otherwise, .. } => {
                ranges.iter().map(|range| &range.state).chain([otherwise]).map(String::as_str).collect()
            }
            Self::Manual { states } => states.iter().map(String::as_str).collect(),
        };
        let mut seen = Vec::new();
        names.retain(|name| {
            !seen.contains(name) && {
                seen.push(*name);
                true
            }
        });
        names
    }
}

impl CalendarLine {
    /// Does it fit at this minute of the week, counted from Monday 00:00?
    fn fits(&self, minute: u16) -> bool {
        let length = if self.to > self.from { self.to - self.from } else { self.to + DAY - self.from };
        (0_u16..7).zip(self.days).any(|(day, begins)| {
            let start = day * DAY + self.from;
            begins && (minute + WEEK - start) % WEEK < length
        })
    }
}

impl FileReading {
    fn state_in<'a>(&'a self, content: &'a str) -> Option<&'a str> {
        match self {
            Self::Word(words) if words.is_empty() => is_state(content).then_some(content),
            Self::Word(words) => words.iter().map(String::as_str).find(|word| *word == content),
            Self::Ranges(ranges) => {
                // Controllers write a unit behind the number, or more lines: the first word counts.
                let number: f64 = content.split_whitespace().next()?.parse().ok()?;
                ranges.iter().find(|range| range.from <= number && number < range.to).map(|range| range.state.as_str())
            }
        }
    }
}

/// Could this be the name of a state? The same rule as for names in the site file.
fn is_state(text: &str) -> bool {
    (1..=64).contains(&text.chars().count()) && text.chars().all(|c| c.is_alphanumeric() || "_-+.:/=#".contains(c))
}

#[derive(Clone, Copy)]
enum From {
    Calendar,
    File,
    Manual,
}

pub(crate) fn read(root: &Table<'_>, base: &Path) -> Option<OperatingStates> {
    root.read_or("operating_states", OperatingStates::Untold, |value| {
        value.table(|table| {
            let sources = [("calendar", From::Calendar), ("file", From::File), ("manual", From::Manual)];
            let source = table.required("source", "source = \"calendar\"").and_then(|value| value.choice(&sources))?;
            match source {
                From::Calendar => read_calendar(table),
                From::File => read_file(table, base),
                From::Manual => {
                    table.keys(&["source", "states"]);
                    let states = table.required("states", "states = [\"running\", \"idle\"]").and_then(read_names);
                    Some(OperatingStates::Manual { states: states? })
                }
            }
        })
    })
}

fn read_state(table: &Table<'_>) -> Option<String> {
    table.required("state", "state = \"running\"").and_then(|value| value.name()).map(str::to_owned)
}

fn read_otherwise(table: &Table<'_>, by_default: &str) -> Option<String> {
    table.read_or("otherwise", by_default.to_owned(), |value| value.name().map(str::to_owned))
}

fn read_names(value: Value<'_>) -> Option<Vec<String>> {
    let names = value.list()?.into_iter().map(|value| value.name().map(str::to_owned)).collect::<Vec<_>>();
    let names = names.into_iter().collect::<Option<Vec<_>>>()?;
    if names.is_empty() {
        return value.refuse("here are no operating states", "write one at least, as in `[\"running\", \"idle\"]`");
    }
    Some(names)
}

fn read_calendar(table: &mut Table<'_>) -> Option<OperatingStates> {
    table.keys(&["source", "calendar", "otherwise"]);
    let otherwise = read_otherwise(table, "idle");
    let example = "calendar = [{ state = \"running\", days = \"Mon-Fri\", from = \"06:00\", to = \"22:00\" }]";
    let value = table.required("calendar", example)?;
    let places = value.list()?;
    let lines = places.iter().map(|line| line.table(read_line)).collect::<Vec<_>>();
    let lines = lines.into_iter().collect::<Option<Vec<_>>>()?;
    if lines.is_empty() {
        return value.refuse("this calendar has no lines", format!("write one at least, as in `{example}`"));
    }
    warn_of_hidden_lines(&lines, &places);
    Some(OperatingStates::Calendar { lines, otherwise: otherwise? })
}

fn read_line(table: &mut Table<'_>) -> Option<CalendarLine> {
    table.keys(&["state", "days", "from", "to"]);
    let state = read_state(table);
    let days = table.read_or("days", [true; 7], read_days);
    let from = table.read_or("from", 0, |value| read_minute(value, DAY - 1));
    let to = table.read_or("to", DAY, |value| read_minute(value, DAY));
    let line = CalendarLine { state: state?, days: days?, from: from?, to: to? };
    if line.from == line.to {
        let fault = Fault::new(table.span(), "this line ends when it begins");
        table.push(fault.with_help("leave out `from` and `to` for the whole day"));
        return None;
    }
    Some(line)
}

/// Days and ranges of days, `Mon-Fri` or `Sat,Sun`; a range may pass Sunday.
fn read_days(value: Value<'_>) -> Option<[bool; 7]> {
    let text = value.text()?;
    let mut days = [false; 7];
    for part in text.split(',') {
        let (first, last) = part.split_once('-').unwrap_or((part, part));
        let (first, last) = (read_day(value, first.trim())?, read_day(value, last.trim())?);
        let mut day = first;
        days[day] = true;
        while day != last {
            day = (day + 1) % 7;
            days[day] = true;
        }
    }
    Some(days)
}

fn read_day(value: Value<'_>, name: &str) -> Option<usize> {
    let day = DAYS.iter().position(|day| *day == name);
    day.or_else(|| {
        let fault = Fault::new(value.span(), format!("`{}` is not a day of the week", name.escape_debug()));
        let fault = fault.with_help(suggestion(name, DAYS));
        value.collector().push(fault.with_help("write days as in `\"Mon-Fri\"` or `\"Sat,Sun\"`"));
        None
    })
}

/// The minute of the day of `HH:MM`; 24:00 where it is allowed.
fn read_minute(value: Value<'_>, most: u16) -> Option<u16> {
    let text = value.text()?;
    let two_digits = |text: &str| -> Option<u16> {
        (text.len() == 2 && text.bytes().all(|byte| byte.is_ascii_digit())).then(|| text.parse().ok())?
    };
    let parts = text.split_once(':');
    let minute = parts.and_then(|(hour, minute)| {
        let (hour, minute) = (two_digits(hour)?, two_digits(minute)?);
        (minute < 60).then_some(hour * 60 + minute)
    });
    match minute.filter(|minute| *minute <= most) {
        Some(minute) => Some(minute),
        None => value.refuse(
            format!("`{}` is not a time of day", text.escape_debug()),
            "write hours and minutes with two digits each, as in `\"06:00\"`",
        ),
    }
}

/// A line that never counts as others before it always fit is hardly meant.
fn warn_of_hidden_lines(lines: &[CalendarLine], places: &[Value<'_>]) {
    for (index, (line, place)) in lines.iter().zip(places).enumerate() {
        let before = &lines[..index];
        let hidden = (0..WEEK).filter(|minute| line.fits(*minute)).all(|minute| before.iter().any(|b| b.fits(minute)));
        if hidden {
            place.warn("this line never counts: lines before it cover its time", "put it before them, or leave it out");
        }
    }
}

fn read_file(table: &mut Table<'_>, base: &Path) -> Option<OperatingStates> {
    table.keys(&["source", "path", "states", "ranges", "otherwise"]);
    let otherwise = read_otherwise(table, OperatingStates::UNKNOWN);
    let path = table.required("path", "path = \"speed.txt\"").and_then(|value| value.line());
    let reading = match (table.optional("states"), table.optional("ranges")) {
        (Some(states), Some(ranges)) => {
            let fault = Fault::new(ranges.span(), "the file holds a word or a number, not both")
                .with_related(states.span(), "the words")
                .with_help("leave out `states`, or `ranges`");
            table.push(fault);
            None
        }
        (Some(states), None) => read_names(states).map(FileReading::Word),
        (None, Some(ranges)) => read_ranges(ranges).map(FileReading::Ranges),
        (None, None) => Some(FileReading::Word(Vec::new())),
    };
    Some(OperatingStates::File { path: base.join(path?), reading: reading?, otherwise: otherwise? })
}

fn read_ranges(value: Value<'_>) -> Option<Vec<StateRange>> {
    let places = value.list()?;
    let ranges = places.iter().map(|range| range.table(read_range)).collect::<Vec<_>>();
    let ranges = ranges.into_iter().collect::<Option<Vec<_>>>()?;
    if ranges.is_empty() {
        let example = "ranges = [{ state = \"slow\", from = 0, to = 10 }]";
        return value.refuse("here are no ranges", format!("write one at least, as in `{example}`"));
    }
    let mut apart = true;
    for (index, range) in ranges.iter().enumerate() {
        let before = ranges[..index].iter().position(|other| range.from < other.to && other.from < range.to);
        if let Some(other) = before {
            let fault = Fault::new(places[index].span(), "this range overlaps another one")
                .with_related(places[other].span(), "this one")
                .with_help("a range goes from `from` up to, not including, `to`");
            value.collector().push(fault);
            apart = false;
        }
    }
    apart.then_some(ranges)
}

fn read_range(table: &mut Table<'_>) -> Option<StateRange> {
    table.keys(&["state", "from", "to"]);
    let state = read_state(table);
    let number = |value: Value<'_>| value.number(-1e12..=1e12);
    let from = table.read_or("from", f64::NEG_INFINITY, number);
    let to = table.read_or("to", f64::INFINITY, number);
    let range = StateRange { state: state?, from: from?, to: to? };
    if range.from >= range.to {
        let fault = Fault::new(table.span(), "this range ends before it begins");
        table.push(fault.with_help("`from` lies below `to`"));
        return None;
    }
    Some(range)
}
