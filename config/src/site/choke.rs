//! Chokes: the retrofit that is watched.

use std::ops::Range;

use jiff::civil::Date;

use super::points::{disorder, read_frequency};
use super::shelf::Shelved;
use crate::faults::Fault;
use crate::walk::{LENGTH, RESISTANCE, Table, Value};

/// The retrofit on a cable.
#[derive(Clone, Debug, PartialEq)]
pub struct Choke {
    /// Its name; the tag of the cable if it stands there and has none.
    pub name: String,
    /// What it is made of, or how it was measured.
    pub make: ChokeMake,
    /// When it was fitted.
    pub installed: Option<Date>,
}

/// What a choke is made of, or its impedance as measured.
#[derive(Clone, Debug, PartialEq)]
pub enum ChokeMake {
    /// Like cores in a row.
    Cores {
        /// One of them.
        core: Core,
        /// How often the cable goes through them; 1 means straight through.
        turns: u32,
        /// How many there are.
        cores: u32,
    },
    /// The impedance of the whole choke over frequency.
    Impedance(ImpedanceTable),
}

/// A core, split or solid.
#[derive(Clone, Debug, PartialEq)]
pub struct Core {
    /// The name of its material. Which ones are known is known elsewhere.
    pub material: String,
    /// Where the material's name stands.
    pub material_place: Range<usize>,
    /// Outer diameter, m.
    pub outer_m: f64,
    /// Inner diameter, m; below the outer one.
    pub inner_m: f64,
    /// Length along the cable, m.
    pub length_m: f64,
    /// Two halves in a clip?
    pub split: bool,
    /// What is left of air between the closed halves, both gaps together, m; 0 in a solid core.
    pub gap_m: f64,
}

/// Impedance over frequency, Hz and ohm; rising, two points at least.
#[derive(Clone, Debug, PartialEq)]
pub enum ImpedanceTable {
    /// Frequency and magnitude.
    Magnitude(Vec<(f64, f64)>),
    /// Frequency, resistance and reactance.
    Complex(Vec<(f64, f64, f64)>),
}

impl Shelved for Choke {
    const KEY: &'static str = "choke";
    const KEYS: &'static [&'static str] = &["name", "core", "turns", "cores", "impedance", "installed"];
    type Context = ();

    fn read(table: &mut Table<'_>, name: &str, (): &()) -> Option<Self> {
        let installed = table.read_if_any("installed", |value| value.date());
        let make = match (table.optional("core"), table.optional("impedance")) {
            (Some(core), None) => read_cores(core, table),
            (None, Some(impedance)) => read_impedance(impedance, table),
            (Some(core), Some(impedance)) => {
                let fault =
                    Fault::new(impedance.span(), "a choke is told by its core or by its impedance, not by both")
                        .with_related(core.span(), "its core")
                        .with_help("leave out `core`, or `impedance`");
                table.push(fault);
                None
            }
            (None, None) => {
                let fault = Fault::new(table.span(), "neither `core` nor `impedance` tells what this choke is");
                table.push(fault.with_help(
                    "write `core = { material = \"nizn-800\", outer = \"26 mm\", inner = \"13 mm\", length = \"28 mm\", \
                     split = true }`, or the measured `impedance = [[\"1 MHz\", \"45 ohm\"], ...]`",
                ));
                None
            }
        };
        Some(Self { name: name.to_owned(), make: make?, installed: installed? })
    }
}

fn read_cores(core: Value<'_>, table: &Table<'_>) -> Option<ChokeMake> {
    let count = |key| table.read_or(key, 1, |value| value.count(1..=100));
    let (turns, cores) = (count("turns"), count("cores"));
    let core = core.table(read_core);
    Some(ChokeMake::Cores { core: core?, turns: turns?, cores: cores? })
}

fn read_core(table: &mut Table<'_>) -> Option<Core> {
    table.keys(&["material", "outer", "inner", "length", "split", "gap"]);
    let length = |value: Option<Value<'_>>| value.and_then(|value| value.quantity_within(&LENGTH, 1e-4..=1.0));
    let material = table.required("material", "material = \"nizn-800\"");
    let material_name = material.and_then(|value| value.name());
    let outer = table.required("outer", "outer = \"26 mm\"");
    let inner = table.required("inner", "inner = \"13 mm\"");
    let (outer_m, inner_m) = (length(outer), length(inner));
    let length_m = length(table.required("length", "length = \"28 mm\""));
    let split = table.read_or("split", false, |value| value.boolean());
    let gap_m = table.read_or("gap", 0.0, |value| value.quantity_within(&LENGTH, 0.0..=0.02));
    if let (Some(outer_m), Some(inner_m), Some(place), Some(outer)) = (outer_m, inner_m, inner, outer)
        && inner_m >= outer_m
    {
        let fault = Fault::new(
            place.span(),
            format!("a hole of {} in a core of {}", LENGTH.write(inner_m), LENGTH.write(outer_m)),
        )
        .with_related(outer.span(), "the outer diameter")
        .with_help("the inner diameter is smaller than the outer one");
        table.push(fault);
        return None;
    }
    if let (Some(gap), Some(false)) = (table.optional("gap"), split) {
        return gap.refuse("a solid core has no gap", "write `split = true`, or leave `gap` out");
    }
    Some(Core {
        material: material_name?.to_owned(),
        material_place: material?.span(),
        outer_m: outer_m?,
        inner_m: inner_m?,
        length_m: length_m?,
        split: split?,
        gap_m: gap_m?,
    })
}

fn read_impedance(impedance: Value<'_>, table: &Table<'_>) -> Option<ChokeMake> {
    let counts = ["turns", "cores"].map(|key| table.optional(key));
    for value in counts.into_iter().flatten() {
        let what = format!("`{}` does not go with an impedance table", value.key());
        value.refuse::<()>(what, "the table is that of the whole choke as it is fitted: leave this out");
    }
    let rows = impedance.list()?;
    let points: Vec<_> = rows.iter().map(|row| read_row(*row)).collect();
    let points = points.into_iter().collect::<Option<Vec<_>>>()?;
    let places = rows.iter().map(Value::span);
    if let Some(fault) = disorder(points.iter().map(|(hz, _, _)| *hz).zip(places), &impedance.span()) {
        table.push(fault);
        return None;
    }
    let complex = points.iter().filter(|(_, _, reactance)| reactance.is_some()).count();
    if complex != 0 && complex != points.len() {
        return impedance.refuse(
            "some of these points are complex, some are not",
            "write magnitudes alone, `[\"1 MHz\", \"45 ohm\"]`, or resistance and reactance everywhere",
        );
    }
    Some(ChokeMake::Impedance(if complex == 0 {
        ImpedanceTable::Magnitude(points.into_iter().map(|(hz, ohm, _)| (hz, ohm)).collect())
    } else {
        ImpedanceTable::Complex(
            points.into_iter().map(|(hz, ohm, reactance)| (hz, ohm, reactance.unwrap_or(0.0))).collect(),
        )
    }))
}

/// Frequency, and magnitude alone or resistance and reactance.
fn read_row(row: Value<'_>) -> Option<(f64, f64, Option<f64>)> {
    let positive = |value: Value<'_>| value.quantity_within(&RESISTANCE, 0.0..=1e6);
    if row.list()?.len() == 3 {
        let [hz, resistance, reactance] = row.tuple("[\"1 MHz\", \"30 ohm\", \"33 ohm\"]")?;
        let reactance = reactance.quantity_within(&RESISTANCE, -1e6..=1e6);
        let (hz, resistance) = (read_frequency(hz), positive(resistance));
        return Some((hz?, resistance?, Some(reactance?)));
    }
    let [hz, magnitude] = row.tuple("[\"1 MHz\", \"45 ohm\"]")?;
    let (hz, magnitude) = (read_frequency(hz), positive(magnitude));
    Some((hz?, magnitude?, None))
}
