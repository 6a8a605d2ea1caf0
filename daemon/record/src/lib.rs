//! The record: one SQLite file that holds what was measured, what was concluded from it, and what people did.
//!
//! One [`Writer`] owns the file, and it alone writes; any number of [`Reader`]s look on. What is written gathers in one
//! transaction until [`Writer::commit`], so that levels, the blocks they closed and the chart state that has seen those
//! blocks are on the disk together or not at all (write-ahead log, `synchronous = FULL`).
//!
//! Tables are in the singular and made for the machine (numbers for names, microseconds, hundredths of a dB); views in
//! the plural say the same to people: `levels`, `blocks`, `gaps`, `epochs`, `alarms`, `journal`, `reference_list`,
//! `site_versions`. The schema stands in `schema/`, one file for each version.

mod error;
mod open;
mod read;
mod rows;
mod write;

pub use error::RecordError;
pub use read::{Filter, Read, Reader};
pub use rows::{
    AlarmRow, EpochRow, GapRow, JournalRow, LevelRow, NewLevel, NewReference, NewSweep, OutboxRow, ReferenceRow,
    SeriesRow, SiteVersionRow,
};
pub use write::Writer;

/// The number of a cable in the record.
pub type CableId = i64;

/// By how much the record grows with each sweep, bytes: the sweep, its place in the index, and what blocks and settings
/// take on average. Measured by a test on generated records.
pub const SWEEP_BYTES: f64 = 41.0;

/// By how much the record grows with each level of a sweep, bytes; measured likewise.
pub const LEVEL_BYTES: f64 = 21.0;

/// The number of a set of settings in the record.
pub type SettingId = i64;
