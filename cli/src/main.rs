//! The companion `hushwatch`: tells what a site file means, looks into the record, and asks the service for whatever
//! changes something. One file for each command.

mod alarms;
mod check;
mod context;
mod demo;
mod export;
mod failure;
mod levels_csv;
mod reference;
mod replay;
mod simulate;
mod standing;
mod state;
mod status;
mod sweep;
mod times;
mod trend;
mod written;

use std::path::PathBuf;
use std::process::ExitCode;

use anstream::ColorChoice;
use clap::{Parser, Subcommand, ValueEnum};

use context::Context;
use failure::Failure;

/// Watches that a noise which was hushed with a choke stays hushed.
///
/// Exit codes: 0 done and all well; 1 an alarm is active (status) or a check failed (check, demo); 2 the call was wrong;
/// 3 could not do it (no service, no record, ...).
#[derive(Parser)]
#[command(name = "hushwatch", version, max_term_width = 100)]
struct Arguments {
    /// The site file [default: ./site.toml, else /etc/hushwatch/site.toml]
    #[arg(long, global = true, value_name = "FILE", env = "HUSHWATCH_SITE")]
    site: Option<PathBuf>,
    /// For programs: one JSON document, or one object a line for lists
    #[arg(long, global = true)]
    json: bool,
    /// When to use colour; NO_COLOR is heeded
    #[arg(long, global = true, value_name = "WHEN", default_value = "auto")]
    color: Color,
    #[command(subcommand)]
    command: Command,
}

#[derive(Clone, Copy, ValueEnum)]
enum Color {
    Auto,
    Always,
    Never,
}

#[derive(Subcommand)]
enum Command {
    /// Is the site file right, what does it mean, does the line keep up?
    Check(check::Arguments),
    /// Every cable: level, held suppression, verdict, quality; open alarms
    Status(status::Arguments),
    /// The course of a level, as a plot
    Trend(trend::Arguments),
    /// Open alarms, and the operator's part of their life
    Alarms(alarms::Arguments),
    /// One live sweep: spectrum, settings, levels; --transcript shows every byte
    Sweep(sweep::Arguments),
    /// Mark an interval of the log as before or after the fix
    Reference(reference::Arguments),
    /// Tell the operating state, where the site file leaves that to people
    State(state::Arguments),
    /// Levels, alarms or gaps for other programs
    Export(export::Arguments),
    /// What would these settings have alarmed on? Levels from a file through the charts
    Replay(replay::Arguments),
    /// A simulated cabinet from start to finish, in about a minute
    Demo(demo::Arguments),
    /// Only the simulated receiver, on a pseudo-terminal
    Simulate(simulate::Arguments),
}

fn main() -> ExitCode {
    let arguments = Arguments::parse();
    match arguments.color {
        // anstream looks at the terminal and at NO_COLOR by itself.
        Color::Auto => {}
        Color::Always => ColorChoice::Always.write_global(),
        Color::Never => ColorChoice::Never.write_global(),
    }
    let context = Context { site: arguments.site, json: arguments.json };
    let outcome = match arguments.command {
        Command::Check(command) => check::run(&context, &command),
        Command::Status(command) => status::run(&context, &command),
        Command::Trend(command) => trend::run(&context, &command),
        Command::Alarms(command) => alarms::run(&context, &command),
        Command::Sweep(command) => sweep::run(&context, &command),
        Command::Reference(command) => reference::run(&context, &command),
        Command::State(command) => state::run(&context, &command),
        Command::Export(command) => export::run(&context, &command),
        Command::Replay(command) => replay::run(&context, &command),
        Command::Demo(command) => demo::run(&command),
        Command::Simulate(command) => simulate::run(&command),
    };
    outcome.unwrap_or_else(Failure::told)
}
