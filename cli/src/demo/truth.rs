//! What happened in the scene, by its physics alone, and what the service said about it.

use hushwatch_alarm::AlarmKind;
use hushwatch_config::scene::{Scene, What};
use hushwatch_config::site::Site;
use hushwatch_quantity::{Span, Time};
use hushwatch_scene::Cabinet;

use crate::context::Opened;
use crate::failure::Failure;
use crate::times::local;

/// A cable whose fix was lost.
#[derive(Clone, Debug)]
pub(super) struct Regression {
    pub(super) cable: String,
    /// The greatest rise over all bands, dB.
    pub(super) rise_db: f64,
    pub(super) since: Time,
}

/// The regressions that the service has open, by its record.
pub(super) fn regressed(opened: &Opened) -> Result<Vec<Regression>, Failure> {
    let alarms = opened.at_once(|read| read.alarms(false))?;
    Ok(alarms
        .iter()
        .filter(|alarm| alarm.key.kind == AlarmKind::Regression)
        .map(|alarm| Regression {
            cable: alarm.key.subject.clone(),
            rise_db: alarm.detail.rise_db().unwrap_or(0.0),
            since: alarm.detail.since.unwrap_or(alarm.raised),
        })
        .collect())
}

/// The cables that, by the physics of the scene, are louder at its end than with their cores fitted by `max_rise` or
/// more, and since which of its events.
pub(super) fn of_scene(scene: &Scene, site: &Site, fitted_day: i64, proven_day: i64) -> Vec<Regression> {
    let cabinet = Cabinet::new(scene.clone());
    let day = |days: i64| scene.start + Span::from_days(days);
    let reference = in_running(&cabinet, day(fitted_day + 1), day(proven_day));
    // Between two events nothing changes for good.
    let mut bounds: Vec<Time> = scene.events.iter().flat_map(|event| ends(scene, event)).collect();
    bounds.retain(|at| *at >= day(proven_day));
    bounds.sort_unstable();
    let end = scene.start + scene.duration;
    let mut found = Vec::new();
    for cable in &site.cables {
        let rise = |time: Time| {
            let level = |band: &hushwatch_config::site::Band, time| {
                cabinet.level_dbua(&cable.tag, band.from_hz, band.to_hz, &band.exclude, time).unwrap_or(0.0)
            };
            cable.bands.iter().map(|band| level(band, time) - level(band, reference)).fold(f64::NEG_INFINITY, f64::max)
        };
        let limit = cable.max_rise_db.unwrap_or(hushwatch_drift::engine::DEFAULT_MAX_RISE_DB);
        let mut since = None;
        for (index, from) in bounds.iter().enumerate() {
            let until = bounds.get(index + 1).copied().unwrap_or(end);
            let rise_db = rise(in_running(&cabinet, *from, until));
            since = if rise_db >= limit { since.or(Some((*from, rise_db))) } else { None };
        }
        if let Some((since, rise_db)) = since {
            found.push(Regression { cable: cable.tag.clone(), rise_db, since });
        }
    }
    found
}

/// When an event begins and ends.
fn ends(scene: &Scene, event: &hushwatch_config::scene::Event) -> Vec<Time> {
    let from = scene.start + event.at;
    match event.what {
        What::SourceLouder { lasts: Some(lasts), .. } => vec![from, from + lasts],
        _ => vec![from],
    }
}

/// A time between two others at which the machine runs, at the same hour if possible; the first one if it never does.
fn in_running(cabinet: &Cabinet, from: Time, until: Time) -> Time {
    let hours = (until - from).as_micros() / Span::from_hours(1).as_micros();
    let noon = |time: &Time| hushwatch_config::local_time(&cabinet.scene().zone, *time).hour() == 12;
    let times =
        || (0..hours).map(|hour| from + Span::from_hours(hour)).filter(|time| cabinet.state(*time) == "running");
    times().find(noon).or_else(|| times().next()).unwrap_or(from)
}

/// Do both name the same cables, with dates not further apart than some blocks?
pub(super) fn agree(said: &[Regression], happened: &[Regression], block: Span) -> bool {
    let near = |a: Time, b: Time| (a - b).as_micros().abs() <= 3 * block.as_micros();
    said.len() == happened.len()
        && happened.iter().all(|one| said.iter().any(|other| other.cable == one.cable && near(other.since, one.since)))
}

/// The cables, by how much and since when.
pub(super) fn in_words(regressions: &[Regression], site: &Site) -> String {
    if regressions.is_empty() {
        return String::from("every fix holds");
    }
    let one = |one: &Regression| {
        format!("{} lost its fix, {:+.1} dB since {}", one.cable, one.rise_db, local(site, one.since))
    };
    regressions.iter().map(one).collect::<Vec<_>>().join("; ")
}
