//! Times as people write them: RFC 3339, or how long ago.

use hushwatch_config::site::Site;
use hushwatch_quantity::{Span, Time};
use jiff::SpanRelativeTo;

use crate::failure::Failure;

/// A time (`2026-09-20T06:00:00Z`), a local date or date with time of day, or how long before `now` (`2h`, `3 days`).
pub(crate) fn time(text: &str, now: Time, site: &Site) -> Result<Time, Failure> {
    if let Ok(time) = Time::parse_rfc3339(text) {
        return Ok(time);
    }
    if let Ok(ago) = span(text) {
        return Ok(now - ago);
    }
    let local = text.parse::<jiff::civil::DateTime>().ok().or_else(|| {
        let date = text.parse::<jiff::civil::Date>().ok()?;
        Some(date.at(0, 0, 0, 0))
    });
    let zoned = local.and_then(|local| site.zone.to_ambiguous_zoned_datetime(local).compatible().ok());
    match zoned {
        Some(zoned) => Ok(Time::from_micros(zoned.timestamp().as_microsecond())),
        None => Err(Failure::wrong_call(format!(
            "`{text}` is no time: write RFC 3339 as in 2026-09-20T06:00:00Z, a local date as in 2026-09-20, or how long \
             ago as in `2h` or `3 days`"
        ))),
    }
}

/// A span as in `90 s`, `24h`, `3 days`; a day has 24 hours.
pub(crate) fn span(text: &str) -> Result<Span, Failure> {
    let wrong = || Failure::wrong_call(format!("`{text}` is no span of time: write it as in `60s`, `24h` or `3 days`"));
    let parsed: jiff::Span = text.parse().map_err(|_| wrong())?;
    let secs = parsed.total((jiff::Unit::Second, SpanRelativeTo::days_are_24_hours())).map_err(|_| wrong())?;
    if secs <= 0.0 {
        return Err(wrong());
    }
    Ok(Span::from_secs_f64(secs))
}

/// A time in the site's zone, to the minute.
pub(crate) fn local(site: &Site, time: Time) -> String {
    site.local(time).strftime("%Y-%m-%d %H:%M").to_string()
}

/// How long ago, roughly.
pub(crate) fn ago(now: Time, time: Time) -> String {
    let secs = (now - time).as_secs_f64();
    let plural = |count: f64, unit: &str| {
        let count = count.floor();
        if count == 1.0 { format!("1 {unit} ago") } else { format!("{count} {unit}s ago") }
    };
    match secs {
        ..2.0 => String::from("now"),
        ..120.0 => format!("{} s ago", secs.floor()),
        ..7200.0 => format!("{} min ago", (secs / 60.0).floor()),
        ..172_800.0 => plural(secs / 3600.0, "hour"),
        _ => plural(secs / 86_400.0, "day"),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn spans() {
        for (text, secs) in [("60s", 60), ("60 s", 60), ("24h", 86_400), ("3 days", 259_200), ("1 week", 604_800)] {
            assert_eq!(span(text).expect(text), Span::from_secs(secs), "{text}");
        }
        for text in ["", "7", "soon", "-3h", "0 s"] {
            assert!(span(text).is_err(), "{text}");
        }
    }

    #[test]
    fn how_long_ago() {
        let now = Time::from_secs(1_000_000);
        for (secs, text) in
            [(0, "now"), (59, "59 s ago"), (600, "10 min ago"), (7200, "2 hours ago"), (86_400 * 9, "9 days ago")]
        {
            assert_eq!(ago(now, now - Span::from_secs(secs)), text);
        }
    }
}
