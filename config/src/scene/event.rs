//! What happens, and when.

use hushwatch_quantity::Span;

use crate::walk::{LENGTH, RATIO, Table};

/// Something that happens at a time.
#[derive(Clone, Debug, PartialEq)]
pub struct Event {
    /// When, plant time since the start.
    pub at: Span,
    /// What.
    pub what: What,
}

/// What happens.
#[derive(Clone, Debug, PartialEq)]
pub enum What {
    /// The choke of a cable is fitted, closed.
    CoresFitted {
        /// The cable's tag.
        cable: String,
    },
    /// The choke of a cable is taken off.
    CoresRemoved {
        /// The cable's tag.
        cable: String,
    },
    /// The clips on a cable open so far.
    ClipOpened {
        /// The cable's tag.
        cable: String,
        /// Air in the core, both gaps together, m.
        gap_m: f64,
    },
    /// A source is louder (or less loud) for a while.
    SourceLouder {
        /// The source's name.
        source: String,
        /// By so much, dB.
        db: f64,
        /// For so long; for ever if not told.
        lasts: Option<Span>,
    },
    /// The receiver answers nothing for a while.
    ReceiverSilent {
        /// For so long.
        lasts: Span,
    },
    /// The receiver is unplugged for a while.
    Unplugged {
        /// For so long.
        lasts: Span,
    },
}

pub(super) fn read(table: &mut Table<'_>, cables: &[&str], sources: &[&str]) -> Option<Event> {
    const KINDS: [(&str, &str); 6] = [
        ("cores-fitted", "cores-fitted"),
        ("cores-removed", "cores-removed"),
        ("clip-opened", "clip-opened"),
        ("source-louder", "source-louder"),
        ("receiver-silent", "receiver-silent"),
        ("unplugged", "unplugged"),
    ];
    let what = table.required("what", "what = \"clip-opened\"").and_then(|value| value.choice(&KINDS))?;
    table.keys(match what {
        "cores-fitted" | "cores-removed" => &["at", "what", "cable"],
        "clip-opened" => &["at", "what", "cable", "gap"],
        "source-louder" => &["at", "what", "source", "by", "lasts"],
        _ => &["at", "what", "lasts"],
    });
    let any = Span::ZERO..=Span::from_days(36_600);
    let at = table.required("at", "at = \"20 days\"").and_then(|value| value.duration(any.clone()));
    let what = match what {
        "source-louder" => {
            let source = read_target(table, "source", "source = \"drive-1\"", sources);
            let db = table.required("by", "by = \"2 dB\"");
            let db = db.and_then(|value| value.quantity_within(&RATIO, -60.0..=60.0));
            let lasts = table.read_if_any("lasts", |value| value.duration(any));
            Some(What::SourceLouder { source: source?, db: db?, lasts: lasts? })
        }
        "receiver-silent" | "unplugged" => {
            let lasts = table.required("lasts", "lasts = \"2 h\"").and_then(|value| value.duration(any))?;
            Some(if what == "unplugged" { What::Unplugged { lasts } } else { What::ReceiverSilent { lasts } })
        }
        of_cable => {
            let cable = read_target(table, "cable", "cable = \"W12\"", cables);
            if of_cable == "clip-opened" {
                let gap = table.required("gap", "gap = \"0.5 mm\"");
                let gap_m = gap.and_then(|value| value.quantity_within(&LENGTH, 0.0..=0.05));
                Some(What::ClipOpened { cable: cable?, gap_m: gap_m? })
            } else if of_cable == "cores-fitted" {
                Some(What::CoresFitted { cable: cable? })
            } else {
                Some(What::CoresRemoved { cable: cable? })
            }
        }
    };
    Some(Event { at: at?, what: what? })
}

fn read_target(table: &Table<'_>, key: &'static str, example: &str, known: &[&str]) -> Option<String> {
    let value = table.required(key, example)?;
    let name = value.name()?;
    if known.contains(&name) {
        return Some(name.to_owned());
    }
    let help = crate::walk::suggestion(name, known.iter().copied());
    value.refuse(format!("no {key} is named `{name}`"), help)
}
