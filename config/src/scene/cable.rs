//! Where it flows: cables, their chokes, and what connects the nodes.

use std::ops::Range;

use crate::site::points::{Points, read_table};
use crate::walk::{Dimension, FACTOR, FREQUENCY, LENGTH, RATIO, RESISTANCE, Table, Value};

/// Henry.
static INDUCTANCE: Dimension = Dimension {
    name: "an inductance",
    example: "1 uH",
    units: &[("nH", 1e-9), ("uH", 1e-6), ("mH", 1e-3), ("H", 1.0)],
    aliases: &[("\u{b5}H", "uH"), ("\u{3bc}H", "uH")],
};

/// A cable: from its node through its choke, its inductance and its far end to earth.
#[derive(Clone, Debug, PartialEq)]
pub struct Cable {
    /// Its tag.
    pub tag: String,
    /// For people; may be empty.
    pub description: String,
    /// The receiver's input on which its probe is.
    pub input: u32,
    /// The node at which it begins.
    pub node: String,
    /// Impedance of its far end, ohm.
    pub far_ohm: f64,
    /// Its own inductance, H.
    pub henry: f64,
    /// The factor of its current probe, Hz and dB(ohm).
    pub factor: Points,
    /// Loss between probe and receiver, Hz and dB.
    pub path_loss: Points,
    /// Its choke, if it has one.
    pub choke: Option<Choke>,
    /// Where its tag stands.
    pub place: Range<usize>,
}

/// A choke: like cores in a row.
#[derive(Clone, Debug, PartialEq)]
pub struct Choke {
    /// The name of its material.
    pub material: String,
    /// Outer diameter, m.
    pub outer_m: f64,
    /// Inner diameter, m.
    pub inner_m: f64,
    /// Length along the cable, m.
    pub length_m: f64,
    /// Air that is left in the closed core, both gaps together, m.
    pub gap_m: f64,
    /// How often the cable goes through.
    pub turns: u32,
    /// How many there are.
    pub cores: u32,
    /// Is it there from the beginning? Else an event fits it.
    pub fitted: bool,
}

/// What a core is made of: permeability that relaxes at one frequency.
#[derive(Clone, Debug, PartialEq)]
pub struct Material {
    /// Its name.
    pub name: String,
    /// Relative permeability at low frequency and 25 degrees Celsius.
    pub mu: f64,
    /// Frequency at which it relaxes, Hz.
    pub relaxation_hz: f64,
    /// Change of the permeability with temperature, a share per K.
    pub per_kelvin: f64,
}

/// An impedance between two nodes.
#[derive(Clone, Debug, PartialEq)]
pub struct Link {
    /// A node.
    pub from: String,
    /// Another node.
    pub to: String,
    /// Resistance, ohm.
    pub ohm: f64,
    /// Inductance, H.
    pub henry: f64,
}

pub(super) fn read(table: &mut Table<'_>, materials: &[Material]) -> Option<Cable> {
    table.keys(&["tag", "description", "input", "node", "far", "inductance", "factor", "path_loss", "choke"]);
    let tag = table.required("tag", "tag = \"W12\"");
    let description = table.read_or("description", "", |value| value.line());
    let input = table.read_or("input", 1, |value| value.count(1..=999));
    let node = table.read_or("node", "cabinet", |value| value.name());
    let far = table.required("far", "far = \"25 ohm\"");
    let far = far.and_then(|value| value.quantity_within(&RESISTANCE, 1e-3..=1e9));
    let henry = table.read_or("inductance", 0.0, |value| value.quantity_within(&INDUCTANCE, 0.0..=1.0));
    let factor = table.required("factor", "factor = [[\"150 kHz\", 2.0], [\"30 MHz\", 14.0]]");
    let factor = factor.and_then(|value| read_table(value, &FACTOR));
    let none = || vec![(1.0, 0.0), (1e12, 0.0)];
    let path_loss = table.read_or("path_loss", none(), |value| read_table(value, &RATIO));
    let choke = table.read_if_any("choke", |value| value.table(|table| read_choke(table, materials)));
    Some(Cable {
        tag: tag?.name()?.to_owned(),
        description: description?.to_owned(),
        input: input?,
        node: node?.to_owned(),
        far_ohm: far?,
        henry: henry?,
        factor: factor?,
        path_loss: path_loss?,
        choke: choke?,
        place: tag?.span(),
    })
}

fn read_choke(table: &mut Table<'_>, materials: &[Material]) -> Option<Choke> {
    table.keys(&["material", "outer", "inner", "length", "gap", "turns", "cores", "fitted"]);
    let length = |value: Option<Value<'_>>| value.and_then(|value| value.quantity_within(&LENGTH, 1e-4..=1.0));
    let material = table.required("material", "material = \"nizn-800\"").and_then(|value| {
        let name = value.name()?;
        let known = || materials.iter().map(|one| one.name.as_str());
        if known().any(|one| one == name) {
            return Some(name.to_owned());
        }
        let help = crate::walk::suggestion(name, known());
        value.refuse(format!("no material is named `{name}`"), help)
    });
    let outer = length(table.required("outer", "outer = \"26 mm\""));
    let inner = table.required("inner", "inner = \"13 mm\"");
    let inner_m = length(inner);
    let length_m = length(table.required("length", "length = \"28 mm\""));
    let gap = table.read_or("gap", 0.0, |value| value.quantity_within(&LENGTH, 0.0..=0.05));
    let turns = table.read_or("turns", 1, |value| value.count(1..=100));
    let cores = table.read_or("cores", 1, |value| value.count(1..=100));
    let fitted = table.read_or("fitted", true, |value| value.boolean());
    if outer <= inner_m
        && let Some(inner) = inner
        && inner_m.is_some()
        && outer.is_some()
    {
        return inner.refuse("the hole is not smaller than the core", "the inner diameter is below the outer one");
    }
    Some(Choke {
        material: material?,
        outer_m: outer?,
        inner_m: inner_m?,
        length_m: length_m?,
        gap_m: gap?,
        turns: turns?,
        cores: cores?,
        fitted: fitted?,
    })
}

pub(super) fn read_material(table: &mut Table<'_>) -> Option<Material> {
    table.keys(&["name", "mu", "relaxation", "per_kelvin"]);
    let name = table.required("name", "name = \"nizn-800\"").and_then(|value| value.name());
    let mu = table.required("mu", "mu = 800").and_then(|value| value.number(1.0..=1e5));
    let relaxation = table.required("relaxation", "relaxation = \"7 MHz\"");
    let relaxation = relaxation.and_then(|value| value.quantity_within(&FREQUENCY, 1e3..=1e12));
    let per_kelvin = table.read_or("per_kelvin", 0.0, |value| value.number(-0.05..=0.05));
    Some(Material { name: name?.to_owned(), mu: mu?, relaxation_hz: relaxation?, per_kelvin: per_kelvin? })
}

pub(super) fn read_link(table: &mut Table<'_>) -> Option<Link> {
    table.keys(&["from", "to", "resistance", "inductance"]);
    let node = |key, example| table.required(key, example).and_then(|value| value.name());
    let (from, to) = (node("from", "from = \"cabinet\""), node("to", "to = \"rack\""));
    let ohm = table.required("resistance", "resistance = \"2 ohm\"");
    let ohm = ohm.and_then(|value| value.quantity_within(&RESISTANCE, 1e-6..=1e9));
    let henry = table.read_or("inductance", 0.0, |value| value.quantity_within(&INDUCTANCE, 0.0..=1.0));
    Some(Link { from: from?.to_owned(), to: to?.to_owned(), ohm: ohm?, henry: henry? })
}
