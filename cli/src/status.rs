//! `hushwatch status`: every cable in a line, what is wrong, and whether the service is well.

use std::io::Write;
use std::process::ExitCode;

use anstyle::{AnsiColor, Style};
use clap::Args;
use hushwatch_alarm::{Alarm, AlarmState};
use hushwatch_config::site::Site;
use hushwatch_control::{ControlError, Reply, Request, Status};
use hushwatch_drift::{Suppression, Verdict};
use hushwatch_quantity::Grade;
use hushwatch_report::{Cell, table};
use serde::Serialize;

use crate::context::{Context, Opened, print_json, width};
use crate::failure::Outcome;
use crate::standing::{CableStanding, Picture, PlaceStanding, picture};
use crate::times::{ago, local};
use crate::written::{WrittenAlarm, hundredths};

/// An alarm is active.
const ALARMED: u8 = 1;

/// How does everything stand?
#[derive(Args, Default)]
pub(crate) struct Arguments {
    /// Each band in each operating state, with the reason of its verdict
    #[arg(long, short)]
    verbose: bool,
}

/// Tells how everything stands; 1 if an alarm is active.
pub(crate) fn run(context: &Context, arguments: &Arguments) -> Outcome {
    let mut opened = context.open()?;
    let service = ask_service(&mut opened);
    let picture = opened.at_once(|read| picture(&opened.site, read, opened.plant_now(read)?))?;
    if context.json {
        print_json(&written(&opened.site, &picture, service.as_ref().ok()))?;
    } else {
        let mut out = anstream::stdout().lock();
        out.write_all(page(&opened.site, &picture, arguments.verbose).as_bytes())?;
        out.write_all(service_lines(&opened.site, &picture, service.as_ref()).as_bytes())?;
    }
    let active = picture.alarms.iter().any(|alarm| alarm.state != AlarmState::Returned);
    Ok(if active { ExitCode::from(ALARMED) } else { ExitCode::SUCCESS })
}

fn ask_service(opened: &mut Opened) -> Result<Status, String> {
    match &mut opened.service {
        Ok(client) => match client.ask(&Request::Status) {
            Ok(Reply::Status(status)) => Ok(status),
            Ok(_) => Err(String::from("the service gave another answer than its status")),
            Err(error) => Err(error.to_string()),
        },
        Err(ControlError::NoService(_)) => Err(String::from("not running: nothing is measured")),
        Err(error) => Err(error.to_string()),
    }
}

fn bold(color: AnsiColor) -> Style {
    color.on_default().bold()
}

fn style_of(verdict: Verdict) -> Style {
    match verdict {
        Verdict::Holding => AnsiColor::Green.on_default(),
        Verdict::Weakening => bold(AnsiColor::Yellow),
        Verdict::Regressed => bold(AnsiColor::Red),
        Verdict::Unproven => Style::new(),
    }
}

/// The page for people: headline, alarms, cables.
fn page(site: &Site, picture: &Picture, verbose: bool) -> String {
    let mut text = format!("{}   {}\n\n", site.name, headline(picture));
    for alarm in &picture.alarms {
        text.push_str(&alarm_lines(site, picture, alarm));
    }
    if !picture.alarms.is_empty() {
        text.push('\n');
    }
    let header = ["cable", "verdict", "suppression held", "drop", "level now", "where", "quality", "last"];
    let rows: Vec<Vec<Cell>> = picture.cables.iter().map(|cable| cable_row(picture, cable)).collect();
    text.push_str(&table(&header, &rows, width()));
    for row in &picture.set_aside {
        let warn = bold(AnsiColor::Yellow);
        text.push_str(&format!(
            "{warn}{}: its references no longer count since {}: {}; mark new ones{warn:#}\n",
            row.cable,
            local(site, row.time),
            row.reason
        ));
    }
    if verbose {
        text.push('\n');
        text.push_str(&details(picture));
    }
    text
}

fn headline(picture: &Picture) -> String {
    let active: Vec<&Alarm> = picture.alarms.iter().filter(|alarm| alarm.state != AlarmState::Returned).collect();
    match active.as_slice() {
        [] => {
            let calm = AnsiColor::Green.on_default();
            format!("{calm}no alarm{calm:#}")
        }
        alarms => {
            let loud = bold(AnsiColor::Red);
            let what: Vec<String> = alarms.iter().map(|alarm| alarm.key.to_string().to_uppercase()).collect();
            format!("{loud}{}{loud:#}", what.join(", "))
        }
    }
}

fn alarm_lines(site: &Site, picture: &Picture, alarm: &Alarm) -> String {
    let style = match alarm.state {
        AlarmState::Returned => AnsiColor::Yellow.on_default(),
        AlarmState::Acknowledged => AnsiColor::Red.on_default(),
        AlarmState::Unacknowledged | AlarmState::Normal => bold(AnsiColor::Red),
    };
    let since = alarm
        .detail
        .since
        .map_or_else(String::new, |since| format!(", since {} ({})", local(site, since), ago(picture.now, since)));
    let rise = alarm.detail.rise_db().map_or_else(String::new, |rise| format!(", {rise:+.1} dB"));
    let mut text = format!("{style}#{} {}{rise}{since}, {}{style:#}\n", alarm.occurrence, alarm.key, alarm.state);
    if alarm.detail.places.is_empty() {
        text.push_str(&format!("   {}\n", alarm.detail.text));
    }
    match (&alarm.acknowledged, alarm.state) {
        (Some(by), _) if by.note.is_empty() => text.push_str(&format!("   taken up by {} ({})\n", by.who, by.cause)),
        (Some(by), _) => text.push_str(&format!("   taken up by {} ({}): {}\n", by.who, by.cause, by.note)),
        (None, AlarmState::Returned) => {
            text.push_str(&format!("   over; take note of it with: hushwatch alarms ack {}\n", alarm.occurrence));
        }
        (None, _) => {
            if let Some(first) = alarm.key.kind.look_first().first() {
                text.push_str(&format!("   look first at {first}\n"));
            }
        }
    }
    text
}

fn cable_row(picture: &Picture, cable: &CableStanding) -> Vec<Cell> {
    let last = cable.latest.as_ref().map_or_else(|| String::from("never"), |level| ago(picture.now, level.time));
    let last = if cable.stale { Cell::new(last).styled(bold(AnsiColor::Yellow)) } else { Cell::new(last) };
    let Some(place) = cable.worst() else {
        let level = cable.latest.as_ref().map_or_else(String::new, |level| format!("{:.1}", level.level_db));
        return vec![
            Cell::new(&cable.tag),
            Cell::new("no block yet"),
            Cell::new(""),
            Cell::new(""),
            Cell::number(level),
            Cell::new(""),
            Cell::new(""),
            last,
        ];
    };
    let verdict = match place.verdict {
        Verdict::Regressed => String::from("REGRESSED"),
        other => other.label().to_owned(),
    };
    vec![
        Cell::new(&cable.tag),
        Cell::new(verdict).styled(style_of(place.verdict)),
        Cell::new(if cable.has_choke || place.standing.held.is_some() {
            held(place)
        } else {
            String::from("no choke")
        }),
        Cell::number(place.standing.drop.map_or_else(String::new, |drop| format!("{:+.1} dB", drop.db))),
        Cell::number(place.standing.now_db.map_or_else(String::new, |db| format!("{db:.1} {}", place.series.unit))),
        Cell::new(format!("{}, {}", place.series.band, place.state)),
        quality_cell(place),
        last,
    ]
}

fn quality_cell(place: &PlaceStanding) -> Cell {
    match place.quality {
        None => Cell::new("stale").styled(bold(AnsiColor::Yellow)),
        Some(quality) if quality.grade == Grade::Good => Cell::new("good"),
        Some(quality) => Cell::new(quality.to_string()).styled(bold(AnsiColor::Yellow)),
    }
}

fn held(place: &PlaceStanding) -> String {
    match (place.standing.held, place.standing.achieved) {
        (Some(held), Some(achieved)) => format!("{:.1} of {:.1} dB", held.db, achieved.db),
        (None, _) if place.after.is_some() => String::from("no `before`"),
        _ => String::from("no reference"),
    }
}

/// Every band in every operating state.
fn details(picture: &Picture) -> String {
    let header = ["cable", "band", "state", "before", "after", "now", "held", "drop", "verdict", "why"];
    let mut rows = Vec::new();
    for cable in &picture.cables {
        for place in &cable.places {
            let level = |figure: Option<f64>| Cell::number(figure.map_or_else(String::new, |db| format!("{db:.1}")));
            let interval = |figure: Option<Suppression>| {
                let text = figure.map(|one| format!("{:.1} ({:.1} to {:.1})", one.db, one.low_db, one.high_db));
                Cell::number(text.unwrap_or_default())
            };
            let commissioning = place
                .drop_since_commissioning_db
                .map_or_else(String::new, |drop| format!("; {drop:+.1} dB since commissioning"));
            rows.push(vec![
                Cell::new(&cable.tag),
                Cell::new(&place.series.band),
                Cell::new(&place.state),
                level(place.before.as_ref().map(|row| row.figure.median_db)),
                level(place.after.as_ref().map(|row| row.figure.median_db)),
                level(place.standing.now_db),
                interval(place.standing.held),
                interval(place.standing.drop),
                Cell::new(place.verdict.label()).styled(style_of(place.verdict)),
                Cell::new(format!("{}{commissioning}", place.why)),
            ]);
        }
    }
    table(&header, &rows, width().max(120))
}

fn service_lines(site: &Site, picture: &Picture, service: Result<&Status, &String>) -> String {
    let warn = bold(AnsiColor::Yellow);
    let mut text = String::from("\n");
    match service {
        Err(why) => text.push_str(&format!("service: {warn}{why}{warn:#}\n")),
        Ok(status) => {
            let up = hushwatch_quantity::Span::from_micros(status.up_us);
            text.push_str(&format!("service: up {up}; record {:.1} MB", picture.size as f64 / 1e6));
            match status.waiting_notices {
                0 => text.push('\n'),
                1 => text.push_str(&format!("; {warn}1 notice waits for its recipient{warn:#}\n")),
                more => text.push_str(&format!("; {warn}{more} notices wait for their recipients{warn:#}\n")),
            }
            for one in &status.instruments {
                let who = one.identity.as_deref().unwrap_or("not identified yet");
                match &one.trouble {
                    Some(trouble) => text.push_str(&format!("{}: {warn}{trouble}{warn:#}\n", one.name)),
                    None => text.push_str(&format!("{}: {who}, {} sweeps\n", one.name, one.sweeps)),
                }
            }
            for trouble in &status.troubles {
                text.push_str(&format!("{warn}{trouble}{warn:#}\n"));
            }
        }
    }
    for gap in &picture.gaps {
        text.push_str(&format!("{}: no levels since {}: {}\n", gap.cable, local(site, gap.from), gap.reason));
    }
    text
}

#[derive(Serialize)]
struct Written<'a> {
    site: &'a str,
    time: String,
    cables: Vec<WrittenCable<'a>>,
    alarms: Vec<WrittenAlarm>,
    gaps: Vec<WrittenGap<'a>>,
    record_bytes: u64,
    service: Option<&'a Status>,
}

#[derive(Serialize)]
struct WrittenGap<'a> {
    cable: &'a str,
    from: String,
    reason: &'a str,
}

#[derive(Serialize)]
struct WrittenCable<'a> {
    cable: &'a str,
    description: &'a str,
    verdict: Option<&'static str>,
    last: Option<String>,
    stale: bool,
    places: Vec<WrittenPlace<'a>>,
}

#[derive(Serialize)]
struct WrittenPlace<'a> {
    band: &'a str,
    state: &'a str,
    unit: &'a str,
    verdict: &'static str,
    why: &'a str,
    level_db: Option<f64>,
    before_db: Option<f64>,
    after_db: Option<f64>,
    provisional: bool,
    achieved: Option<Interval>,
    held: Option<Interval>,
    drop: Option<Interval>,
    drop_since_commissioning_db: Option<f64>,
    max_rise_db: Option<f64>,
    quality: Option<String>,
}

/// A difference in dB with its 95 % interval.
#[derive(Serialize)]
struct Interval {
    db: f64,
    low_db: f64,
    high_db: f64,
}

impl From<Suppression> for Interval {
    fn from(from: Suppression) -> Self {
        Self { db: hundredths(from.db), low_db: hundredths(from.low_db), high_db: hundredths(from.high_db) }
    }
}

fn written<'a>(site: &'a Site, picture: &'a Picture, service: Option<&'a Status>) -> Written<'a> {
    Written {
        site: &site.name,
        time: picture.now.to_string(),
        cables: picture.cables.iter().map(written_cable).collect(),
        alarms: picture.alarms.iter().map(WrittenAlarm::from).collect(),
        gaps: picture
            .gaps
            .iter()
            .map(|gap| WrittenGap { cable: &gap.cable, from: gap.from.to_string(), reason: &gap.reason })
            .collect(),
        record_bytes: picture.size,
        service,
    }
}

fn written_cable(cable: &CableStanding) -> WrittenCable<'_> {
    WrittenCable {
        cable: &cable.tag,
        description: &cable.description,
        verdict: cable.worst().map(|place| place.verdict.label()),
        last: cable.latest.as_ref().map(|level| level.time.to_string()),
        stale: cable.stale,
        places: cable.places.iter().map(written_place).collect(),
    }
}

fn written_place(place: &PlaceStanding) -> WrittenPlace<'_> {
    let figures = || place.before.iter().chain(&place.after).map(|row| row.figure);
    WrittenPlace {
        band: &place.series.band,
        state: &place.state,
        unit: &place.series.unit,
        verdict: place.verdict.label(),
        why: place.why,
        level_db: place.standing.now_db.map(hundredths),
        before_db: place.before.as_ref().map(|row| hundredths(row.figure.median_db)),
        after_db: place.after.as_ref().map(|row| hundredths(row.figure.median_db)),
        provisional: figures().any(|figure| figure.provisional),
        achieved: place.standing.achieved.map(Interval::from),
        held: place.standing.held.map(Interval::from),
        drop: place.standing.drop.map(Interval::from),
        drop_since_commissioning_db: place.drop_since_commissioning_db.map(hundredths),
        max_rise_db: place.chart.as_ref().map(|chart| hundredths(chart.max_rise_db)),
        quality: place.quality.map(|quality| quality.to_string()),
    }
}
