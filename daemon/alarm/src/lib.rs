//! The alarm life cycle: an event in, actions out.
//!
//! An alarm is known by its [`AlarmKey`]: its kind and what it is about (a cable, an instrument). It goes through the
//! states of IEC 62682 / ISA-18.2 as far as they are built: normal, unacknowledged, acknowledged, returned to normal
//! unacknowledged ([`AlarmState`]). Each time it occurs it gets a number of its own, the *occurrence*, by which it is
//! acknowledged and found in the journal. The [`Board`] holds all alarms that are not normal.
//!
//! | state | occurs | clears | acknowledged |
//! |---|---|---|---|
//! | normal | unacknowledged | - | - |
//! | unacknowledged | updates | returned | acknowledged |
//! | acknowledged | updates | normal | refused |
//! | returned | unacknowledged, new occurrence | - | normal |
//!
//! The room is pure: time comes with the events; the wiring writes the journal and tells the recipients.

mod board;
mod words;

pub use board::{Action, AlarmError, Board, Event, Notify};
pub use words::{AlarmKey, AlarmKind, AlarmState, CAUTION, Cause, Detail, Place, Transition};

use hushwatch_quantity::Time;
use serde::{Deserialize, Serialize};

/// One occurrence of an alarm.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Alarm {
    /// Its number, from 1, counted over all alarms of a site.
    pub occurrence: u64,
    /// What kind, and about what.
    pub key: AlarmKey,
    /// Where it is in its life.
    pub state: AlarmState,
    /// When it became known, plant time.
    #[serde(with = "words::micros")]
    pub raised: Time,
    /// What is known of it by now.
    pub detail: Detail,
    /// Who acknowledged it and why, once somebody did.
    pub acknowledged: Option<Acknowledged>,
}

/// The operator's part.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Acknowledged {
    /// When, plant time.
    #[serde(with = "words::micros")]
    pub time: Time,
    /// Who.
    pub who: String,
    /// In their own words; may be empty.
    pub note: String,
    /// What it was.
    pub cause: Cause,
}
