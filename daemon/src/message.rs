//! What the keeper is told. The list is closed: everything that can change the record is in it.

use hushwatch_control::{Peer, Reply, Request};
use hushwatch_instrument::ErrorClass;
use hushwatch_quantity::Time;
use hushwatch_signal::BandLevel;
use tokio::sync::oneshot;

/// Something happened.
#[derive(Debug)]
pub(crate) enum Message {
    /// A cable was swept.
    Swept(Swept),
    /// An instrument gave no answer that is one.
    Trouble(Trouble),
    /// Somebody asks on the control socket.
    Asked {
        /// What.
        request: Request,
        /// Who.
        peer: Peer,
        /// Where the answer goes.
        reply: oneshot::Sender<Reply>,
    },
    /// A notice was told, or not.
    Told {
        /// The recipient, by index.
        recipient: usize,
        /// The notice's number in the outbox.
        id: i64,
        /// What went wrong, if something did: it will be tried again.
        error: Option<String>,
    },
    /// The site file was saved, and is refused or right again.
    SiteFile {
        /// Its faults.
        refused: Option<String>,
    },
    /// Commit everything and end.
    Stop {
        /// It goes on at once, by another site file.
        again: bool,
    },
}

/// A cable was swept.
#[derive(Debug)]
pub(crate) struct Swept {
    /// The cable, by index in the site.
    pub(crate) cable: usize,
    /// When, plant time.
    pub(crate) time: Time,
    /// What the machine was doing.
    pub(crate) state: String,
    /// What the instrument was set to, as JSON.
    pub(crate) settings: String,
    /// What bears on the levels, line by line.
    pub(crate) bearing: Vec<String>,
    /// Settings that it cannot tell.
    pub(crate) assumed: Vec<&'static str>,
    /// Who it says it is.
    pub(crate) identity: String,
    /// One for each band of the cable; none where nothing of a band was measured.
    pub(crate) levels: Vec<Option<BandLevel>>,
}

/// An instrument gave no answer that is one.
#[derive(Debug)]
pub(crate) struct Trouble {
    /// The instrument, by index in the site.
    pub(crate) instrument: usize,
    /// Which part of the chain is at fault.
    pub(crate) class: ErrorClass,
    /// In a sentence.
    pub(crate) text: String,
}
