//! The conversation with an instrument as a pure state machine: an event in, one action out.
//!
//! A plan becomes a queue of steps: bring the line in step, prepare, and for each segment select, set, verify, trigger,
//! fetch, confirm. A step acts, its outcome may put further steps in front of the queue, and when the queue is empty the
//! answer is whole. What went wrong decides what is still believed:
//!
//! - After a time-out or garbage nothing is: the next plan begins by draining the line and asking for the identity until
//!   the right one answers, since a late answer looks like the right one.
//! - After a wrong setting or a device error the line is still in step, but everything is set anew.
//! - After a hang-up, or when nobody answers in step, the port is opened again, later and later.
//!
//! Only what differs from the last verified setting is sent; all of it is read back after each sweep, so that a level is
//! never taken from a receiver that somebody turned a knob of.

mod command;
mod errors;
mod exchange;
mod known;
mod query;
mod sync;

use core::time::Duration;
use std::collections::VecDeque;

use hushwatch_config::dialect::LineEnd;
use hushwatch_quantity::Time;

use crate::answer::DeviceError;
use crate::error::{ErrorClass, Garbage, InstrumentError};
use crate::framing::Expected;
use crate::plan::{Segment, Settings, SweepAnswer, SweepPlan};
pub use exchange::{Action, Event, Patience, Rules};
use known::Known;
use sync::Synchrony;

/// The longest line that is not a trace: an entry of the error queue has 255 characters at most, an identity 72.
const LONGEST_LINE: usize = 512;
/// The longest number of a list, with its comma and blanks.
const LONGEST_NUMBER: usize = 32;
/// How long the first answer to a query may take that the device perhaps does not know.
const BRIEF: Duration = Duration::from_millis(300);
/// More entries than any queue of errors holds.
const MOST_ERRORS: usize = 64;
/// How often an unasked-for byte may bring the line out of step within one plan.
const MOST_RESYNCS: u32 = 3;

/// A step of the conversation. Numbers are places in the lists of the dialect.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Step {
    Open,
    Drain,
    Identify,
    Clear,
    /// A command of the dialect's own.
    Prepare(usize),
    Format(usize),
    FormatBack(usize),
    Order,
    OrderBack,
    Select,
    Settle,
    BeginSegment,
    Set(usize),
    /// Once more, after the others.
    SetLate(usize),
    /// Read back before the sweep, since it was set.
    Verify(usize),
    Trigger(usize),
    Wait,
    Fetch,
    /// Read back after the sweep.
    Confirm(usize),
    /// Was the query not answered since the device does not know it? That query stands next in the queue.
    WhyUnanswered,
    EndSegment,
    Overload,
    Clock,
    Errors,
}

/// What is waited for.
#[derive(Clone, Debug)]
struct Doing {
    step: Step,
    /// What was sent, for messages.
    text: String,
    /// How long an answer may take, for messages.
    patience: Duration,
    /// The entries so far, once the error queue is being read that is laid to this step.
    errors: Option<Vec<DeviceError>>,
}

/// A plan under way.
#[derive(Debug)]
struct Job {
    plan: SweepPlan,
    at: usize,
    /// The segment was begun again, since a setting was found changed after the sweep.
    redone: bool,
    resyncs: u32,
    traces: Vec<Vec<f64>>,
    settings: Settings,
    overload: Option<bool>,
    clock: Option<Time>,
}

impl Job {
    fn segment(&self) -> Option<&Segment> {
        self.plan.segments.get(self.at)
    }
}

/// The state of a conversation.
#[derive(Debug)]
pub struct Machine {
    rules: Rules,
    known: Known,
    sync: Synchrony,
    queue: VecDeque<Step>,
    doing: Option<Doing>,
    job: Option<Job>,
    /// A command that was refused once as unknown: a second refusal is believed, the first may be noise on the line.
    doubted: Option<Step>,
}

impl Machine {
    /// Nothing is known yet.
    pub fn new(rules: Rules) -> Self {
        let known = Known::new(rules.dialect.settings.len());
        Self { rules, known, sync: Synchrony::default(), queue: VecDeque::new(), doing: None, job: None, doubted: None }
    }

    /// Who the instrument said it is, if the line is in step.
    pub fn identity(&self) -> Option<&str> {
        if self.sync.in_step { self.known.identity.as_deref() } else { None }
    }

    /// The greatest number of points of one sweep, as far as is known.
    pub fn most_points(&self) -> u32 {
        self.known.most_points.unwrap_or(u32::MAX).min(self.rules.dialect.sweep.max_points)
    }

    /// Begins a plan. One that was under way is given up, and with it the belief that the line is in step.
    pub fn start(&mut self, plan: SweepPlan) -> Action {
        if self.job.take().is_some() {
            self.sync.in_step = false;
            self.known.prepared = false;
        }
        self.queue.clear();
        self.doing = None;
        if let Err(error) = plan.check(self.most_points()).and_then(|()| self.check(&plan)) {
            return Action::Finish(Err(error));
        }
        let settings = Settings { input: plan.input, ..Settings::default() };
        self.job = Some(Job {
            plan,
            at: 0,
            redone: false,
            resyncs: 0,
            traces: Vec::new(),
            settings,
            overload: None,
            clock: None,
        });
        self.enqueue_start();
        self.go_on()
    }

    /// Takes what has happened and tells what is to be done.
    pub fn step(&mut self, event: Event) -> Action {
        let Some(doing) = self.doing.take() else { return self.go_on() };
        match event {
            Event::Gone(why) => self.fail(InstrumentError::Gone { port: self.rules.port.clone(), why }),
            Event::Held => self.fail(InstrumentError::Held { port: self.rules.port.clone() }),
            event if matches!(doing.step, Step::Open | Step::Drain | Step::Identify) => {
                self.synchronised(&doing, event)
            }
            // A late answer to that query: ask it once more, with more patience.
            Event::Garbled(_) if doing.step == Step::WhyUnanswered => {
                self.resync();
                self.go_on()
            }
            // Nothing was sent yet: bring the line in step and take this step again.
            Event::Garbled(Garbage::Unasked(_)) if self.may_resync() => {
                self.queue.push_front(doing.step);
                self.resync();
                self.go_on()
            }
            Event::Garbled(what) => self.fail(InstrumentError::Garbage { question: doing.text, what }),
            Event::Done => self.told(doing),
            Event::Answered(answer) if doing.errors.is_some() => self.queued(doing, &answer),
            Event::Answered(answer) => match self.answered(&doing, answer) {
                Ok(()) => self.go_on(),
                Err(error) => self.fail(error),
            },
            Event::TimedOut if doing.errors.is_none() => self.unanswered(doing),
            // Opened, Quiet and Restless belong to the steps above.
            Event::TimedOut | Event::Opened | Event::Quiet | Event::Restless => self.fail(no_answer(doing)),
        }
    }

    /// Takes steps from the queue until one has something to do.
    fn go_on(&mut self) -> Action {
        while let Some(step) = self.queue.pop_front() {
            match self.begin(step) {
                Ok(Some(action)) => return action,
                Ok(None) => {}
                Err(error) => return self.fail(error),
            }
        }
        match self.job.take() {
            Some(job) => Action::Finish(Ok(SweepAnswer {
                segments: job.traces,
                unit: self.rules.unit,
                settings: job.settings,
                clock: job.clock,
                overload: job.overload,
            })),
            None => Action::Finish(Err(InstrumentError::Plan("there is nothing to sweep".to_owned()))),
        }
    }

    /// Gives the plan up, and with it what can no longer be believed.
    fn fail(&mut self, error: InstrumentError) -> Action {
        self.queue.clear();
        self.doing = None;
        self.doubted = None;
        self.job = None;
        match error.class() {
            ErrorClass::Gone | ErrorClass::Held => self.sync.lost(),
            ErrorClass::NoAnswer | ErrorClass::Garbage | ErrorClass::WrongIdentity => self.sync.in_step = false,
            ErrorClass::Settings | ErrorClass::Device | ErrorClass::Plan => {}
        }
        self.known.prepared = false;
        Action::Finish(Err(error))
    }

    /// A garbled line is brought in step within a plan, but not for ever.
    fn may_resync(&mut self) -> bool {
        self.job.as_mut().is_some_and(|job| {
            job.resyncs += 1;
            job.resyncs <= MOST_RESYNCS
        })
    }

    /// The action that sends a command or, with a longest answer, a query; its outcome is laid to `step`.
    fn send(&mut self, step: Step, text: &str, ask: Option<Question>) -> Action {
        let mut bytes = text.as_bytes().to_vec();
        bytes.extend_from_slice(self.rules.dialect.line.send.bytes());
        let timeout = self.rules.timeout;
        let patience = match ask {
            Some(Question { brief: true, .. }) => {
                let sent_and_answered = u32::try_from(bytes.len() + LONGEST_NUMBER).unwrap_or(u32::MAX);
                timeout.min(BRIEF + self.rules.byte_time.saturating_mul(sent_and_answered))
            }
            Some(Question { work, .. }) => timeout.saturating_add(work),
            None => timeout,
        };
        self.doing = Some(Doing { step, text: text.to_owned(), patience, errors: None });
        let Some(Question { block, longest, .. }) = ask else { return Action::Tell { bytes } };
        let transfer = self.rules.byte_time.saturating_mul(u32::try_from(longest).unwrap_or(u32::MAX));
        let line_end = match self.rules.dialect.line.receive {
            LineEnd::Cr => b'\r',
            LineEnd::Lf | LineEnd::CrLf => b'\n',
        };
        Action::Ask {
            bytes,
            expected: Expected { block, line_end, longest },
            // Twice the time that its bytes take: some devices make pauses between them.
            patience: Patience { first: patience, between: timeout, whole: timeout + transfer.saturating_mul(2) },
        }
    }
}

/// What a query's answer looks like at most.
#[derive(Clone, Copy, Debug)]
struct Question {
    /// May it be a block?
    block: bool,
    /// Its greatest length, bytes.
    longest: usize,
    /// What the device has to do before it can answer.
    work: Duration,
    /// May the device not know it? Then it is not waited for so long, since no answer is one, too.
    brief: bool,
}

impl Question {
    /// A short line, at once.
    const LINE: Self = Self { block: false, longest: LONGEST_LINE, work: Duration::ZERO, brief: false };
}

fn no_answer(doing: Doing) -> InstrumentError {
    InstrumentError::NoAnswer { question: doing.text, waited: doing.patience }
}

#[cfg(test)]
mod tests;
