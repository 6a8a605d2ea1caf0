//! The verdict on a cable's band, by a table. The first row that fits counts; `-` fits anything.
//!
//! | # | regression stands | recent levels | after | before | suppression achieved | suppression held | provisional | verdict |
//! |---|---|---|---|---|---|---|---|---|
//! | 1 | yes | - | - | - | - | - | - | regressed |
//! | 2 | no | none or bad | - | - | - | - | - | unproven |
//! | 3 | no | usable | no | - | - | - | - | unproven |
//! | 4 | no | usable | yes | no | - | - | - | unproven |
//! | 5 | no | usable | yes | yes | below | - | - | unproven |
//! | 6 | no | usable | yes | yes | open | - | - | unproven |
//! | 7 | no | usable | yes | yes | above | below | - | regressed |
//! | 8 | no | usable | yes | yes | above | - | yes | unproven |
//! | 9 | no | usable | yes | yes | above | open | no | weakening |
//! | 10 | no | uncertain | yes | yes | above | above | no | holding |
//! | 11 | no | good | yes | yes | above | above | no | holding |
//!
//! A suppression is *below* the requirement if its whole 95 % interval is, *above* if its whole interval is (or just
//! reaches it), *open* otherwise, also if it is not known. The requirement is `min_suppression`, or 0 dB without one
//! (then an interval that reaches down to 0 is open). A regression is charted and alarmed without a `before` as well,
//! and with provisional references: hence row 1 comes first.

use core::fmt;

use hushwatch_quantity::Grade;

use crate::Suppression;

/// What is said of a cable's band in an operating state.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub enum Verdict {
    /// The fix is proven and holds.
    Holding,
    /// It may no longer suffice.
    Weakening,
    /// It is lost, in whole or in part.
    Regressed,
    /// There is not enough to say so.
    Unproven,
}

impl Verdict {
    /// The verdict as it is shown and exported.
    pub fn label(self) -> &'static str {
        match self {
            Self::Holding => "holding",
            Self::Weakening => "weakening",
            Self::Regressed => "regressed",
            Self::Unproven => "unproven",
        }
    }

    /// The verdict that is written `label`.
    pub fn from_label(label: &str) -> Option<Self> {
        [Self::Holding, Self::Weakening, Self::Regressed, Self::Unproven].into_iter().find(|v| v.label() == label)
    }
}

impl fmt::Display for Verdict {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.pad(self.label())
    }
}

/// What the table asks for.
#[expect(clippy::struct_excessive_bools, reason = "they are the columns of the table")]
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct VerdictInput {
    /// Does a `regression` finding stand?
    pub regression: bool,
    /// Quality of the recent levels; `None` if there are none.
    pub recent: Option<Grade>,
    /// Is there a `before` reference?
    pub before: bool,
    /// Is there an `after` reference?
    pub after: bool,
    /// Is either reference provisional?
    pub provisional: bool,
    /// The suppression that was achieved: before - after.
    pub achieved: Option<Suppression>,
    /// What is held of it: before - now.
    pub held: Option<Suppression>,
    /// The suppression that is required, dB.
    pub min_suppression_db: Option<f64>,
}

/// An interval against the requirement.
#[derive(Clone, Copy, PartialEq, Eq)]
enum Against {
    Below,
    Open,
    Above,
}

fn against(suppression: Option<Suppression>, min_suppression_db: Option<f64>) -> Against {
    let Some(Suppression { low_db, high_db, .. }) = suppression else { return Against::Open };
    let required = min_suppression_db.unwrap_or(0.0);
    let reached = if min_suppression_db.is_some() { low_db >= required } else { low_db > required };
    match (reached, high_db < required) {
        (true, _) => Against::Above,
        (false, true) => Against::Below,
        (false, false) => Against::Open,
    }
}

/// The verdict, and why, as a sentence for people.
pub fn verdict(input: &VerdictInput) -> (Verdict, &'static str) {
    use Verdict::{Holding, Regressed, Unproven, Weakening};
    if input.regression {
        return (Regressed, "the level has risen from its reference by more than is allowed");
    }
    if matches!(input.recent, None | Some(Grade::Bad)) {
        return (Unproven, "there are no usable levels of late");
    }
    if !input.after {
        return (Unproven, "no reference after the fix is marked, so nothing is charted yet");
    }
    if !input.before {
        return (Unproven, "no reference before the fix is marked; a rise is charted and alarmed all the same");
    }
    let achieved = against(input.achieved, input.min_suppression_db);
    let held = against(input.held, input.min_suppression_db);
    match (achieved, held, input.provisional) {
        (Against::Below, _, _) => (Unproven, "the fix never achieved the suppression that is required"),
        (Against::Open, _, _) => {
            (Unproven, "the references are too uncertain to show that the fix achieved what is required")
        }
        (_, Against::Below, _) => (Regressed, "the suppression held is below what is required"),
        (_, _, true) => (Unproven, "a reference covers less than a day"),
        (_, Against::Open, false) => (Weakening, "the suppression held may be below what is required"),
        (_, Against::Above, false) if input.recent == Some(Grade::Uncertain) => {
            (Holding, "the suppression held is what is required, as far as uncertain levels show")
        }
        (_, Against::Above, false) => (Holding, "the suppression held is what is required"),
    }
}
