//! Points in time and spans, in whole microseconds.
//!
//! Times are UTC since 1970-01-01 without leap seconds. They are written as RFC 3339; zones belong to those
//! who talk to people.

use core::fmt;
use core::fmt::Write as _;
use core::ops::{Add, Sub};

const MICROS_PER_SEC: i64 = 1_000_000;
const SECS_PER_DAY: i64 = 86_400;

/// A point in time: microseconds since 1970-01-01T00:00:00Z.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub struct Time(i64);

/// A span of time in microseconds; may be negative.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub struct Span(i64);

/// A half-open interval: `from` belongs to it, `to` does not.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash)]
pub struct Interval {
    /// First instant.
    pub from: Time,
    /// First instant after.
    pub to: Time,
}

/// A text is not a time after RFC 3339, or lies outside the years 0000 to 9999.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct TimeError;

impl fmt::Display for TimeError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str("not a time as in 2026-11-20T08:30:00Z (RFC 3339)")
    }
}

impl core::error::Error for TimeError {}

impl Time {
    /// From microseconds since 1970 (UTC).
    pub const fn from_micros(micros: i64) -> Self {
        Self(micros)
    }

    /// From whole seconds since 1970 (UTC); saturates.
    pub const fn from_secs(secs: i64) -> Self {
        Self(secs.saturating_mul(MICROS_PER_SEC))
    }

    /// Microseconds since 1970 (UTC).
    pub const fn as_micros(self) -> i64 {
        self.0
    }

    /// The start of the block of length `block` in which this time lies; blocks are counted from 1970, so
    /// that every part of the house cuts them alike. `block` must be positive.
    #[must_use]
    pub fn floor_to(self, block: Span) -> Self {
        Self(self.0.div_euclid(block.0.max(1)) * block.0.max(1))
    }

    /// Reads RFC 3339, with any offset; digits beyond microseconds are cut.
    ///
    /// # Errors
    /// The text is not RFC 3339.
    pub fn parse_rfc3339(text: &str) -> Result<Self, TimeError> {
        parse(text).ok_or(TimeError)
    }
}

impl Span {
    /// Nothing.
    pub const ZERO: Self = Self(0);

    /// From microseconds.
    pub const fn from_micros(micros: i64) -> Self {
        Self(micros)
    }

    /// From milliseconds; saturates.
    pub const fn from_millis(millis: i64) -> Self {
        Self(millis.saturating_mul(1000))
    }

    /// From seconds; saturates.
    pub const fn from_secs(secs: i64) -> Self {
        Self(secs.saturating_mul(MICROS_PER_SEC))
    }

    /// From minutes; saturates.
    pub const fn from_mins(mins: i64) -> Self {
        Self::from_secs(mins.saturating_mul(60))
    }

    /// From hours; saturates.
    pub const fn from_hours(hours: i64) -> Self {
        Self::from_secs(hours.saturating_mul(3600))
    }

    /// From days of 24 hours; saturates.
    pub const fn from_days(days: i64) -> Self {
        Self::from_secs(days.saturating_mul(SECS_PER_DAY))
    }

    /// From a number of seconds, rounded to the microsecond; saturates, and what is no number is nothing.
    pub fn from_secs_f64(secs: f64) -> Self {
        Self((secs * MICROS_PER_SEC as f64).round() as i64)
    }

    /// Microseconds.
    pub const fn as_micros(self) -> i64 {
        self.0
    }

    /// Seconds.
    pub fn as_secs_f64(self) -> f64 {
        self.0 as f64 / MICROS_PER_SEC as f64
    }

    /// As the standard library's duration; a negative span is none.
    pub fn to_duration(self) -> core::time::Duration {
        core::time::Duration::from_micros(self.0.max(0).unsigned_abs())
    }
}

impl Interval {
    /// From `from` up to, not including, `to`.
    pub const fn new(from: Time, to: Time) -> Self {
        Self { from, to }
    }

    /// Does `time` lie in it?
    pub fn contains(self, time: Time) -> bool {
        self.from <= time && time < self.to
    }

    /// Its length; negative if it ends before it begins.
    pub fn span(self) -> Span {
        self.to - self.from
    }
}

impl Add<Span> for Time {
    type Output = Self;
    fn add(self, span: Span) -> Self {
        Self(self.0.saturating_add(span.0))
    }
}

impl Sub<Span> for Time {
    type Output = Self;
    fn sub(self, span: Span) -> Self {
        Self(self.0.saturating_sub(span.0))
    }
}

impl Sub for Time {
    type Output = Span;
    fn sub(self, earlier: Self) -> Span {
        Span(self.0.saturating_sub(earlier.0))
    }
}

impl Add for Span {
    type Output = Self;
    fn add(self, other: Self) -> Self {
        Self(self.0.saturating_add(other.0))
    }
}

impl Sub for Span {
    type Output = Self;
    fn sub(self, other: Self) -> Self {
        Self(self.0.saturating_sub(other.0))
    }
}

/// RFC 3339 in UTC, with as many decimals as are needed: `2026-11-20T08:30:00.25Z`.
impl fmt::Display for Time {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let secs = self.0.div_euclid(MICROS_PER_SEC);
        let micros = self.0.rem_euclid(MICROS_PER_SEC);
        let (year, month, day) = civil_from_days(secs.div_euclid(SECS_PER_DAY));
        let of_day = secs.rem_euclid(SECS_PER_DAY);
        let (hour, minute, second) = (of_day / 3600, of_day / 60 % 60, of_day % 60);
        let mut text = format!("{year:04}-{month:02}-{day:02}T{hour:02}:{minute:02}:{second:02}");
        if micros != 0 {
            text.push_str(format!(".{micros:06}").trim_end_matches('0'));
        }
        text.push('Z');
        f.pad(&text)
    }
}

/// The span in its largest fitting units, two at most: `2 days 4 h`, `10 min`, `50 ms`.
impl fmt::Display for Span {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        const UNITS: [(i64, &str); 6] = [
            (SECS_PER_DAY * MICROS_PER_SEC, "days"),
            (3600 * MICROS_PER_SEC, "h"),
            (60 * MICROS_PER_SEC, "min"),
            (MICROS_PER_SEC, "s"),
            (1000, "ms"),
            (1, "us"),
        ];
        let mut text = String::from(if self.0 < 0 { "-" } else { "" });
        let mut rest = self.0.saturating_abs();
        let first = UNITS.iter().position(|(size, _)| rest >= *size);
        let Some(first) = first else { return f.pad("0 s") };
        for (size, unit) in UNITS.iter().skip(first).take(2) {
            let count = rest / size;
            rest %= size;
            if count > 0 {
                if !text.is_empty() && text != "-" {
                    text.push(' ');
                }
                let unit = if count == 1 && *unit == "days" { "day" } else { unit };
                let _ = write!(text, "{count} {unit}");
            }
        }
        f.pad(&text)
    }
}

/// Year, month and day of a day number counted from 1970-01-01 in the proleptic Gregorian calendar.
/// Eras of 400 years have 146 097 days; the year is taken to begin in March, so that the leap day is its last.
fn civil_from_days(days: i64) -> (i64, i64, i64) {
    let shifted = days + 719_468;
    let era = shifted.div_euclid(146_097);
    let of_era = shifted.rem_euclid(146_097);
    let year_of_era = (of_era - of_era / 1460 + of_era / 36_524 - of_era / 146_096) / 365;
    let of_year = of_era - (365 * year_of_era + year_of_era / 4 - year_of_era / 100);
    let march_month = (5 * of_year + 2) / 153;
    let day = of_year - (153 * march_month + 2) / 5 + 1;
    let month = if march_month < 10 { march_month + 3 } else { march_month - 9 };
    (year_of_era + era * 400 + i64::from(month <= 2), month, day)
}

/// The inverse of [`civil_from_days`].
fn days_from_civil(year: i64, month: i64, day: i64) -> i64 {
    let march_year = year - i64::from(month <= 2);
    let era = march_year.div_euclid(400);
    let year_of_era = march_year.rem_euclid(400);
    let of_year = (153 * ((month + 9) % 12) + 2) / 5 + day - 1;
    era * 146_097 + year_of_era * 365 + year_of_era / 4 - year_of_era / 100 + of_year - 719_468
}

fn parse(text: &str) -> Option<Time> {
    let bytes = text.as_bytes();
    let number = |range: core::ops::Range<usize>| -> Option<i64> {
        let digits = bytes.get(range)?;
        digits.iter().all(u8::is_ascii_digit).then(|| digits.iter().fold(0, |sum, d| sum * 10 + i64::from(d - b'0')))
    };
    let mark = |at: usize, wanted: &[u8]| bytes.get(at).is_some_and(|byte| wanted.contains(byte));
    let (year, month, day) = (number(0..4)?, number(5..7)?, number(8..10)?);
    let (hour, minute, second) = (number(11..13)?, number(14..16)?, number(17..19)?);
    let shaped = mark(4, b"-") && mark(7, b"-") && mark(10, b"Tt ") && mark(13, b":") && mark(16, b":");
    let days = days_from_civil(year, month, day);
    if !shaped || hour > 23 || minute > 59 || second > 60 || civil_from_days(days) != (year, month, day) {
        return None;
    }
    let mut at = 19;
    let mut micros = 0;
    if mark(at, b".") {
        at += 1;
        let digits = bytes[at..].iter().take_while(|byte| byte.is_ascii_digit()).count();
        if digits == 0 {
            return None;
        }
        for place in 0..6 {
            micros = micros * 10 + if place < digits { i64::from(bytes[at + place] - b'0') } else { 0 };
        }
        at += digits;
    }
    let offset = match bytes.get(at)? {
        b'Z' | b'z' if at + 1 == bytes.len() => 0,
        sign @ (b'+' | b'-') if at + 6 == bytes.len() && mark(at + 3, b":") => {
            let (hours, minutes) = (number(at + 1..at + 3)?, number(at + 4..at + 6)?);
            if hours > 23 || minutes > 59 {
                return None;
            }
            (hours * 3600 + minutes * 60) * if *sign == b'+' { 1 } else { -1 }
        }
        _ => return None,
    };
    let secs = days * SECS_PER_DAY + hour * 3600 + minute * 60 + second - offset;
    Some(Time(secs * MICROS_PER_SEC + micros))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn rfc_3339_there_and_back() {
        // The first two are examples of RFC 3339, 5.8; the numbers of seconds follow from the calendar.
        for (text, micros, written) in [
            ("1985-04-12T23:20:50.52Z", 482_196_050_520_000, "1985-04-12T23:20:50.52Z"),
            ("1996-12-19T16:39:57-08:00", 851_042_397_000_000, "1996-12-20T00:39:57Z"),
            ("1970-01-01T00:00:00Z", 0, "1970-01-01T00:00:00Z"),
            ("1969-12-31T23:59:59.999999Z", -1, "1969-12-31T23:59:59.999999Z"),
            ("2024-02-29 12:00:00.1234567+01:00", 1_709_204_400_123_456, "2024-02-29T11:00:00.123456Z"),
        ] {
            let time = Time::parse_rfc3339(text).expect(text);
            assert_eq!((time.as_micros(), time.to_string().as_str()), (micros, written), "{text}");
        }
    }

    #[test]
    fn what_is_no_time_is_refused() {
        for text in [
            "",
            "2026",
            "2026-02-29T00:00:00Z",
            "2026-13-01T00:00:00Z",
            "2026-01-01T24:00:00Z",
            "2026-01-01T00:00:00",
            "2026-01-01T00:00:00.Z",
            "2026-01-01T00:00:00+1:00",
            "2026-01-01T00:00:00Zx",
            "2026-01-01T00:00:00\u{fc}",
        ] {
            assert_eq!(Time::parse_rfc3339(text), Err(TimeError), "{text}");
        }
    }

    #[test]
    fn spans_are_written_for_people() {
        for (span, text) in [
            (Span::ZERO, "0 s"),
            (Span::from_millis(50), "50 ms"),
            (Span::from_mins(10), "10 min"),
            (Span::from_hours(28), "1 day 4 h"),
            (Span::from_days(400), "400 days"),
            (Span::from_secs_f64(-1.5), "-1 s 500 ms"),
        ] {
            assert_eq!(span.to_string(), text);
        }
    }

    #[test]
    fn blocks_are_cut_from_1970_also_before_it() {
        let block = Span::from_mins(10);
        assert_eq!(Time::from_secs(1201).floor_to(block), Time::from_secs(1200));
        assert_eq!(Time::from_secs(-1).floor_to(block), Time::from_secs(-600));
    }
}
