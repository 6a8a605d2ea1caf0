//! `hushwatch alarms`: the open alarms, and the operator's part of their life.

use std::io::Write;
use std::process::ExitCode;

use clap::{Args, Subcommand, ValueEnum};
use hushwatch_alarm::{Alarm, CAUTION, Place};
use hushwatch_config::site::Site;
use hushwatch_control::{Acknowledge, Client, Request};
use hushwatch_quantity::Time;
use hushwatch_report::{Cell, table};

use crate::context::{Context, print_json, width};
use crate::failure::{Failure, Outcome};
use crate::times::{ago, local};
use crate::written::WrittenAlarm;

/// Lists alarms; with a word after it, takes part in their life.
#[derive(Args)]
pub(crate) struct Arguments {
    /// Also those that are over and acknowledged
    #[arg(long)]
    all: bool,
    #[command(subcommand)]
    part: Option<Part>,
}

#[derive(Subcommand)]
enum Part {
    /// Say that you have taken an alarm up, and what it was
    Ack(Ack),
}

#[derive(Args)]
struct Ack {
    /// The alarm's number, as listed
    number: u64,
    /// What it turned out to be
    #[arg(long, value_enum)]
    cause: Cause,
    /// In your own words
    #[arg(long, default_value = "")]
    note: String,
    /// Who you are [default: the user of this process]
    #[arg(long)]
    who: Option<String>,
}

#[derive(Clone, Copy, ValueEnum)]
enum Cause {
    /// The choke: gone, open, cracked, hot
    Choke,
    /// The source of the noise changed
    Source,
    /// The measurement itself
    Measurement,
    /// Anything else, or not known yet
    Other,
}

impl Cause {
    fn label(self) -> &'static str {
        match self {
            Self::Choke => "choke",
            Self::Source => "source",
            Self::Measurement => "measurement",
            Self::Other => "other",
        }
    }
}

/// Lists the open alarms, or acknowledges one.
pub(crate) fn run(context: &Context, arguments: &Arguments) -> Outcome {
    match &arguments.part {
        Some(Part::Ack(ack)) => acknowledge(context, ack),
        None => list(context, arguments.all),
    }
}

fn acknowledge(context: &Context, ack: &Ack) -> Outcome {
    let site = context.site()?;
    let mut service = Client::connect(&site.control_socket)?;
    service.ask(&Request::Acknowledge(Acknowledge {
        occurrence: ack.number,
        who: ack.who.clone(),
        note: ack.note.trim().to_owned(),
        cause: ack.cause.label().to_owned(),
    }))?;
    writeln!(anstream::stderr(), "alarm #{} is acknowledged", ack.number)?;
    Ok(ExitCode::SUCCESS)
}

/// Where a rise shows, the strongest first; else what is wrong in a sentence.
fn what(alarm: &Alarm) -> String {
    let place = |place: &Place| format!("{} ({})", place.band, place.state);
    match alarm.detail.places.as_slice() {
        [] => alarm.detail.text.clone(),
        places => places.iter().map(place).collect::<Vec<_>>().join(", "),
    }
}

/// Lists the open alarms, or all that ever were.
pub(crate) fn list(context: &Context, all: bool) -> Outcome {
    let opened = context.open()?;
    let (alarms, now) = opened.at_once(|read| Ok((read.alarms(!all)?, opened.plant_now(read)?)))?;
    if context.json {
        for alarm in &alarms {
            print_json(&WrittenAlarm::from(alarm))?;
        }
        return Ok(ExitCode::SUCCESS);
    }
    write(&opened.site, &alarms, now, all)?;
    Ok(ExitCode::SUCCESS)
}

fn write(site: &Site, alarms: &[Alarm], now: Time, all: bool) -> Result<(), Failure> {
    let mut out = anstream::stdout().lock();
    if alarms.is_empty() {
        let open = if all { "there was never an alarm" } else { "no alarm is open (--all lists those that are over)" };
        writeln!(out, "{}: {open}", site.name)?;
        return Ok(());
    }
    let row = |alarm: &Alarm| {
        let since = alarm.detail.since.unwrap_or(alarm.raised);
        vec![
            Cell::number(alarm.occurrence.to_string()),
            Cell::new(alarm.key.kind.label()),
            Cell::new(&alarm.key.subject),
            Cell::new(alarm.state.label()),
            Cell::number(alarm.detail.rise_db().map_or_else(String::new, |rise| format!("{rise:+.1} dB"))),
            Cell::new(format!("{} ({})", local(site, since), ago(now, since))),
            Cell::new(what(alarm)),
        ]
    };
    let rows: Vec<Vec<Cell>> = alarms.iter().map(row).collect();
    let header = ["no.", "kind", "of", "state", "rise", "since", "where"];
    out.write_all(table(&header, &rows, width()).as_bytes())?;
    let mut kinds: Vec<_> = alarms.iter().map(|alarm| alarm.key.kind).collect();
    kinds.dedup();
    for kind in kinds.into_iter().filter(|_| !all) {
        writeln!(out, "\nwhat to look at first ({kind}):")?;
        for (number, line) in kind.look_first().iter().enumerate() {
            writeln!(out, "  {}. {line}", number + 1)?;
        }
    }
    if !all {
        writeln!(out, "\n{CAUTION}")?;
    }
    Ok(())
}
