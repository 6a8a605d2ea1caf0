//! What is to be swept, and what came of it.

use core::time::Duration;
use std::collections::BTreeMap;

use hushwatch_config::dialect::Quantity;
use hushwatch_quantity::{Detector, FilterShape, ReceiverUnit, Time};
use serde::Serialize;

use crate::error::InstrumentError;

/// One look at one input: one or more segments, swept one after the other.
#[derive(Clone, Debug, PartialEq)]
pub struct SweepPlan {
    /// Number of the input, from 1.
    pub input: u32,
    /// At least one.
    pub segments: Vec<Segment>,
    /// How long to wait after another input was selected.
    pub settle: Duration,
}

/// A stretch of frequencies that is swept at once.
#[derive(Clone, Debug, PartialEq)]
pub struct Segment {
    /// First frequency, Hz; above 0.
    pub start_hz: f64,
    /// Last frequency, Hz; above the first.
    pub stop_hz: f64,
    /// Number of points, both ends included; 2 or more.
    pub points: u32,
    /// Resolution bandwidth, Hz.
    pub rbw_hz: f64,
    /// Shape of the resolution filter; set only by dialects that can.
    pub shape: FilterShape,
    /// Video bandwidth, Hz; `None` leaves it to the instrument.
    pub vbw_hz: Option<f64>,
    /// Detector.
    pub detector: Detector,
    /// Time spent on one point, s; above 0.
    pub dwell_s: f64,
}

impl Segment {
    /// Time of one sweep, s.
    pub fn sweep_s(&self) -> f64 {
        self.dwell_s * f64::from(self.points)
    }
}

impl SweepPlan {
    /// Can it be swept at all?
    pub(crate) fn check(&self, most_points: u32) -> Result<(), InstrumentError> {
        let plan = |what: &str| Err(InstrumentError::Plan(what.to_owned()));
        if self.segments.is_empty() {
            return plan("a plan without segments cannot be swept");
        }
        for segment in &self.segments {
            let positive = |value: f64| value.is_finite() && value > 0.0;
            if !(positive(segment.start_hz) && positive(segment.stop_hz) && segment.start_hz < segment.stop_hz) {
                return plan("a segment must run from one frequency above 0 Hz up to a higher one");
            }
            if !(positive(segment.rbw_hz) && positive(segment.dwell_s) && segment.vbw_hz.is_none_or(positive)) {
                return plan("bandwidths and dwell of a segment must be above 0");
            }
            if segment.points < 2 {
                return plan("a segment has 2 points or more");
            }
            if segment.points > most_points {
                return Err(InstrumentError::TooManyPoints { asked: segment.points, limit: most_points });
            }
        }
        Ok(())
    }
}

/// The answer to a [`SweepPlan`].
#[derive(Clone, Debug, PartialEq)]
pub struct SweepAnswer {
    /// For each segment as many levels as it has points, in `unit`; NaN where nothing was measured.
    pub segments: Vec<Vec<f64>>,
    /// Unit of the levels.
    pub unit: ReceiverUnit,
    /// What the instrument was set to.
    pub settings: Settings,
    /// When the sweep ended by the instrument's own clock, if that was to be asked.
    pub clock: Option<Time>,
    /// Was the input overloaded, if the dialect tells how to ask?
    pub overload: Option<bool>,
}

/// What an instrument was set to during a sweep. Equal settings serialise to equal JSON.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Settings {
    /// Who it said it is.
    pub identity: String,
    /// The input that was selected; no instrument tells it, so that it is assumed where it was not refused.
    pub input: u32,
    /// For each segment what bears on its level, by the quantity's name in the dialect.
    pub segments: Vec<BTreeMap<&'static str, Reading>>,
}

impl Settings {
    /// What the device could not tell, each name once: these were taken as asked for.
    pub fn assumed(&self) -> Vec<&'static str> {
        let mut names: Vec<_> = self
            .segments
            .iter()
            .flatten()
            .filter(|(_, reading)| matches!(reading, Reading::Assumed(_)))
            .map(|(name, _)| *name)
            .collect();
        names.sort_unstable();
        names.dedup();
        names
    }

    /// What bears on a level, whether the device told it or it was taken as asked for: the identity, and each quantity of
    /// each segment as `2 attenuation_db = 10` (segments from 1). Levels are comparable only where this is the same.
    pub fn bearing(&self) -> Vec<String> {
        let mut all = vec![format!("instrument = {}", self.identity)];
        for (number, segment) in self.segments.iter().enumerate() {
            all.extend(segment.iter().map(|(name, reading)| {
                let (Reading::Told(value) | Reading::Assumed(value)) = reading;
                format!("{} {name} = {value}", number + 1)
            }));
        }
        all
    }

    /// What is known of a quantity in one segment, if it was to be set.
    pub fn reading(&self, segment: usize, quantity: Quantity) -> Option<&Reading> {
        self.segments.get(segment)?.get(quantity.label())
    }
}

/// The value of a setting, and how it is known.
#[derive(Clone, Debug, PartialEq, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum Reading {
    /// The instrument told it.
    Told(Value),
    /// It was asked for, and the instrument cannot tell.
    Assumed(Value),
}

/// The value of a setting.
#[derive(Clone, Debug, PartialEq, Serialize)]
#[serde(untagged)]
pub enum Value {
    /// A number in the unit that the quantity's name tells.
    Number(f64),
    /// A word of the dialect.
    Word(String),
}

impl core::fmt::Display for Value {
    fn fmt(&self, f: &mut core::fmt::Formatter<'_>) -> core::fmt::Result {
        match self {
            Self::Number(number) => write!(f, "{number}"),
            Self::Word(word) => f.pad(word),
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn settings_tell_in_the_record_what_was_told_and_what_assumed() {
        let segment = BTreeMap::from([
            (Quantity::RbwHz.label(), Reading::Told(Value::Number(9000.0))),
            (Quantity::Detector.label(), Reading::Assumed(Value::Word("RMS".to_owned()))),
        ]);
        let settings = Settings { identity: "a,b,c,d".to_owned(), input: 2, segments: vec![segment.clone(), segment] };
        assert_eq!(settings.assumed(), ["detector"]);
        let told = serde_json::to_value(&settings).expect("JSON");
        let segment = serde_json::json!({ "detector": { "assumed": "RMS" }, "rbw_hz": { "told": 9000.0 } });
        let expected = serde_json::json!({ "identity": "a,b,c,d", "input": 2, "segments": [segment, segment] });
        assert_eq!(told, expected);
    }
}
