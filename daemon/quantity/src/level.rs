//! What a level is referred to.

use core::fmt;

/// The reference of a level, given by the kind of probe that sees the cable.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub enum LevelUnit {
    /// dB over 1 microampere: a current probe.
    DbMicroamp,
    /// dB over 1 microampere per metre: a loop probe. Relative verdicts only.
    DbMicroampPerMetre,
    /// dB over 1 microvolt: connected directly.
    DbMicrovolt,
}

impl LevelUnit {
    /// The unit as it is written, `dB(uA)` and so on.
    pub fn label(self) -> &'static str {
        match self {
            Self::DbMicroamp => "dB(uA)",
            Self::DbMicroampPerMetre => "dB(uA/m)",
            Self::DbMicrovolt => "dB(uV)",
        }
    }

    /// The unit that is written `label`.
    pub fn from_label(label: &str) -> Option<Self> {
        [Self::DbMicroamp, Self::DbMicroampPerMetre, Self::DbMicrovolt].into_iter().find(|unit| unit.label() == label)
    }
}

impl fmt::Display for LevelUnit {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.pad(self.label())
    }
}
