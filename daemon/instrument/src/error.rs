//! What can go wrong between a plan and its answer, in words for people.

use core::time::Duration;

use thiserror::Error;

use crate::answer::AnswerError;
use crate::framing::FramingError;

/// Why there is no answer to a plan.
#[derive(Clone, Debug, PartialEq, Error)]
pub enum InstrumentError {
    /// The port cannot be opened, or was closed from the other side: unplugged, or the path is not there.
    #[error("{port}: {why}")]
    Gone {
        /// The path of the port.
        port: String,
        /// What the system says.
        why: String,
    },
    /// Another process holds the port.
    #[error("another process holds {port}")]
    Held {
        /// The path of the port.
        port: String,
    },
    /// No answer, or only a part of it, within the time.
    #[error("no whole answer to `{question}` within {} ms", waited.as_millis())]
    NoAnswer {
        /// What had been asked.
        question: String,
        /// How long was waited.
        waited: Duration,
    },
    /// Somebody answers, but not the one who should.
    #[error("the instrument says it is `{got}`, not `{expected}`")]
    WrongIdentity {
        /// What it says.
        got: String,
        /// What must be a part of it, or what it said before.
        expected: String,
    },
    /// What was read back is not what had been asked for.
    #[error("the instrument is at {setting} = {got}, not at {asked}")]
    SettingsMismatch {
        /// The setting's name in the dialect.
        setting: String,
        /// What had been asked for.
        asked: String,
        /// What was read back.
        got: String,
    },
    /// The instrument does not take a setting.
    #[error("the instrument refuses `{command}`: {why}")]
    Refused {
        /// The command.
        command: String,
        /// The errors of its queue, or what else stands against it.
        why: String,
    },
    /// The instrument cannot sweep so many points at once: the plan is to be made anew.
    #[error("the instrument cannot sweep {asked} points at once: {limit} are the most")]
    TooManyPoints {
        /// What had been asked for.
        asked: u32,
        /// What it can.
        limit: u32,
    },
    /// An answer came that is none.
    #[error("the answer to `{question}` is none: {what}")]
    Garbage {
        /// What had been asked.
        question: String,
        /// What is wrong with it.
        what: Garbage,
    },
    /// The instrument tells an error of its own.
    #[error("after `{after}` the instrument tells: {errors}")]
    Device {
        /// What had been sent.
        after: String,
        /// The errors of its queue.
        errors: String,
    },
    /// The plan itself makes no sense, or asks for what the dialect has no words for.
    #[error("{0}")]
    Plan(String),
}

/// What is wrong with an answer.
#[derive(Clone, Debug, PartialEq, Error)]
pub enum Garbage {
    /// Its frame: line or block.
    #[error(transparent)]
    Frame(#[from] FramingError),
    /// What it says.
    #[error(transparent)]
    Content(#[from] AnswerError),
    /// Bytes that nobody had asked for.
    #[error("unasked for, `{0}` had come")]
    Unasked(String),
    /// The line never falls silent.
    #[error("the line does not fall silent")]
    Restless,
}

/// Which part of the chain is at fault: what alarms, gaps and logs tell apart.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash)]
pub enum ErrorClass {
    /// The port is not there.
    Gone,
    /// The port is in another process's hands.
    Held,
    /// The port is there, the instrument is silent.
    NoAnswer,
    /// Another instrument.
    WrongIdentity,
    /// A setting that bears on the level is not what was asked for.
    Settings,
    /// Answers that make no sense.
    Garbage,
    /// The instrument tells an error.
    Device,
    /// No fault of the instrument: make another plan.
    Plan,
}

impl ErrorClass {
    /// A few words for people.
    pub fn label(self) -> &'static str {
        match self {
            Self::Gone => "unplugged",
            Self::Held => "port held by another process",
            Self::NoAnswer => "no answer",
            Self::WrongIdentity => "wrong identity",
            Self::Settings => "settings",
            Self::Garbage => "garbled answer",
            Self::Device => "device error",
            Self::Plan => "plan",
        }
    }
}

impl InstrumentError {
    /// Which part of the chain is at fault.
    pub fn class(&self) -> ErrorClass {
        match self {
            Self::Gone { .. } => ErrorClass::Gone,
            Self::Held { .. } => ErrorClass::Held,
            Self::NoAnswer { .. } => ErrorClass::NoAnswer,
            Self::WrongIdentity { .. } => ErrorClass::WrongIdentity,
            Self::SettingsMismatch { .. } | Self::Refused { .. } => ErrorClass::Settings,
            Self::Garbage { .. } => ErrorClass::Garbage,
            Self::Device { .. } => ErrorClass::Device,
            Self::TooManyPoints { .. } | Self::Plan(_) => ErrorClass::Plan,
        }
    }
}

/// Bytes as people can read them: printable ASCII as it is, the rest escaped, and not more than a line of it.
pub fn readable(bytes: &[u8]) -> String {
    const LONGEST: usize = 80;
    let mut text = bytes.iter().take(LONGEST).map(|byte| byte.escape_ascii().to_string()).collect::<String>();
    if bytes.len() > LONGEST {
        text.push_str("...");
    }
    text
}
