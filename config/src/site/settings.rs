//! Small tables of the site file: `[site]`, `[record]`, `[drift]`.

use std::ops::Range;
use std::path::{Path, PathBuf};

use hushwatch_quantity::Span;
use jiff::tz::TimeZone;

use crate::faults::Fault;
use crate::walk::{Table, Value, nearest};

/// The folder in which a record lies if the site file does not say where.
const RECORD_FOLDER: &str = "/var/lib/hushwatch";

const COMMIT_EVERY: Span = Span::from_secs(10);
const KEEP_LEVELS: Span = Span::from_days(400);
const BLOCK: Span = Span::from_mins(10);

/// False alarms by default: one in five years of 365.25 days.
const FALSE_ALARMS: (f64, Span) = (1.0, Span::from_hours(5 * 8766));

/// The longest path of a Unix socket, bytes: 108 on Linux with the closing nought (unix(7)).
const LONGEST_SOCKET_PATH: usize = 107;

/// Where and how long things are kept.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct RecordSettings {
    /// The database file.
    pub path: PathBuf,
    /// How often levels are committed: what a power cut may cost.
    pub commit_every: Span,
    /// How long every level is kept.
    pub keep_levels: Span,
}

/// How levels are charted.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Drift {
    /// So many false alarms ...
    pub false_alarms_count: f64,
    /// ... in this span, over all cables, bands and operating states of the site together.
    pub false_alarms_per: Span,
    /// Levels are reduced to robust blocks of this length before they are charted.
    pub block: Span,
}

pub(super) struct Head {
    pub(super) name: String,
    pub(super) timezone: Option<String>,
    pub(super) zone: TimeZone,
}

pub(super) fn read_head(table: &mut Table<'_>) -> Option<Head> {
    table.keys(&["name", "timezone"]);
    let name = table.required("name", "name = \"Bottling hall 2, cabinet E14\"").and_then(|value| value.line());
    let zone = table.read_if_any("timezone", read_zone);
    let (name, (timezone, zone)) = (name?.to_owned(), zone?.unwrap_or_else(|| (None, TimeZone::system())));
    Some(Head { name, timezone, zone })
}

fn read_zone(value: Value<'_>) -> Option<(Option<String>, TimeZone)> {
    let name = value.line()?;
    if let Ok(zone) = TimeZone::get(name) {
        return Some((Some(name.to_owned()), zone));
    }
    let zones: Vec<String> = jiff::tz::db().available().map(|zone| zone.to_string()).collect();
    let help = match nearest(name, zones.iter().map(String::as_str)) {
        Some(near) => format!("did you mean `{near}`?"),
        None => String::from("write a zone of the IANA database, as in `\"Europe/Vienna\"`"),
    };
    value.refuse(format!("there is no time zone `{name}`"), help)
}

/// The record's settings and the path of the control socket.
pub(super) fn read_record(root: &Table<'_>, base: &Path, site_name: &str) -> Option<(RecordSettings, PathBuf)> {
    let by_default = Path::new(RECORD_FOLDER).join(format!("{}.db", slug(site_name)));
    let Some(value) = root.optional("record") else {
        let settings = RecordSettings { path: by_default, commit_every: COMMIT_EVERY, keep_levels: KEEP_LEVELS };
        let socket = with_suffix(&settings.path, ".sock");
        return Some((settings, socket));
    };
    value.table(|table| {
        table.keys(&["path", "commit_every", "keep_levels", "socket"]);
        let record = table.read_or("path", by_default, |value| value.line().map(|path| base.join(path)));
        let limits = Span::from_millis(10)..=Span::from_hours(1);
        let commit_every = table.read_or("commit_every", COMMIT_EVERY, |value| value.duration(limits));
        let limits = Span::from_hours(1)..=Span::from_days(36_525);
        let keep_levels = table.read_or("keep_levels", KEEP_LEVELS, |value| value.duration(limits));
        let socket = table.optional("socket");
        let socket_path = match socket {
            Some(value) => value.line().map(|path| base.join(path)),
            None => record.as_ref().map(|path| with_suffix(path, ".sock")),
        };
        if let Some(socket_path) = &socket_path {
            check_socket(socket_path, socket.or(table.optional("path")).unwrap_or(value))?;
        }
        let settings = RecordSettings { path: record?, commit_every: commit_every?, keep_levels: keep_levels? };
        Some((settings, socket_path?))
    })
}

fn check_socket(path: &Path, place: Value<'_>) -> Option<()> {
    let length = path.as_os_str().len();
    if length <= LONGEST_SOCKET_PATH {
        return Some(());
    }
    place.refuse(
        format!("the path of the control socket has {length} bytes: {}", path.display()),
        format!("it may have {LONGEST_SOCKET_PATH}: write a shorter one as `socket = \"/run/hushwatch/e14.sock\"` in [record]"),
    )
}

fn with_suffix(path: &Path, suffix: &str) -> PathBuf {
    let mut text = path.as_os_str().to_owned();
    text.push(suffix);
    PathBuf::from(text)
}

/// A file name made of the site's name: small letters and digits, everything else a single `-`; 48 at most, so that
/// the socket beside the record has a path of legal length.
fn slug(name: &str) -> String {
    let mut slug = String::new();
    for letter in name.chars() {
        if letter.is_ascii_alphanumeric() {
            slug.push(letter.to_ascii_lowercase());
        } else if !slug.is_empty() && !slug.ends_with('-') {
            slug.push('-');
        }
        if slug.len() == 48 {
            break;
        }
    }
    let slug = slug.trim_end_matches('-');
    if slug.is_empty() { String::from("site") } else { slug.to_owned() }
}

/// The settings with the places that are needed to hold them against others.
pub(super) struct PlacedDrift {
    pub(super) drift: Drift,
    pub(super) block_place: Option<Range<usize>>,
}

pub(super) fn read_drift(root: &Table<'_>) -> Option<PlacedDrift> {
    let Some(value) = root.optional("drift") else {
        let (false_alarms_count, false_alarms_per) = FALSE_ALARMS;
        let drift = Drift { false_alarms_count, false_alarms_per, block: BLOCK };
        return Some(PlacedDrift { drift, block_place: None });
    };
    value.table(|table| {
        table.keys(&["false_alarms", "block"]);
        let rate = table.read_or("false_alarms", FALSE_ALARMS, |value| value.rate());
        let limits = Span::from_secs(1)..=Span::from_days(1);
        let length = table.read_or("block", BLOCK, |value| value.duration(limits));
        let block = table.optional("block");
        let ((false_alarms_count, false_alarms_per), length) = (rate?, length?);
        if per_block(false_alarms_count, false_alarms_per, length) > 0.1 {
            let place = table.optional("false_alarms").or(block).map_or(table.span(), |value| value.span());
            let fault = Fault::new(place, "more than one false alarm in ten blocks is no alarm at all");
            table.push(fault.with_help("allow fewer, as in `1 per 5 years`, or take shorter blocks"));
            return None;
        }
        let drift = Drift { false_alarms_count, false_alarms_per, block: length };
        Some(PlacedDrift { drift, block_place: block.map(|value| value.span()) })
    })
}

fn per_block(count: f64, per: Span, block: Span) -> f64 {
    count * block.as_secs_f64() / per.as_secs_f64()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn slugs_are_short_and_plain() {
        assert_eq!(slug("Bottling hall 2, cabinet E14"), "bottling-hall-2-cabinet-e14");
        assert_eq!(slug("  \u{dc}ber / Halle "), "ber-halle");
        assert_eq!(slug("\u{6c34}"), "site");
        assert_eq!(slug(&"hall ".repeat(100)).len(), 48);
    }
}
