//! What a recipient is told.

use serde::Serialize;

/// A notice, as JSON. Times are RFC 3339 in UTC.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Notice {
    /// The same for every attempt to tell this: by it repeats are known.
    pub key: String,
    /// The site's name.
    pub site: String,
    /// The alarm's number.
    pub occurrence: u64,
    /// The alarm's kind.
    pub kind: String,
    /// What happened to the alarm: `occurred` or `cleared`.
    pub what: String,
    /// The state of the alarm: `unacknowledged`, `acknowledged`, `returned` or `normal`.
    pub state: String,
    /// What it is about: a cable's tag or an instrument's name.
    pub subject: String,
    /// The cable, if it is about one.
    pub cable: Option<String>,
    /// What the site file says of the cable; may be empty.
    pub description: String,
    /// Everything in a sentence.
    pub text: String,
    /// When it became known.
    pub time: String,
    /// Since when its condition holds, as far as that can be told.
    pub since: Option<String>,
    /// The greatest rise over the reference, dB.
    pub rise_db: Option<f64>,
    /// Where it shows, the strongest first.
    pub bands: Vec<Band>,
    /// What to look at, in this order.
    pub look_first: Vec<String>,
    /// What to mind before going there.
    pub caution: String,
}

/// A band in which a rise shows.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Band {
    /// The band.
    pub band: String,
    /// The operating state.
    pub state: String,
    /// The rise over the reference, dB.
    pub rise_db: f64,
    /// Since when.
    pub since: String,
}
