//! The service `hushwatchd`: arguments, logging, signals; everything else stands in the library.

use std::path::PathBuf;
use std::process::ExitCode;

use clap::Parser;
use tokio::signal::unix::{SignalKind, signal};
use tracing_subscriber::EnvFilter;
use tracing_subscriber::layer::SubscriberExt;
use tracing_subscriber::util::SubscriberInitExt;

/// Watches the common-mode level of the cables of one cabinet, records it and raises an alarm when a choke that
/// quieted a cable no longer does.
///
/// Runs in the foreground and logs to the journal, or to stderr where there is none. SIGTERM and SIGINT stop it in
/// order. It is not a compliance measurement.
#[derive(Parser)]
#[command(name = "hushwatchd", version)]
struct Arguments {
    /// The site file: the cabinet and all that watches it.
    #[arg(long, value_name = "FILE", env = "HUSHWATCH_SITE")]
    site: PathBuf,
    /// What to log: error, warn, info, debug or trace, also for single parts (`info,hushwatch_instrument=debug`).
    #[arg(long, value_name = "FILTER", env = "HUSHWATCH_LOG", default_value = "info")]
    log: String,
    /// Log one JSON object a line.
    #[arg(long)]
    log_json: bool,
}

/// Could not do it: the site file is wrong, the record or the port is taken, ...
const COULD_NOT: u8 = 3;

fn main() -> ExitCode {
    let arguments = Arguments::parse();
    start_logging(&arguments);
    match serve(&arguments) {
        Ok(()) => ExitCode::SUCCESS,
        Err(error) => {
            tracing::error!("{error:#}");
            ExitCode::from(COULD_NOT)
        }
    }
}

fn serve(arguments: &Arguments) -> anyhow::Result<()> {
    let site = hushwatchd::load_site(&arguments.site)?;
    let runtime = tokio::runtime::Builder::new_current_thread().enable_all().build()?;
    runtime.block_on(async {
        let mut terminate = signal(SignalKind::terminate())?;
        let mut interrupt = signal(SignalKind::interrupt())?;
        hushwatchd::run(site, async move {
            tokio::select! {
                _ = terminate.recv() => "SIGTERM",
                _ = interrupt.recv() => "SIGINT",
            }
        })
        .await
    })
}

fn start_logging(arguments: &Arguments) {
    let filter = EnvFilter::try_new(&arguments.log).unwrap_or_else(|_| EnvFilter::new("info"));
    let registry = tracing_subscriber::registry().with(filter);
    // Under systemd stderr is the journal's stream; then structured fields go there directly.
    let journal = std::env::var_os("JOURNAL_STREAM").and_then(|_| tracing_journald::layer().ok());
    match journal {
        Some(layer) => registry.with(layer).init(),
        None if arguments.log_json => {
            registry.with(tracing_subscriber::fmt::layer().json().with_writer(std::io::stderr)).init();
        }
        None => {
            use std::io::IsTerminal;
            let colour = std::io::stderr().is_terminal() && std::env::var_os("NO_COLOR").is_none();
            registry
                .with(
                    tracing_subscriber::fmt::layer().with_target(false).with_ansi(colour).with_writer(std::io::stderr),
                )
                .init();
        }
    }
}
