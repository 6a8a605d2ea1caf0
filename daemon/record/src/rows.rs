//! What goes into the record and what comes out of it.

use hushwatch_alarm::{Alarm, Transition};
use hushwatch_drift::{ReferenceFigure, ReferenceKind, SeriesId, StateId};
use hushwatch_quantity::{Interval, Quality, Time};

use crate::{CableId, SettingId};

/// A sweep of a cable with the levels that came of it.
#[derive(Clone, Copy, Debug)]
pub struct NewSweep<'a> {
    /// When, plant time.
    pub time: Time,
    /// Of which cable.
    pub cable: CableId,
    /// What the machine was doing.
    pub state: StateId,
    /// What the instrument was set to.
    pub setting: SettingId,
    /// One for each band that was measured.
    pub levels: &'a [NewLevel],
}

/// A level of a sweep. Levels are stored to 0.01 dB, frequencies to 1 Hz.
#[derive(Clone, Copy, Debug)]
pub struct NewLevel {
    /// The series.
    pub series: SeriesId,
    /// The level, in the unit of the series.
    pub level_db: f64,
    /// The greatest single point, in the same unit.
    pub peak_db: f64,
    /// Where that was, Hz.
    pub peak_hz: f64,
    /// How far it may be trusted.
    pub quality: Quality,
}

/// A series: one band of one cable in one unit.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct SeriesRow {
    /// Its number.
    pub id: SeriesId,
    /// The tag of the cable.
    pub cable: String,
    /// The band.
    pub band: String,
    /// The unit, as it is written.
    pub unit: String,
}

/// A level as it is exported.
#[derive(Clone, Debug, PartialEq)]
pub struct LevelRow {
    /// When, plant time.
    pub time: Time,
    /// The series.
    pub series: SeriesId,
    /// What the machine was doing.
    pub state: StateId,
    /// The level, in the unit of the series.
    pub level_db: f64,
    /// The greatest single point, in the same unit.
    pub peak_db: f64,
    /// Where that was, Hz.
    pub peak_hz: f64,
    /// How far it may be trusted.
    pub quality: Quality,
}

/// A reference to be laid.
#[derive(Clone, Debug)]
pub struct NewReference<'a> {
    /// The series.
    pub series: SeriesId,
    /// The operating state.
    pub state: StateId,
    /// Before or after the fix.
    pub kind: ReferenceKind,
    /// The labelled interval of the log, plant time.
    pub interval: Interval,
    /// When it was marked, plant time.
    pub marked: Time,
    /// By whom.
    pub who: &'a str,
    /// Why; may be empty.
    pub note: &'a str,
    /// What the interval amounts to.
    pub figure: ReferenceFigure,
}

/// A reference as it stands in the record.
#[derive(Clone, Debug)]
pub struct ReferenceRow {
    /// Its number: later ones are greater.
    pub id: i64,
    /// The series.
    pub series: SeriesId,
    /// The operating state.
    pub state: StateId,
    /// Before or after the fix.
    pub kind: ReferenceKind,
    /// The labelled interval of the log, plant time.
    pub interval: Interval,
    /// When it was marked, plant time.
    pub marked: Time,
    /// By whom.
    pub who: String,
    /// Why; may be empty.
    pub note: String,
    /// What the interval amounts to.
    pub figure: ReferenceFigure,
}

/// From when on the levels of a cable cannot be compared with those before, and why.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct EpochRow {
    /// The tag of the cable.
    pub cable: String,
    /// From this level on, plant time.
    pub time: Time,
    /// Why.
    pub reason: String,
}

/// An interval without levels, and why.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct GapRow {
    /// Its number.
    pub id: i64,
    /// The tag of the cable.
    pub cable: String,
    /// From the last level on, plant time.
    pub from: Time,
    /// Up to the next level; none as long as there is none.
    pub to: Option<Time>,
    /// Why.
    pub reason: String,
}

/// An alarm as it stands in the record.
pub type AlarmRow = Alarm;

/// An entry of the alarm journal.
#[derive(Clone, Debug, PartialEq)]
pub struct JournalRow {
    /// When, plant time.
    pub time: Time,
    /// The alarm's number.
    pub occurrence: u64,
    /// Its kind.
    pub kind: String,
    /// What it is about.
    pub subject: String,
    /// What happened.
    pub transition: Transition,
    /// In a sentence.
    pub text: String,
    /// Who did it; empty where nobody did.
    pub who: String,
    /// What they said of it.
    pub note: String,
    /// What they said it was.
    pub cause: String,
}

/// Something that is to be told to a recipient.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct OutboxRow {
    /// Its number.
    pub id: i64,
    /// The recipient's name.
    pub recipient: String,
    /// The same for every attempt: by it repeats are told.
    pub key: String,
    /// The notice, as JSON.
    pub body: String,
    /// How often it was tried in vain.
    pub attempts: u32,
}

/// A version of the site file.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct SiteVersionRow {
    /// Its number.
    pub id: i64,
    /// Since when, plant time.
    pub time: Time,
    /// The whole file.
    pub text: String,
}
