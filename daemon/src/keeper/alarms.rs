//! Findings become alarms, alarms go into the journal and to the recipients.

use hushwatch_alarm::{Action, AlarmKey, AlarmKind, Detail, Event, Notify, Place};
use hushwatch_drift::{Finding, SeriesId};
use hushwatch_quantity::Time;
use hushwatch_record::{OutboxRow, RecordError};

use super::Keeper;
use crate::notice;

impl Keeper {
    /// One alarm for each cable, whatever bands and operating states show the rise: it stands as long as one of them
    /// does. `cleared` is the finding that has just gone, if one has.
    pub(super) fn judge(&mut self, series: SeriesId, time: Time, cleared: Option<&Finding>) -> Result<(), RecordError> {
        let Some((index, _)) = self.series(series) else { return Ok(()) };
        let tag = self.site.cables[index].tag.clone();
        let key = AlarmKey::new(AlarmKind::Regression, tag.clone());
        let places = self.places(index);
        let event = if places.is_empty() {
            let text = cleared.map_or_else(|| format!("{tag} is back"), |finding| self.how_it_cleared(&tag, finding));
            Event::Clears { key, time, text }
        } else {
            Event::Occurs { key, time, detail: detail(&tag, places) }
        };
        self.happened(event)
    }

    /// Where on a cable a rise stands, the greatest first.
    fn places(&self, cable: usize) -> Vec<Place> {
        let mut places = Vec::new();
        for series in &self.cables[cable].bands {
            let of_series = self.findings.iter().filter(|((id, _), _)| *id == series.id);
            places.extend(of_series.map(|((_, state), finding)| Place {
                band: series.band.clone(),
                state: self.state_name(*state),
                rise_db: finding.rise_db,
                since: finding.since,
            }));
        }
        places.sort_by(|a, b| b.rise_db.total_cmp(&a.rise_db));
        places
    }

    fn how_it_cleared(&self, tag: &str, finding: &Finding) -> String {
        let epoch = self.engine.chart(finding.series, finding.state).map(|chart| chart.epoch);
        if epoch == Some(finding.epoch) {
            format!("{tag} is back: {:+.1} dB against its reference", finding.rise_db)
        } else {
            format!("{tag} is charted anew: another reference or another max_rise counts from now on")
        }
    }

    /// Takes an event to the board, and what comes of it into the record.
    pub(super) fn happened(&mut self, event: Event) -> Result<(), RecordError> {
        match self.board.handle(event) {
            Ok(Some(action)) => self.perform(&action),
            Ok(None) => Ok(()),
            Err(error) => {
                tracing::error!("an alarm: {error}");
                Ok(())
            }
        }
    }

    pub(super) fn perform(&mut self, action: &Action) -> Result<(), RecordError> {
        let alarm = &action.alarm;
        let (occurrence, kind) = (alarm.occurrence, alarm.key.kind.label());
        let (subject, what) = (alarm.key.subject.as_str(), action.transition.label());
        if action.notify == Notify::Yes {
            tracing::warn!(occurrence, kind, subject, what, "alarm: {}", action.text);
        } else {
            tracing::info!(occurrence, kind, subject, what, "alarm: {}", action.text);
        }
        self.writer.alarm(action)?;
        if action.notify == Notify::Yes {
            let body = notice::of(&self.site, action);
            for recipient in &mut self.recipients {
                let id = self.writer.to_tell(action.time, &recipient.name, &body.key, &body.json)?;
                let (recipient_name, key) = (recipient.name.clone(), body.key.clone());
                let row = OutboxRow { id, recipient: recipient_name, key, body: body.json.clone(), attempts: 0 };
                recipient.waiting.push_back(row);
            }
        }
        self.urgent = true;
        Ok(())
    }

    /// Gives each recipient that is free its next notice. To be called after a commit: a notice that is not on the disk
    /// yet could be told, forgotten by a crash, and told under the number of another alarm.
    pub(super) fn send_notices(&mut self) {
        if self.urgent {
            return;
        }
        for recipient in self.recipients.iter_mut().filter(|recipient| !recipient.busy) {
            if let Some(row) = recipient.waiting.pop_front() {
                // The channel has room for one, and one at a time is on its way.
                recipient.busy = recipient.tx.try_send(row).is_ok();
            }
        }
    }

    /// A notice was told, or not: then its task tries again.
    pub(super) fn told(&mut self, recipient: usize, id: i64, error: Option<String>) -> Result<(), RecordError> {
        if let Some(why) = error {
            return self.writer.not_told(id, &why);
        }
        if let Some(recipient) = self.recipients.get_mut(recipient) {
            recipient.busy = false;
        }
        self.writer.told(id, self.plant_now())?;
        self.urgent = true;
        Ok(())
    }
}

fn detail(tag: &str, places: Vec<Place>) -> Detail {
    let since = places.iter().map(|place| place.since).min();
    let place = |place: &Place| format!("{} ({})", place.band, place.state);
    let mut text = match places.first() {
        Some(first) => format!("{tag} is {:.1} dB over its reference in {}", first.rise_db, place(first)),
        None => format!("{tag} is over its reference"),
    };
    if places.len() > 1 {
        let others: Vec<String> = places.iter().skip(1).map(place).collect();
        text.push_str(&format!(", also in {}", others.join(", ")));
    }
    if let Some(since) = since {
        text.push_str(&format!("; since {since}"));
    }
    Detail { text, since, places }
}
