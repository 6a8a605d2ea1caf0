//! A simulated cabinet, and a simulated receiver that looks at it, on a pseudo-terminal.
//!
//! [`Cabinet`] is the physics: sources drive common-mode currents through a network of cables and chokes. It is written
//! apart from the rooms that are tested with it and shares no formula with them. [`Device`] is the receiver as its
//! commands show it (SCPI-1999), pure: bytes in, bytes out. [`SimulatedReceiver`] puts it on a terminal of its own.
//!
//! Plant time goes on with each sweep in lockstep with the answers, or with the real clock, as the scene says.

#![forbid(unsafe_code)]

mod cabinet;
mod choke;
mod command;
mod device;
mod network;
mod random;
mod receiver;
mod site_file;
mod spectrum;

pub use cabinet::{Cabinet, Grid};
pub use device::{Device, Outage, Reply};
pub use receiver::{Options, SceneError, SimulatedReceiver};
pub use site_file::site_file;
