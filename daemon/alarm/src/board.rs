//! The board: all alarms that are not normal, and what events do to them.

use std::collections::BTreeMap;

use hushwatch_quantity::Time;
use thiserror::Error;

use crate::{Acknowledged, Alarm, AlarmKey, AlarmState, Cause, Detail, Transition};

/// What has happened.
#[derive(Clone, Debug, PartialEq)]
pub enum Event {
    /// A condition holds. Told again while it holds, it is an update.
    Occurs {
        /// Of which alarm.
        key: AlarmKey,
        /// When this became known, plant time.
        time: Time,
        /// What is known.
        detail: Detail,
    },
    /// The condition no longer holds; nothing happens if it did not before.
    Clears {
        /// Of which alarm.
        key: AlarmKey,
        /// When this became known, plant time.
        time: Time,
        /// In a sentence, for people.
        text: String,
    },
    /// Somebody takes an alarm up.
    Acknowledge {
        /// Which occurrence.
        occurrence: u64,
        /// Who, when and why.
        by: Acknowledged,
    },
}

/// What is to be done.
#[derive(Clone, Debug, PartialEq)]
pub struct Action {
    /// The alarm as it is from now on: to be stored.
    pub alarm: Alarm,
    /// What happened: to be written into the journal.
    pub transition: Transition,
    /// When, plant time.
    pub time: Time,
    /// In a sentence, for people.
    pub text: String,
    /// Are the recipients to be told?
    pub notify: Notify,
}

/// Are the recipients to be told?
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Notify {
    /// Yes.
    Yes,
    /// No: it only refines what they know.
    No,
}

/// Why an alarm cannot be acknowledged.
#[derive(Clone, Debug, PartialEq, Eq, Error)]
pub enum AlarmError {
    /// No open alarm has this number.
    #[error("no open alarm has the number {occurrence}{}", open_numbers(open))]
    Unknown {
        /// What was asked for.
        occurrence: u64,
        /// Those that could be meant.
        open: Vec<u64>,
    },
    /// Somebody was quicker.
    #[error("alarm {occurrence} was acknowledged by {who} already")]
    Already {
        /// What was asked for.
        occurrence: u64,
        /// By whom.
        who: String,
    },
}

fn open_numbers(open: &[u64]) -> String {
    let list: Vec<String> = open.iter().map(u64::to_string).collect();
    if list.is_empty() { String::from("; none is open") } else { format!("; open: {}", list.join(", ")) }
}

/// A rise that has grown or shrunk by this much since recipients were told is news to the journal, dB: less is noise.
const NEWS_DB: f64 = 1.0;

/// All alarms that are not normal.
#[derive(Clone, Debug, Default)]
pub struct Board {
    open: BTreeMap<AlarmKey, Alarm>,
    last_occurrence: u64,
}

impl Board {
    /// A board on which these alarms are open; `last_occurrence` is the greatest number that was ever given.
    pub fn restore(open: impl IntoIterator<Item = Alarm>, last_occurrence: u64) -> Self {
        let open: BTreeMap<AlarmKey, Alarm> = open
            .into_iter()
            .filter(|a| a.state != AlarmState::Normal)
            .map(|alarm| (alarm.key.clone(), alarm))
            .collect();
        let greatest = open.values().map(|alarm| alarm.occurrence).max().unwrap_or(0);
        Self { open, last_occurrence: last_occurrence.max(greatest) }
    }

    /// The open alarms, by key.
    pub fn open(&self) -> impl Iterator<Item = &Alarm> {
        self.open.values()
    }

    /// Does the condition of this alarm hold?
    pub fn is_active(&self, key: &AlarmKey) -> bool {
        self.open.get(key).is_some_and(|alarm| alarm.state != AlarmState::Returned)
    }

    /// Takes what has happened and tells what is to be done: nothing or one thing.
    ///
    /// # Errors
    /// An alarm cannot be acknowledged that is not open, or already is.
    pub fn handle(&mut self, event: Event) -> Result<Option<Action>, AlarmError> {
        match event {
            Event::Occurs { key, time, detail } => Ok(self.occurs(key, time, detail)),
            Event::Clears { key, time, text } => Ok(self.clears(&key, time, text)),
            Event::Acknowledge { occurrence, by } => self.acknowledge(occurrence, by).map(Some),
        }
    }

    fn occurs(&mut self, key: AlarmKey, time: Time, detail: Detail) -> Option<Action> {
        if let Some(alarm) = self.open.get_mut(&key).filter(|alarm| alarm.state != AlarmState::Returned) {
            let news = is_news(&alarm.detail, &detail);
            let text = detail.text.clone();
            alarm.detail = detail;
            return news.then(|| action(alarm, Transition::Updated, time, text, Notify::No));
        }
        self.last_occurrence += 1;
        let text = detail.text.clone();
        let alarm = Alarm {
            occurrence: self.last_occurrence,
            key: key.clone(),
            state: AlarmState::Unacknowledged,
            raised: time,
            detail,
            acknowledged: None,
        };
        let done = action(&alarm, Transition::Occurred, time, text, Notify::Yes);
        self.open.insert(key, alarm);
        Some(done)
    }

    fn clears(&mut self, key: &AlarmKey, time: Time, text: String) -> Option<Action> {
        let alarm = self.open.get_mut(key)?;
        let next = match alarm.state {
            AlarmState::Unacknowledged => AlarmState::Returned,
            AlarmState::Acknowledged => AlarmState::Normal,
            AlarmState::Returned | AlarmState::Normal => return None,
        };
        alarm.state = next;
        let done = action(alarm, Transition::Cleared, time, text, Notify::Yes);
        if next == AlarmState::Normal {
            self.open.remove(key);
        }
        Some(done)
    }

    fn acknowledge(&mut self, occurrence: u64, by: Acknowledged) -> Result<Action, AlarmError> {
        let found = self.open.iter_mut().find(|(_, alarm)| alarm.occurrence == occurrence);
        let Some((key, alarm)) = found else {
            let open = self.open.values().filter(|alarm| alarm.acknowledged.is_none()).map(|a| a.occurrence).collect();
            return Err(AlarmError::Unknown { occurrence, open });
        };
        if let Some(Acknowledged { who, .. }) = &alarm.acknowledged {
            return Err(AlarmError::Already { occurrence, who: who.clone() });
        }
        let key = key.clone();
        alarm.state = if alarm.state == AlarmState::Returned { AlarmState::Normal } else { AlarmState::Acknowledged };
        let (time, text) = (by.time, told(&by));
        alarm.acknowledged = Some(by);
        let done = action(alarm, Transition::Acknowledged, time, text, Notify::No);
        if done.alarm.state == AlarmState::Normal {
            self.open.remove(&key);
        }
        Ok(done)
    }
}

fn action(alarm: &Alarm, transition: Transition, time: Time, text: String, notify: Notify) -> Action {
    Action { alarm: alarm.clone(), transition, time, text, notify }
}

fn told(by: &Acknowledged) -> String {
    let Acknowledged { who, note, cause, .. } = by;
    let cause = match cause {
        Cause::Choke => "the choke",
        Cause::Source => "the source",
        Cause::Measurement => "the measurement",
        Cause::Other => "something else",
    };
    if note.is_empty() { format!("by {who}: it was {cause}") } else { format!("by {who}: it was {cause}; {note}") }
}

/// Does what is known now say more than what was known before: another place, or a rise of another size?
fn is_news(before: &Detail, now: &Detail) -> bool {
    let same_places = before.places.len() == now.places.len()
        && now.places.iter().all(|place| {
            before.places.iter().any(|old| {
                old.band == place.band && old.state == place.state && (old.rise_db - place.rise_db).abs() < NEWS_DB
            })
        });
    !same_places || (now.places.is_empty() && before.text != now.text)
}

#[cfg(test)]
mod tests;
