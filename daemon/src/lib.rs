//! The service that watches a cabinet: the wiring of the rooms.
//!
//! [`run`] takes a site and a future that tells when to stop. One task for each instrument (a serial line is one
//! conversation) sends what it measured through a bounded channel to the *keeper*, a thread of its own, which alone owns
//! the record, the charts and the alarms. The control server and the deliveries to recipients talk to the keeper by
//! the same channel, so that the order in which things happened is the order in which they are recorded.

mod clock;
mod deliver;
mod keeper;
mod message;
mod notice;
mod outage;
mod pulse;
mod schedule;
mod serve;
mod state;
mod users;
mod watch;

use std::path::Path;
use std::sync::Arc;
use std::time::Duration;

use anyhow::{Context, bail};
use hushwatch_config::site::{self, Site};
use hushwatch_control as control;
use hushwatch_instrument::{Instrument, InstrumentError};
use tokio::sync::{mpsc, oneshot, watch as signal};
use tokio::task::JoinSet;

use keeper::Keeper;
use message::Message;
use pulse::Pulse;

/// How many messages may wait for the keeper: enough for a slow disk, few enough to notice that it does not follow.
const WAITING: usize = 256;

/// How long the tasks may take to stop before they are left behind.
const PATIENCE: Duration = Duration::from_secs(3);

/// Reads a site file; what is hardly meant in it is logged.
///
/// # Errors
/// All that is wrong with it, each fault at its place.
pub fn load_site(path: &Path) -> anyhow::Result<Site> {
    let site = match site::load(path) {
        Ok(site) => site,
        Err(faults) => bail!("the site file is refused:\n{}", faults.render(false)),
    };
    if !site.warnings.is_empty() {
        tracing::warn!("the site file:\n{}", site.warnings.render(false));
    }
    Ok(site)
}

/// Watches the site until `shutdown` tells why to stop. Then, in this order: no sweep is begun any more, the control
/// socket is closed, deliveries are broken off (the record keeps what was not told), and the keeper commits.
///
/// # Errors
/// The record, the control socket or a port belongs to another process, or the record can no longer be written.
pub async fn run(site: Site, shutdown: impl Future<Output = &'static str>) -> anyhow::Result<()> {
    let site = Arc::new(site);
    let (tx, rx) = mpsc::channel(WAITING);
    let (keeper, outlets) = Keeper::open(Arc::clone(&site), clock::now())?;
    let instruments = open_instruments(&site)?;
    let listener = control::listen(&site.control_socket).context("the control socket")?;

    let pulse = Arc::new(Pulse::new(site.instruments.len() + 1));
    let keeper = keeper.with_pulse(Arc::clone(&pulse), site.instruments.len());
    let (stop_tx, stop) = signal::channel(false);
    let (ended_tx, mut ended) = oneshot::channel();
    let keeper = std::thread::Builder::new().name("keeper".into()).spawn(move || {
        // The other end waits for this as long as the service lives.
        let _ = ended_tx.send(keeper.run(rx));
    })?;

    let mut tasks = JoinSet::new();
    for (index, instrument) in instruments.into_iter().enumerate() {
        let task = watch::Task::new(Arc::clone(&site), index, instrument, Arc::clone(&pulse));
        tasks.spawn(watch::instrument(task, tx.clone(), stop.clone()));
    }
    tasks.spawn(serve::control(listener, tx.clone(), stop.clone()));
    for outlet in outlets {
        tasks.spawn(deliver::recipient(outlet, tx.clone(), stop.clone()));
    }
    let mut parts: Vec<String> = site.instruments.iter().map(|one| format!("the task of {}", one.name)).collect();
    parts.push(String::from("the keeper of the record"));
    let fed = stop.clone();
    tasks.spawn(async move { pulse::feed(&pulse, &parts, fed).await });
    let (cables, record) = (site.cables.len(), site.record.path.display());
    tracing::info!(site = site.name, cables, %record, "watching");
    pulse::say(&[sd_notify::NotifyState::Ready, sd_notify::NotifyState::Status(&format!("watching {cables} cables"))]);

    let outcome = tokio::select! {
        why = shutdown => {
            tracing::info!("stopping: {why}");
            None
        }
        outcome = &mut ended => Some(outcome),
    };
    pulse::say(&[sd_notify::NotifyState::Stopping]);
    // Nobody may listen any more: then all have ended already.
    let _ = stop_tx.send(true);
    let all = async { while tasks.join_next().await.is_some() {} };
    if tokio::time::timeout(PATIENCE, all).await.is_err() {
        tracing::warn!("some tasks did not stop in time and are left behind");
        tasks.abort_all();
    }
    // A socket that another service has meanwhile made would be removed too: but that one refuses to start before.
    let _ = std::fs::remove_file(&site.control_socket);
    let outcome = if let Some(outcome) = outcome {
        outcome
    } else {
        let _ = tx.send(Message::Stop).await;
        ended.await
    };
    if keeper.join().is_err() {
        bail!("the keeper of the record ended by a panic");
    }
    outcome.context("the keeper of the record ended without a word")?
}

/// The instruments of the site, none of whose ports another process holds.
fn open_instruments(site: &Site) -> anyhow::Result<Vec<Instrument>> {
    let open = |described: &site::Instrument| {
        let instrument = Instrument::new(described);
        match instrument.probe_port() {
            Err(error @ InstrumentError::Held { .. }) => {
                Err(error).with_context(|| format!("instrument {}", described.name))
            }
            // What cannot be opened now is tried again later, and told then.
            Ok(()) | Err(_) => Ok(instrument),
        }
    };
    site.instruments.iter().map(open).collect()
}
