//! What has been learnt about the instrument, and how what it tells is judged.

use hushwatch_config::dialect::{Coding, Compare, Quantity, Setting};
use hushwatch_quantity::ReceiverUnit;

use crate::answer::{AnswerError, Order, number, same_words};
use crate::error::{InstrumentError, readable};
use crate::plan::{Reading, Segment, Value};

/// What has been learnt about the instrument.
#[derive(Debug)]
pub(super) struct Known {
    /// Who it is.
    pub(super) identity: Option<String>,
    /// The greatest number of points that it takes.
    pub(super) most_points: Option<u32>,
    /// It was identified, its errors cleared and its answers given a shape.
    pub(super) prepared: bool,
    /// How values are coded, once that is settled.
    pub(super) coding: Option<Coding>,
    /// The order of the bytes of binary values.
    pub(super) order: Order,
    /// It knows no command to select an input.
    pub(super) one_input: bool,
    /// The input that was selected last.
    pub(super) input: Option<u32>,
    /// Does it tell how values are coded?
    pub(super) format_back: ReadBack,
    /// Does it tell the order of bytes?
    pub(super) order_back: ReadBack,
    /// What is known of each setting of the dialect.
    pub(super) settings: Vec<KnownSetting>,
}

/// Whether a query is answered.
#[derive(Clone, Copy, Debug, Default)]
pub(super) struct ReadBack {
    /// It was.
    pub(super) answered: bool,
    /// It is not: it is not asked any more.
    pub(super) unread: bool,
    /// How often it was not answered.
    pub(super) silences: u32,
}

/// What is known of one setting.
#[derive(Clone, Debug, Default)]
pub(super) struct KnownSetting {
    /// It does not know the command.
    pub(super) unknown: bool,
    /// Does it answer the query?
    pub(super) back: ReadBack,
    /// The command by which it was set, as long as that is believed.
    pub(super) sent: Option<String>,
    /// It was set a second time, since it was not at what was asked for.
    pub(super) corrected: bool,
    /// What was read back last.
    pub(super) told: Option<Value>,
}

impl Known {
    pub(super) fn new(settings: usize) -> Self {
        Self {
            identity: None,
            most_points: None,
            prepared: false,
            coding: None,
            order: Order::Big,
            one_input: false,
            input: None,
            format_back: ReadBack::default(),
            order_back: ReadBack::default(),
            settings: vec![KnownSetting::default(); settings],
        }
    }

    /// The port was opened: another device may be there, or the same one after its power was off.
    pub(super) fn forget_device(&mut self) {
        self.one_input = false;
        self.format_back = ReadBack::default();
        self.order_back = ReadBack::default();
        self.settings.fill(KnownSetting::default());
        self.unprepare();
    }

    /// Everything is to be set anew.
    pub(super) fn unprepare(&mut self) {
        self.prepared = false;
        self.coding = None;
        self.order = Order::Big;
        self.input = None;
        self.forget_sent();
    }

    /// All settings are to be sent anew.
    pub(super) fn forget_sent(&mut self) {
        for setting in &mut self.settings {
            setting.sent = None;
        }
    }

    /// This is who answers. What another one could do says nothing about this one.
    pub(super) fn identified(&mut self, who: &str) {
        if self.identity.as_deref() != Some(who) {
            self.most_points = None;
            self.identity = Some(who.to_owned());
        }
    }
}

/// What is asked for, quantity by quantity.
pub(super) struct Asked<'a> {
    pub(super) segment: &'a Segment,
    pub(super) input: u32,
    pub(super) attenuation_db: Option<f64>,
    pub(super) unit: ReceiverUnit,
}

impl Asked<'_> {
    /// The value of a quantity, a word being that of the site file; `None` if it is left to the instrument.
    pub(super) fn value(&self, quantity: Quantity) -> Option<Value> {
        let Segment { start_hz, stop_hz, points, rbw_hz, shape, vbw_hz, detector, dwell_s } = *self.segment;
        let number = match quantity {
            Quantity::StartHz => start_hz,
            Quantity::StopHz => stop_hz,
            Quantity::CenterHz => f64::midpoint(start_hz, stop_hz),
            Quantity::SpanHz => stop_hz - start_hz,
            Quantity::Points => f64::from(points),
            Quantity::RbwHz => rbw_hz,
            Quantity::VbwHz => vbw_hz?,
            Quantity::DwellS => dwell_s,
            Quantity::SweepS => self.segment.sweep_s(),
            Quantity::AttenuationDb => self.attenuation_db?,
            Quantity::Input => f64::from(self.input),
            Quantity::BandwidthShape => return Some(Value::Word(shape.label().to_owned())),
            Quantity::Detector => return Some(Value::Word(detector.label().to_owned())),
            Quantity::Unit => return Some(Value::Word(self.unit.label().to_owned())),
        };
        Some(Value::Number(number))
    }

    /// What a setting is to be, in the device's words; `None` if it is left to the instrument.
    pub(super) fn wanted(&self, setting: &Setting) -> Result<Option<Value>, InstrumentError> {
        let Some(value) = self.value(setting.quantity) else { return Ok(None) };
        match value {
            Value::Word(word) if !setting.words.is_empty() => {
                let word = setting.words.get(&word).cloned().ok_or_else(|| {
                    let quantity = setting.quantity;
                    InstrumentError::Plan(format!("the dialect has no word for {quantity} = {word}"))
                })?;
                Ok(Some(Value::Word(word)))
            }
            value => Ok(Some(value)),
        }
    }

    /// The command of a setting; `None` if something in it is left to the instrument.
    pub(super) fn command(&self, setting: &Setting) -> Result<Option<String>, InstrumentError> {
        let Some(own) = self.wanted(setting)? else { return Ok(None) };
        let filled = setting.set.fill(|quantity| {
            let value = if quantity == setting.quantity { Some(own.clone()) } else { self.value(quantity) };
            value.map(|value| value.to_string())
        });
        Ok(filled.ok())
    }
}

/// Does what was read back agree with what was wanted?
#[derive(Clone, Debug, PartialEq)]
pub(super) enum Judgement {
    Agrees(Value),
    Differs(Value),
}

/// Holds an answer against what was wanted.
pub(super) fn judge(compare: Compare, wanted: &Value, line: &[u8]) -> Result<Judgement, AnswerError> {
    let judged = |agrees: bool, value: Value| if agrees { Judgement::Agrees(value) } else { Judgement::Differs(value) };
    match (compare, wanted) {
        (Compare::Equal { tolerance }, Value::Number(wanted)) => {
            let got = number_of(line)?;
            Ok(judged((got - wanted).abs() <= tolerance * wanted.abs(), Value::Number(got)))
        }
        (Compare::AtLeast { tolerance }, Value::Number(wanted)) => {
            let got = number_of(line)?;
            Ok(judged(got >= wanted - tolerance * wanted.abs(), Value::Number(got)))
        }
        (_, wanted) => {
            let wanted = wanted.to_string();
            let got = text_of(line)?;
            // The word that was asked for, so that long and short forms are one setting to the record.
            Ok(if same_words(&wanted, &got) {
                Judgement::Agrees(Value::Word(wanted))
            } else {
                Judgement::Differs(Value::Word(got))
            })
        }
    }
}

fn number_of(line: &[u8]) -> Result<f64, AnswerError> {
    number(line).ok_or_else(|| AnswerError::Unexpected { expected: "a number", got: readable(line) })
}

/// A short text of printable characters.
pub(super) fn text_of(line: &[u8]) -> Result<String, AnswerError> {
    let text = str::from_utf8(line).ok().map(str::trim).filter(|text| !text.chars().any(char::is_control));
    text.map(str::to_owned).ok_or_else(|| AnswerError::Unexpected { expected: "a text", got: readable(line) })
}

/// What stands in the record for a setting that was wanted and, perhaps, told.
pub(super) fn reading(known: &KnownSetting, wanted: Value) -> Reading {
    match &known.told {
        Some(told) if !known.unknown && !known.back.unread => Reading::Told(told.clone()),
        _ => Reading::Assumed(wanted),
    }
}
