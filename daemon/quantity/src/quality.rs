//! How far a level may be trusted, after IEC 62541: good, uncertain or bad, with a reason.

use core::fmt;

/// The three grades of IEC 62541-4, the better one first.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub enum Grade {
    /// Fit for charts and references.
    Good,
    /// Shown and kept, charted with care.
    Uncertain,
    /// Kept, never charted.
    Bad,
}

/// Why a level is not simply good. The codes are stored: never renumber, only add.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub enum Reason {
    /// Too close to the receiver's own noise floor.
    NearFloor = 1,
    /// The receiver was overloaded, or may have been.
    Overload = 2,
    /// Part of the band lies outside the range of the probe's factor or the path loss.
    OutsideFactor = 3,
    /// A setting that bears on the level was not what had been asked for.
    Settings = 4,
    /// The device cannot tell a setting that bears on the level; it was taken as asked for.
    Assumed = 5,
    /// The answer is older than the sweep that was asked for.
    Stale = 6,
    /// Points of the band are missing from the answer.
    MissingPoints = 7,
    /// Imported from elsewhere without a statement of quality.
    Imported = 8,
}

impl Reason {
    const ALL: [Self; 8] = [
        Self::NearFloor,
        Self::Overload,
        Self::OutsideFactor,
        Self::Settings,
        Self::Assumed,
        Self::Stale,
        Self::MissingPoints,
        Self::Imported,
    ];

    /// The reason in words, as it is shown and exported.
    pub fn label(self) -> &'static str {
        match self {
            Self::NearFloor => "near floor",
            Self::Overload => "overload",
            Self::OutsideFactor => "outside factor",
            Self::Settings => "settings",
            Self::Assumed => "assumed setting",
            Self::Stale => "stale",
            Self::MissingPoints => "missing points",
            Self::Imported => "imported",
        }
    }
}

/// A grade with its reason; `good` may carry a reason too (an assumed setting is no fault of the level).
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash)]
pub struct Quality {
    /// The grade.
    pub grade: Grade,
    /// What stands in the way of a better one, if anything.
    pub reason: Option<Reason>,
}

impl Quality {
    /// Good, nothing to say.
    pub const GOOD: Self = Self { grade: Grade::Good, reason: None };

    /// Uncertain for this reason.
    pub fn uncertain(reason: Reason) -> Self {
        Self { grade: Grade::Uncertain, reason: Some(reason) }
    }

    /// Bad for this reason.
    pub fn bad(reason: Reason) -> Self {
        Self { grade: Grade::Bad, reason: Some(reason) }
    }

    /// The worse of two; the first one's reason stands between equals.
    #[must_use]
    pub fn worse(self, other: Self) -> Self {
        if other.grade > self.grade || (other.grade == self.grade && self.reason.is_none()) { other } else { self }
    }

    /// May this level enter charts and references?
    pub fn is_usable(self) -> bool {
        self.grade != Grade::Bad
    }

    /// The number under which the record stores this quality: grade in the hundreds, reason below.
    pub fn code(self) -> i64 {
        let grade = match self.grade {
            Grade::Good => 0,
            Grade::Uncertain => 100,
            Grade::Bad => 200,
        };
        grade + self.reason.map_or(0, |reason| reason as i64)
    }

    /// The quality stored under `code`, if it is one.
    pub fn from_code(code: i64) -> Option<Self> {
        let grade = match code.div_euclid(100) {
            0 => Grade::Good,
            1 => Grade::Uncertain,
            2 => Grade::Bad,
            _ => return None,
        };
        let reason = match code.rem_euclid(100) {
            0 => None,
            number => Some(Reason::ALL.into_iter().find(|reason| *reason as i64 == number)?),
        };
        Some(Self { grade, reason })
    }
}

impl fmt::Display for Grade {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.pad(match self {
            Self::Good => "good",
            Self::Uncertain => "uncertain",
            Self::Bad => "bad",
        })
    }
}

impl fmt::Display for Reason {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.pad(self.label())
    }
}

/// `good`, or `uncertain: near floor`.
impl fmt::Display for Quality {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self.reason {
            Some(reason) => write!(f, "{}: {}", self.grade, reason),
            None => write!(f, "{}", self.grade),
        }
    }
}

impl core::str::FromStr for Quality {
    type Err = ();

    /// Reads what `Display` writes; a bare grade is enough.
    fn from_str(text: &str) -> Result<Self, ()> {
        let (grade, reason) = match text.split_once(':') {
            Some((grade, reason)) => (grade.trim(), Some(reason.trim())),
            None => (text.trim(), None),
        };
        let grade =
            [Grade::Good, Grade::Uncertain, Grade::Bad].into_iter().find(|g| g.to_string() == grade).ok_or(())?;
        let reason = match reason {
            None => None,
            Some(label) => Some(Reason::ALL.into_iter().find(|r| r.label() == label).ok_or(())?),
        };
        Ok(Self { grade, reason })
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn every_quality_survives_storage_and_text() {
        for grade in [Grade::Good, Grade::Uncertain, Grade::Bad] {
            for reason in Reason::ALL.into_iter().map(Some).chain([None]) {
                let quality = Quality { grade, reason };
                assert_eq!(Quality::from_code(quality.code()), Some(quality));
                assert_eq!(quality.to_string().parse(), Ok(quality));
            }
        }
        assert_eq!(Quality::from_code(300), None);
        assert_eq!(Quality::from_code(99), None);
        assert_eq!(Quality::from_code(-1), None);
    }

    #[test]
    fn the_worse_quality_wins() {
        let near = Quality::uncertain(Reason::NearFloor);
        let bad = Quality::bad(Reason::Settings);
        assert_eq!(Quality::GOOD.worse(near), near);
        assert_eq!(bad.worse(near), bad);
        assert_eq!(near.worse(bad), bad);
        assert_eq!(near.worse(Quality::uncertain(Reason::Overload)), near);
    }
}
