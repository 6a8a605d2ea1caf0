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
mod reload;
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

use hushwatch_record::Writer;
use keeper::Keeper;
use message::Message;
use pulse::Pulse;
use reload::{Change, SiteFile};

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
/// When the site file is saved with another content, everything is stopped in that order and begun anew by the new file,
/// which takes some hundredths of a second; what stands in the record goes on. A file with faults is refused, and the
/// one in force stays.
///
/// # Errors
/// The record, the control socket or a port belongs to another process, or the record can no longer be written.
pub async fn run(site: Site, shutdown: impl Future<Output = &'static str>) -> anyhow::Result<()> {
    let mut shutdown = std::pin::pin!(shutdown);
    let mut file = SiteFile::new(&site.path)?;
    let mut site = Arc::new(site);
    loop {
        let next = match watch_site(&site, shutdown.as_mut(), &mut file).await? {
            End::Stopped => return Ok(()),
            End::Another(next) => Arc::new(*next),
        };
        match can_begin(&next) {
            Ok(()) => site = next,
            Err(error) => tracing::error!("the new site file cannot be put in force, the old one stays: {error:#}"),
        }
    }
}

/// How watching by one site file ended.
enum End {
    /// The service is to stop.
    Stopped,
    /// Another site file is to be put in force.
    Another(Box<Site>),
}

/// Whether a site could be watched: its record and its ports can be had. Nothing is kept open.
fn can_begin(site: &Arc<Site>) -> anyhow::Result<()> {
    open_instruments(site)?;
    Writer::open(&site.record.path)?;
    Ok(())
}

/// Watches by one site file.
async fn watch_site(
    site: &Arc<Site>,
    shutdown: std::pin::Pin<&mut impl Future<Output = &'static str>>,
    file: &mut SiteFile,
) -> anyhow::Result<End> {
    let (tx, rx) = mpsc::channel(WAITING);
    let (keeper, outlets) = Keeper::open(Arc::clone(site), clock::now())?;
    let instruments = open_instruments(site)?;
    let listener = control::listen(&site.control_socket).context("the control socket")?;

    let pulse = Arc::new(Pulse::new(site.instruments.len() + 1));
    let keeper = keeper.with_pulse(Arc::clone(&pulse), site.instruments.len());
    let told_state = keeper.told_state();
    let (stop_tx, stop) = signal::channel(false);
    let (ended_tx, mut ended) = oneshot::channel();
    let keeper = std::thread::Builder::new().name("keeper".into()).spawn(move || {
        // The other end waits for this as long as the service lives.
        let _ = ended_tx.send(keeper.run(rx));
    })?;
    let mut tasks = JoinSet::new();
    for (index, instrument) in instruments.into_iter().enumerate() {
        let task = watch::Task::new(Arc::clone(site), index, instrument, Arc::clone(&pulse), told_state.clone());
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

    let reason = tokio::select! {
        reason = until_end(site, shutdown, file, &tx) => Some(reason),
        outcome = &mut ended => {
            // Nothing is left to be stopped but the tasks, whose messages nobody takes any more.
            stop_all(&stop_tx, &mut tasks, site).await;
            outcome.context("the keeper of the record ended without a word")??;
            None
        }
    };
    let Some(reason) = reason else { bail!("the keeper of the record ended by itself") };
    stop_all(&stop_tx, &mut tasks, site).await;
    let again = matches!(&reason, End::Another(next) if next.record.path == site.record.path);
    let _ = tx.send(Message::Stop { again }).await;
    ended.await.context("the keeper of the record ended without a word")??;
    if keeper.join().is_err() {
        bail!("the keeper of the record ended by a panic");
    }
    Ok(reason)
}

/// Waits for a reason to end: the service is to stop, or another site file is to be put in force.
async fn until_end(
    site: &Site,
    mut shutdown: std::pin::Pin<&mut impl Future<Output = &'static str>>,
    file: &mut SiteFile,
    tx: &mpsc::Sender<Message>,
) -> End {
    loop {
        let change = tokio::select! {
            why = shutdown.as_mut() => {
                tracing::info!("stopping: {why}");
                pulse::say(&[sd_notify::NotifyState::Stopping]);
                return End::Stopped;
            }
            change = file.change(&site.text) => change,
        };
        let refused = match change {
            Change::Right(next) => {
                tracing::info!(path = %site.path.display(), "the site file was saved, and is put in force");
                if !next.warnings.is_empty() {
                    tracing::warn!("the site file:\n{}", next.warnings.render(false));
                }
                return End::Another(next);
            }
            Change::Faulty(faults) => {
                tracing::error!(
                    "the site file was saved with faults and is refused; the one before stays in force\n{faults}"
                );
                Some(faults)
            }
            Change::AsBefore => None,
        };
        // A keeper that has ended is noticed elsewhere.
        let _ = tx.send(Message::SiteFile { refused }).await;
    }
}

/// Has all tasks stop and waits for them, but not for ever; then the control socket is removed.
async fn stop_all(stop: &signal::Sender<bool>, tasks: &mut JoinSet<()>, site: &Site) {
    // Nobody may listen any more: then all have ended already.
    let _ = stop.send(true);
    let all = async { while tasks.join_next().await.is_some() {} };
    if tokio::time::timeout(PATIENCE, all).await.is_err() {
        tracing::warn!("some tasks did not stop in time and are left behind");
        tasks.abort_all();
    }
    // A socket that another service has meanwhile made would be removed too: but that one refuses to start before.
    let _ = std::fs::remove_file(&site.control_socket);
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
