//! The keeper of the record: one thread that owns database, charts and alarms, and takes one message after the other.
//!
//! Levels gather for `commit_every`; whatever people wait for (a gap, an alarm, a reference) commits at once, and with it
//! all that gathered before. A record that can no longer be written ends the service: what the charts in memory have seen
//! since the last commit would not be on the disk, so that only a new start brings the two together again.

mod alarms;
mod ask;
mod epochs;
mod gaps;
mod levels;
mod references;
mod start;

use std::collections::{BTreeMap, VecDeque};
use std::sync::Arc;
use std::time::Duration;

use hushwatch_alarm::Board;
use hushwatch_config::site::{Clock, Site};
use hushwatch_drift::{Engine, Finding, SeriesId, StateId};
use hushwatch_quantity::{LevelUnit, Time};
use hushwatch_record::{CableId, OutboxRow, RecordError, Writer};
use tokio::sync::{mpsc, watch as signal};
use tokio::time::Instant;

use crate::clock;
use crate::deliver::Delivery;
use crate::message::Message;
use crate::outage::Outage;
use crate::pulse::Pulse;

/// How often the keeper is heard of when there is nothing to do.
const BREATH: Duration = Duration::from_secs(20);

/// How long it may take over one message or one commit: a worn flash disk can be slow.
const PROMISE: Duration = Duration::from_mins(2);

/// Everything that only one may change.
#[derive(Debug)]
pub(crate) struct Keeper {
    site: Arc<Site>,
    writer: Writer,
    engine: Engine,
    board: Board,
    cables: Vec<Cable>,
    instruments: Vec<Instrument>,
    recipients: Vec<Recipient>,
    /// The name of each operating state that was met so far.
    states: BTreeMap<StateId, String>,
    /// The findings that stand, by which the alarm of their cable stands.
    findings: BTreeMap<(SeriesId, StateId), Finding>,
    started: Instant,
    /// When to commit what has gathered, if something has.
    due: Option<Instant>,
    /// To be committed before the next message.
    urgent: bool,
    /// The operating state as people told it last, for the instruments' tasks.
    told_state: signal::Sender<String>,
    /// The faults of a site file that was saved and refused.
    refused_site: Option<String>,
    /// Where it promises to be heard of again, and as which part.
    pulse: Option<(Arc<Pulse>, usize)>,
}

/// What the keeper knows of a cable.
#[derive(Debug)]
struct Cable {
    id: CableId,
    bands: Vec<Series>,
    /// When it was swept last.
    latest: Option<Time>,
    /// The gap that is open, if one is.
    gap: Option<i64>,
    /// No level of it was recorded since the start.
    first: bool,
    /// What bore on its last level.
    bearing: Option<String>,
    /// Levels before this cannot be compared with those after.
    comparable_from: Option<Time>,
}

/// A band of a cable.
#[derive(Debug)]
struct Series {
    id: SeriesId,
    band: String,
    unit: LevelUnit,
}

/// What the keeper knows of an instrument.
#[derive(Debug, Default)]
struct Instrument {
    outage: Outage,
    identity: Option<String>,
    assumed: Vec<&'static str>,
    sweeps: u64,
    trouble: Option<String>,
}

/// Notices on their way to a recipient.
#[derive(Debug)]
struct Recipient {
    name: String,
    waiting: VecDeque<OutboxRow>,
    /// One is with the recipient's task.
    busy: bool,
    tx: mpsc::Sender<OutboxRow>,
}

impl Keeper {
    /// Opens the record and brings charts and alarms to where they were at its last commit. Also gives the other ends of
    /// the recipients' channels.
    ///
    /// # Errors
    /// The record belongs to another process, is of a later version, or cannot be read or written.
    pub(crate) fn open(site: Arc<Site>, now: Time) -> Result<(Self, Vec<Delivery>), RecordError> {
        start::open(site, now)
    }

    /// Has it promise to be heard of, as this part.
    pub(crate) fn with_pulse(self, pulse: Arc<Pulse>, part: usize) -> Self {
        Self { pulse: Some((pulse, part)), ..self }
    }

    /// Where to look up which operating state people told last.
    pub(crate) fn told_state(&self) -> signal::Receiver<String> {
        self.told_state.subscribe()
    }

    /// Takes messages until told to stop, or until nobody is left to send any.
    ///
    /// # Errors
    /// The record can no longer be written.
    pub(crate) fn run(mut self, mut rx: mpsc::Receiver<Message>) -> anyhow::Result<()> {
        let runtime = tokio::runtime::Builder::new_current_thread().enable_time().build()?;
        runtime.block_on(async {
            self.send_notices();
            self.commit_if_due()?;
            loop {
                if let Some((pulse, part)) = &self.pulse {
                    pulse.promise(*part, PROMISE);
                }
                let wake = Instant::now() + BREATH;
                let message = tokio::select! {
                    message = rx.recv() => message,
                    () = tokio::time::sleep_until(self.due.unwrap_or(wake).min(wake)) => {
                        if self.due.is_some_and(|due| due <= Instant::now()) {
                            self.commit()?;
                        }
                        continue;
                    }
                };
                match message {
                    None => return self.stop(false),
                    Some(Message::Stop { again }) => return self.stop(again),
                    Some(message) => self.take(message)?,
                }
            }
        })?;
        Ok(())
    }

    fn take(&mut self, message: Message) -> Result<(), RecordError> {
        match message {
            Message::Swept(swept) => self.swept(&swept)?,
            Message::Trouble(trouble) => self.trouble(&trouble)?,
            Message::Asked { request, peer, reply } => {
                let answer = self.asked(request, peer)?;
                // What was promised is on the disk before it is said.
                self.commit_if_due()?;
                // Whoever asked may have gone.
                let _ = reply.send(answer);
            }
            Message::Told { recipient, id, error } => self.told(recipient, id, error)?,
            Message::SiteFile { refused } => self.refused_site = refused,
            Message::Stop { .. } => {}
        }
        self.commit_if_due()?;
        self.send_notices();
        Ok(())
    }

    /// Commits at once if something urgent has happened, else makes sure that it is done in time.
    fn commit_if_due(&mut self) -> Result<(), RecordError> {
        if self.urgent {
            return self.commit();
        }
        if self.writer.is_dirty() && self.due.is_none() {
            self.due = Some(Instant::now() + self.site.record.commit_every.to_duration());
        }
        Ok(())
    }

    fn commit(&mut self) -> Result<(), RecordError> {
        self.urgent = false;
        self.due = None;
        self.writer.commit()
    }

    fn stop(mut self, again: bool) -> Result<(), RecordError> {
        let when = clock::now().to_string();
        self.writer.remember(start::STOPPED, Some(if again { start::AGAIN } else { &when }))?;
        self.writer.close()?;
        tracing::info!("everything is recorded");
        Ok(())
    }

    /// The present plant time: the system's, or that of the newest level where instruments keep the time.
    fn plant_now(&self) -> Time {
        let latest = self.cables.iter().filter_map(|cable| cable.latest).max();
        match latest {
            Some(latest) if self.site.instruments.iter().all(|one| one.clock == Clock::Instrument) => latest,
            _ => clock::now(),
        }
    }

    fn state_name(&self, state: StateId) -> String {
        self.states.get(&state).cloned().unwrap_or_else(|| format!("state {state}"))
    }

    /// The cable of a series, by index, and the series.
    fn series(&self, id: SeriesId) -> Option<(usize, &Series)> {
        self.cables.iter().enumerate().find_map(|(index, cable)| {
            let series = cable.bands.iter().find(|series| series.id == id)?;
            Some((index, series))
        })
    }
}
