//! Queries and what their answers say: settings read back, the end of a sweep, its values, overload and clock.
//!
//! A setting is read back before the sweep if it was sent, and after it in any case. A device that tells another value
//! is set once more and, if it still does, gives no level. A query that was never answered is held against the queue of
//! errors: if the device does not know it, what it would tell is assumed, and the answer to the plan says so.

use core::time::Duration;
use std::collections::BTreeMap;

use hushwatch_config::dialect::{Coding, Quantity};
use hushwatch_quantity::Time;

use super::known::{Judgement, ReadBack, judge, reading, text_of};
use super::{Action, Doing, LONGEST_NUMBER, Machine, Question, Step, no_answer};
use crate::answer::{AnswerError, Order, levels_from_real32, levels_from_text, number, same_words};
use crate::error::{InstrumentError, readable};
use crate::framing::Answer;
use crate::plan::{Segment, Value};

/// Size of a number of a binary answer, bytes.
const REAL32: usize = 4;
/// No sweep takes longer, whatever a device tells: the dwell of a site file is 100 s a point at most.
const LONGEST_SWEEP: Duration = Duration::from_hours(7 * 24);
/// A query that was never answered is asked so often.
const MOST_SILENCES: u32 = 2;

impl Machine {
    /// Begins a query: its action, or nothing if there is nothing to ask.
    pub(super) fn begin_query(&mut self, step: Step) -> Result<Option<Action>, InstrumentError> {
        let brief = self.is_brief(step);
        let dialect = &self.rules.dialect;
        let line = Question { brief, ..Question::LINE };
        let asked = match step {
            Step::FormatBack(index) if self.known.format_back.unread => {
                self.accept_format(index);
                None
            }
            Step::FormatBack(index) => dialect.formats.get(index).and_then(|format| Some((format.get.clone()?, line))),
            Step::OrderBack if self.known.order_back.unread => None,
            Step::OrderBack => dialect.byte_order.as_ref().map(|order| (order.get.clone(), line)),
            Step::Verify(index) | Step::Confirm(index) => self.get_of(index)?.map(|get| (get, line)),
            Step::Wait => {
                let query = dialect.sweep.wait.as_ref().map(|(query, _)| query.clone());
                query.map(|query| (query, Question { work: self.sweep_time(), ..line }))
            }
            Step::Fetch => Some((self.filled(&dialect.sweep.read)?, self.trace_question())),
            Step::Overload => dialect.overload.as_ref().map(|overload| (overload.query.clone(), line)),
            Step::Clock if self.rules.ask_clock => dialect.clock.clone().map(|query| (query, line)),
            _ => None,
        };
        Ok(asked.map(|(text, question)| self.send(step, &text, Some(question))))
    }

    /// The query that reads a setting back, if it was set and can be read.
    fn get_of(&self, index: usize) -> Result<Option<String>, InstrumentError> {
        let known = &self.known.settings[index];
        if known.unknown || known.back.unread || self.wanted(index)?.is_none() {
            return Ok(None);
        }
        Ok(self.rules.dialect.settings[index].get.clone())
    }

    fn present_segment(&self) -> Option<&Segment> {
        self.job.as_ref().and_then(|job| job.segment())
    }

    /// How long the sweep takes: as long as was asked for, or longer if the device told so.
    fn sweep_time(&self) -> Duration {
        let asked = self.present_segment().map_or(0.0, Segment::sweep_s);
        let settings = self.rules.dialect.settings.iter().zip(&self.known.settings);
        let told = settings.filter(|(setting, _)| setting.quantity == Quantity::SweepS).map(|(_, known)| &known.told);
        let seconds = told.fold(asked, |longest, told| match told {
            Some(Value::Number(told)) => longest.max(*told),
            _ => longest,
        });
        Duration::try_from_secs_f64(seconds).unwrap_or(LONGEST_SWEEP).min(LONGEST_SWEEP)
    }

    fn points(&self) -> usize {
        self.present_segment().map_or(0, |segment| segment.points as usize)
    }

    fn trace_question(&self) -> Question {
        let each = if self.known.coding == Some(Coding::Real32) && self.known.format_back.answered {
            REAL32
        } else {
            LONGEST_NUMBER
        };
        let work = if self.rules.dialect.sweep.wait.is_some() { Duration::ZERO } else { self.sweep_time() };
        Question { block: true, longest: self.points().saturating_mul(each), work, brief: false }
    }

    /// What is known of the answering of a query that the device may not know.
    fn back(&mut self, step: Step) -> Option<&mut ReadBack> {
        match step {
            Step::FormatBack(_) => Some(&mut self.known.format_back),
            Step::OrderBack => Some(&mut self.known.order_back),
            Step::Verify(index) | Step::Confirm(index) if self.rules.dialect.settings[index].may_be_unknown => {
                Some(&mut self.known.settings[index].back)
            }
            _ => None,
        }
    }

    /// Without a queue of errors only time tells that a query is not known.
    fn is_brief(&mut self, step: Step) -> bool {
        let told = self.rules.dialect.errors.is_some();
        told && self.back(step).is_some_and(|back| !back.answered && back.silences == 0)
    }

    /// Nothing came in time: a fault, unless the device may not know the query.
    pub(super) fn unanswered(&mut self, doing: Doing) -> Action {
        let silences = match self.back(doing.step) {
            Some(back) if !back.answered => {
                back.silences += 1;
                back.silences
            }
            _ => return self.fail(no_answer(doing)),
        };
        self.queue.push_front(doing.step);
        if silences >= MOST_SILENCES {
            self.pass_over(doing.step);
        }
        if silences < MOST_SILENCES && self.rules.dialect.errors.is_some() {
            self.queue.push_front(Step::WhyUnanswered);
        } else {
            self.resync();
        }
        self.go_on()
    }

    /// What the queue of errors says about the query that stands next.
    pub(super) fn why_unanswered(&mut self, unknown: bool) {
        match self.queue.front() {
            Some(step) if unknown => self.pass_over(*step),
            // Silent without a reason: its answer may still come.
            _ => self.resync(),
        }
    }

    fn pass_over(&mut self, step: Step) {
        if let Some(back) = self.back(step) {
            back.unread = true;
        }
    }

    /// An answer came.
    pub(super) fn answered(&mut self, doing: &Doing, answer: Answer) -> Result<(), InstrumentError> {
        if let Some(back) = self.back(doing.step) {
            back.answered = true;
        }
        let line = match (doing.step, answer) {
            (Step::Fetch, answer) => return self.fetched(doing, &answer),
            (_, Answer::Line(line)) => line,
            (_, Answer::Block(payload)) => return Err(unexpected(doing, "a line", &payload)),
        };
        match doing.step {
            Step::FormatBack(index) => self.told_format(index, doing, &line),
            Step::OrderBack => self.told_order(doing, &line),
            Step::Verify(index) => self.verified(index, doing, &line),
            Step::Confirm(index) => self.confirmed(index, doing, &line),
            Step::Wait => self.waited(doing, &line),
            Step::Overload => self.told_overload(doing, &line),
            Step::Clock => self.told_clock(doing, &line),
            _ => Ok(()),
        }
    }

    fn told_format(&mut self, index: usize, doing: &Doing, line: &[u8]) -> Result<(), InstrumentError> {
        let got = text_of(line).map_err(|what| garbage(doing, what))?;
        let asked = self.rules.dialect.formats[index].expect.clone();
        if same_words(&asked, &got) {
            self.accept_format(index);
        } else if !self.next_format(index) {
            return Err(InstrumentError::SettingsMismatch { setting: "format".to_owned(), asked, got });
        }
        Ok(())
    }

    fn told_order(&mut self, doing: &Doing, line: &[u8]) -> Result<(), InstrumentError> {
        let got = text_of(line).map_err(|what| garbage(doing, what))?;
        let Some(rules) = &self.rules.dialect.byte_order else { return Ok(()) };
        self.known.order = if same_words(&rules.big, &got) {
            Order::Big
        } else if same_words(&rules.little, &got) {
            Order::Little
        } else {
            let (setting, asked) = ("byte order".to_owned(), rules.big.clone());
            return Err(InstrumentError::SettingsMismatch { setting, asked, got });
        };
        Ok(())
    }

    /// Holds what was read back against what is wanted.
    fn judged(&mut self, index: usize, doing: &Doing, line: &[u8]) -> Result<(Value, Judgement), InstrumentError> {
        let setting = &self.rules.dialect.settings[index];
        let wanted = self.wanted(index)?.ok_or_else(|| unexpected(doing, "nothing", line))?;
        let judgement = judge(setting.compare, &wanted, line).map_err(|what| garbage(doing, what))?;
        if let Judgement::Agrees(value) = &judgement {
            self.known.settings[index].told = Some(value.clone());
        }
        Ok((wanted, judgement))
    }

    fn verified(&mut self, index: usize, doing: &Doing, line: &[u8]) -> Result<(), InstrumentError> {
        let (wanted, Judgement::Differs(got)) = self.judged(index, doing, line)? else { return Ok(()) };
        if let Some(error) = self.fewer_points(index, &got) {
            return Err(error);
        }
        let known = &mut self.known.settings[index];
        if known.corrected {
            return Err(self.mismatch(index, &wanted, &got));
        }
        // Perhaps another setting has moved it, which came later.
        known.corrected = true;
        self.queue.push_front(Step::Verify(index));
        self.queue.push_front(Step::SetLate(index));
        Ok(())
    }

    /// A device that took fewer points than it was asked for has told how many it can.
    fn fewer_points(&mut self, index: usize, got: &Value) -> Option<InstrumentError> {
        let asked = self.present_segment()?.points;
        match got {
            Value::Number(got)
                if self.rules.dialect.settings[index].quantity == Quantity::Points
                    && (2.0..f64::from(asked)).contains(got)
                    && got.fract() == 0.0 =>
            {
                let limit = *got as u32;
                self.known.most_points = Some(limit);
                Some(InstrumentError::TooManyPoints { asked, limit })
            }
            _ => None,
        }
    }

    fn mismatch(&self, index: usize, wanted: &Value, got: &Value) -> InstrumentError {
        InstrumentError::SettingsMismatch {
            setting: self.rules.dialect.settings[index].quantity.to_string(),
            asked: wanted.to_string(),
            got: got.to_string(),
        }
    }

    /// After the sweep: what is read now stood while it was swept, or somebody has changed it meanwhile.
    fn confirmed(&mut self, index: usize, doing: &Doing, line: &[u8]) -> Result<(), InstrumentError> {
        let (wanted, Judgement::Differs(got)) = self.judged(index, doing, line)? else { return Ok(()) };
        let mismatch = self.mismatch(index, &wanted, &got);
        match &mut self.job {
            Some(job) if !job.redone => {
                job.redone = true;
                job.traces.truncate(job.at);
            }
            _ => return Err(mismatch),
        }
        // What has changed one setting may have changed others: it may even have been started anew, at another input.
        self.known.unprepare();
        self.queue.clear();
        self.enqueue_preparation();
        Ok(())
    }

    fn waited(&mut self, doing: &Doing, line: &[u8]) -> Result<(), InstrumentError> {
        let expected = self.rules.dialect.sweep.wait.as_ref().map(|(_, answer)| answer.as_str());
        match text_of(line) {
            Ok(got) if expected.is_none_or(|expected| same_words(expected, &got)) => Ok(()),
            _ => Err(unexpected(doing, "the word that the sweep has ended", line)),
        }
    }

    fn fetched(&mut self, doing: &Doing, answer: &Answer) -> Result<(), InstrumentError> {
        let points = self.points();
        // If the device cannot tell how it codes, the answer itself does: a block has a header, a list has none.
        let untold = !self.known.format_back.answered;
        let levels = match answer {
            Answer::Block(payload) if untold || self.known.coding == Some(Coding::Real32) => {
                levels_from_real32(payload, self.known.order, points)
            }
            Answer::Line(line) if untold || self.known.coding == Some(Coding::Ascii) => levels_from_text(line, points),
            Answer::Block(payload) => return Err(unexpected(doing, "a list of numbers", payload)),
            Answer::Line(line) => return Err(unexpected(doing, "a block", line)),
        };
        let levels = levels.map_err(|what| garbage(doing, what))?;
        if let Some(job) = &mut self.job {
            job.traces.push(levels);
        }
        Ok(())
    }

    fn told_overload(&mut self, doing: &Doing, line: &[u8]) -> Result<(), InstrumentError> {
        let Some(rules) = &self.rules.dialect.overload else { return Ok(()) };
        let bits = number(line).filter(|bits| (0.0..=f64::from(u32::MAX)).contains(bits) && bits.fract() == 0.0);
        let bits = bits.ok_or_else(|| unexpected(doing, "a number of bits", line))?;
        let overload = bits as u32 & rules.mask != 0;
        if let Some(job) = &mut self.job {
            job.overload = Some(job.overload == Some(true) || overload);
        }
        Ok(())
    }

    fn told_clock(&mut self, doing: &Doing, line: &[u8]) -> Result<(), InstrumentError> {
        let text = text_of(line).map_err(|what| garbage(doing, what))?;
        let time = Time::parse_rfc3339(text.trim_matches(['"', '\'']));
        let time = time.map_err(|_| unexpected(doing, "a time, RFC 3339", line))?;
        if let Some(job) = &mut self.job {
            job.clock = Some(time);
        }
        Ok(())
    }

    /// Writes down what the segment was swept with, and goes on to the next one or to the end of the plan.
    pub(super) fn end_segment(&mut self) -> Result<(), InstrumentError> {
        let mut readings = BTreeMap::new();
        for (index, setting) in self.rules.dialect.settings.iter().enumerate() {
            if let Some(wanted) = self.wanted(index)? {
                readings.insert(setting.quantity.label(), reading(&self.known.settings[index], wanted));
            }
        }
        let Some(job) = &mut self.job else { return Ok(()) };
        job.settings.segments.push(readings);
        // The overload of each sweep counts, the errors and the clock of the last one tell for all.
        self.queue.push_back(Step::Overload);
        if job.at + 1 < job.plan.segments.len() {
            job.at += 1;
            job.redone = false;
            self.queue.push_back(Step::BeginSegment);
        } else {
            self.queue.extend([Step::Clock, Step::Errors]);
        }
        Ok(())
    }
}

fn garbage(doing: &Doing, what: AnswerError) -> InstrumentError {
    InstrumentError::Garbage { question: doing.text.clone(), what: what.into() }
}

fn unexpected(doing: &Doing, expected: &'static str, got: &[u8]) -> InstrumentError {
    garbage(doing, AnswerError::Unexpected { expected, got: readable(got) })
}
