//! Instruments: receivers on serial ports.

use std::collections::BTreeSet;
use std::ops::{Range, RangeInclusive};
use std::path::{Path, PathBuf};

use hushwatch_quantity::{FilterShape, ReceiverUnit, Span};

use super::shelf::Names;
use crate::dialect::{self, Coding, Dialect};
use crate::faults::Fault;
use crate::walk::{Dimension, RATIO, Table, Value, suggestion};

/// A level at the receiver's input.
static INPUT_LEVEL: Dimension = Dimension {
    name: "a level at the receiver's input",
    example: "-10 dBm",
    units: &[("dBm", 1.0), ("dB(uV)", 1.0)],
    aliases: &[("dBuV", "dB(uV)"), ("dB\u{b5}V", "dB(uV)"), ("dB\u{3bc}V", "dB(uV)")],
};

/// The receiver's own noise.
static FLOOR: Dimension =
    Dimension { name: "a receiver's noise", example: "18 dB", units: &[("dB", 1.0), ("dBm/Hz", 1.0)], aliases: &[] };

/// The parity bit of a serial line.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Parity {
    /// None.
    None,
    /// Even.
    Even,
    /// Odd.
    Odd,
}

/// How a serial line is held up.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Flow {
    /// Not at all.
    None,
    /// By RTS and CTS.
    Hardware,
    /// By XON and XOFF; not with binary answers.
    Software,
}

/// Whose clock stamps the levels.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Clock {
    /// The system's.
    System,
    /// The instrument's, which it tells with each sweep: for simulated receivers.
    Instrument,
}

/// The receiver's own noise.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Floor {
    /// Noise figure over -174 dBm/Hz, dB.
    NoiseFigureDb(f64),
    /// Noise density at the input, dBm/Hz.
    DbmPerHz(f64),
}

/// A receiver on a serial port.
#[derive(Clone, Debug)]
pub struct Instrument {
    /// Its name.
    pub name: String,
    /// The device's path.
    pub port: PathBuf,
    /// Bits per second.
    pub baud: u32,
    /// Parity, none by default.
    pub parity: Parity,
    /// Stop bits, 1 or 2; 1 by default.
    pub stop_bits: u8,
    /// Flow control, none by default.
    pub flow: Flow,
    /// Is DTR raised when the port is opened? As the driver has it if not told; some devices restart by it.
    pub dtr_on_open: Option<bool>,
    /// How it is spoken to.
    pub dialect: Dialect,
    /// A part of its answer to the identity query that must be there.
    pub identity: Option<String>,
    /// How long it may be silent.
    pub timeout: Span,
    /// How long each point of a sweep is looked at.
    pub dwell: Span,
    /// How long to wait after an input was selected.
    pub settle: Span,
    /// Fixed attenuation, dB; the dialect's own if not told.
    pub attenuation_db: Option<f64>,
    /// The unit in which it is made to answer.
    pub unit: ReceiverUnit,
    /// The shape of its resolution filter, and the width by which that is named.
    pub shape: FilterShape,
    /// The coding of values that is asked for first.
    pub format: Coding,
    /// Whose clock stamps its levels.
    pub clock: Clock,
    /// Its own noise, if it is known.
    pub floor: Option<Floor>,
    /// From this level on at its input it is overloaded, dB(uV), if it is known.
    pub overload_dbuv: Option<f64>,
    /// Its uncertainty, dB, k = 2, if it is told.
    pub uncertainty_db: Option<f64>,
    /// Where its name stands in the site file.
    pub place: Range<usize>,
}

/// The instruments of a site by name, those with faults too.
pub(super) struct Instruments<'a> {
    entries: Vec<(Option<&'a str>, Option<Instrument>)>,
}

impl<'a> Instruments<'a> {
    /// Which one a cable means, by index.
    pub(super) fn find(&self, value: Value<'a>) -> Option<usize> {
        let name = value.text()?;
        let names = || self.entries.iter().filter_map(|(name, _)| *name);
        match self.entries.iter().position(|(known, _)| *known == Some(name)) {
            Some(index) => Some(index),
            None => value.refuse_name("no instrument is named", name, names()),
        }
    }

    /// The only one, for a cable that does not say; a fault if there are several. Without any, that has been told.
    pub(super) fn only(&self, cable: &Table<'_>) -> Option<usize> {
        if self.entries.len() > 1 {
            let names = self.entries.iter().filter_map(|(name, _)| *name).collect::<BTreeSet<_>>();
            let fault = Fault::new(cable.span(), "which instrument sees this cable?");
            cable.push(fault.with_help("write `instrument = \"...\"`").with_help(suggestion("", names)));
            return None;
        }
        (self.entries.len() == 1).then_some(0)
    }

    /// All of them, if nothing is wrong with any.
    pub(super) fn finished(self) -> Option<Vec<Instrument>> {
        self.entries.into_iter().map(|(_, instrument)| instrument).collect()
    }
}

pub(super) fn read_all<'a>(root: &Table<'a>, base: &Path) -> Instruments<'a> {
    root.required("instrument", "[[instrument]]");
    let (mut names, mut ports) = (Names::default(), Names::default());
    let read = root.tables("instrument").into_iter().map(|value| {
        let mut known = None;
        let instrument = value.table(|table| {
            table.keys(KEYS);
            let place = table.required("name", "name = \"rx1\"");
            known = place.and_then(|value| value.name());
            if let (Some(place), Some(name)) = (place, known) {
                names.add(place, name, "another instrument is named");
            }
            let port = table.required("port", "port = \"/dev/hushwatch/rx1\"");
            if let Some((place, path)) = port.and_then(|value| Some((value, value.line()?))) {
                ports.add(place, path, "another instrument is on the port");
            }
            read_one(table, base)
        });
        (known, instrument)
    });
    Instruments { entries: read.collect() }
}

const KEYS: &[&str] = &[
    "name",
    "port",
    "baud",
    "parity",
    "stop_bits",
    "flow",
    "dtr_on_open",
    "dialect",
    "identity",
    "timeout",
    "dwell",
    "settle",
    "attenuation",
    "unit",
    "filter",
    "format",
    "clock",
    "floor",
    "overload",
    "uncertainty",
];

fn read_one(table: &Table<'_>, base: &Path) -> Option<Instrument> {
    let baud = table.read_or("baud", 115_200, |value| value.count(50..=12_000_000));
    let parities = [("none", Parity::None), ("even", Parity::Even), ("odd", Parity::Odd)];
    let parity = table.read_or("parity", Parity::None, |value| value.choice(&parities));
    let stop_bits = table.read_or("stop_bits", 1, |value| value.count(1..=2).map(|bits| bits as u8));
    let flows = [("none", Flow::None), ("hardware", Flow::Hardware), ("software", Flow::Software)];
    let flow = table.read_or("flow", Flow::None, |value| value.choice(&flows));
    let dtr_on_open = table.read_if_any("dtr_on_open", |value| value.boolean());
    let dialect = table.required("dialect", "dialect = \"scpi-swept\"").and_then(|value| read_dialect(value, base));
    let identity = table.read_if_any("identity", |value| value.line());
    let timeout = read_span(table, "timeout", Span::from_secs(3), Span::from_millis(10)..=Span::from_mins(10));
    let dwell = read_span(table, "dwell", Span::from_millis(20), Span::from_micros(1)..=Span::from_secs(100));
    let settle = read_span(table, "settle", Span::ZERO, Span::ZERO..=Span::from_mins(1));
    let attenuation_db = table.read_if_any("attenuation", |value| value.quantity_within(&RATIO, 0.0..=120.0));
    let units = [ReceiverUnit::Dbm, ReceiverUnit::DbMicrovolt].map(|unit| (unit.label(), unit));
    let unit = table.read_or("unit", ReceiverUnit::Dbm, |value| value.choice(&units));
    let shapes = FilterShape::ALL.map(|shape| (shape.label(), shape));
    let shape = table.read_or("filter", FilterShape::Gaussian6dB, |value| value.choice(&shapes));
    let codings = Coding::ALL.map(|coding| (coding.label(), coding));
    let format = table.read_or("format", Coding::Real32, |value| value.choice(&codings));
    let clocks = [("system", Clock::System), ("instrument", Clock::Instrument)];
    let clock = table.read_or("clock", Clock::System, |value| value.choice(&clocks));
    let floor = table.read_if_any("floor", read_floor);
    let overload_dbuv = table.read_if_any("overload", read_overload);
    let uncertainty_db = table.read_if_any("uncertainty", |value| value.quantity_within(&RATIO, 0.0..=20.0));
    check_flow(table, flow, format)?;
    Some(Instrument {
        name: table.optional("name")?.name()?.to_owned(),
        port: base.join(table.optional("port")?.line()?),
        baud: baud?,
        parity: parity?,
        stop_bits: stop_bits?,
        flow: flow?,
        dtr_on_open: dtr_on_open?,
        dialect: dialect?,
        identity: identity?.map(str::to_owned),
        timeout: timeout?,
        dwell: dwell?,
        settle: settle?,
        attenuation_db: attenuation_db?,
        unit: unit?,
        shape: shape?,
        format: format?,
        clock: clock?,
        floor: floor?,
        overload_dbuv: overload_dbuv?,
        uncertainty_db: uncertainty_db?,
        place: table.optional("name")?.span(),
    })
}

fn read_span(table: &Table<'_>, key: &'static str, by_default: Span, limits: RangeInclusive<Span>) -> Option<Span> {
    table.read_or(key, by_default, |value| value.duration(limits))
}

/// The name of a dialect that is built in, or the path of a dialect file.
fn read_dialect(value: Value<'_>, base: &Path) -> Option<Dialect> {
    let name = value.line()?;
    if let Some(dialect) = dialect::builtin(name) {
        return Some(dialect);
    }
    if !name.contains('/') && Path::new(name).extension().is_none_or(|ending| ending != "toml") {
        let fault = Fault::new(value.span(), format!("no dialect `{}` is built in", name.escape_debug()));
        let fault = fault.with_help(suggestion(name, dialect::BUILTIN));
        value.collector().push(fault.with_help("the path of a dialect file ends in `.toml`"));
        return None;
    }
    let path = base.join(name);
    let text = match std::fs::read_to_string(&path) {
        Ok(text) => text,
        Err(error) => {
            return value.refuse(
                format!("cannot read the dialect file `{}`: {error}", path.display()),
                "the path is taken from the folder of the site file",
            );
        }
    };
    dialect::parse(&text, &path).map_err(|faults| value.collector().absorb(faults)).ok()
}

fn read_floor(value: Value<'_>) -> Option<Floor> {
    match value.quantity_and_unit(&FLOOR)? {
        (figure, "dB") if (0.0..=100.0).contains(&figure) => Some(Floor::NoiseFigureDb(figure)),
        (density, "dBm/Hz") if (-174.0..=-74.0).contains(&density) => Some(Floor::DbmPerHz(density)),
        _ => value.refuse(
            "no receiver has such a noise",
            "write the noise figure, 0 to 100 dB, or the noise density at the input, -174 to -74 dBm/Hz",
        ),
    }
}

/// The level in dB(uV).
fn read_overload(value: Value<'_>) -> Option<f64> {
    let (level, unit) = value.quantity_and_unit(&INPUT_LEVEL)?;
    let level = if unit == "dBm" { level + ReceiverUnit::Dbm.to_db_microvolt() } else { level };
    if (0.0..=200.0).contains(&level) {
        return Some(level);
    }
    value.refuse("no receiver is overloaded at such a level", "write a level between 0 and 200 dB(uV), -107 to 93 dBm")
}

/// XON and XOFF are bytes like others in a binary answer: a driver that obeys them eats them.
fn check_flow(table: &Table<'_>, flow: Option<Flow>, format: Option<Coding>) -> Option<()> {
    if (flow, format) == (Some(Flow::Software), Some(Coding::Real32)) {
        let place = table.optional("flow").map_or(table.span(), |value| value.span());
        let fault = Fault::new(place, "software flow control takes bytes out of binary answers");
        table.push(fault.with_help("write `format = \"ascii\"`, or `flow = \"hardware\"` or `\"none\"`"));
        return None;
    }
    Some(())
}
