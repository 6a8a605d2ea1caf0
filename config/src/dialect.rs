//! Dialects: how one kind of instrument is spoken to, as data.
//!
//! A dialect is a TOML file of commands, written as [`Template`]s, and of rules by which answers are judged. It tells
//! how to identify the instrument, to set it up, to read each setting back, to select an input, to sweep, and what
//! shape the answer has. The engine that speaks it is the `instrument` room; the file format is told with the one
//! that is built in, `config/dialects/scpi-swept.toml`.

mod file;
mod template;

use std::collections::BTreeMap;
use std::path::Path;
use std::sync::Arc;

pub use template::{Quantity, Template, TemplateError};

use crate::faults::{Faults, Source};

/// The names of the dialects that are built in.
pub const BUILTIN: [&str; 1] = ["scpi-swept"];

const SCPI_SWEPT: &str = include_str!("../dialects/scpi-swept.toml");

/// The dialect that is built in under this name.
pub fn builtin(name: &str) -> Option<Dialect> {
    let text = match name {
        "scpi-swept" => SCPI_SWEPT,
        _ => return None,
    };
    // A test parses every built-in file, so that this cannot be reached by a faulty one.
    parse(text, Path::new(name)).ok()
}

/// Reads a dialect file.
///
/// # Errors
/// The file cannot be read, or all that is wrong with it.
pub fn load(path: &Path) -> Result<Dialect, Faults> {
    let text = std::fs::read_to_string(path).map_err(|error| Faults::unreadable(path, &error))?;
    parse(&text, path)
}

/// Reads a dialect from its text; `path` is only told with the faults.
///
/// # Errors
/// All that is wrong with it, each fault at its place.
pub fn parse(text: &str, path: &Path) -> Result<Dialect, Faults> {
    let source = Arc::new(Source { path: path.to_owned(), text: text.to_owned() });
    file::read(&source)
}

/// How one kind of instrument is spoken to.
#[derive(Clone, Debug, PartialEq)]
pub struct Dialect {
    /// Its name.
    pub name: String,
    /// For people: which instruments it is for.
    pub description: String,
    /// How lines end.
    pub line: Line,
    /// How it tells who it is.
    pub identify: Identify,
    /// How it tells what it did not like; without it refusals go unseen until a setting is read back.
    pub errors: Option<Errors>,
    /// Sent once after each identification; a command that the device does not know is passed over.
    pub prepare: Vec<String>,
    /// Selects an input; without it the instrument has one input only.
    pub select_input: Option<Template>,
    /// What bears on a level, in the order in which it is sent.
    pub settings: Vec<Setting>,
    /// How the values of the answer are coded, the best one first: the first that the device accepts is used.
    pub formats: Vec<Format>,
    /// The byte order of binary values.
    pub byte_order: Option<ByteOrder>,
    /// How a sweep is made and fetched.
    pub sweep: Sweep,
    /// Asks for the instrument's own time at the end of the last sweep, RFC 3339, in quotes or not.
    pub clock: Option<String>,
    /// Asks whether the input was overloaded during the last sweep.
    pub overload: Option<Overload>,
}

/// How lines end.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Line {
    /// What ends a command.
    pub send: LineEnd,
    /// What ends an answer: `Lf` takes `CR LF` as well. Blocks are told by their length.
    pub receive: LineEnd,
}

/// The end of a line.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum LineEnd {
    /// NL, 0x0A.
    Lf,
    /// CR, 0x0D.
    Cr,
    /// CR NL.
    CrLf,
}

impl LineEnd {
    /// All of them, the default one first.
    pub const ALL: [Self; 3] = [Self::Lf, Self::Cr, Self::CrLf];

    /// The word for it in the file.
    pub fn label(self) -> &'static str {
        match self {
            Self::Lf => "lf",
            Self::Cr => "cr",
            Self::CrLf => "crlf",
        }
    }

    /// Its bytes.
    pub fn bytes(self) -> &'static [u8] {
        match self {
            Self::Lf => b"\n",
            Self::Cr => b"\r",
            Self::CrLf => b"\r\n",
        }
    }
}

/// How an instrument tells who it is.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Identify {
    /// The query.
    pub query: String,
    /// How many fields, separated by commas, its answer has; by this an identity is told from a late answer.
    pub fields: Option<usize>,
}

/// The queue of errors.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Errors {
    /// Sent once after each identification, to forget what was before.
    pub clear: Option<String>,
    /// Takes one entry, `number,"text"`.
    pub query: String,
    /// The number that tells that there is none (left).
    pub none: i64,
    /// Numbers that tell that the device does not know the command: the setting is assumed.
    pub unknown_command: Vec<i64>,
    /// Numbers after which a setting is tried once more when the others are set: it was refused for the order only.
    pub try_later: Vec<i64>,
}

/// One setting that bears on the level: how it is set, read back and judged.
#[derive(Clone, Debug, PartialEq)]
pub struct Setting {
    /// What is set.
    pub quantity: Quantity,
    /// The command.
    pub set: Template,
    /// The query that reads it back; without it the setting is always assumed.
    pub get: Option<String>,
    /// How the answer is judged.
    pub compare: Compare,
    /// The device's words for values that are words (detector, unit, filter shape). A value without a word cannot be
    /// set; an empty map takes values as they are.
    pub words: BTreeMap<String, String>,
    /// May the device not know it? If so it is taken as asked for and marked as assumed.
    pub may_be_unknown: bool,
}

/// How what is read back is held against what was asked for.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Compare {
    /// The same number, to a share of it.
    Equal {
        /// Share of the value, 0 to 1.
        tolerance: f64,
    },
    /// This number or more, to a share of it.
    AtLeast {
        /// Share of the value, 0 to 1.
        tolerance: f64,
    },
    /// The same words, in the long or the short form of SCPI, in any case.
    Text,
}

/// A coding of the values of an answer.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Format {
    /// The command that asks for it.
    pub set: Option<String>,
    /// The query that reads it back.
    pub get: Option<String>,
    /// What must be read back, as words.
    pub expect: String,
    /// How values are coded then.
    pub coding: Coding,
}

/// How the values of an answer are coded.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Coding {
    /// A list of decimal numbers in one line.
    Ascii,
    /// A definite-length block of IEEE 754 numbers of 4 bytes.
    Real32,
}

impl Coding {
    /// All of them.
    pub const ALL: [Self; 2] = [Self::Ascii, Self::Real32];

    /// The word for it in the file.
    pub fn label(self) -> &'static str {
        match self {
            Self::Ascii => "ascii",
            Self::Real32 => "real-32",
        }
    }
}

/// How the order of bytes is set and read back. A device that does not tell sends the most significant byte first.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct ByteOrder {
    /// The command that asks for the most significant byte first.
    pub set: String,
    /// The query that reads it back.
    pub get: String,
    /// The word for the most significant byte first.
    pub big: String,
    /// The word for the least significant byte first.
    pub little: String,
}

/// How a sweep is made and fetched.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Sweep {
    /// Commands that start one sweep.
    pub trigger: Vec<Template>,
    /// A query that is answered when the sweep has ended, and its answer.
    pub wait: Option<(String, String)>,
    /// The query for the values.
    pub read: Template,
    /// The greatest number of points of one sweep, until the device teaches less.
    pub max_points: u32,
}

/// A query for a number of bits, and those that tell of an overload.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Overload {
    /// The query.
    pub query: String,
    /// Any of these bits set: overloaded.
    pub mask: u32,
}

#[cfg(test)]
mod tests;
