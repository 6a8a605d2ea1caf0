//! Going on where the last commit was.

use std::collections::{BTreeMap, BTreeSet, VecDeque};
use std::ops::ControlFlow;
use std::sync::Arc;

use hushwatch_alarm::{AlarmKey, AlarmKind, Board, Event};
use hushwatch_config::site::{OperatingStates, ProbeKind, Site};
use hushwatch_drift::engine::{FalseAlarms, RECENT_BLOCKS};
use hushwatch_drift::{Engine, EngineSettings, Reading, ReferenceKind, SeriesId, SeriesSettings, StateId};
use hushwatch_quantity::{LevelUnit, Time};
use hushwatch_record::{Filter, LevelRow, RecordError, Writer};
use tokio::sync::{mpsc, watch as signal};
use tokio::time::Instant;

use super::{Cable, Instrument, Keeper, Recipient, Series};
use crate::deliver::{Delivery, outlet};
use crate::outage::Outage;

/// Under this name the record remembers that the service was stopped in order.
pub(super) const STOPPED: &str = "stopped";

/// Under this name the record remembers the operating state that people told last.
pub(super) const TOLD_STATE: &str = "told-state";

/// What it remembers there if the service went on at once, by another site file.
pub(super) const AGAIN: &str = "again";

pub(super) fn open(site: Arc<Site>, now: Time) -> Result<(Keeper, Vec<Delivery>), RecordError> {
    let mut writer = Writer::open(&site.record.path)?;
    if writer.site_version(now, &site.path, &site.text)? {
        tracing::info!(path = %site.path.display(), "the site file is kept in the record");
    }
    let cables = site.cables.iter().map(|cable| take_up(&mut writer, cable)).collect::<Result<_, _>>()?;
    let board = Board::restore(writer.read().alarms(true)?, writer.read().last_occurrence()?);
    let resumed = |name: &str| Outage::resumed(board.is_active(&AlarmKey::new(AlarmKind::Instrument, name)));
    let instruments =
        site.instruments.iter().map(|one| Instrument { outage: resumed(&one.name), ..Instrument::default() }).collect();
    let (recipients, deliveries) = outlets(&site, &writer)?;
    let engine = Engine::new(EngineSettings {
        block: site.drift.block,
        false_alarms: FalseAlarms { count: site.drift.false_alarms_count, per: site.drift.false_alarms_per },
    });
    let told_state = signal::Sender::new(told_state(&site, &writer)?);
    let states = writer.read().states()?.into_iter().collect();
    let mut keeper = Keeper {
        site,
        writer,
        engine,
        board,
        cables,
        instruments,
        recipients,
        states,
        findings: BTreeMap::new(),
        started: Instant::now(),
        due: None,
        urgent: true,
        told_state,
        refused_site: None,
        pulse: None,
    };
    keeper.resume_charts()?;
    keeper.resume_gaps()?;
    keeper.clear_what_is_watched_no_more(now)?;
    keeper.writer.remember(STOPPED, None)?;
    Ok((keeper, deliveries))
}

/// The operating state that people told last, if the site file still knows it; else the first one.
fn told_state(site: &Site, writer: &Writer) -> Result<String, RecordError> {
    let OperatingStates::Manual { states } = &site.operating_states else { return Ok(String::new()) };
    let told = writer.read().remembered(TOLD_STATE)?.filter(|told| states.contains(told));
    Ok(told.or_else(|| states.first().cloned()).unwrap_or_default())
}

fn take_up(writer: &mut Writer, cable: &hushwatch_config::site::Cable) -> Result<Cable, RecordError> {
    let id = writer.cable(&cable.tag)?;
    let unit = match cable.probe.kind {
        ProbeKind::Current => LevelUnit::DbMicroamp,
        ProbeKind::Loop => LevelUnit::DbMicroampPerMetre,
        ProbeKind::Direct => LevelUnit::DbMicrovolt,
    };
    let mut bands = Vec::new();
    for band in &cable.bands {
        let series = writer.series(id, &band.name, unit)?;
        bands.push(Series { id: series, band: band.name.clone(), unit });
    }
    let latest = writer.read().latest_sweep(id)?;
    let bearing = writer.read().remembered(&super::epochs::key(&cable.tag))?;
    let epochs = writer.read().epochs()?;
    let comparable_from = epochs.iter().rfind(|row| row.cable == cable.tag).map(|row| row.time);
    Ok(Cable { id, bands, latest, gap: None, first: true, bearing, comparable_from })
}

/// The recipients with what still waits for them, and the other ends of their channels.
fn outlets(site: &Site, writer: &Writer) -> Result<(Vec<Recipient>, Vec<Delivery>), RecordError> {
    let mut recipients = Vec::new();
    let mut deliveries = Vec::new();
    for (index, recipient) in site.recipients.iter().enumerate() {
        let (tx, notices) = mpsc::channel(1);
        let name = recipient.name.clone();
        recipients.push(Recipient { name: name.clone(), waiting: VecDeque::new(), busy: false, tx });
        deliveries.push(Delivery { recipient: index, name, outlet: outlet(recipient), notices });
    }
    for row in writer.read().to_tell()? {
        if let Some(recipient) = recipients.iter_mut().find(|recipient| recipient.name == row.recipient) {
            recipient.waiting.push_back(row);
        } else {
            tracing::warn!(recipient = row.recipient, key = row.key, "waits for a recipient that is no more");
        }
    }
    Ok((recipients, deliveries))
}

impl Keeper {
    fn resume_charts(&mut self) -> Result<(), RecordError> {
        let watched: Vec<(usize, SeriesId)> = self
            .cables
            .iter()
            .enumerate()
            .flat_map(|(index, cable)| cable.bands.iter().map(move |series| (index, series.id)))
            .collect();
        for (index, series) in &watched {
            let cable = &self.site.cables[*index];
            let settings =
                SeriesSettings { max_rise_db: cable.max_rise_db, min_suppression_db: cable.min_suppression_db };
            let outcomes = self.engine.watch(*series, settings);
            self.take_outcomes(outcomes)?;
        }
        self.lay_known_references(&watched)?;
        for (_, series) in &watched {
            let mut states: BTreeSet<StateId> = self.writer.read().states_of(*series)?.into_iter().collect();
            states.extend(self.states.keys().filter(|state| self.engine.chart(*series, **state).is_some()));
            for state in states {
                self.resume_chart(*series, state)?;
            }
        }
        for cable in 0..self.cables.len() {
            self.feed_open_blocks(cable)?;
        }
        Ok(())
    }

    /// Lays the latest reference of each kind; the charts then know what they stand on.
    fn lay_known_references(&mut self, watched: &[(usize, SeriesId)]) -> Result<(), RecordError> {
        let mut latest = BTreeMap::new();
        for row in self.writer.read().references()? {
            let watched = watched.iter().find(|(_, series)| *series == row.series);
            let from = watched.map(|(cable, _)| self.cables[*cable].comparable_from);
            // Those from before the last change of the settings stand in the record, but no longer count.
            if from.is_some_and(|from| from.is_none_or(|from| row.interval.from >= from)) {
                let order = matches!(row.kind, ReferenceKind::After);
                latest.insert((row.series, row.state, order), row);
            }
        }
        for row in latest.into_values() {
            // Nothing was charted yet, so that nothing can come of it.
            self.engine.set_reference(row.series, row.state, row.kind, row.figure, row.interval.to);
        }
        Ok(())
    }

    fn resume_chart(&mut self, series: SeriesId, state: StateId) -> Result<(), RecordError> {
        let chart = self.writer.read().chart(series, state)?;
        let recent = self.writer.read().recent_blocks(series, state, RECENT_BLOCKS)?;
        let outcomes = self.engine.restore(series, state, chart, &recent);
        if let Some(active) = self.engine.chart(series, state).and_then(|chart| chart.active.clone()) {
            self.findings.insert((series, state), active.finding);
        }
        self.take_outcomes(outcomes)
    }

    /// Gives the engine the levels of the blocks that were open at the last commit.
    fn feed_open_blocks(&mut self, cable: usize) -> Result<(), RecordError> {
        let closed: BTreeMap<SeriesId, Option<Time>> =
            self.cables[cable].bands.iter().map(|one| (one.id, self.engine.closed_until(one.id))).collect();
        let from = closed.values().copied().min().flatten();
        let filter = Filter { cable: Some(self.site.cables[cable].tag.clone()), from, ..Filter::default() };
        let mut rows: Vec<LevelRow> = Vec::new();
        self.writer.read().levels(&filter, |row| {
            if closed.get(&row.series).is_some_and(|until| until.is_none_or(|until| row.time >= until)) {
                rows.push(row);
            }
            ControlFlow::Continue(())
        })?;
        for row in rows {
            let LevelRow { series, state, time, level_db, quality, .. } = row;
            let outcomes = self.engine.observe(Reading { series, state, time, level_db, quality });
            self.take_outcomes(outcomes)?;
        }
        Ok(())
    }

    /// Alarms about what the site file no longer names would stand for ever.
    fn clear_what_is_watched_no_more(&mut self, now: Time) -> Result<(), RecordError> {
        let gone: Vec<AlarmKey> = self
            .board
            .open()
            .map(|alarm| alarm.key.clone())
            .filter(|key| match key.kind {
                AlarmKind::Instrument => !self.site.instruments.iter().any(|one| one.name == key.subject),
                AlarmKind::Regression => self.site.cable(&key.subject).is_none(),
                _ => false,
            })
            .collect();
        for key in gone {
            let text = format!("{} is not in the site file any more", key.subject);
            self.happened(Event::Clears { key, time: now, text })?;
        }
        Ok(())
    }
}
