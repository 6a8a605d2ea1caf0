//! What is written for programs: the objects of `--json`. Their names are a surface that people script against: they are
//! only ever added to.

use hushwatch_alarm::{Alarm, Place};
use serde::Serialize;

/// An alarm, a line of `hushwatch alarms --json`.
#[derive(Serialize)]
pub(crate) struct WrittenAlarm {
    occurrence: u64,
    kind: &'static str,
    subject: String,
    state: &'static str,
    raised: String,
    since: Option<String>,
    rise_db: Option<f64>,
    text: String,
    places: Vec<WrittenPlace>,
    acknowledged: Option<WrittenAcknowledgement>,
}

#[derive(Serialize)]
struct WrittenPlace {
    band: String,
    state: String,
    rise_db: f64,
    since: String,
}

#[derive(Serialize)]
struct WrittenAcknowledgement {
    time: String,
    who: String,
    note: String,
    cause: &'static str,
}

impl From<&Alarm> for WrittenAlarm {
    fn from(alarm: &Alarm) -> Self {
        let place = |place: &Place| WrittenPlace {
            band: place.band.clone(),
            state: place.state.clone(),
            rise_db: hundredths(place.rise_db),
            since: place.since.to_string(),
        };
        Self {
            occurrence: alarm.occurrence,
            kind: alarm.key.kind.label(),
            subject: alarm.key.subject.clone(),
            state: alarm.state.label(),
            raised: alarm.raised.to_string(),
            since: alarm.detail.since.map(|since| since.to_string()),
            rise_db: alarm.detail.rise_db().map(hundredths),
            text: alarm.detail.text.clone(),
            places: alarm.detail.places.iter().map(place).collect(),
            acknowledged: alarm.acknowledged.as_ref().map(|by| WrittenAcknowledgement {
                time: by.time.to_string(),
                who: by.who.clone(),
                note: by.note.clone(),
                cause: by.cause.label(),
            }),
        }
    }
}

/// Levels are known to a hundredth of a dB at best; more digits would only look like knowledge.
pub(crate) fn hundredths(db: f64) -> f64 {
    (db * 100.0).round() / 100.0
}
