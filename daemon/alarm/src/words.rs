//! The words of the life cycle, and how they are written in the record.

use core::fmt;

use hushwatch_quantity::Time;
use serde::{Deserialize, Serialize};

/// Makes an enum with a label for each variant, which is what stands in the record, in `--json` and before people.
macro_rules! labelled {
    ($(#[$doc:meta])* $name:ident { $($(#[$variant_doc:meta])* $variant:ident = $label:literal,)* }) => {
        $(#[$doc])*
        #[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, PartialOrd, Ord, Serialize, Deserialize)]
        pub enum $name {
            $($(#[$variant_doc])* #[serde(rename = $label)] $variant,)*
        }

        impl $name {
            /// All of them, in the order of their documentation.
            pub const ALL: &'static [Self] = &[$(Self::$variant),*];

            /// How it is written.
            pub fn label(self) -> &'static str {
                match self { $(Self::$variant => $label,)* }
            }

            /// The one that is written `label`.
            pub fn from_label(label: &str) -> Option<Self> {
                Self::ALL.iter().copied().find(|one| one.label() == label)
            }
        }

        impl fmt::Display for $name {
            fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
                f.pad(self.label())
            }
        }
    };
}

labelled! {
    /// What an alarm is about.
    AlarmKind {
        /// A quieted cable has become louder than its reference allows.
        Regression = "regression",
        /// A lasting rise that is smaller than that.
        Weakening = "weakening",
        /// The source itself became louder.
        Source = "source",
        /// The level fell implausibly: the probe is off, the input dead.
        SignalLost = "signal-lost",
        /// An instrument does not answer, another one does, or it cannot be set.
        Instrument = "instrument",
        /// The record cannot be written.
        Record = "record",
        /// The clock is not to be trusted.
        Clock = "clock",
    }
}

labelled! {
    /// Where an alarm is in its life, after IEC 62682.
    AlarmState {
        /// Not there, or over and acknowledged.
        Normal = "normal",
        /// There, and nobody has said that they know.
        Unacknowledged = "unacknowledged",
        /// There, and somebody has taken it up.
        Acknowledged = "acknowledged",
        /// Over before anybody took it up.
        Returned = "returned",
    }
}

labelled! {
    /// What turned out to be behind an alarm, told by who acknowledges it.
    Cause {
        /// The choke: gone, open, cracked, hot.
        Choke = "choke",
        /// The source of the noise changed.
        Source = "source",
        /// The measurement itself.
        Measurement = "measurement",
        /// Anything else, or not known yet.
        Other = "other",
    }
}

labelled! {
    /// What happened to an alarm.
    Transition {
        /// It occurred.
        Occurred = "occurred",
        /// It is still there, with another size or date.
        Updated = "updated",
        /// Its condition is over.
        Cleared = "cleared",
        /// Somebody took it up.
        Acknowledged = "acknowledged",
    }
}

/// What kind of alarm, and about what: a cable's tag, an instrument's name. At most one alarm of a key is open.
#[derive(Clone, Debug, PartialEq, Eq, Hash, PartialOrd, Ord, Serialize, Deserialize)]
pub struct AlarmKey {
    /// The kind.
    pub kind: AlarmKind,
    /// The tag of the cable, or the name of the instrument.
    pub subject: String,
}

impl AlarmKey {
    /// The key of this kind about this subject.
    pub fn new(kind: AlarmKind, subject: impl Into<String>) -> Self {
        Self { kind, subject: subject.into() }
    }
}

impl fmt::Display for AlarmKey {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "{} {}", self.kind, self.subject)
    }
}

/// What is known of an alarm.
#[derive(Clone, Debug, Default, PartialEq, Serialize, Deserialize)]
pub struct Detail {
    /// In a sentence, for people.
    pub text: String,
    /// Since when its condition holds, as far as that can be told, plant time.
    #[serde(with = "optional_micros", default)]
    pub since: Option<Time>,
    /// Where it shows, the strongest first; none for an alarm that is not about levels.
    #[serde(default)]
    pub places: Vec<Place>,
}

/// A band of a cable in an operating state in which a rise shows.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Place {
    /// The band.
    pub band: String,
    /// The operating state.
    pub state: String,
    /// The rise over the reference, dB.
    pub rise_db: f64,
    /// Since when, plant time.
    #[serde(with = "micros")]
    pub since: Time,
}

impl Detail {
    /// The greatest rise, dB.
    pub fn rise_db(&self) -> Option<f64> {
        self.places.iter().map(|place| place.rise_db).max_by(f64::total_cmp)
    }
}

/// Times as whole microseconds.
pub(crate) mod micros {
    use hushwatch_quantity::Time;
    use serde::{Deserialize, Deserializer, Serializer};

    #[expect(clippy::trivially_copy_pass_by_ref, reason = "serde calls it with a reference")]
    pub(crate) fn serialize<S: Serializer>(time: &Time, serializer: S) -> Result<S::Ok, S::Error> {
        serializer.serialize_i64(time.as_micros())
    }

    pub(crate) fn deserialize<'de, D: Deserializer<'de>>(deserializer: D) -> Result<Time, D::Error> {
        i64::deserialize(deserializer).map(Time::from_micros)
    }
}

/// Times that may be missing, as whole microseconds.
mod optional_micros {
    use hushwatch_quantity::Time;
    use serde::{Deserialize, Deserializer, Serialize, Serializer};

    #[expect(clippy::ref_option, reason = "serde calls it with a reference")]
    pub(super) fn serialize<S: Serializer>(time: &Option<Time>, serializer: S) -> Result<S::Ok, S::Error> {
        time.map(Time::as_micros).serialize(serializer)
    }

    pub(super) fn deserialize<'de, D: Deserializer<'de>>(deserializer: D) -> Result<Option<Time>, D::Error> {
        Ok(Option::<i64>::deserialize(deserializer)?.map(Time::from_micros))
    }
}

/// What to mind before going to the cabinet (common practice).
pub const CAUTION: &str = "Live parts: only qualified persons may open the cabinet, by the local rules and the plant's own. \
    Cores on power cables can be hot. Clamps belong on insulated conductors only.";

impl AlarmKind {
    /// What to look at, in this order (common practice).
    pub fn look_first(self) -> &'static [&'static str] {
        match self {
            Self::Regression | Self::Weakening => &[
                "the choke on this cable: is it there, is its clip fully closed, is a half cracked, are there as many turns as there were?",
                "is it hot, or was it moved to another place on the cable?",
                "the shield's bond and the earth connections at both ends of the cable",
                "was the drive set otherwise (carrier frequency, filter), or was something new connected?",
                "the probe: is it where it was, is its connector tight?",
            ],
            Self::Source => &[
                "the source that the cables share: was a drive set otherwise or exchanged?",
                "what was connected or switched on at that time?",
            ],
            Self::SignalLost => &["the probe: is it on the cable?", "its connector, its cable, its amplifier's supply"],
            Self::Instrument => &[
                "the receiver: is it on, and plugged in at the port that the site file names?",
                "is it the receiver that it was, with nobody else using it?",
                "its serial cable and adapter",
            ],
            Self::Record => &["the disk: is it full, or worn out?", "the owner and the rights of the record's folder"],
            Self::Clock => &["the computer's clock, and where it takes its time from"],
        }
    }
}
