//! What users write: the site file, dialects and scenes, parsed and checked with every fault at its place.
//!
//! [`faults`] says what is wrong and shows it, [`walk`] reads a TOML tree by hand and collects all faults of a file.
//! Upon these stand [`site`] (one cabinet and all that watches it), [`dialect`] (how one kind of instrument is spoken
//! to) and [`scene`] (a simulated cabinet). Reading files is the only thing that happens here: no clock, no network.

pub mod dialect;
pub mod faults;
pub mod scene;
pub mod site;
pub mod walk;

/// Date and time of day at a place.
pub type LocalTime = jiff::civil::DateTime;

/// Date and time of day of a zone. Times outside the years -9999 to 9999 are taken as 1970.
pub fn local_time(zone: &jiff::tz::TimeZone, time: hushwatch_quantity::Time) -> LocalTime {
    zone.to_datetime(jiff::Timestamp::from_microsecond(time.as_micros()).unwrap_or_default())
}
