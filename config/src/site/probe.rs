//! Probes, each with its correction chain.

use std::path::{Path, PathBuf};

use hushwatch_quantity::LevelUnit;
use jiff::civil::Date;

use super::points::{self, Points};
use super::shelf::Shelved;
use crate::faults::Fault;
use crate::walk::{Dimension, FACTOR, MAGNETIC_FACTOR, RATIO, Table};

/// What a cable is looked at with.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum ProbeKind {
    /// A current probe around the cable; its factor is in dB(ohm) and is taken from the voltage.
    Current,
    /// A loop probe beside the cable; its magnetic factor is in dB(S/m) and is added to the voltage. It sees
    /// differential currents nearby too: relative levels and verdicts only.
    Loop,
    /// No probe: the receiver's input itself. A factor, if there is one, is in dB and is taken from the voltage.
    Direct,
}

impl ProbeKind {
    /// All kinds, in the order of their documentation.
    pub const ALL: [Self; 3] = [Self::Current, Self::Loop, Self::Direct];

    /// The word for it in the site file.
    pub fn label(self) -> &'static str {
        match self {
            Self::Current => "current-probe",
            Self::Loop => "loop-probe",
            Self::Direct => "direct",
        }
    }

    /// The unit of the levels that are measured with it.
    pub fn unit(self) -> LevelUnit {
        match self {
            Self::Current => LevelUnit::DbMicroamp,
            Self::Loop => LevelUnit::DbMicroampPerMetre,
            Self::Direct => LevelUnit::DbMicrovolt,
        }
    }

    fn factor_dimension(self) -> &'static Dimension {
        match self {
            Self::Current => &FACTOR,
            Self::Loop => &MAGNETIC_FACTOR,
            Self::Direct => &RATIO,
        }
    }
}

/// A probe with cable, attenuator and amplifier: what stands between cable and receiver.
#[derive(Clone, Debug, PartialEq)]
pub struct Probe {
    /// Its name; the tag of the cable if it stands there and has none.
    pub name: String,
    /// Its kind.
    pub kind: ProbeKind,
    /// The factor over frequency: Hz and the unit of its kind; rising, two points at least. A direct connection
    /// without a factor has 0 dB from 1 Hz to 1 THz.
    pub factor: Vec<(f64, f64)>,
    /// The loss between probe and receiver, Hz and dB (an amplifier's is negative); rising, two points at least,
    /// 0 dB from 1 Hz to 1 THz by default.
    pub path_loss: Vec<(f64, f64)>,
    /// Its serial number.
    pub serial: Option<String>,
    /// Uncertainty of factor and path together, dB, k = 2, if it is told.
    pub uncertainty_db: Option<f64>,
    /// When it was calibrated.
    pub calibrated: Option<Date>,
    /// When it is due again; not before it was calibrated.
    pub due: Option<Date>,
}

impl Probe {
    /// The frequencies that both factor and path loss cover, Hz; the first above the second if there are none.
    pub fn range(&self) -> (f64, f64) {
        let ends = |points: &[(f64, f64)]| {
            let first = points.first().map_or(points::EVERYWHERE.0, |(hz, _)| *hz);
            (first, points.last().map_or(points::EVERYWHERE.1, |(hz, _)| *hz))
        };
        let (factor, loss) = (ends(&self.factor), ends(&self.path_loss));
        (factor.0.max(loss.0), factor.1.min(loss.1))
    }
}

impl Shelved for Probe {
    const KEY: &'static str = "probe";
    const KEYS: &'static [&'static str] = &[
        "name",
        "kind",
        "factor",
        "factor_file",
        "path_loss",
        "path_loss_file",
        "uncertainty",
        "serial",
        "calibrated",
        "due",
    ];
    /// The folder of the site file.
    type Context = PathBuf;

    fn read(table: &mut Table<'_>, name: &str, base: &PathBuf) -> Option<Self> {
        let kinds = ProbeKind::ALL.map(|kind| (kind.label(), kind));
        let kind = table.required("kind", "kind = \"current-probe\"").and_then(|value| value.choice(&kinds));
        // Without its kind nobody knows in which unit the factor is.
        let factor =
            kind.and_then(|kind| read_curve(table, ["factor", "factor_file"], base, kind.factor_dimension(), kind));
        let path_loss = read_curve(table, ["path_loss", "path_loss_file"], base, &RATIO, ProbeKind::Direct);
        let serial = table.read_if_any("serial", |value| value.line());
        let uncertainty_db = table.read_if_any("uncertainty", |value| value.quantity_within(&RATIO, 0.0..=20.0));
        let calibrated = table.read_if_any("calibrated", |value| value.date());
        let due = table.read_if_any("due", |value| value.date());
        if let (Some(Some(done)), Some(Some(next)), Some(place)) = (calibrated, due, table.optional("due"))
            && next < done
        {
            let fault = Fault::new(place.span(), format!("due on {next}, before it was calibrated on {done}"));
            table.push(fault.with_help("`due` is the day on which the next calibration must be done"));
        }
        Some(Self {
            name: name.to_owned(),
            kind: kind?,
            factor: factor?,
            path_loss: path_loss?,
            serial: serial?.map(str::to_owned),
            uncertainty_db: uncertainty_db?,
            calibrated: calibrated?,
            due: due?,
        })
    }
}

/// A curve that stands in the table or in a file; a direct connection needs none.
fn read_curve(
    table: &Table<'_>,
    [key, file_key]: [&'static str; 2],
    base: &Path,
    dimension: &'static Dimension,
    kind: ProbeKind,
) -> Option<Points> {
    let (inline, file) = (table.optional(key), table.optional(file_key));
    match (inline, file) {
        (Some(inline), Some(file)) => {
            let fault = Fault::new(file.span(), format!("`{key}` stands here twice"))
                .with_related(inline.span(), "in the table too")
                .with_help(format!("leave out `{key}` or `{file_key}`"));
            table.push(fault);
            None
        }
        (Some(inline), None) => points::read_table(inline, dimension),
        (None, Some(file)) => points::read_file(file, base, dimension),
        (None, None) if kind == ProbeKind::Direct => Some(points::flat(0.0)),
        (None, None) => {
            let fault = Fault::new(table.span(), format!("a {} needs its factor", kind.label()));
            table.push(fault.with_help(format!(
                "write `{key} = [[\"150 kHz\", 2.0], [\"30 MHz\", 14.0]]` in {}, or `{file_key} = \"factor.csv\"`",
                dimension.units.first().map_or("dB", |(unit, _)| unit)
            )));
            None
        }
    }
}
