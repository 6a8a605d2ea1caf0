//! Instruments on serial ports: the link, and the engine that speaks a dialect over it.
//!
//! An [`Instrument`] takes a [`SweepPlan`] and gives a [`SweepAnswer`]: a trace for each segment, and what the
//! instrument was set to, as it told it itself. What it cannot tell is marked as assumed; what it tells otherwise gives
//! no answer but an [`InstrumentError`], whose [`ErrorClass`] says which part of the chain is at fault.
//!
//! Inside, [`machine`] holds the conversation as a pure state machine, [`framing`] and [`answer`] find and read the
//! answers, and [`link`] alone knows the port and the clock. The machine gives an action, the link an event back.

pub mod answer;
#[cfg(test)]
mod bench;
pub mod error;
pub mod framing;
mod instrument;
pub mod link;
pub mod machine;
pub mod plan;

pub use error::{ErrorClass, Garbage, InstrumentError};
pub use instrument::Instrument;
pub use link::{Listener, Way};
pub use plan::{Reading, Segment, Settings, SweepAnswer, SweepPlan, Value};
