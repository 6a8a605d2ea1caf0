//! The control protocol: what the companion asks of the service over a local socket.
//!
//! One JSON object a line, [`LONGEST_LINE`] bytes at most, one reply for each request, in turn. Who asks is known from
//! the kernel ([`Peer`]); who may is decided by the socket's group (mode 0660). The companion reads the record by
//! itself: here is only what changes something, or what the service alone knows.
//!
//! [`Client`] is the companion's end (blocking); [`listen`] and [`converse`] are the service's (tokio).

mod client;
mod messages;
mod server;

pub use client::{Client, ControlError};
pub use messages::{
    Acknowledge, Hello, InstrumentStatus, LaidReference, MarkReference, Reply, Request, SetState, Status, When,
};
pub use server::{ListenError, Peer, converse, listen};

/// The version of the protocol; both ends must have the same.
pub const PROTOCOL: u32 = 1;

/// The longest line of either end, bytes, with its end.
pub const LONGEST_LINE: usize = 64 * 1024;
