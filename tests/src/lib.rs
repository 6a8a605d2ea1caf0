//! What the end-to-end tests share: the real programs, built once, and an instrument that is not the project's own
//! simulator.

#![allow(
    clippy::expect_used,
    clippy::unwrap_used,
    clippy::panic,
    clippy::missing_panics_doc,
    reason = "a test fails by a panic that tells what was expected"
)]

pub mod device;
pub mod plant;
pub mod programs;
pub mod sqlite;
pub mod terminal;
