//! What goes between the machine and the line: rules once, then an action for each event.

use core::time::Duration;

use hushwatch_config::dialect::Dialect;
use hushwatch_quantity::ReceiverUnit;

use crate::error::{Garbage, InstrumentError};
use crate::framing::{Answer, Expected};
use crate::plan::SweepAnswer;

/// What the machine must know of an instrument beside its plans.
#[derive(Clone, Debug)]
pub struct Rules {
    /// How it is spoken to.
    pub dialect: Dialect,
    /// Part of the answer to the identity query that must match; without it the first identity is remembered.
    pub identity: Option<String>,
    /// How long an answer may take, beside the time of the sweep and of the bytes.
    pub timeout: Duration,
    /// Time of one byte on the line.
    pub byte_time: Duration,
    /// Input attenuation to be set, dB; `None` leaves it to the instrument.
    pub attenuation_db: Option<f64>,
    /// Unit of the answers.
    pub unit: ReceiverUnit,
    /// Is the instrument's own clock to be asked?
    pub ask_clock: bool,
    /// The path of the port, for messages.
    pub port: String,
}

/// What has happened.
#[derive(Clone, Debug, PartialEq)]
pub enum Event {
    /// The port is open and its buffers are empty.
    Opened,
    /// The port cannot be opened, or is not there any more; with what the system says.
    Gone(String),
    /// The port cannot be opened, since another process holds it.
    Held,
    /// The bytes were written, or the time has passed.
    Done,
    /// A whole answer.
    Answered(Answer),
    /// No whole answer, or the bytes could not be written, in time.
    TimedOut,
    /// What came is no answer, or came unasked.
    Garbled(Garbage),
    /// The line is quiet.
    Quiet,
    /// The line did not fall silent in time.
    Restless,
}

/// What is to be done next. Each action ends in one event.
#[derive(Clone, Debug, PartialEq)]
pub enum Action {
    /// Close the port if it is open, wait, open it: `Opened`, `Gone` or `Held`.
    Open {
        /// How long to wait before.
        after: Duration,
    },
    /// Write: `Done`, `TimedOut`, `Garbled` (bytes were waiting that nobody asked for; nothing was written) or `Gone`.
    Tell {
        /// What to write.
        bytes: Vec<u8>,
    },
    /// Write, then read one answer: as `Tell`, but `Answered` instead of `Done`.
    Ask {
        /// What to write.
        bytes: Vec<u8>,
        /// What the answer looks like.
        expected: Expected,
        /// How long it may take.
        patience: Patience,
    },
    /// Read and throw away until nothing came for `quiet`: `Quiet`, `Restless` or `Gone`.
    Drain {
        /// For how long nothing may come.
        quiet: Duration,
        /// How long this may take.
        at_most: Duration,
    },
    /// Wait: `Done`.
    Pause(Duration),
    /// The plan is done with. The next event is none of the line's, but [`Machine::start`](super::Machine::start).
    Finish(Result<SweepAnswer, InstrumentError>),
}

/// How long an answer may take.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Patience {
    /// Until its first byte.
    pub first: Duration,
    /// Between two bytes.
    pub between: Duration,
    /// From the first byte to the last.
    pub whole: Duration,
}
