//! What the end-to-end tests share: the real programs, built once, and an instrument that is not the project's own
//! simulator.

pub mod device;
pub mod plant;
pub mod programs;
pub mod sqlite;
pub mod terminal;
