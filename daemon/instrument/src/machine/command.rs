//! The steps of a plan, and how each of them begins: what is sent for it.

use core::time::Duration;

use hushwatch_config::dialect::{Coding, Template};

use super::known::Asked;
use super::{Action, Doing, Machine, Step};
use crate::error::InstrumentError;
use crate::plan::{SweepPlan, Value};

impl Machine {
    /// Can the dialect say what this plan asks for?
    pub(super) fn check(&self, plan: &SweepPlan) -> Result<(), InstrumentError> {
        let dialect = &self.rules.dialect;
        if dialect.select_input.is_none() && plan.input != 1 {
            return Err(InstrumentError::Plan(format!(
                "the dialect {} has no command for input {}",
                dialect.name, plan.input
            )));
        }
        if self.rules.ask_clock && dialect.clock.is_none() {
            return Err(InstrumentError::Plan(format!(
                "the dialect {} cannot ask for the instrument's clock",
                dialect.name
            )));
        }
        for segment in &plan.segments {
            let asked =
                Asked { segment, input: plan.input, attenuation_db: self.rules.attenuation_db, unit: self.rules.unit };
            for setting in &dialect.settings {
                asked.wanted(setting)?;
            }
        }
        Ok(())
    }

    /// The steps of a plan up to its first segment, which brings its own.
    pub(super) fn enqueue_start(&mut self) {
        if self.sync.in_step {
            let who = self.known.identity.clone().unwrap_or_default();
            if let Some(job) = &mut self.job {
                job.settings.identity = who;
            }
        } else {
            self.enqueue_synchronisation();
            self.known.prepared = false;
        }
        self.enqueue_preparation();
    }

    /// What must stand before a segment can be set: the shape of the answers, and the input.
    pub(super) fn enqueue_preparation(&mut self) {
        if !self.known.prepared {
            self.known.unprepare();
            self.queue.push_back(Step::Clear);
            self.queue.extend((0..self.rules.dialect.prepare.len()).map(Step::Prepare));
            self.queue.push_back(Step::Format(0));
        }
        self.queue.push_back(Step::Select);
        self.queue.push_back(Step::BeginSegment);
    }

    /// Puts the steps of the present segment behind the queue.
    fn enqueue_segment(&mut self) -> Result<(), InstrumentError> {
        let mut verify = Vec::new();
        for index in 0..self.rules.dialect.settings.len() {
            self.known.settings[index].corrected = false;
            if let Some(command) = self.command_of(index)?
                && self.known.settings[index].sent.as_deref() != Some(&command)
                && !self.known.settings[index].unknown
            {
                self.queue.push_back(Step::Set(index));
                verify.push(Step::Verify(index));
            }
        }
        self.queue.extend(verify);
        self.queue.extend((0..self.rules.dialect.sweep.trigger.len()).map(Step::Trigger));
        self.queue.extend([Step::Wait, Step::Fetch]);
        self.queue.extend((0..self.rules.dialect.settings.len()).map(Step::Confirm));
        self.queue.push_back(Step::EndSegment);
        Ok(())
    }

    /// Begins a step: its action, or nothing if there is nothing to do.
    pub(super) fn begin(&mut self, step: Step) -> Result<Option<Action>, InstrumentError> {
        let dialect = &self.rules.dialect;
        let errors = dialect.errors.as_ref();
        let command = match step {
            Step::Open | Step::Drain | Step::Identify => return Ok(Some(self.begin_synchronisation(step))),
            Step::Clear => errors.and_then(|errors| errors.clear.clone()),
            Step::Prepare(index) => dialect.prepare.get(index).cloned(),
            Step::Format(index) => return Ok(self.begin_format(index)),
            Step::Order => dialect.byte_order.as_ref().map(|order| order.set.clone()),
            Step::Select => self.select_command()?,
            Step::Set(index) | Step::SetLate(index) => self.command_of(index)?,
            Step::Trigger(index) => {
                dialect.sweep.trigger.get(index).map(|template| self.filled(template)).transpose()?
            }
            Step::Settle => return Ok(self.begin_settle()),
            Step::BeginSegment => {
                self.enqueue_segment()?;
                None
            }
            Step::EndSegment => {
                self.end_segment()?;
                None
            }
            Step::WhyUnanswered => {
                let query = errors.map(|errors| errors.query.clone());
                return Ok(query.map(|query| self.ask_errors(step, &query, Vec::new())));
            }
            Step::Errors => {
                let Some(query) = errors.map(|errors| errors.query.clone()) else { return Ok(None) };
                let text = self.sweep_text()?;
                self.doing = Some(Doing { step, text, patience: Duration::ZERO, errors: None });
                return Ok(Some(self.ask_errors(step, &query, Vec::new())));
            }
            Step::FormatBack(_)
            | Step::OrderBack
            | Step::Verify(_)
            | Step::Wait
            | Step::Fetch
            | Step::Confirm(_)
            | Step::Overload
            | Step::Clock => return self.begin_query(step),
        };
        Ok(command.map(|command| self.send(step, &command, None)))
    }

    fn asked(&self) -> Option<Asked<'_>> {
        let job = self.job.as_ref()?;
        Some(Asked {
            segment: job.segment()?,
            input: job.plan.input,
            attenuation_db: self.rules.attenuation_db,
            unit: self.rules.unit,
        })
    }

    /// What a setting is to be in the present segment; `None` if it is left to the instrument.
    pub(super) fn wanted(&self, index: usize) -> Result<Option<Value>, InstrumentError> {
        match (self.asked(), self.rules.dialect.settings.get(index)) {
            (Some(asked), Some(setting)) => asked.wanted(setting),
            _ => Ok(None),
        }
    }

    fn command_of(&self, index: usize) -> Result<Option<String>, InstrumentError> {
        match (self.asked(), self.rules.dialect.settings.get(index)) {
            (Some(asked), Some(setting)) => asked.command(setting),
            _ => Ok(None),
        }
    }

    /// A command of the sweep with what is known of the plan filled in.
    pub(super) fn filled(&self, template: &Template) -> Result<String, InstrumentError> {
        let asked = self.asked();
        template
            .fill(|quantity| asked.as_ref()?.value(quantity).map(|value| value.to_string()))
            .map_err(|quantity| InstrumentError::Plan(format!("there is no {quantity} to fill into a command")))
    }

    /// What was sent for a sweep, for messages.
    fn sweep_text(&self) -> Result<String, InstrumentError> {
        let sweep = &self.rules.dialect.sweep;
        let sent = sweep.trigger.iter().chain([&sweep.read]).map(|template| self.filled(template));
        Ok(sent.collect::<Result<Vec<_>, _>>()?.join(", "))
    }

    /// The input is selected before each plan, since no device tells which one is.
    fn select_command(&self) -> Result<Option<String>, InstrumentError> {
        let input = self.job.as_ref().map_or(1, |job| job.plan.input);
        match &self.rules.dialect.select_input {
            Some(_) if self.known.one_input && input == 1 => Ok(None),
            Some(template) => self.filled(template).map(Some),
            None => Ok(None),
        }
    }

    fn begin_settle(&mut self) -> Option<Action> {
        let plan = self.job.as_ref().map(|job| &job.plan)?;
        let (input, settle) = (plan.input, plan.settle);
        let same = self.known.input.replace(input) == Some(input);
        if same || settle.is_zero() {
            return None;
        }
        self.doing = Some(Doing { step: Step::Settle, text: String::new(), patience: settle, errors: None });
        Some(Action::Pause(settle))
    }

    fn begin_format(&mut self, index: usize) -> Option<Action> {
        let command = self.rules.dialect.formats.get(index)?.set.clone();
        if command.is_none() {
            self.accept_format(index);
        }
        command.map(|command| self.send(Step::Format(index), &command, None))
    }

    /// Goes on to the next format, or tells that none is left.
    pub(super) fn next_format(&mut self, index: usize) -> bool {
        let next = index + 1;
        let there = next < self.rules.dialect.formats.len();
        if there {
            self.queue.push_front(Step::Format(next));
        }
        there
    }

    /// The device takes this format.
    pub(super) fn accept_format(&mut self, index: usize) {
        let coding = self.rules.dialect.formats.get(index).map(|format| format.coding);
        self.known.coding = coding;
        self.known.prepared = true;
        if coding == Some(Coding::Real32) && self.rules.dialect.byte_order.is_some() {
            self.queue.push_front(Step::Order);
        }
    }
}
