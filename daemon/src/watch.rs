//! The task of one instrument: sweeps its cables in turn and tells the keeper what came of it.

use std::sync::Arc;
use std::time::Duration;

use hushwatch_config::site::{Clock, Site};
use hushwatch_instrument::{ErrorClass, Instrument, InstrumentError, SweepAnswer};
use hushwatch_plan::CablePlan;
use tokio::sync::{mpsc, watch as signal};

use crate::clock;
use crate::message::{Message, Swept, Trouble};
use crate::pulse::Pulse;
use crate::schedule::{Next, Schedule};
use crate::state;

/// First pause after a sweep that failed, and the longest one; doubled with each failure in a row. The port itself is
/// opened again by a back-off of its own: this one holds for refusals that come at once.
const PAUSES: (Duration, Duration) = (Duration::from_millis(100), Duration::from_secs(5));

/// On top of every time that is promised to the watchdog: a busy computer is no reason for a new start.
const SLACK: Duration = Duration::from_secs(30);

/// Watches the cables of one instrument until told to stop, or until the keeper is gone.
pub(crate) async fn instrument(mut task: Task, tx: mpsc::Sender<Message>, mut stop: signal::Receiver<bool>) {
    loop {
        let told = tokio::select! {
            _ = stop.wait_for(|stop| *stop) => return,
            told = task.turn() => told,
        };
        if let Some(message) = told
            && tx.send(message).await.is_err()
        {
            return;
        }
    }
}

/// What the task of an instrument has.
pub(crate) struct Task {
    site: Arc<Site>,
    index: usize,
    instrument: Instrument,
    cables: Vec<usize>,
    plans: Vec<CablePlan>,
    schedule: Schedule,
    /// The class of the trouble that was logged last, as long as it lasts.
    trouble: Option<ErrorClass>,
    pause: Duration,
    pulse: Arc<Pulse>,
    /// The operating state that people told last.
    told_state: signal::Receiver<String>,
}

impl Task {
    /// An instrument with all that is to be swept on it.
    pub(crate) fn new(
        site: Arc<Site>,
        index: usize,
        instrument: Instrument,
        pulse: Arc<Pulse>,
        told_state: signal::Receiver<String>,
    ) -> Self {
        let cables: Vec<usize> =
            (0..site.cables.len()).filter(|cable| site.cables[*cable].instrument == index).collect();
        let free_running = site.instruments[index].clock == Clock::Instrument;
        let mut task = Self {
            site,
            index,
            instrument,
            cables,
            plans: Vec::new(),
            schedule: Schedule::new([], clock::now(), free_running),
            trouble: None,
            pause: PAUSES.0,
            pulse,
            told_state,
        };
        task.plan();
        let every = task.plans.iter().map(|plan| plan.every);
        task.schedule = Schedule::new(every, clock::now(), free_running);
        task
    }

    fn name(&self) -> &str {
        &self.site.instruments[self.index].name
    }

    /// Plans all sweeps by what is known of the instrument.
    fn plan(&mut self) {
        let most = usize::try_from(self.instrument.most_points()).unwrap_or(usize::MAX);
        self.plans.clear();
        for cable in &self.cables {
            match CablePlan::new(&self.site, *cable, most) {
                Ok(plan) => self.plans.push(plan),
                Err(error) => {
                    let cable = &self.site.cables[*cable].tag;
                    tracing::error!(cable, "cannot be measured: {error:#}");
                }
            }
        }
    }

    /// Waits for the next cable's turn and sweeps it. To be dropped at any time.
    async fn turn(&mut self) -> Option<Message> {
        let at = match self.schedule.next(clock::now()) {
            None => {
                // There is nothing to do, ever.
                self.pulse.promise(self.index, Duration::MAX);
                return std::future::pending().await;
            }
            Some(Next::Wait(until)) => {
                let wait = (until - clock::now()).to_duration();
                self.pulse.promise(self.index, wait.saturating_add(SLACK));
                tokio::time::sleep(wait).await;
                return None;
            }
            Some(Next::Sweep(at)) => at,
        };
        let started = clock::now();
        // The turn is taken also if this future is dropped half-way.
        self.schedule.done(at, started);
        self.pulse.promise(self.index, self.patience(at));
        let outcome = self.instrument.sweep(&self.plans[at].sweep).await;
        match outcome {
            Ok(answer) => self.swept(at, &answer).await,
            Err(InstrumentError::TooManyPoints { limit, .. }) => {
                let instrument = self.name();
                tracing::info!(instrument, points = limit, "sweeps so many points at most: bands are split");
                self.plan();
                None
            }
            Err(error) => Some(self.failed(error.class(), error.to_string()).await),
        }
    }

    /// How long a sweep may take with everything that may go wrong on the way: the sweep itself twice (it may have to be
    /// begun again), the longest pause before a port is opened, and some time-outs.
    fn patience(&self, at: usize) -> Duration {
        let scan: f64 = self.plans[at].sweep.segments.iter().map(hushwatch_instrument::Segment::sweep_s).sum();
        let timeout = self.site.instruments[self.index].timeout.to_duration();
        Duration::from_secs_f64(2.0 * scan) + timeout.saturating_mul(10) + SLACK
    }

    async fn swept(&mut self, at: usize, answer: &SweepAnswer) -> Option<Message> {
        let time = match self.site.instruments[self.index].clock {
            Clock::System => clock::now(),
            Clock::Instrument => match answer.clock {
                Some(time) => time,
                None => return Some(self.no_clock().await),
            },
        };
        if let Some(class) = self.trouble.take() {
            let instrument = self.name();
            tracing::info!(instrument, "answers again after: {}", class.label());
        }
        self.pause = PAUSES.0;
        let plan = &self.plans[at];
        Some(Message::Swept(Swept {
            cable: plan.cable,
            time,
            state: state::at(&self.site, time, &self.told_state.borrow()),
            settings: settings(answer, plan.uncertainty.expanded_db),
            bearing: plan.bearing.iter().cloned().chain(answer.settings.bearing()).collect(),
            assumed: answer.settings.assumed(),
            identity: answer.settings.identity.clone(),
            levels: plan.levels(answer),
        }))
    }

    async fn no_clock(&mut self) -> Message {
        let text =
            String::from("the instrument does not tell its clock, but the site file says `clock = \"instrument\"`");
        self.failed(ErrorClass::Settings, text).await
    }

    /// Says once what is wrong, and pauses.
    async fn failed(&mut self, class: ErrorClass, text: String) -> Message {
        let instrument = self.name();
        if self.trouble == Some(class) {
            tracing::debug!(instrument, "{}: {text}", class.label());
        } else {
            tracing::warn!(instrument, "{}: {text}; trying on", class.label());
            self.trouble = Some(class);
        }
        self.pulse.promise(self.index, self.pause + SLACK);
        tokio::time::sleep(self.pause).await;
        self.pause = self.pause.saturating_mul(2).min(PAUSES.1);
        Message::Trouble(Trouble { instrument: self.index, class, text })
    }
}

/// What the instrument was set to and how far its levels may be off, as JSON: equal settings give equal text.
fn settings(answer: &SweepAnswer, uncertainty_db: f64) -> String {
    #[derive(serde::Serialize)]
    struct Stored<'a> {
        #[serde(flatten)]
        settings: &'a hushwatch_instrument::Settings,
        /// dB, k = 2.
        uncertainty_db: f64,
    }
    let uncertainty_db = (100.0 * uncertainty_db).round() / 100.0;
    let stored = Stored { settings: &answer.settings, uncertainty_db };
    serde_json::to_string(&stored).unwrap_or_else(|error| format!("{{\"unreadable\":\"{error}\"}}"))
}
