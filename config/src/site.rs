//! The site file: one cabinet and all that watches it.
//!
//! [`load`] reads the file and the files that it names (dialects, tables of factors), fills in every default and
//! resolves every name, so that nobody after it has to look anything up or check anything again. What the physics
//! of a choke has to say is not known here: whoever knows adds to [`Site::faults`] at the places that are kept.

mod band;
mod cable;
mod choke;
mod cross;
mod instrument;
pub(crate) mod points;
mod probe;
mod recipient;
mod settings;
mod shelf;
pub(crate) mod states;

use std::path::{Path, PathBuf};
use std::sync::Arc;

use hushwatch_quantity::Time;
use jiff::civil::DateTime;
use jiff::tz::TimeZone;

pub use band::Band;
pub use cable::{Cable, CablePlaces};
pub use choke::{Choke, ChokeMake, Core, ImpedanceTable};
pub use instrument::{Clock, Floor, Flow, Instrument, Parity};
pub use probe::{Probe, ProbeKind};
pub use recipient::{Recipient, RecipientKind};
pub use settings::{Drift, RecordSettings};
pub use states::{CalendarLine, FileReading, OperatingStates, StateRange};

use crate::faults::{Fault, Faults, Source};
use crate::walk::{self, Table};

/// The format of the site file that this version reads.
const FORMAT: i64 = 1;

/// A site file, checked, with every default filled in.
#[derive(Clone, Debug)]
pub struct Site {
    /// What the cabinet is called.
    pub name: String,
    /// The zone's name as it is written, if it is.
    pub timezone: Option<String>,
    /// The zone in which calendars are meant: the one written, else the system's.
    pub zone: TimeZone,
    /// The path of the site file.
    pub path: PathBuf,
    /// Its whole text, for the record.
    pub text: String,
    /// Where and how long things are kept.
    pub record: RecordSettings,
    /// The path of the socket between service and companion.
    pub control_socket: PathBuf,
    /// At least one; cables refer to them by index.
    pub instruments: Vec<Instrument>,
    /// At least one, in the order of the file.
    pub cables: Vec<Cable>,
    /// How levels are charted.
    pub drift: Drift,
    /// What the machine is doing, and how that is known.
    pub operating_states: OperatingStates,
    /// Who is told.
    pub recipients: Vec<Recipient>,
    /// What the file is taken with, but was hardly meant.
    pub warnings: Faults,
}

impl Site {
    /// The instrument that sees this cable.
    pub fn instrument(&self, cable: &Cable) -> Option<&Instrument> {
        self.instruments.get(cable.instrument)
    }

    /// The cable with this tag.
    pub fn cable(&self, tag: &str) -> Option<&Cable> {
        self.cables.iter().find(|cable| cable.tag == tag)
    }

    /// An empty collection for faults that others find in this file, shown alike; places are kept with what they are
    /// the place of, as [`Cable::places`].
    pub fn faults(&self) -> Faults {
        Faults::new(Arc::new(Source { path: self.path.clone(), text: self.text.clone() }))
    }

    /// Date and time of day in the site's zone. Times outside the years -9999 to 9999 are taken as 1970.
    pub fn local(&self, time: Time) -> DateTime {
        crate::local_time(&self.zone, time)
    }

    /// The operating state at a time, if the site file alone tells it: without operating states, or by calendar.
    pub fn scheduled_state(&self, time: Time) -> Option<&str> {
        let local = self.local(time);
        self.operating_states.state_at(local.weekday(), local.time())
    }
}

/// Reads a site file and the files that it names.
///
/// # Errors
/// The file cannot be read, or all that is wrong with it and the files that it names.
pub fn load(path: &Path) -> Result<Site, Faults> {
    let text = std::fs::read_to_string(path).map_err(|error| Faults::unreadable(path, &error))?;
    parse(&text, path)
}

/// Reads a site file from its text; paths in it are relative to the folder of `path`.
///
/// # Errors
/// All that is wrong with it and the files that it names, each fault at its place.
pub fn parse(text: &str, path: &Path) -> Result<Site, Faults> {
    let source = Arc::new(Source { path: path.to_owned(), text: text.to_owned() });
    let base = path.parent().unwrap_or(Path::new(""));
    let read = walk::document(&source, |root| read(root, base, &source))?;
    Ok(Site { warnings: read.warnings, ..read.value })
}

fn read(root: &mut Table<'_>, base: &Path, source: &Arc<Source>) -> Option<Site> {
    read_format(root)?;
    root.keys(&[
        "format",
        "site",
        "record",
        "instrument",
        "probe",
        "band",
        "choke",
        "cable",
        "drift",
        "operating_states",
        "recipient",
    ]);
    let head = root.required("site", "[site]").and_then(|value| value.table(settings::read_head));
    let slug = head.as_ref().map_or("site", |head| head.name.as_str());
    let record = settings::read_record(root, base, slug);
    let drift = settings::read_drift(root);
    let instruments = instrument::read_all(root, base);
    let shelves = cable::Shelves::read(root, base);
    let cables = cable::read_all(root, &shelves, &instruments);
    let operating_states = states::read(root, base);
    let recipients = recipient::read_all(root);

    cross::inputs(&cables, root.collector());
    if let Some(drift) = &drift {
        cross::cadence(&cables, drift, root.collector());
    }
    let (record, control_socket) = record?;
    let settings::Head { name, timezone, zone } = head?;
    Some(Site {
        name,
        timezone,
        zone,
        path: source.path.clone(),
        text: source.text.clone(),
        record,
        control_socket,
        instruments: instruments.finished()?,
        cables,
        drift: drift?.drift,
        operating_states: operating_states?,
        recipients: recipients?,
        warnings: Faults::new(Arc::clone(source)),
    })
}

/// A file of another format may mean anything, so nothing else is said about it.
fn read_format(root: &Table<'_>) -> Option<()> {
    let format = root.required("format", "format = 1")?;
    match format.integer(1..=i64::MAX)? {
        FORMAT => Some(()),
        other => {
            let what = format!("this site file is of format {other}; this version reads format {FORMAT}");
            root.push(Fault::new(format.span(), what).with_help("take a newer version of the program"));
            None
        }
    }
}
