//! The system's clock, read in this one place of the wiring and handed on as an argument.

use std::time::{SystemTime, UNIX_EPOCH};

use hushwatch_quantity::Time;

/// The present time of the system's clock; a clock before 1970 counts backwards from there.
pub(crate) fn now() -> Time {
    let micros = match SystemTime::now().duration_since(UNIX_EPOCH) {
        Ok(since) => i64::try_from(since.as_micros()).unwrap_or(i64::MAX),
        Err(before) => i64::try_from(before.duration().as_micros()).map_or(i64::MIN, |micros| -micros),
    };
    Time::from_micros(micros)
}
