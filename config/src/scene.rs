//! The scene file: a simulated cabinet, with what disturbs it, what flows where, and what fails when.
//!
//! It is made like a site file and walked like one: every fault is told at its place. What is written is plain physics
//! (volts, ohms, millimetres); how it acts is the business of whoever simulates it.

mod cable;
mod event;
mod source;

use std::path::Path;
use std::sync::Arc;

use hushwatch_quantity::{Span, Time};
use jiff::tz::TimeZone;

pub use cable::{Cable, Choke, Link, Material};
pub use event::{Event, What};
pub use source::{Source, SourceKind};

use crate::faults::{Fault, Faults, Source as Text};
use crate::site::OperatingStates;
use crate::walk::{self, RATIO, Table, Value};

/// The format of the scene file that this version reads.
const FORMAT: i64 = 1;

/// The scene that the demo plays.
const BOTTLING_HALL: &str = include_str!("../scenes/bottling-hall.toml");

/// A simulated cabinet.
#[derive(Clone, Debug)]
pub struct Scene {
    /// What it is called.
    pub name: String,
    /// Plant time at which it begins.
    pub start: Time,
    /// How long it lasts, plant time; then it goes on as it was.
    pub duration: Span,
    /// By how much plant time goes on with each sweep; `None`: with the real clock.
    pub step: Option<Span>,
    /// Two runs with the same seed are the same.
    pub seed: u64,
    /// The zone in which the calendar is meant.
    pub zone: TimeZone,
    /// The zone's name as it is written.
    pub timezone: String,
    /// The temperature of cores and receiver.
    pub temperature: Temperature,
    /// The receiver.
    pub receiver: Receiver,
    /// What disturbs.
    pub sources: Vec<Source>,
    /// What the cores are made of.
    pub materials: Vec<Material>,
    /// Where it flows.
    pub cables: Vec<Cable>,
    /// What connects the nodes.
    pub links: Vec<Link>,
    /// What the machine is doing.
    pub operating_states: OperatingStates,
    /// What happens, in the order of time.
    pub events: Vec<Event>,
    /// The whole file.
    pub text: String,
}

/// The temperature of cores and receiver: a mean with a daily swing.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Temperature {
    /// Mean, degrees Celsius.
    pub mean_c: f64,
    /// Half of the difference between day and night, K.
    pub swing_k: f64,
    /// Change of the receiver's gain, dB/K.
    pub gain_db_per_k: f64,
}

/// The simulated receiver.
#[derive(Clone, Debug, PartialEq)]
pub struct Receiver {
    /// What it answers to `*IDN?`.
    pub identity: String,
    /// Noise figure at 0 dB of attenuation, dB.
    pub noise_figure_db: f64,
    /// Standard deviation of a single point from sweep to sweep, dB.
    pub fluctuation_db: f64,
    /// Points that it can sweep at once.
    pub max_points: u32,
    /// Bits per second at which it paces its answers.
    pub baud: u32,
}

/// A scene that is built in.
pub fn builtin(name: &str) -> Option<&'static str> {
    (name == "bottling-hall").then_some(BOTTLING_HALL)
}

/// Reads a scene file.
///
/// # Errors
/// The file cannot be read, or all that is wrong with it.
pub fn load(path: &Path) -> Result<Scene, Faults> {
    let text = std::fs::read_to_string(path).map_err(|error| Faults::unreadable(path, &error))?;
    parse(&text, path)
}

/// Reads a scene from its text; `path` is for messages.
///
/// # Errors
/// All that is wrong with it, each fault at its place.
pub fn parse(text: &str, path: &Path) -> Result<Scene, Faults> {
    let source = Arc::new(Text { path: path.to_owned(), text: text.to_owned() });
    let base = path.parent().unwrap_or(Path::new(""));
    let read = walk::document(&source, |root| read(root, base, text))?;
    Ok(read.value)
}

fn read(root: &mut Table<'_>, base: &Path, text: &str) -> Option<Scene> {
    root.keys(&[
        "format",
        "scene",
        "temperature",
        "receiver",
        "source",
        "material",
        "cable",
        "link",
        "operating_states",
        "event",
    ]);
    let format = root.required("format", "format = 1")?.integer(1..=i64::MAX)?;
    if format != FORMAT {
        let fault = Fault::new(root.span(), format!("this scene is of format {format}; this version reads {FORMAT}"));
        root.push(fault.with_help("take a newer version of the program"));
        return None;
    }
    let head = root.required("scene", "[scene]").and_then(|value| value.table(read_head));
    let still = Temperature { mean_c: 25.0, swing_k: 0.0, gain_db_per_k: 0.0 };
    let temperature = root.read_or("temperature", still, |value| value.table(read_temperature));
    let receiver = root.required("receiver", "[receiver]").and_then(|value| value.table(read_receiver));
    let sources = all(root, "source", source::read);
    let materials = all(root, "material", cable::read_material);
    let cables = all(root, "cable", |table| cable::read(table, materials.as_deref().unwrap_or_default()));
    let links = all(root, "link", cable::read_link);
    let operating_states = crate::site::states::read(root, base);
    let tags: Vec<&str> = cables.iter().flatten().map(|cable| cable.tag.as_str()).collect();
    let names: Vec<&str> = sources.iter().flatten().map(|source| source.name.as_str()).collect();
    let events = all(root, "event", |table| event::read(table, &tags, &names));
    if let (Some(sources), Some(cables)) = (&sources, &cables) {
        check_nodes(root, sources, cables, links.as_deref().unwrap_or_default());
    }
    let head = head?;
    let mut events = events?;
    events.sort_by_key(|event| event.at);
    Some(Scene {
        name: head.name,
        start: head.start,
        duration: head.duration,
        step: head.step,
        seed: head.seed,
        zone: head.zone.1,
        timezone: head.zone.0,
        temperature: temperature?,
        receiver: receiver?,
        sources: sources?,
        materials: materials?,
        cables: cables?,
        links: links?,
        operating_states: operating_states?,
        events,
        text: text.to_owned(),
    })
}

/// Reads all tables of a `[[key]]`; `None` if one of them is wrong, after all of them were read.
fn all<T>(root: &Table<'_>, key: &'static str, mut read: impl FnMut(&mut Table<'_>) -> Option<T>) -> Option<Vec<T>> {
    let read: Vec<Option<T>> = root.tables(key).into_iter().map(|value| value.table(&mut read)).collect();
    read.into_iter().collect()
}

struct Head {
    name: String,
    start: Time,
    duration: Span,
    step: Option<Span>,
    seed: u64,
    zone: (String, TimeZone),
}

fn read_head(table: &mut Table<'_>) -> Option<Head> {
    table.keys(&["name", "start", "duration", "step", "seed", "timezone"]);
    let any = Span::from_millis(1)..=Span::from_days(3660);
    let name = table.required("name", "name = \"Bottling hall 2\"").and_then(|value| value.line());
    let start = table.required("start", "start = \"2026-09-01T00:00:00Z\"").and_then(read_time);
    let duration = table.required("duration", "duration = \"30 days\"").and_then(|value| value.duration(any.clone()));
    let step = table.read_if_any("step", |value| value.duration(any.clone()));
    let seed = table.read_or("seed", 1, |value| value.integer(0..=i64::MAX));
    let zone = table.read_or("timezone", (String::from("UTC"), TimeZone::UTC), |value| {
        let name = value.line()?;
        match TimeZone::get(name) {
            Ok(zone) => Some((name.to_owned(), zone)),
            Err(_) => value.refuse(format!("there is no time zone `{name}`"), "write one as in `\"Europe/Vienna\"`"),
        }
    });
    Some(Head {
        name: name?.to_owned(),
        start: start?,
        duration: duration?,
        step: step?,
        seed: seed?.unsigned_abs(),
        zone: zone?,
    })
}

fn read_time(value: Value<'_>) -> Option<Time> {
    let text = value.text()?;
    let help = "write it as RFC 3339 in quotes, as in `\"2026-09-01T00:00:00Z\"`";
    Time::parse_rfc3339(text).ok().or_else(|| value.refuse(format!("`{}` is no time", text.escape_debug()), help))
}

fn read_temperature(table: &mut Table<'_>) -> Option<Temperature> {
    table.keys(&["mean", "swing", "gain_per_kelvin"]);
    let mean = table.read_or("mean", 25.0, |value| value.number(-40.0..=125.0));
    let swing = table.read_or("swing", 0.0, |value| value.number(0.0..=60.0));
    let gain = table.read_or("gain_per_kelvin", 0.0, |value| value.quantity_within(&RATIO, -1.0..=1.0));
    Some(Temperature { mean_c: mean?, swing_k: swing?, gain_db_per_k: gain? })
}

fn read_receiver(table: &mut Table<'_>) -> Option<Receiver> {
    table.keys(&["identity", "noise_figure", "fluctuation", "max_points", "baud"]);
    let identity = table.required("identity", "identity = \"Bench,RX-1,1,1.0\"").and_then(|value| value.line());
    let ratio =
        |key, by_default, most| table.read_or(key, by_default, |value| value.quantity_within(&RATIO, 0.0..=most));
    let (noise_figure, fluctuation) = (ratio("noise_figure", 20.0, 60.0), ratio("fluctuation", 1.0, 20.0));
    let max_points = table.read_or("max_points", 1001, |value| value.count(2..=100_001));
    let baud = table.read_or("baud", 115_200, |value| value.count(300..=12_000_000));
    Some(Receiver {
        identity: identity?.to_owned(),
        noise_figure_db: noise_figure?,
        fluctuation_db: fluctuation?,
        max_points: max_points?,
        baud: baud?,
    })
}

/// Every node must lead somewhere, and nothing may be called twice.
fn check_nodes(root: &Table<'_>, sources: &[Source], cables: &[Cable], links: &[Link]) {
    let known = |node: &str| {
        cables.iter().any(|cable| cable.node == node) || links.iter().any(|link| link.from == node || link.to == node)
    };
    for source in sources.iter().filter(|source| !known(&source.node)) {
        let what = format!("source `{}` feeds node `{}`, where no cable and no link begins", source.name, source.node);
        root.push(Fault::new(source.place.clone(), what).with_help("name the node of a cable or of a link"));
    }
    for (index, cable) in cables.iter().enumerate() {
        if let Some(other) = cables[..index].iter().find(|other| other.tag == cable.tag || other.input == cable.input) {
            let what = format!("cables `{}` and `{}` have the same tag or input", other.tag, cable.tag);
            root.push(Fault::new(cable.place.clone(), what).with_related(other.place.clone(), "the other one"));
        }
    }
}

#[cfg(test)]
mod tests;
