//! The words that every room of the house shares: time, levels in dB with their reference, quality
//! with its reason, detectors and filter shapes.
//!
//! This crate depends on nothing and knows no clock: whoever needs the present time is told it.

mod decibel;
mod level;
mod quality;
mod receiver;
mod time;

pub use decibel::{amplitude_to_db, db_to_amplitude, db_to_power, from_centi, power_sum_db, power_to_db, to_centi};
pub use level::LevelUnit;
pub use quality::{Grade, Quality, Reason};
pub use receiver::{Detector, FilterShape, ReceiverUnit};
pub use time::{Interval, Span, Time, TimeError};
