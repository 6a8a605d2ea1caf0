//! When trouble with an instrument becomes an alarm: pure, told the wire time.
//!
//! A single lost answer is recorded as a gap and no more; an instrument that stays silent, or another one in its
//! place, is somebody's business.

use std::time::Duration;

/// How long trouble must last before it is an alarm (wire time).
pub(crate) const PATIENCE: Duration = Duration::from_secs(10);

/// The trouble of one instrument, if it has any.
#[derive(Debug, Default)]
pub(crate) struct Outage {
    began: Option<Duration>,
    alarmed: bool,
}

/// What follows from a failed or successful sweep.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(crate) enum Consequence {
    /// Nothing changes.
    None,
    /// Raise the alarm.
    Raise,
    /// The instrument answers again: let the alarm return.
    Clear,
}

impl Outage {
    /// An instrument whose alarm was already raised before the service was started again.
    pub(crate) fn resumed(alarmed: bool) -> Self {
        Self { began: None, alarmed }
    }

    /// A sweep failed at `wire` (time since any fixed point). `at_once` tells that waiting would not help: another
    /// instrument answers, or a setting is refused.
    pub(crate) fn failed(&mut self, wire: Duration, at_once: bool) -> Consequence {
        let began = *self.began.get_or_insert(wire);
        if !self.alarmed && (at_once || wire.saturating_sub(began) >= PATIENCE) {
            self.alarmed = true;
            return Consequence::Raise;
        }
        Consequence::None
    }

    /// A sweep succeeded.
    pub(crate) fn succeeded(&mut self) -> Consequence {
        self.began = None;
        if std::mem::take(&mut self.alarmed) { Consequence::Clear } else { Consequence::None }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn only_lasting_trouble_is_an_alarm_and_only_once() {
        let mut outage = Outage::default();
        let at = Duration::from_secs;
        assert_eq!(outage.failed(at(100), false), Consequence::None);
        assert_eq!(outage.failed(at(109), false), Consequence::None);
        assert_eq!(outage.failed(at(110), false), Consequence::Raise);
        assert_eq!(outage.failed(at(500), false), Consequence::None);
        assert_eq!(outage.succeeded(), Consequence::Clear);
        assert_eq!(outage.succeeded(), Consequence::None);
        assert_eq!(outage.failed(at(501), false), Consequence::None);
    }

    #[test]
    fn another_instrument_on_the_port_is_told_at_once() {
        let mut outage = Outage::default();
        assert_eq!(outage.failed(Duration::ZERO, true), Consequence::Raise);
        assert_eq!(outage.failed(Duration::ZERO, true), Consequence::None);
    }

    #[test]
    fn an_alarm_from_before_a_restart_can_still_return() {
        assert_eq!(Outage::resumed(true).succeeded(), Consequence::Clear);
        assert_eq!(Outage::resumed(true).failed(Duration::ZERO, true), Consequence::None);
    }
}
