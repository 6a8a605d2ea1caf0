//! The messages. They are made for the wire: nothing of the service's inside is in them.
//!
//! Times are microseconds since 1970 (UTC), plant time, if nothing else is said.

use serde::{Deserialize, Serialize};

/// What is asked.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(tag = "ask", rename_all = "kebab-case")]
pub enum Request {
    /// Who are you? The first request of every conversation.
    Hello,
    /// How are you, and your instruments?
    Status,
    /// Lay a reference.
    Reference(MarkReference),
    /// Take an alarm up.
    Acknowledge(Acknowledge),
    /// The machine is in another operating state from now on; only where the site file leaves that to people.
    State(SetState),
    /// Commit what is gathered, so that whoever reads the record sees all of it.
    Flush,
}

/// A reference to be laid.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct MarkReference {
    /// The tag of the cable.
    pub cable: String,
    /// `before` or `after`.
    pub kind: String,
    /// Which interval of the log.
    pub when: When,
    /// Who marks it; the user of the process if nobody.
    pub who: Option<String>,
    /// Why; needed for an `after` that is not the first one.
    pub note: String,
}

/// An interval of the log.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum When {
    /// The last so many microseconds, up to the newest level of the cable.
    Last(i64),
    /// From the first time up to, not including, the second.
    Between(i64, i64),
}

/// The operator's part of an alarm's life.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Acknowledge {
    /// The alarm's number.
    pub occurrence: u64,
    /// Who takes it up; the user of the process if nobody.
    pub who: Option<String>,
    /// In their own words.
    pub note: String,
    /// `choke`, `source`, `measurement` or `other`.
    pub cause: String,
}

/// An operating state, as people tell it.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct SetState {
    /// Its name, one of those in the site file.
    pub state: String,
}

/// What is answered.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(tag = "reply", rename_all = "kebab-case")]
pub enum Reply {
    /// To [`Request::Hello`].
    Hello(Hello),
    /// To [`Request::Status`].
    Status(Status),
    /// To [`Request::Reference`]: what was laid, one for each band and operating state.
    References {
        /// At least one.
        laid: Vec<LaidReference>,
        /// What could not be laid, and why, in sentences.
        left_out: Vec<String>,
    },
    /// It was done.
    Done,
    /// It was not done.
    Refused {
        /// Why, in a sentence for people.
        why: String,
    },
}

/// Who answers.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct Hello {
    /// [`crate::PROTOCOL`] of the service.
    pub protocol: u32,
    /// The version of the service.
    pub version: String,
    /// The site's name.
    pub site: String,
    /// The record that it writes.
    pub record: String,
}

/// How the service is.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Status {
    /// For how long it has run, microseconds of real time.
    pub up_us: i64,
    /// Its instruments, in the order of the site file.
    pub instruments: Vec<InstrumentStatus>,
    /// Notices that wait for their recipients.
    pub waiting_notices: u64,
    /// What it cannot do at the moment, in sentences; empty if all is well.
    pub troubles: Vec<String>,
}

/// How an instrument is.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct InstrumentStatus {
    /// Its name in the site file.
    pub name: String,
    /// Who it says it is, once it did.
    pub identity: Option<String>,
    /// Sweeps since the start of the service.
    pub sweeps: u64,
    /// Settings that it cannot tell, so that they are taken as asked for.
    pub assumed: Vec<String>,
    /// What is wrong with it, if anything.
    pub trouble: Option<String>,
}

/// A reference that was laid.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct LaidReference {
    /// The band.
    pub band: String,
    /// The operating state.
    pub state: String,
    /// The level, in `unit`.
    pub level_db: f64,
    /// Its standard error, dB.
    pub standard_error_db: f64,
    /// On how many blocks it stands.
    pub blocks: u32,
    /// How many independent blocks would be worth as much.
    pub effective_blocks: f64,
    /// Does it cover less than a day?
    pub provisional: bool,
    /// The unit of the level.
    pub unit: String,
    /// Where the chart of this series now stands, if there is one: the rise that it looks for, dB.
    pub max_rise_db: Option<f64>,
}
