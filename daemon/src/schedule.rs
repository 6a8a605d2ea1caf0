//! When each cable of one instrument is due: pure, told the time.

use hushwatch_quantity::{Span, Time};

/// The cables of one instrument in turn. A cable that was late is not made up for: its next turn counts from when
/// it was swept, so that a slow line shares its time evenly.
#[derive(Debug)]
pub(crate) struct Schedule {
    turns: Vec<Turn>,
    free_running: bool,
}

#[derive(Debug)]
struct Turn {
    every: Span,
    due: Time,
}

/// What to do next.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(crate) enum Next {
    /// Sweep this cable now.
    Sweep(usize),
    /// Nothing is due before this time.
    Wait(Time),
}

impl Schedule {
    /// Cadences of the cables, all due at `now`, the first one first. `free_running` takes them strictly in turn as
    /// fast as they are answered, for an instrument that keeps the time itself.
    pub(crate) fn new(every: impl IntoIterator<Item = Span>, now: Time, free_running: bool) -> Self {
        Self { turns: every.into_iter().map(|every| Turn { every, due: now }).collect(), free_running }
    }

    /// The cable that has been due longest; `None` if there is no cable at all.
    pub(crate) fn next(&self, now: Time) -> Option<Next> {
        let (index, turn) = self.turns.iter().enumerate().min_by_key(|(_, turn)| turn.due)?;
        Some(if self.free_running || turn.due <= now { Next::Sweep(index) } else { Next::Wait(turn.due) })
    }

    /// The cable was swept (or the attempt failed): `started` is when its turn began.
    pub(crate) fn done(&mut self, index: usize, started: Time) {
        let latest = self.turns.iter().map(|turn| turn.due).max();
        let Some(turn) = self.turns.get_mut(index) else { return };
        if self.free_running {
            // Only the order matters here: behind all others.
            turn.due = latest.unwrap_or(started) + Span::from_micros(1);
        } else {
            let regular = turn.due + turn.every;
            turn.due = if regular <= started { started + turn.every } else { regular };
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    const SECOND: Span = Span::from_secs(1);

    fn at(millis: i64) -> Time {
        Time::from_micros(millis * 1000)
    }

    #[test]
    fn cables_take_turns_and_keep_their_cadence() {
        let mut schedule = Schedule::new([SECOND, SECOND], at(0), false);
        assert_eq!(schedule.next(at(0)), Some(Next::Sweep(0)));
        schedule.done(0, at(0));
        assert_eq!(schedule.next(at(300)), Some(Next::Sweep(1)));
        schedule.done(1, at(300));
        assert_eq!(schedule.next(at(600)), Some(Next::Wait(at(1000))));
        assert_eq!(schedule.next(at(1000)), Some(Next::Sweep(0)));
        schedule.done(0, at(1010));
        assert_eq!(schedule.next(at(1020)), Some(Next::Sweep(1)));
        schedule.done(1, at(1020));
        // A turn that began a little late does not shift the cadence.
        assert_eq!(schedule.next(at(1400)), Some(Next::Wait(at(2000))));
    }

    #[test]
    fn time_lost_is_not_made_up_for() {
        let mut schedule = Schedule::new([SECOND], at(0), false);
        schedule.done(0, at(60_000));
        assert_eq!(schedule.next(at(60_001)), Some(Next::Wait(at(61_000))));
    }

    #[test]
    fn a_line_that_is_too_slow_still_serves_every_cable() {
        let mut schedule = Schedule::new([SECOND, SECOND, SECOND], at(0), false);
        let mut swept = [0; 3];
        let mut now = 0;
        for _ in 0..30 {
            let Some(Next::Sweep(index)) = schedule.next(at(now)) else { panic!("something is always due") };
            swept[index] += 1;
            schedule.done(index, at(now));
            now += 900;
        }
        assert_eq!(swept, [10, 10, 10]);
    }

    #[test]
    fn free_running_goes_strictly_in_turn() {
        let mut schedule = Schedule::new([SECOND, SECOND], at(0), true);
        for round in 0..6 {
            assert_eq!(schedule.next(at(0)), Some(Next::Sweep(round % 2)));
            schedule.done(round % 2, at(0));
        }
    }

    #[test]
    fn no_cable_no_turn() {
        assert_eq!(Schedule::new([], at(0), false).next(at(0)), None);
    }
}
