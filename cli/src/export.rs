//! `hushwatch export`: levels, alarms or gaps for other programs.

use std::collections::BTreeMap;
use std::io::{BufWriter, Write};
use std::ops::ControlFlow;
use std::process::ExitCode;

use clap::{Args, ValueEnum};
use hushwatch_alarm::Alarm;
use hushwatch_record::{Filter, LevelRow, Read, RecordError, SeriesRow};
use serde::Serialize;

use crate::context::{Context, Opened};
use crate::failure::{Failure, Outcome};
use crate::times::time;
use crate::written::WrittenAlarm;

/// Writes levels, alarms or gaps to the standard output.
///
/// CSV after RFC 4180, times in UTC. Levels are in dB over the unit that the probe gives: dB(uA) for a current probe,
/// dB(uA/m) for a loop probe, dB(uV) when connected directly; the first line of `--format json` tells the unit of each
/// band of each cable.
#[derive(Args)]
pub(crate) struct Arguments {
    /// What
    #[arg(value_enum)]
    what: What,
    /// In which form
    #[arg(long, value_enum, default_value = "csv")]
    format: Format,
    /// Of this cable only
    #[arg(long)]
    cable: Option<String>,
    /// Of this band only
    #[arg(long)]
    band: Option<String>,
    /// From this time on: RFC 3339, or how long ago as in `3 days`
    #[arg(long, value_name = "TIME")]
    since: Option<String>,
    /// Up to, not including, this time
    #[arg(long, value_name = "TIME")]
    until: Option<String>,
}

#[derive(Clone, Copy, ValueEnum)]
enum What {
    Levels,
    Alarms,
    Gaps,
}

#[derive(Clone, Copy, PartialEq, Eq, ValueEnum)]
enum Format {
    Csv,
    Json,
}

/// Exports; with the common `--json` as `--format json`.
pub(crate) fn run(context: &Context, arguments: &Arguments) -> Outcome {
    let opened = context.open()?;
    let format = if context.json { Format::Json } else { arguments.format };
    let now = opened.at_once(|read| opened.plant_now(read))?;
    let bound = |text: &Option<String>| text.as_deref().map(|text| time(text, now, &opened.site)).transpose();
    let filter = Filter {
        cable: arguments.cable.clone(),
        band: arguments.band.clone(),
        from: bound(&arguments.since)?,
        to: bound(&arguments.until)?,
    };
    let out = BufWriter::new(std::io::stdout().lock());
    to(&opened, arguments.what, &filter, format, out)?;
    Ok(ExitCode::SUCCESS)
}

/// All levels as CSV into a file.
pub(crate) fn levels_csv(opened: &Opened, out: impl Write) -> Result<(), Failure> {
    to(opened, What::Levels, &Filter::default(), Format::Csv, out)
}

fn to(opened: &Opened, what: What, filter: &Filter, format: Format, out: impl Write) -> Result<(), Failure> {
    let mut sink = Sink::new(format, out);
    let result = opened.reader.at_once(|read| {
        Ok(match what {
            What::Levels => levels(opened, read, filter, &mut sink),
            What::Alarms => alarms(read, filter, &mut sink),
            What::Gaps => gaps(read, filter, &mut sink),
        })
    })?;
    result?;
    sink.finish()
}

/// Where rows go.
struct Sink<W: Write> {
    form: Form<W>,
}

enum Form<W: Write> {
    Csv(Box<csv::Writer<W>>),
    Json(W),
}

impl<W: Write> Sink<W> {
    fn new(format: Format, out: W) -> Self {
        let form = match format {
            Format::Csv => {
                let mut builder = csv::WriterBuilder::new();
                builder.terminator(csv::Terminator::CRLF).has_headers(false);
                Form::Csv(Box::new(builder.from_writer(out)))
            }
            Format::Json => Form::Json(out),
        };
        Self { form }
    }

    /// The names of the columns; in JSON a first object with what else is to be known.
    fn head(&mut self, columns: &[&str], more: &impl Serialize) -> Result<(), Failure> {
        match &mut self.form {
            Form::Csv(writer) => writer.write_record(columns).map_err(csv_failure),
            Form::Json(out) => line(out, more),
        }
    }

    fn row(&mut self, row: &impl Serialize) -> Result<(), Failure> {
        match &mut self.form {
            Form::Csv(writer) => writer.serialize(row).map_err(csv_failure),
            Form::Json(out) => line(out, row),
        }
    }

    fn finish(self) -> Result<(), Failure> {
        match self.form {
            Form::Csv(mut writer) => writer.flush()?,
            Form::Json(mut out) => out.flush()?,
        }
        Ok(())
    }
}

fn line(out: &mut impl Write, value: &impl Serialize) -> Result<(), Failure> {
    let text = serde_json::to_string(value)?;
    writeln!(out, "{text}")?;
    Ok(())
}

fn csv_failure(error: csv::Error) -> Failure {
    match error.into_kind() {
        csv::ErrorKind::Io(error) => error.into(),
        other => Failure::could_not(format!("{other:?}")),
    }
}

/// What JSON tells before the rows.
#[derive(Serialize)]
struct Head<'a> {
    site: &'a str,
    columns: &'a [&'a str],
    units: BTreeMap<String, &'a str>,
}

#[derive(Serialize)]
#[expect(clippy::struct_field_names, reason = "they are the names of the columns")]
struct Level<'a> {
    time: String,
    cable: &'a str,
    band: &'a str,
    level: f64,
    peak: f64,
    peak_hz: i64,
    state: &'a str,
    quality: String,
}

fn levels<W: Write>(opened: &Opened, read: Read<'_>, filter: &Filter, sink: &mut Sink<W>) -> Result<(), Failure> {
    const COLUMNS: [&str; 8] = ["time", "cable", "band", "level", "peak", "peak_hz", "state", "quality"];
    let series: BTreeMap<u32, SeriesRow> = read.series()?.into_iter().map(|row| (row.id, row)).collect();
    let states: BTreeMap<u32, String> = read.states()?.into_iter().collect();
    let units = series.values().map(|row| (format!("{}/{}", row.cable, row.band), row.unit.as_str())).collect();
    sink.head(&COLUMNS, &Head { site: &opened.site.name, columns: &COLUMNS, units })?;
    let mut failed = None;
    let write = |row: LevelRow| {
        let Some(one) = series.get(&row.series) else { return ControlFlow::Continue(()) };
        let level = Level {
            time: row.time.to_string(),
            cable: &one.cable,
            band: &one.band,
            level: row.level_db,
            peak: row.peak_db,
            peak_hz: row.peak_hz as i64,
            state: states.get(&row.state).map_or("unknown", String::as_str),
            quality: row.quality.to_string(),
        };
        match sink.row(&level) {
            Ok(()) => ControlFlow::Continue(()),
            Err(error) => {
                failed = Some(error);
                ControlFlow::Break(())
            }
        }
    };
    read.levels(filter, write)?;
    failed.map_or(Ok(()), Err)
}

#[derive(Serialize)]
struct Gap<'a> {
    from: String,
    to: Option<String>,
    cable: &'a str,
    reason: &'a str,
}

fn gaps<W: Write>(read: Read<'_>, filter: &Filter, sink: &mut Sink<W>) -> Result<(), Failure> {
    const COLUMNS: [&str; 4] = ["from", "to", "cable", "reason"];
    sink.head(&COLUMNS, &serde_json::json!({ "columns": COLUMNS }))?;
    for gap in read.gaps(filter)? {
        let to = gap.to.map(|to| to.to_string());
        sink.row(&Gap { from: gap.from.to_string(), to, cable: &gap.cable, reason: &gap.reason })?;
    }
    Ok(())
}

#[derive(Serialize)]
struct AlarmLine<'a> {
    occurrence: u64,
    kind: &'a str,
    subject: &'a str,
    state: &'a str,
    raised: String,
    since: Option<String>,
    rise_db: Option<f64>,
    text: &'a str,
    who: &'a str,
    note: &'a str,
    cause: &'a str,
}

fn alarms<W: Write>(read: Read<'_>, filter: &Filter, sink: &mut Sink<W>) -> Result<(), Failure> {
    const COLUMNS: [&str; 11] =
        ["occurrence", "kind", "subject", "state", "raised", "since", "rise_db", "text", "who", "note", "cause"];
    sink.head(&COLUMNS, &serde_json::json!({ "columns": COLUMNS }))?;
    let wanted = |alarm: &&Alarm| {
        filter.cable.as_ref().is_none_or(|cable| *cable == alarm.key.subject)
            && filter.from.is_none_or(|from| alarm.raised >= from)
            && filter.to.is_none_or(|to| alarm.raised < to)
    };
    let all = read.alarms(false).map_err(|error: RecordError| Failure::from(error))?;
    for alarm in all.iter().filter(wanted) {
        match &sink.form {
            Form::Csv(_) => sink.row(&alarm_line(alarm))?,
            Form::Json(_) => sink.row(&WrittenAlarm::from(alarm))?,
        }
    }
    Ok(())
}

fn alarm_line(alarm: &Alarm) -> AlarmLine<'_> {
    let by = alarm.acknowledged.as_ref();
    AlarmLine {
        occurrence: alarm.occurrence,
        kind: alarm.key.kind.label(),
        subject: &alarm.key.subject,
        state: alarm.state.label(),
        raised: alarm.raised.to_string(),
        since: alarm.detail.since.map(|since| since.to_string()),
        rise_db: alarm.detail.rise_db().map(crate::written::hundredths),
        text: &alarm.detail.text,
        who: by.map_or("", |by| &by.who),
        note: by.map_or("", |by| &by.note),
        cause: by.map_or("", |by| by.cause.label()),
    }
}
