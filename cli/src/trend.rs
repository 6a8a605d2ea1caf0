//! `hushwatch trend`: the course of a level, with its references, what is required, and alarms.

use std::io::Write;
use std::path::PathBuf;
use std::process::ExitCode;

use clap::Args;
use hushwatch_alarm::{Alarm, AlarmKind, Transition};
use hushwatch_config::site::{Cable, Site};
use hushwatch_config::walk::suggestion;
use hushwatch_drift::robust;
use hushwatch_quantity::{Interval, Span, Time};
use hushwatch_record::{Filter, JournalRow, Read, RecordError};
use hushwatch_report::{Axis, Line, LineKind, Mark, MarkKind, Point, Size, Tick, Trend};
use serde::Serialize;

use crate::context::{Context, Opened, height, print_json, width};
use crate::failure::{Failure, Outcome};
use crate::standing::{PlaceStanding, picture};
use crate::times::{local, time};
use crate::written::hundredths;

/// More points than this nobody can see; they are put together by their median.
const POINTS: usize = 1500;

/// The course of a level as a plot in the terminal, or as a picture.
#[derive(Args)]
pub(crate) struct Arguments {
    /// The tag of the cable
    cable: String,
    /// The band [default: where the drop is greatest]
    #[arg(long)]
    band: Option<String>,
    /// The operating state [default: where the drop is greatest]
    #[arg(long)]
    state: Option<String>,
    /// From this time on: RFC 3339, a date, or how long ago as in `3 days` [default: the beginning]
    #[arg(long, value_name = "TIME")]
    since: Option<String>,
    /// Up to this time [default: now]
    #[arg(long, value_name = "TIME")]
    until: Option<String>,
    /// Write a picture (SVG) instead
    #[arg(long, value_name = "FILE")]
    svg: Option<PathBuf>,
}

/// Shows the trend of a cable.
pub(crate) fn run(context: &Context, arguments: &Arguments) -> Outcome {
    let opened = context.open()?;
    let trend = of(&opened, arguments)?;
    if let Some(path) = &arguments.svg {
        std::fs::write(path, trend.to_svg())
            .map_err(|error| Failure::could_not(format!("{}: {error}", path.display())))?;
        writeln!(anstream::stderr(), "written: {}", path.display())?;
    } else if context.json {
        print_json(&written(&trend))?;
    } else {
        let size = Size { width: width(), height: height().saturating_sub(2).min(34) };
        anstream::stdout().lock().write_all(trend.to_text(size).as_bytes())?;
    }
    Ok(ExitCode::SUCCESS)
}

/// The trend of a cable with everything by default.
pub(crate) fn of_cable(opened: &Opened, cable: &str) -> Result<Trend, Failure> {
    let nothing = Arguments { cable: cable.to_owned(), band: None, state: None, since: None, until: None, svg: None };
    of(opened, &nothing)
}

fn of(opened: &Opened, arguments: &Arguments) -> Result<Trend, Failure> {
    let site = &opened.site;
    let cable = find_cable(site, &arguments.cable)?;
    if let Some(band) = &arguments.band
        && !cable.bands.iter().any(|one| one.name == *band)
    {
        let bands = cable.bands.iter().map(|band| band.name.as_str());
        return Err(Failure::wrong_call(format!("{} has no band `{band}`; {}", cable.tag, suggestion(band, bands))));
    }
    let (now, picture) = opened.at_once(|read| {
        let now = opened.plant_now(read)?;
        Ok((now, picture(site, read, now)?))
    })?;
    let standing = picture.cables.iter().find(|one| one.tag == cable.tag);
    let wanted = |place: &&PlaceStanding| {
        arguments.band.as_ref().is_none_or(|band| *band == place.series.band)
            && arguments.state.as_ref().is_none_or(|state| *state == place.state)
    };
    let Some(place) = standing.and_then(|one| one.places.iter().find(wanted)) else {
        return Err(Failure::could_not(format!(
            "there are no closed blocks of {} yet{}",
            cable.tag,
            arguments.state.as_ref().map_or_else(String::new, |state| format!(" in state `{state}`"))
        )));
    };
    let bound = |text: &Option<String>| text.as_deref().map(|text| time(text, now, site)).transpose();
    let (since, until) = (bound(&arguments.since)?, bound(&arguments.until)?);
    opened.at_once(|read| draw(site, cable, place, read, (since, until)))
}

fn find_cable<'a>(site: &'a Site, tag: &str) -> Result<&'a Cable, Failure> {
    site.cable(tag).ok_or_else(|| {
        let tags = site.cables.iter().map(|cable| cable.tag.as_str());
        Failure::wrong_call(format!("there is no cable `{tag}`; {}", suggestion(tag, tags)))
    })
}

fn draw(
    site: &Site,
    cable: &Cable,
    place: &PlaceStanding,
    read: Read<'_>,
    (since, until): (Option<Time>, Option<Time>),
) -> Result<Trend, RecordError> {
    let block = site.drift.block;
    let all = Interval::new(since.unwrap_or(Time::from_micros(i64::MIN)), until.unwrap_or(Time::from_micros(i64::MAX)));
    let state = state_number(read, &place.state)?;
    let blocks = read.blocks(place.series.id, state, all)?;
    let points: Vec<Point> = blocks
        .iter()
        .map(|one| Point { time: one.start + Span::from_micros(block.as_micros() / 2), db: one.median_db })
        .collect();
    let first = points.first().map_or(Time::from_micros(0), |point| point.time - block);
    let last = points.last().map_or(Time::from_micros(1), |point| point.time + block);
    let (from, to) = (since.unwrap_or(first), until.unwrap_or(last));
    let gaps = read.gaps(&Filter { cable: Some(cable.tag.clone()), from: Some(from), to: Some(to), band: None })?;
    Ok(Trend {
        title: format!(
            "{}{}: {} in state {}, {}",
            cable.tag,
            if cable.description.is_empty() { String::new() } else { format!(" ({})", cable.description) },
            place.series.band,
            place.state,
            place.series.unit
        ),
        unit: place.series.unit.clone(),
        axis: axis(site, from, to),
        pieces: pieces(&points, block),
        lines: lines(cable, place),
        marks: marks(site, cable, &read.alarms(false)?, &read.journal()?, Interval::new(from, to)),
        gaps: gaps.into_iter().map(|gap| (gap.from, gap.to.unwrap_or(to))).collect(),
    })
}

fn state_number(read: Read<'_>, name: &str) -> Result<u32, RecordError> {
    Ok(read.states()?.into_iter().find(|(_, known)| known == name).map_or(0, |(id, _)| id))
}

/// Unbroken pieces, thinned to what can be seen: each group of neighbours is represented by its median, so that a
/// single burst does not vanish behind a mean nor stand for all.
fn pieces(points: &[Point], block: Span) -> Vec<Vec<Point>> {
    let apart = Span::from_micros(block.as_micros().saturating_mul(2));
    let group = points.len().div_ceil(POINTS).max(1);
    let mut pieces: Vec<Vec<Point>> = Vec::new();
    for piece in points.chunk_by(|a, b| b.time - a.time <= apart) {
        let thinned = piece.chunks(group).filter_map(|group| {
            let levels: Vec<f64> = group.iter().map(|point| point.db).collect();
            Some(Point { time: group[group.len() / 2].time, db: robust::median(&levels)? })
        });
        pieces.push(thinned.collect());
    }
    pieces
}

fn lines(cable: &Cable, place: &PlaceStanding) -> Vec<Line> {
    let before = place.before.as_ref().map(|row| row.figure.median_db);
    let after = place.after.as_ref().map(|row| row.figure.median_db);
    let limit = place.chart.as_ref().map(|chart| chart.target_db + chart.max_rise_db);
    let requirement = before.zip(cable.min_suppression_db).map(|(before, required)| before - required);
    [
        (LineKind::Before, before),
        (LineKind::After, after),
        (LineKind::Limit, limit),
        (LineKind::Requirement, requirement),
    ]
    .into_iter()
    .filter_map(|(kind, db)| Some(Line { kind, db: db? }))
    .collect()
}

fn marks(site: &Site, cable: &Cable, alarms: &[Alarm], journal: &[JournalRow], shown: Interval) -> Vec<Mark> {
    let mut marks = Vec::new();
    let of_cable = |alarm: &&Alarm| alarm.key.subject == cable.tag && alarm.key.kind == AlarmKind::Regression;
    for alarm in alarms.iter().filter(of_cable) {
        let number = alarm.occurrence;
        if let Some(since) = alarm.detail.since {
            let label = format!("since {}", local(site, since));
            marks.push(Mark { time: since, kind: MarkKind::Since, label });
        }
        let label = format!("alarm #{number} (regression) {}", local(site, alarm.raised));
        marks.push(Mark { time: alarm.raised, kind: MarkKind::Alarm, label });
        let cleared = journal.iter().rfind(|row| row.occurrence == number && row.transition == Transition::Cleared);
        if let Some(row) = cleared {
            let label = format!("over {}", local(site, row.time));
            marks.push(Mark { time: row.time, kind: MarkKind::Cleared, label });
        }
    }
    marks.retain(|mark| shown.contains(mark.time));
    // Only the latest can be told apart.
    let many = marks.len().saturating_sub(6);
    marks.split_off(many)
}

/// The time that is shown, with labels at round local times.
fn axis(site: &Site, from: Time, to: Time) -> Axis {
    const STEPS: [i64; 14] =
        [1, 10, 60, 300, 900, 3600, 10_800, 21_600, 43_200, 86_400, 172_800, 432_000, 864_000, 2_592_000];
    let length = (to - from).as_secs_f64();
    let step = STEPS.iter().copied().find(|step| length / *step as f64 <= 8.0).unwrap_or(STEPS[13]);
    let format = match step {
        ..60 => "%H:%M:%S",
        60..86_400 => "%m-%d %H:%M",
        _ => "%m-%d",
    };
    // Round times by the wall clock: counted from the local midnight before the first level.
    let midnight = site.local(from).date().at(0, 0, 0, 0);
    let zoned = site.zone.to_ambiguous_zoned_datetime(midnight).compatible();
    let mut at = zoned.map_or(from, |zoned| Time::from_micros(zoned.timestamp().as_microsecond()));
    let mut ticks = Vec::new();
    while at <= to && ticks.len() < 400 {
        if at + Span::from_secs(step) > from {
            ticks.push(Tick { time: at, label: site.local(at).strftime(format).to_string() });
        }
        at = at + Span::from_secs(step);
    }
    // A tick that lies before the beginning belongs to no label that is seen.
    ticks.retain(|tick| tick.time >= from);
    let zone = site.timezone.clone().unwrap_or_else(|| String::from("local time"));
    Axis { from, to, ticks, caption: format!("({}, {zone})", site.local(from).strftime("%Y")) }
}

#[derive(Serialize)]
struct Written<'a> {
    title: &'a str,
    unit: &'a str,
    from: String,
    to: String,
    points: Vec<WrittenPoint>,
    lines: Vec<WrittenLine>,
    marks: Vec<WrittenMark<'a>>,
    gaps: Vec<(String, String)>,
}

#[derive(Serialize)]
struct WrittenPoint {
    time: String,
    level: f64,
}

#[derive(Serialize)]
struct WrittenLine {
    what: &'static str,
    level: f64,
}

#[derive(Serialize)]
struct WrittenMark<'a> {
    time: String,
    what: &'a str,
}

fn written(trend: &Trend) -> Written<'_> {
    let point = |point: &Point| WrittenPoint { time: point.time.to_string(), level: hundredths(point.db) };
    Written {
        title: &trend.title,
        unit: &trend.unit,
        from: trend.axis.from.to_string(),
        to: trend.axis.to.to_string(),
        points: trend.pieces.iter().flatten().map(point).collect(),
        lines: trend
            .lines
            .iter()
            .map(|line| WrittenLine { what: line.kind.label(), level: hundredths(line.db) })
            .collect(),
        marks: trend.marks.iter().map(|mark| WrittenMark { time: mark.time.to_string(), what: &mark.label }).collect(),
        gaps: trend.gaps.iter().map(|(from, to)| (from.to_string(), to.to_string())).collect(),
    }
}
