//! What recipients are told of an alarm.

use hushwatch_alarm::{Action, AlarmKind, Place};
use hushwatch_config::site::Site;
use hushwatch_recipient::{Band, Notice};

/// A notice as it goes into the outbox.
#[derive(Debug)]
pub(crate) struct Body {
    /// By it repeats are told: site, alarm and what happened to it.
    pub(crate) key: String,
    /// The notice itself.
    pub(crate) json: String,
}

/// The notice of something that happened to an alarm.
pub(crate) fn of(site: &Site, action: &Action) -> Body {
    let alarm = &action.alarm;
    let cable = site.cable(&alarm.key.subject).filter(|_| alarm.key.kind != AlarmKind::Instrument);
    let key = format!("{}/{}/{}", site.name, alarm.occurrence, action.transition);
    let band = |place: &Place| Band {
        band: place.band.clone(),
        state: place.state.clone(),
        rise_db: tenths(place.rise_db),
        since: place.since.to_string(),
    };
    let notice = Notice {
        key: key.clone(),
        site: site.name.clone(),
        occurrence: alarm.occurrence,
        kind: alarm.key.kind.label().to_owned(),
        what: action.transition.label().to_owned(),
        state: alarm.state.label().to_owned(),
        subject: alarm.key.subject.clone(),
        cable: cable.map(|cable| cable.tag.clone()),
        description: cable.map(|cable| cable.description.clone()).unwrap_or_default(),
        text: action.text.clone(),
        time: action.time.to_string(),
        since: alarm.detail.since.map(|since| since.to_string()),
        rise_db: alarm.detail.rise_db().map(tenths),
        bands: alarm.detail.places.iter().map(band).collect(),
        look_first: alarm.key.kind.look_first().iter().map(|&line| line.to_owned()).collect(),
        caution: hushwatch_alarm::CAUTION.to_owned(),
    };
    let json = serde_json::to_string(&notice).unwrap_or_else(|error| format!("{{\"unreadable\":\"{error}\"}}"));
    Body { key, json }
}

/// A tenth of a dB is all that anybody can act upon.
fn tenths(db: f64) -> f64 {
    (db * 10.0).round() / 10.0
}
