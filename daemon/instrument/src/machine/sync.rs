//! Bringing the line in step: open, drain until it is quiet, ask for the identity until the right one answers.

use core::time::Duration;

use super::{Action, Doing, Event, Machine, Question, Step, no_answer};
use crate::answer::identity;
use crate::error::{Garbage, InstrumentError};
use crate::framing::Answer;

/// First pause before the port is opened again; doubled each time.
const FIRST_BACK_OFF: Duration = Duration::from_millis(250);
/// Longest pause before the port is opened again.
const LONGEST_BACK_OFF: Duration = Duration::from_secs(10);
/// How often the identity is asked for before the port is opened again.
const TRIES: u32 = 4;
/// How long the line must be quiet when nothing is known to be wrong with it.
const SHORT_QUIET: Duration = Duration::from_millis(30);
/// The same after a time-out or garbage; doubled with each try.
const LONG_QUIET: Duration = Duration::from_millis(200);
/// At slow lines quiet is told by the time of so many bytes.
const QUIET_BYTES: u32 = 40;

/// How far the line may be believed.
#[derive(Debug, Default)]
pub(super) struct Synchrony {
    /// The port is open.
    pub(super) open: bool,
    /// Question and answer belong together.
    pub(super) in_step: bool,
    /// How often in a row the port was lost, could not be opened, or nobody answered in step.
    failures: u32,
    tries: u32,
    /// Something was wrong: the right identity must be told twice, with quiet between, since its answer to an earlier
    /// question may still be on its way.
    doubtful: bool,
    /// An identity that is not the right one.
    stranger: Option<String>,
}

impl Synchrony {
    /// The port is not there, or nobody answers on it.
    pub(super) fn lost(&mut self) {
        self.open = false;
        self.in_step = false;
        self.failures = self.failures.saturating_add(1);
    }

    /// How long to wait before the port is opened.
    fn back_off(&self) -> Duration {
        match self.failures {
            0 => Duration::ZERO,
            failures => {
                FIRST_BACK_OFF.saturating_mul(1u32.checked_shl(failures - 1).unwrap_or(u32::MAX)).min(LONGEST_BACK_OFF)
            }
        }
    }
}

impl Machine {
    /// Puts in front of the queue what brings the line in step.
    pub(super) fn enqueue_synchronisation(&mut self) {
        self.sync.tries = TRIES;
        self.sync.stranger = None;
        self.sync.doubtful = self.sync.open;
        self.queue.push_front(Step::Identify);
        self.queue.push_front(Step::Drain);
        if !self.sync.open {
            self.queue.push_front(Step::Open);
        }
    }

    /// The same within a plan, when something came unasked or a query was not answered.
    pub(super) fn resync(&mut self) {
        self.sync.in_step = false;
        self.enqueue_synchronisation();
    }

    pub(super) fn begin_synchronisation(&mut self, step: Step) -> Action {
        match step {
            Step::Open => {
                self.sync.open = false;
                self.doing = Some(Doing { step, text: String::new(), patience: Duration::ZERO, errors: None });
                Action::Open { after: self.sync.back_off() }
            }
            Step::Drain => {
                let text = self.rules.dialect.identify.query.clone();
                self.doing = Some(Doing { step, text, patience: Duration::ZERO, errors: None });
                let tried = TRIES.saturating_sub(self.sync.tries).min(TRIES);
                let quiet = if self.sync.doubtful { LONG_QUIET.saturating_mul(1 << tried) } else { SHORT_QUIET };
                let quiet = quiet.min(self.rules.timeout).max(self.rules.byte_time.saturating_mul(QUIET_BYTES));
                // A long trace at a slow line goes on for a while after its time-out.
                Action::Drain { quiet, at_most: quiet + self.rules.timeout + Duration::from_secs(2) }
            }
            _ => {
                let query = self.rules.dialect.identify.query.clone();
                self.send(Step::Identify, &query, Some(Question::LINE))
            }
        }
    }

    /// What came of one of these steps.
    pub(super) fn synchronised(&mut self, doing: &Doing, event: Event) -> Action {
        match (doing.step, event) {
            (Step::Open, Event::Opened) => {
                self.sync.open = true;
                self.known.forget_device();
                self.go_on()
            }
            (Step::Drain, Event::Quiet) => self.go_on(),
            (Step::Identify, Event::Answered(Answer::Line(line))) => {
                match identity(&line, self.rules.dialect.identify.fields) {
                    Ok(who) => self.told_identity(who),
                    Err(what) => self.try_again(garbage(doing, what.into())),
                }
            }
            (Step::Identify, Event::Garbled(what)) => self.try_again(garbage(doing, what)),
            (Step::Identify, _) => self.try_again(no_answer(doing.clone())),
            (_, _) => self.give_up(garbage(doing, Garbage::Restless)),
        }
    }

    fn told_identity(&mut self, who: String) -> Action {
        let expected = match (&self.rules.identity, &self.known.identity) {
            (Some(part), _) => (!who.contains(part.as_str())).then(|| part.clone()),
            (None, Some(before)) => (*before != who).then(|| before.clone()),
            (None, None) => None,
        };
        if let Some(expected) = expected {
            self.sync.stranger = Some(who.clone());
            return self.try_again(InstrumentError::WrongIdentity { got: who, expected });
        }
        if std::mem::take(&mut self.sync.doubtful) {
            self.queue.push_front(Step::Identify);
            self.queue.push_front(Step::Drain);
            return self.go_on();
        }
        self.known.identified(&who);
        self.sync.in_step = true;
        self.sync.failures = 0;
        if let Some(job) = &mut self.job {
            job.settings.identity = who;
        }
        self.go_on()
    }

    /// Not the right answer: drain and ask once more, or give the port up with this error.
    fn try_again(&mut self, error: InstrumentError) -> Action {
        self.sync.tries = self.sync.tries.saturating_sub(1);
        if self.sync.tries == 0 {
            // That another instrument answered says more than that it then was silent.
            let stranger = self.sync.stranger.take();
            let expected = self.rules.identity.clone().or_else(|| self.known.identity.clone());
            return match (stranger, expected) {
                (Some(got), Some(expected)) => self.give_up(InstrumentError::WrongIdentity { got, expected }),
                _ => self.give_up(error),
            };
        }
        self.sync.doubtful = true;
        self.queue.push_front(Step::Identify);
        self.queue.push_front(Step::Drain);
        self.go_on()
    }

    /// Nobody answers in step here: the next plan opens the port again.
    fn give_up(&mut self, error: InstrumentError) -> Action {
        self.sync.lost();
        self.fail(error)
    }
}

fn garbage(doing: &Doing, what: Garbage) -> InstrumentError {
    InstrumentError::Garbage { question: doing.text.clone(), what }
}
