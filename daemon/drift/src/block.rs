//! Robust blocks: the levels of a series within a block of time, per operating state, reduced to their median.
//!
//! Blocks are cut at whole multiples of the block length since 1970 ([`Time::floor_to`]), so that every part of
//! the house cuts them alike. A block is closed by a reading of its series (in any operating state) at or after
//! its end, or by being told that this time has come. What arrives later for a closed block is counted and left out.

use std::collections::BTreeMap;

use hushwatch_quantity::{Quality, Span, Time, from_centi, to_centi};
use serde::{Deserialize, Serialize};

use crate::{StateId, robust, stored};

/// The usable levels of one series in one operating state within `[start, start + block)`.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct Block {
    /// Where it begins.
    #[serde(with = "stored::time")]
    pub start: Time,
    /// The exact median of its usable levels, in the unit of the series.
    pub median_db: f64,
    /// How many levels it stands on; at least one.
    pub count: u32,
    /// The worst quality among them (never `bad`: those do not enter).
    #[serde(with = "stored::quality")]
    pub worst: Quality,
}

/// The one open block of a series, its levels kept apart by operating state.
#[derive(Clone, Debug, Default)]
pub(crate) struct Blocker {
    open: Option<Open>,
    closed_until: Option<Time>,
    late: u64,
}

#[derive(Clone, Debug)]
struct Open {
    start: Time,
    end: Time,
    states: BTreeMap<StateId, Levels>,
}

#[derive(Clone, Debug)]
struct Levels {
    db: Vec<f64>,
    worst: Quality,
}

impl Blocker {
    /// Takes one reading; returns the blocks that it closes, by operating state.
    ///
    /// The level is rounded to the 0.01 dB to which the record keeps it, so that levels read back from the record
    /// after a restart make the same block. A level that is `bad` or no number closes blocks, but does not enter one.
    pub(crate) fn observe(
        &mut self,
        block: Span,
        state: StateId,
        time: Time,
        level_db: f64,
        quality: Quality,
    ) -> Vec<(StateId, Block)> {
        let closed = self.advance(time);
        let start = self.open.as_ref().map(|open| open.start).max(self.closed_until);
        if start.is_some_and(|start| time < start) {
            self.late += 1;
            return closed;
        }
        if let Some(centi) = to_centi(level_db).filter(|_| quality.is_usable()) {
            let start = time.floor_to(block);
            let open = self.open.get_or_insert_with(|| Open { start, end: start + block, states: BTreeMap::new() });
            let levels = open.states.entry(state).or_insert(Levels { db: Vec::new(), worst: Quality::GOOD });
            levels.db.push(from_centi(centi));
            levels.worst = levels.worst.worse(quality);
        }
        closed
    }

    /// Closes the open block if its end has come by `now`.
    pub(crate) fn advance(&mut self, now: Time) -> Vec<(StateId, Block)> {
        let Some(open) = self.open.take_if(|open| now >= open.end) else { return Vec::new() };
        self.closed_until = self.closed_until.max(Some(open.end));
        let close = |(state, levels): (StateId, Levels)| {
            let count = levels.db.len() as u32;
            let median_db = robust::median_in(levels.db)?;
            Some((state, Block { start: open.start, median_db, count, worst: levels.worst }))
        };
        open.states.into_iter().filter_map(close).collect()
    }

    /// Closes the open block before its end; what is left of its time is closed too, so that no two blocks begin alike.
    pub(crate) fn close_early(&mut self) -> Vec<(StateId, Block)> {
        let end = self.next_end();
        end.map(|end| self.advance(end)).unwrap_or_default()
    }

    /// Takes note that everything before `time` has been closed earlier.
    pub(crate) fn resume_after(&mut self, time: Time) {
        self.closed_until = self.closed_until.max(Some(time));
    }

    /// When the open block ends, if there is one.
    pub(crate) fn next_end(&self) -> Option<Time> {
        self.open.as_ref().map(|open| open.end)
    }

    /// Everything before this has been closed.
    pub(crate) fn closed_until(&self) -> Option<Time> {
        self.closed_until
    }

    /// How many readings came too late for their block.
    pub(crate) fn late(&self) -> u64 {
        self.late
    }
}
