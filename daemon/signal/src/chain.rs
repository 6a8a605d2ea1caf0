//! From what the receiver reads back to what is on the cable.

use hushwatch_quantity::LevelUnit;

use crate::curve::Curve;

/// What a cable is looked at with. It decides the unit of the level and the sign of the factor.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash)]
pub enum ProbeKind {
    /// A current probe; factor in dB(ohm), voltage over current, taken off.
    Current,
    /// A loop probe; magnetic factor in dB(S/m), field over voltage, added. Relative levels only.
    Loop,
    /// The receiver's input itself; a factor is in dB, voltage out over voltage in, and is taken off.
    Direct,
}

impl ProbeKind {
    /// The unit of levels measured with it.
    pub fn unit(self) -> LevelUnit {
        match self {
            Self::Current => LevelUnit::DbMicroamp,
            Self::Loop => LevelUnit::DbMicroampPerMetre,
            Self::Direct => LevelUnit::DbMicrovolt,
        }
    }
}

/// What stands between cable and receiver: a probe, then cable, attenuator and amplifier.
#[derive(Clone, Debug, PartialEq)]
pub struct CorrectionChain {
    /// The probe's kind.
    pub kind: ProbeKind,
    /// The probe's factor, in the unit of its kind.
    pub factor: Curve,
    /// The loss between probe and receiver, dB; an amplifier's is negative.
    pub path_loss: Curve,
}

impl CorrectionChain {
    /// The level at the cable, in the unit of the probe's kind, of `db_microvolt` at the receiver.
    pub fn level_db(&self, db_microvolt: f64, hz: f64) -> f64 {
        db_microvolt + self.correction_db(hz)
    }

    /// What is added to dB(uV) at the receiver to have the level at the cable.
    pub fn correction_db(&self, hz: f64) -> f64 {
        let factor = self.factor.at(hz);
        let signed = match self.kind {
            ProbeKind::Current | ProbeKind::Direct => -factor,
            ProbeKind::Loop => factor,
        };
        self.path_loss.at(hz) + signed
    }

    /// The frequencies at which both factor and path loss are known, Hz; the first above the second if there are none.
    pub fn range(&self) -> (f64, f64) {
        let (factor, loss) = (self.factor.range(), self.path_loss.range());
        (factor.0.max(loss.0), factor.1.min(loss.1))
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn chain(kind: ProbeKind, factor: f64, loss: f64) -> CorrectionChain {
        CorrectionChain { kind, factor: Curve::flat(factor), path_loss: Curve::flat(loss) }
    }

    #[test]
    fn a_loss_lifts_the_level_and_an_amplifier_lowers_it() {
        assert_eq!(chain(ProbeKind::Direct, 0.0, 10.0).level_db(40.0, 1e6), 50.0);
        assert_eq!(chain(ProbeKind::Direct, 0.0, -20.0).level_db(40.0, 1e6), 20.0);
        assert_eq!(chain(ProbeKind::Current, 14.0, 1.0).level_db(40.0, 1e6), 27.0);
        assert_eq!(chain(ProbeKind::Loop, 14.0, 1.0).level_db(40.0, 1e6), 55.0);
        assert_eq!(ProbeKind::Loop.unit(), LevelUnit::DbMicroampPerMetre);
    }

    #[test]
    fn known_where_both_parts_are() {
        let chain = CorrectionChain {
            kind: ProbeKind::Current,
            factor: Curve::new(vec![(1e5, 0.0), (3e7, 0.0)]).unwrap(),
            path_loss: Curve::new(vec![(2e5, 0.0), (1e8, 0.0)]).unwrap(),
        };
        assert_eq!(chain.range(), (2e5, 3e7));
    }
}
