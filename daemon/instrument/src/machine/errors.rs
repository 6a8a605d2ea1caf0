//! What came of a command: what the queue of errors says about it, and what is believed of the device from then on.
//!
//! The queue is read to its end after each command, so that an error is laid to the command that brought it. A command
//! that the device does not know is sent twice: the first refusal may be noise on the line.

use hushwatch_config::dialect::{Errors, Quantity};

use super::{Action, Doing, Event, MOST_ERRORS, Machine, Question, Step, no_answer};
use crate::answer::{DeviceError, device_error};
use crate::error::InstrumentError;
use crate::framing::Answer;

impl Machine {
    /// A command was written, or a pause is over.
    pub(super) fn told(&mut self, doing: Doing) -> Action {
        let query = self.rules.dialect.errors.as_ref().map(|errors| errors.query.clone());
        match (doing.step, query) {
            // Asking for errors while it sweeps would disturb some devices; that is done after the sweep.
            (Step::Settle | Step::Trigger(_), _) => self.go_on(),
            // It was taken before; if not so now, the errors after the sweep tell.
            (Step::Select, _) if self.is_same_input() => self.commanded(&doing, &[]),
            (step, Some(query)) => {
                self.doing = Some(doing);
                self.ask_errors(step, &query, Vec::new())
            }
            (_, None) => self.commanded(&doing, &[]),
        }
    }

    fn is_same_input(&self) -> bool {
        self.job.as_ref().is_some_and(|job| self.known.input == Some(job.plan.input))
    }

    /// Asks for the next entry of the queue, which is laid to `step`.
    pub(super) fn ask_errors(&mut self, step: Step, query: &str, errors: Vec<DeviceError>) -> Action {
        // What was sent stands in the messages, not the query for errors that follows it.
        let text = self.doing.take().map_or_else(|| query.to_owned(), |doing| doing.text);
        let action = self.send(step, query, Some(Question::LINE));
        let patience = self.rules.timeout;
        self.doing = Some(Doing { step, text, patience, errors: Some(errors) });
        action
    }

    /// An entry of the error queue came.
    pub(super) fn queued(&mut self, mut doing: Doing, answer: &Answer) -> Action {
        let Some(rules) = self.rules.dialect.errors.clone() else { return self.fail(no_answer(doing)) };
        let (Answer::Line(bytes) | Answer::Block(bytes)) = answer;
        let entry = match device_error(bytes) {
            Ok(entry) => entry,
            Err(what) => {
                let what = Event::Garbled(what.into());
                self.doing = Some(Doing { text: rules.query, ..doing });
                return self.step(what);
            }
        };
        let mut errors = doing.errors.take().unwrap_or_default();
        if entry.number == rules.none {
            return self.commanded(&doing, &errors);
        }
        errors.push(entry);
        if errors.len() >= MOST_ERRORS {
            let error = device(&doing, &errors);
            return self.fail(error);
        }
        let step = doing.step;
        self.doing = Some(doing);
        self.ask_errors(step, &rules.query, errors)
    }

    /// A command has been taken, with these errors.
    fn commanded(&mut self, doing: &Doing, errors: &[DeviceError]) -> Action {
        let unknown = !errors.is_empty() && self.are_all(errors, |rules| &rules.unknown_command);
        if unknown && doing.step != Step::WhyUnanswered && self.doubted != Some(doing.step) {
            self.doubted = Some(doing.step);
            self.queue.push_front(doing.step);
            return self.go_on();
        }
        self.doubted = None;
        match self.taken(doing, errors, unknown) {
            Ok(()) => self.go_on(),
            Err(error) => self.fail(error),
        }
    }

    fn taken(&mut self, doing: &Doing, errors: &[DeviceError], unknown: bool) -> Result<(), InstrumentError> {
        let fine = errors.is_empty();
        match doing.step {
            Step::Clear | Step::Prepare(_) if fine || unknown => Ok(()),
            Step::Format(index) if fine => {
                if self.rules.dialect.formats[index].get.is_some() {
                    self.queue.push_front(Step::FormatBack(index));
                } else {
                    self.accept_format(index);
                }
                Ok(())
            }
            Step::Format(index) if self.next_format(index) => Ok(()),
            Step::Format(index) if unknown => {
                self.accept_format(index);
                Ok(())
            }
            Step::Order if fine => {
                self.queue.push_front(Step::OrderBack);
                Ok(())
            }
            // The reset value of SCPI-99 is the most significant byte first.
            Step::Order if unknown => Ok(()),
            Step::Select => self.selected(doing, errors, unknown),
            Step::Set(index) | Step::SetLate(index) => self.set(index, doing, errors, unknown),
            Step::WhyUnanswered => {
                self.why_unanswered(unknown);
                Ok(())
            }
            Step::Errors if !fine => Err(device(doing, errors)),
            _ if fine => Ok(()),
            _ => Err(refused(doing, errors)),
        }
    }

    fn selected(&mut self, doing: &Doing, errors: &[DeviceError], unknown: bool) -> Result<(), InstrumentError> {
        let input = self.job.as_ref().map_or(1, |job| job.plan.input);
        // A device without a switch has one input. If another one was meant its levels would be those of input 1.
        if unknown && input == 1 {
            self.known.one_input = true;
        } else if !errors.is_empty() {
            return Err(refused(doing, errors));
        }
        self.queue.push_front(Step::Settle);
        Ok(())
    }

    fn set(
        &mut self,
        index: usize,
        doing: &Doing,
        errors: &[DeviceError],
        unknown: bool,
    ) -> Result<(), InstrumentError> {
        let setting = &self.rules.dialect.settings[index];
        let again = !errors.is_empty() && !unknown && self.are_all(errors, |rules| &rules.try_later);
        let setting_points = setting.quantity == Quantity::Points;
        let may_be_unknown = setting.may_be_unknown;
        let known_setting = &mut self.known.settings[index];
        if errors.is_empty() || (again && setting_points && doing.step == Step::SetLate(index)) {
            // A refused number of points is read back: it may be as many as the device can.
            known_setting.sent = Some(doing.text.clone());
            return Ok(());
        }
        if unknown && may_be_unknown {
            known_setting.unknown = true;
            return Ok(());
        }
        if again && doing.step == Step::Set(index) {
            let others = self.queue.iter().take_while(|step| matches!(step, Step::Set(_) | Step::SetLate(_))).count();
            self.queue.insert(others, Step::SetLate(index));
            return Ok(());
        }
        Err(refused(doing, errors))
    }

    fn are_all(&self, errors: &[DeviceError], numbers: impl Fn(&Errors) -> &Vec<i64>) -> bool {
        let Some(rules) = &self.rules.dialect.errors else { return false };
        errors.iter().all(|error| numbers(rules).contains(&error.number))
    }
}

fn list(errors: &[DeviceError]) -> String {
    errors.iter().map(ToString::to_string).collect::<Vec<_>>().join("; ")
}

fn refused(doing: &Doing, errors: &[DeviceError]) -> InstrumentError {
    InstrumentError::Refused { command: doing.text.clone(), why: list(errors) }
}

fn device(doing: &Doing, errors: &[DeviceError]) -> InstrumentError {
    InstrumentError::Device { after: doing.text.clone(), errors: list(errors) }
}
