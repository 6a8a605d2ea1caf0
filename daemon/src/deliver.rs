//! The task of one recipient: tells one notice after the other, each until it was told.

use hushwatch_config::site::{Recipient, RecipientKind};
use hushwatch_recipient::{Command, Outlet, deliver, retry_after};
use hushwatch_record::OutboxRow;
use tokio::sync::{mpsc, watch as signal};

use crate::message::Message;

/// A recipient and the notices that come for it, one at a time.
#[derive(Debug)]
pub(crate) struct Delivery {
    /// By index in the site.
    pub(crate) recipient: usize,
    /// Its name.
    pub(crate) name: String,
    /// How it is told.
    pub(crate) outlet: Outlet,
    /// What it is to be told. The keeper sends the next one when this one was told.
    pub(crate) notices: mpsc::Receiver<OutboxRow>,
}

/// How a recipient of the site file is told.
pub(crate) fn outlet(recipient: &Recipient) -> Outlet {
    match &recipient.kind {
        RecipientKind::Command { run, timeout } => {
            Outlet::Command(Command { run: run.clone(), timeout: timeout.to_duration() })
        }
    }
}

/// Tells notices until told to stop; one that is being told then is broken off, and told again after the next start.
pub(crate) async fn recipient(mut delivery: Delivery, tx: mpsc::Sender<Message>, mut stop: signal::Receiver<bool>) {
    tokio::select! {
        _ = stop.wait_for(|stop| *stop) => {}
        () = tell_all(&mut delivery, &tx) => {}
    }
}

async fn tell_all(delivery: &mut Delivery, tx: &mpsc::Sender<Message>) {
    let Delivery { recipient, name, outlet, notices } = delivery;
    let recipient = *recipient;
    while let Some(notice) = notices.recv().await {
        let mut attempts = 0;
        loop {
            let error = deliver(outlet, &notice.body).await.err().map(|error| error.to_string());
            match (&error, attempts) {
                (None, 0) => tracing::info!(recipient = name, key = notice.key, "told"),
                (None, _) => tracing::info!(recipient = name, key = notice.key, attempts, "told at last"),
                (Some(error), 0) => tracing::warn!(recipient = name, key = notice.key, "not told, trying on: {error}"),
                (Some(error), _) => tracing::debug!(recipient = name, key = notice.key, attempts, "not told: {error}"),
            }
            let done = error.is_none();
            if tx.send(Message::Told { recipient, id: notice.id, error }).await.is_err() {
                return;
            }
            if done {
                break;
            }
            attempts += 1;
            tokio::time::sleep(retry_after(attempts)).await;
        }
    }
}
