//! What disturbs.

use std::ops::Range;

use crate::walk::{Dimension, FREQUENCY, RATIO, RESISTANCE, Table};

/// Volts.
static VOLTAGE: Dimension =
    Dimension { name: "a voltage", example: "5 V", units: &[("mV", 1e-3), ("V", 1.0), ("kV", 1e3)], aliases: &[] };

/// dB over 1 microvolt.
static LEVEL: Dimension =
    Dimension { name: "a level", example: "60 dB(uV)", units: &[("dB(uV)", 1.0)], aliases: &[("dBuV", "dB(uV)")] };

/// Seconds, also very short ones.
static SHORT: Dimension = Dimension {
    name: "a time",
    example: "200 ns",
    units: &[("ns", 1e-9), ("us", 1e-6), ("ms", 1e-3), ("s", 1.0)],
    aliases: &[("\u{b5}s", "us"), ("\u{3bc}s", "us")],
};

/// A source: a voltage behind an impedance, between earth and a node.
#[derive(Clone, Debug, PartialEq)]
pub struct Source {
    /// Its name.
    pub name: String,
    /// The node that it feeds.
    pub node: String,
    /// Its inner impedance, ohm.
    pub impedance_ohm: f64,
    /// What it is.
    pub kind: SourceKind,
    /// By how much it is stronger or weaker in an operating state, dB; 0 in those not named.
    pub states: Vec<(String, f64)>,
    /// Standard deviation of its strength from sweep to sweep, dB.
    pub fluctuation_db: f64,
    /// How much of the fluctuation stays from one sweep to the next, 0 to 1.
    pub memory: f64,
    /// Where its name stands.
    pub place: Range<usize>,
}

/// What a source is.
#[derive(Clone, Debug, PartialEq)]
pub enum SourceKind {
    /// A drive: trapezoids of varying width at a carrier frequency, with a resonance that rings at each edge.
    Drive {
        /// Step of the common-mode voltage, V.
        step_v: f64,
        /// Carrier frequency, Hz.
        carrier_hz: f64,
        /// Rise time of the edges, s.
        rise_s: f64,
        /// Frequency at which it rings, Hz.
        ring_hz: f64,
        /// Quality of the resonance.
        ring_q: f64,
        /// How much stronger it is at the resonance, dB.
        ring_db: f64,
    },
    /// A clock: narrow lines at all multiples, weaker by 20 dB a decade.
    Clock {
        /// Its frequency, Hz.
        hz: f64,
        /// Level of the first line, dB(uV).
        level_dbuv: f64,
    },
    /// A broadcast transmitter: one line.
    Broadcast {
        /// Its frequency, Hz.
        hz: f64,
        /// Its level, dB(uV).
        level_dbuv: f64,
    },
    /// Bursts: now and then, noise that is spread evenly.
    Bursts {
        /// How many in an hour, on average.
        per_hour: f64,
        /// How long each lasts, s.
        length_s: f64,
        /// Level in 100 kHz, dB(uV).
        level_dbuv: f64,
    },
}

pub(super) fn read(table: &mut Table<'_>) -> Option<Source> {
    const KINDS: [(&str, &str); 4] =
        [("drive", "drive"), ("clock", "clock"), ("broadcast", "broadcast"), ("bursts", "bursts")];
    let kind = table.required("kind", "kind = \"drive\"").and_then(|value| value.choice(&KINDS))?;
    table.keys(match kind {
        "drive" => &[
            "kind",
            "name",
            "node",
            "impedance",
            "states",
            "fluctuation",
            "memory",
            "step",
            "carrier",
            "rise",
            "ring",
            "ring_q",
            "ring_gain",
        ],
        "bursts" => {
            &["kind", "name", "node", "impedance", "states", "fluctuation", "memory", "per_hour", "length", "level"]
        }
        _ => &["kind", "name", "node", "impedance", "states", "fluctuation", "memory", "frequency", "level"],
    });
    let name = table.required("name", "name = \"drive-1\"");
    let kind = read_kind(table, kind);
    let node = table.read_or("node", "cabinet", |value| value.name());
    let impedance = table.required("impedance", "impedance = \"25 ohm\"");
    let impedance = impedance.and_then(|value| value.quantity_within(&RESISTANCE, 1e-3..=1e9));
    let states = table.read_or("states", Vec::new(), |value| {
        let rows: Vec<Option<(String, f64)>> = value.list()?.iter().map(read_state).collect();
        rows.into_iter().collect()
    });
    let fluctuation = table.read_or("fluctuation", 0.0, |value| value.quantity_within(&RATIO, 0.0..=20.0));
    let memory = table.read_or("memory", 0.0, |value| value.number(0.0..=0.999));
    Some(Source {
        name: name?.name()?.to_owned(),
        node: node?.to_owned(),
        impedance_ohm: impedance?,
        kind: kind?,
        states: states?,
        fluctuation_db: fluctuation?,
        memory: memory?,
        place: name?.span(),
    })
}

fn read_state(value: &crate::walk::Value<'_>) -> Option<(String, f64)> {
    let [state, db] = value.tuple("[\"idle\", \"-6 dB\"]")?;
    let (state, db) = (state.name(), db.quantity_within(&RATIO, -200.0..=60.0));
    Some((state?.to_owned(), db?))
}

fn read_kind(table: &Table<'_>, kind: &str) -> Option<SourceKind> {
    let hz = |key, example| {
        let value = table.required(key, example);
        value.and_then(|value| value.quantity_within(&FREQUENCY, 1.0..=1e10))
    };
    let level = || {
        let value = table.required("level", "level = \"60 dB(uV)\"");
        value.and_then(|value| value.quantity_within(&LEVEL, -60.0..=200.0))
    };
    let short = |key, example| {
        let value = table.required(key, example);
        value.and_then(|value| value.quantity_within(&SHORT, 1e-10..=1e4))
    };
    match kind {
        "drive" => {
            let step = table.required("step", "step = \"5 V\"");
            let step = step.and_then(|value| value.quantity_within(&VOLTAGE, 1e-6..=1e4));
            let (carrier, rise) = (hz("carrier", "carrier = \"8 kHz\""), short("rise", "rise = \"200 ns\""));
            let ring = hz("ring", "ring = \"4 MHz\"");
            let q = table.read_or("ring_q", 3.0, |value| value.number(0.5..=1000.0));
            let gain = table.read_or("ring_gain", 12.0, |value| value.quantity_within(&RATIO, 0.0..=60.0));
            Some(SourceKind::Drive {
                step_v: step?,
                carrier_hz: carrier?,
                rise_s: rise?,
                ring_hz: ring?,
                ring_q: q?,
                ring_db: gain?,
            })
        }
        "bursts" => {
            let per_hour = table.required("per_hour", "per_hour = 4").and_then(|value| value.number(0.0..=3600.0));
            let (length, level) = (short("length", "length = \"2 s\""), level());
            Some(SourceKind::Bursts { per_hour: per_hour?, length_s: length?, level_dbuv: level? })
        }
        other => {
            let (hz, level_dbuv) = (hz("frequency", "frequency = \"6.07 MHz\""), level());
            let (hz, level_dbuv) = (hz?, level_dbuv?);
            Some(if other == "clock" {
                SourceKind::Clock { hz, level_dbuv }
            } else {
                SourceKind::Broadcast { hz, level_dbuv }
            })
        }
    }
}
