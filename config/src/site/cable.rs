//! Cables: each with its input, probe, bands, choke, loop and requirement.

use std::cell::RefCell;
use std::ops::Range;
use std::path::Path;

use hushwatch_quantity::Span;

use super::band::Band;
use super::choke::Choke;
use super::instrument::Instruments;
use super::probe::Probe;
use super::shelf::{Names, Shelf};
use crate::faults::Fault;
use crate::walk::{FREQUENCY, LENGTH, RATIO, RESISTANCE, Table, Value};

/// The common-mode impedance on each side of a cable that is not told, ohm: IEC 61000-4-6.
const LOOP_OHM: f64 = 150.0;

/// A cable that is watched.
#[derive(Clone, Debug, PartialEq)]
pub struct Cable {
    /// Its tag.
    pub tag: String,
    /// For people; may be empty.
    pub description: String,
    /// The instrument that sees it, by index.
    pub instrument: usize,
    /// The instrument's input; 1 if there is only one.
    pub input: u32,
    /// What it is looked at with.
    pub probe: Probe,
    /// Its bands, one at least, each mostly within the range of the probe's factor and path loss.
    pub bands: Vec<Band>,
    /// The retrofit.
    pub choke: Option<Choke>,
    /// Common-mode impedance of the side of the source, ohm.
    pub source_ohm: f64,
    /// Common-mode impedance of the side of the load, ohm; not nought together with the source's.
    pub load_ohm: f64,
    /// Its length, m.
    pub length_m: Option<f64>,
    /// The tag of another cable that sees the same source.
    pub witness: Option<String>,
    /// The suppression that is required, dB.
    pub min_suppression_db: Option<f64>,
    /// A rise of this much is one too much, dB; half the achieved suppression if not told.
    pub max_rise_db: Option<f64>,
    /// How often it is looked at; what the line allows, at least 10 s, if not told.
    pub every: Option<Span>,
    /// Where things stand in the site file.
    pub places: CablePlaces,
}

/// Where the things of a cable stand in the site file, bytes, for those who find faults that are not known here.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct CablePlaces {
    /// Its tag.
    pub tag: Range<usize>,
    /// Its probe, or the name of it.
    pub probe: Range<usize>,
    /// Its choke, or the name of it.
    pub choke: Option<Range<usize>>,
    /// The required suppression.
    pub min_suppression: Option<Range<usize>>,
    /// The greatest rise.
    pub max_rise: Option<Range<usize>>,
    /// How often it is looked at.
    pub every: Option<Range<usize>>,
}

/// What cables share.
pub(super) struct Shelves<'a> {
    probes: Shelf<'a, Probe>,
    bands: Shelf<'a, Band>,
    chokes: Shelf<'a, Choke>,
    /// Bands and probes of which it was told that they do not fit wholly: once is enough.
    warned: RefCell<Vec<(String, String)>>,
}

impl<'a> Shelves<'a> {
    pub(super) fn read(root: &Table<'a>, base: &Path) -> Self {
        Self {
            probes: Shelf::read(root, base.to_owned()),
            bands: Shelf::read(root, ()),
            chokes: Shelf::read(root, ()),
            warned: RefCell::default(),
        }
    }

    fn is_first_warning(&self, band: &Band, probe: &Probe) -> bool {
        let pair = (band.name.clone(), probe.name.clone());
        let mut warned = self.warned.borrow_mut();
        let first = !warned.contains(&pair);
        warned.push(pair);
        first
    }
}

/// Reads all cables; those with faults are left out.
pub(super) fn read_all<'a>(root: &Table<'a>, shelves: &Shelves<'a>, instruments: &Instruments<'a>) -> Vec<Cable> {
    root.required("cable", "[[cable]]");
    let mut tags = Names::default();
    let mut witnesses = Vec::new();
    let tables = root.tables("cable");
    let cables = tables.iter().filter_map(|value| {
        value.table(|table| {
            table.keys(KEYS);
            let place = table.required("tag", "tag = \"W12\"");
            let tag = place.and_then(|value| value.name());
            if let (Some(place), Some(tag)) = (place, tag) {
                tags.add(place, tag, "another cable has the tag");
            }
            witnesses.extend(table.optional("witness").map(|witness| (witness, tag)));
            read_one(table, shelves, instruments)
        })
    });
    let cables: Vec<Cable> = cables.collect();
    for (witness, tag) in witnesses {
        check_witness(witness, tag, &tags.all());
    }
    // What a cable with faults would have used is not known.
    if cables.len() == tables.len() {
        shelves.probes.warn_of_unused();
        shelves.bands.warn_of_unused();
        shelves.chokes.warn_of_unused();
    }
    cables
}

const KEYS: &[&str] = &[
    "tag",
    "description",
    "instrument",
    "input",
    "probe",
    "bands",
    "choke",
    "loop",
    "witness",
    "min_suppression",
    "max_rise",
    "every",
];

fn read_one<'a>(table: &Table<'a>, shelves: &Shelves<'a>, instruments: &Instruments<'a>) -> Option<Cable> {
    let tag_place = table.optional("tag").filter(Value::is_text);
    // A probe or choke that stands here without a name is called by the cable.
    let tag = tag_place.and_then(|value| value.text());
    let name = tag.unwrap_or_default();
    let description = table.read_or("description", "", |value| value.line());
    let instrument = match table.optional("instrument") {
        Some(value) => instruments.find(value),
        None => instruments.only(table),
    };
    let input = table.read_or("input", 1, |value| value.count(1..=9999));
    let probe_place = table.required("probe", "probe = \"clamp-a\"");
    let probe = probe_place.and_then(|value| shelves.probes.find(value, name));
    let bands = read_bands(table, shelves, probe.as_ref());
    let choke = table.read_if_any("choke", |value| shelves.chokes.find(value, name));
    let impedances = table.read_or("loop", Loop::default(), |value| value.table(read_loop));
    let witness = table.optional("witness").filter(Value::is_text).and_then(|value| value.text());
    let min_suppression_db = table.read_if_any("min_suppression", |value| value.quantity_within(&RATIO, 0.1..=120.0));
    let max_rise_db = table.read_if_any("max_rise", |value| value.quantity_within(&RATIO, 0.1..=120.0));
    let limits = Span::from_millis(50)..=Span::from_days(1);
    let every = table.read_if_any("every", |value| value.duration(limits));
    warn_of_requirement_without_choke(table);
    let place = |key| table.optional(key).map(|value: Value<'_>| value.span());
    let Loop { source_ohm, load_ohm, length_m } = impedances?;
    Some(Cable {
        tag: tag?.to_owned(),
        description: description?.to_owned(),
        instrument: instrument?,
        input: input?,
        probe: probe?,
        bands: bands?,
        choke: choke?,
        source_ohm,
        load_ohm,
        length_m,
        witness: witness.map(str::to_owned),
        min_suppression_db: min_suppression_db?,
        max_rise_db: max_rise_db?,
        every: every?,
        places: CablePlaces {
            tag: tag_place?.span(),
            probe: probe_place?.span(),
            choke: place("choke"),
            min_suppression: place("min_suppression"),
            max_rise: place("max_rise"),
            every: place("every"),
        },
    })
}

#[derive(Clone, Copy)]
struct Loop {
    source_ohm: f64,
    load_ohm: f64,
    length_m: Option<f64>,
}

impl Default for Loop {
    fn default() -> Self {
        Self { source_ohm: LOOP_OHM, load_ohm: LOOP_OHM, length_m: None }
    }
}

fn read_loop(table: &mut Table<'_>) -> Option<Loop> {
    table.keys(&["source", "load", "length"]);
    let side = |key| table.read_or(key, LOOP_OHM, |value: Value<'_>| value.quantity_within(&RESISTANCE, 0.0..=1e5));
    let (source_ohm, load_ohm) = (side("source"), side("load"));
    let length_m = table.read_if_any("length", |value| value.quantity_within(&LENGTH, 0.01..=1e4));
    let (source_ohm, load_ohm, length_m) = (source_ohm?, load_ohm?, length_m?);
    if source_ohm + load_ohm < 0.1 {
        let fault = Fault::new(table.span(), "a loop without any impedance");
        table.push(
            fault.with_help(
                "write what source and load have together, as in `{ source = \"25 ohm\", load = \"25 ohm\" }`",
            ),
        );
        return None;
    }
    Some(Loop { source_ohm, load_ohm, length_m })
}

/// The bands that a cable names, else all of the site, else the default ones in the range of its probe.
fn read_bands<'a>(table: &Table<'a>, shelves: &Shelves<'a>, probe: Option<&Probe>) -> Option<Vec<Band>> {
    let Some(value) = table.optional("bands") else {
        let place = table.optional("probe")?;
        let bands = if shelves.bands.is_empty() { Band::by_default(probe?.range()) } else { shelves.bands.all() };
        if bands.is_empty() {
            return refuse_no_bands(place, shelves, probe?);
        }
        return check_range(bands.into_iter().map(|band| (band, place)).collect(), probe?, shelves);
    };
    let items = value.list()?;
    if items.is_empty() {
        return value.refuse("a cable without bands has no level", "name one at least, or leave `bands` out for all");
    }
    let mut names: Vec<String> = Vec::new();
    let mut bands = Vec::new();
    for item in items {
        let by_default = format!("band-{}", names.len() + 1);
        let Some(band) = shelves.bands.find(item, &by_default) else { continue };
        if names.contains(&band.name) {
            let what = format!("the band `{}` stands here twice", band.name);
            item.refuse::<()>(what, "name each band once; give a band that stands here a `name` of its own");
            continue;
        }
        names.push(band.name.clone());
        bands.push((band, item));
    }
    check_range(bands, probe?, shelves)
}

fn refuse_no_bands<T>(place: Value<'_>, shelves: &Shelves<'_>, probe: &Probe) -> Option<T> {
    if !shelves.bands.is_empty() {
        // There are some, but all have faults; those have been told.
        return None;
    }
    let (from, to) = probe.range();
    if from >= to {
        return place.refuse(
            "factor and path loss of this probe have no frequency in common",
            "give both over the range in which it is used",
        );
    }
    place.refuse(
        format!("none of the default bands lies between {} and {}", FREQUENCY.write(from), FREQUENCY.write(to)),
        "write the bands that matter as `[[band]]`, within the range of the probe's factor and path loss",
    )
}

/// Refuses bands of which less than half lies within the probe's range, as they would never have a usable level, and
/// warns of those that are cut.
fn check_range(bands: Vec<(Band, Value<'_>)>, probe: &Probe, shelves: &Shelves<'_>) -> Option<Vec<Band>> {
    let range = probe.range();
    let mut fits = true;
    for (band, place) in &bands {
        let share = band.share_within(range);
        let (from, to) = (FREQUENCY.write(range.0), FREQUENCY.write(range.1));
        let help = format!("the probe `{}` is known from {from} to {to}", probe.name);
        if share < 0.5 {
            let outside = if share == 0.0 { "lies outside" } else { "lies for the most part outside" };
            place.refuse::<()>(format!("the band `{}` {outside} the range of the probe", band.name), help);
            fits = false;
        } else if share < 1.0 && shelves.is_first_warning(band, probe) {
            let percent = ((1.0 - share) * 100.0).ceil();
            let what = format!("{percent} % of the band `{}` lie outside the range of the probe", band.name);
            place.warn(what, format!("{help}; its levels will be `uncertain`"));
        }
    }
    fits.then(|| bands.into_iter().map(|(band, _)| band).collect())
}

/// A witness is another cable of the site.
fn check_witness<'a>(witness: Value<'a>, tag: Option<&str>, known: &[&'a str]) -> Option<()> {
    let name = witness.name()?;
    if tag == Some(name) {
        return witness.refuse("a cable cannot be its own witness", "name another cable that sees the same source");
    }
    if known.contains(&name) {
        return Some(());
    }
    let others = known.iter().copied().filter(|other| Some(*other) != tag);
    witness.refuse_name("no cable has the tag", name, others)
}

fn warn_of_requirement_without_choke(table: &Table<'_>) {
    if let (Some(required), None) = (table.optional("min_suppression"), table.optional("choke")) {
        required.warn(
            "a suppression is required of a cable without a choke",
            "write its `choke`, so that it can be told what that should do",
        );
    }
}
