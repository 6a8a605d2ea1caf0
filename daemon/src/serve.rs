//! The control server: requests go to the keeper, its replies go back.

use std::sync::Arc;
use std::time::Duration;

use hushwatch_control::{Peer, Reply, Request, converse};
use tokio::net::UnixListener;
use tokio::sync::{Semaphore, mpsc, oneshot, watch as signal};
use tokio::task::JoinSet;

use crate::message::Message;

/// So many may ask at once; others wait.
const CONVERSATIONS: usize = 8;

/// Pause after the system refused a connection, so that a lasting refusal does not make a full core of it.
const PAUSE: Duration = Duration::from_millis(200);

/// Answers on the control socket until told to stop.
pub(crate) async fn control(listener: UnixListener, tx: mpsc::Sender<Message>, mut stop: signal::Receiver<bool>) {
    let places = Arc::new(Semaphore::new(CONVERSATIONS));
    let mut conversations = JoinSet::new();
    loop {
        let accepted = tokio::select! {
            _ = stop.wait_for(|stop| *stop) => break,
            Some(_) = conversations.join_next() => continue,
            accepted = accept(&listener, &places) => accepted,
        };
        match accepted {
            Ok((stream, place)) => {
                let tx = tx.clone();
                conversations.spawn(async move {
                    converse(stream, |request, peer| ask(tx.clone(), request, peer)).await;
                    drop(place);
                });
            }
            Err(error) => {
                tracing::warn!("the control socket: {error}");
                tokio::time::sleep(PAUSE).await;
            }
        }
    }
    conversations.abort_all();
}

async fn accept(
    listener: &UnixListener,
    places: &Arc<Semaphore>,
) -> std::io::Result<(tokio::net::UnixStream, tokio::sync::OwnedSemaphorePermit)> {
    let place = Arc::clone(places).acquire_owned().await.map_err(std::io::Error::other)?;
    let (stream, _) = listener.accept().await?;
    Ok((stream, place))
}

async fn ask(tx: mpsc::Sender<Message>, request: Request, peer: Peer) -> Reply {
    let stopping = || Reply::Refused { why: String::from("the service is stopping") };
    let (reply, answer) = oneshot::channel();
    if tx.send(Message::Asked { request, peer, reply }).await.is_err() {
        return stopping();
    }
    answer.await.unwrap_or_else(|_| stopping())
}
