//! The engine: readings in, closed blocks and findings out, for all series and operating states of a site.
//!
//! The wanted false-alarm rate is the site's. Every pair of series and operating state that has an `after` reference
//! gets an equal share of it, so thresholds follow the number of such pairs; statistics stay when that number changes.
//!
//! Every `Raised` is followed by one `Cleared` of the same epoch, be it that the level returned or that a new reference
//! or another `max_rise` started a new epoch. Per series the outcomes depend on its readings and their order alone,
//! not on batches nor on when [`Engine::advance`] is called in between, as long as no reading comes late for its block.

use std::collections::BTreeMap;

use hushwatch_quantity::{Quality, Span, Time};
use serde::{Deserialize, Serialize};

use crate::block::Blocker;
use crate::pair::{Pair, Share};
use crate::{Block, ChartState, Design, ReferenceFigure, ReferenceKind, SeriesId, StateId, stored};

/// How many recent blocks of a series and operating state are held in memory, to date a rise and to size it.
pub const RECENT_BLOCKS: usize = 288;

/// `max_rise` without a `before` reference, dB: a change that one acts on (common practice).
pub const DEFAULT_MAX_RISE_DB: f64 = 3.0;

/// Least repeatability that a default `max_rise` reckons with, dB: of the same cable and clamp from one day to the
/// next (common practice).
pub const LEAST_REPEATABILITY_DB: f64 = 0.5;

/// The wanted rate of false alarms of the whole site.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct FalseAlarms {
    /// So many,
    pub count: f64,
    /// in this time.
    pub per: Span,
}

/// What holds for all series.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct EngineSettings {
    /// Length of a block; positive.
    pub block: Span,
    /// The wanted rate of false alarms.
    pub false_alarms: FalseAlarms,
}

/// What the user asks of one series.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct SeriesSettings {
    /// The rise that is to be found, dB; taken as asked for. None (or not positive): half the achieved suppression, or
    /// [`DEFAULT_MAX_RISE_DB`] without a `before` reference, but never under twice the repeatability.
    pub max_rise_db: Option<f64>,
    /// The suppression that is required, dB. It is for the verdict; the chart does not know it.
    pub min_suppression_db: Option<f64>,
}

/// One level of one series.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Reading {
    /// The series.
    pub series: SeriesId,
    /// What the machine was doing.
    pub state: StateId,
    /// When, in plant time.
    pub time: Time,
    /// The level, in the unit of the series.
    pub level_db: f64,
    /// How far it may be trusted; `bad` does not enter blocks.
    pub quality: Quality,
}

/// A rise that was found.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Finding {
    /// Where: the series,
    pub series: SeriesId,
    /// and the operating state.
    pub state: StateId,
    /// The chart's epoch.
    pub epoch: u32,
    /// When this was known: the end of the block that told it.
    #[serde(with = "stored::time")]
    pub time: Time,
    /// Median of the blocks since the change, over the target, dB; when cleared, of the blocks since the return.
    pub rise_db: f64,
    /// Since when: the start of the first block after the change.
    #[serde(with = "stored::time")]
    pub since: Time,
    /// The level that was to be held, in the unit of the series.
    pub target_db: f64,
    /// The rise that was looked for, dB.
    pub max_rise_db: f64,
    /// The statistic that told it: the CUSUM's, or how far the last of some gross blocks lay above the target, dB,
    pub statistic: f64,
    /// and the threshold that it passed.
    pub threshold: f64,
}

/// What readings led to.
#[derive(Clone, Debug, PartialEq)]
pub enum Outcome {
    /// A block is complete: to be recorded.
    BlockClosed {
        /// The series,
        series: SeriesId,
        /// the operating state,
        state: StateId,
        /// and the block.
        block: Block,
    },
    /// A rise was found.
    Raised(Finding),
    /// The rise that stands is now of another size or date.
    Updated(Finding),
    /// The level returned, or the chart was started anew (then its epoch is no longer the finding's).
    Cleared(Finding),
}

/// Blocks, references and charts of all series.
#[derive(Clone, Debug)]
pub struct Engine {
    settings: EngineSettings,
    series: BTreeMap<SeriesId, Series>,
}

#[derive(Clone, Debug, Default)]
struct Series {
    settings: SeriesSettings,
    blocks: Blocker,
    states: BTreeMap<StateId, Pair>,
}

impl Engine {
    /// An engine that watches nothing yet.
    pub fn new(settings: EngineSettings) -> Self {
        Self { settings, series: BTreeMap::new() }
    }

    /// Takes a series up, or changes what is asked of it. A chart whose `max_rise` is another by that starts anew.
    pub fn watch(&mut self, series: SeriesId, settings: SeriesSettings) -> Vec<Outcome> {
        let entry = self.series.entry(series).or_default();
        entry.settings = settings;
        let mut outcomes = Vec::new();
        for pair in entry.states.values_mut() {
            outcomes.extend(pair.adopt_max_rise(&settings));
        }
        outcomes
    }

    /// Lays a reference. An `after` starts a new epoch of the chart: blocks that begin at `from` or later are charted,
    /// also those recent ones that are closed already. A `before` starts one only if it changes the default of `max_rise`;
    /// `from` then has no meaning.
    pub fn set_reference(
        &mut self,
        series: SeriesId,
        state: StateId,
        kind: ReferenceKind,
        figure: ReferenceFigure,
        from: Time,
    ) -> Vec<Outcome> {
        let entry = self.series.entry(series).or_default();
        let settings = entry.settings;
        let pair = entry.states.entry(state).or_default();
        let ended = match kind {
            ReferenceKind::Before => pair.set_before(figure, &settings),
            ReferenceKind::After => pair.set_after(figure, from, &settings),
        };
        let mut outcomes: Vec<Outcome> = ended.into_iter().collect();
        if kind == ReferenceKind::Before {
            return outcomes;
        }
        let share = self.share(series, state);
        if let Some(pair) = self.series.get_mut(&series).and_then(|entry| entry.states.get_mut(&state)) {
            outcomes.extend(pair.catch_up(share));
        }
        outcomes
    }

    /// Levels of a series cannot be compared from now on with those before (another setting, another probe): its open block
    /// is closed early, and its references and charts are set aside. A later `after` starts a new epoch. Readings that
    /// still fall into the time of the block that was closed are left out.
    pub fn set_aside(&mut self, series: SeriesId) -> Vec<Outcome> {
        let Some(entry) = self.series.get_mut(&series) else { return Vec::new() };
        let closed = entry.blocks.close_early();
        let mut outcomes = Vec::new();
        // The block still belongs to what was before.
        self.close(series, closed, &mut outcomes);
        let pairs = self.series.get_mut(&series).into_iter().flat_map(|entry| entry.states.values_mut());
        outcomes.extend(pairs.filter_map(Pair::set_aside));
        outcomes
    }

    /// Takes a reading: closes the block of its series that ended before it, if any.
    pub fn observe(&mut self, reading: Reading) -> Vec<Outcome> {
        let Reading { series, state, time, level_db, quality } = reading;
        let entry = self.series.entry(series).or_default();
        let closed = entry.blocks.observe(self.settings.block, state, time, level_db, quality);
        let mut outcomes = Vec::new();
        self.close(series, closed, &mut outcomes);
        outcomes
    }

    /// Closes all blocks that have ended by `now`. `now` must not run ahead of the readings: what arrives for a closed
    /// block is too late.
    pub fn advance(&mut self, now: Time) -> Vec<Outcome> {
        let due = |(id, entry): (&SeriesId, &Series)| Some((entry.blocks.next_end()?, *id));
        let mut due: Vec<(Time, SeriesId)> =
            self.series.iter().filter_map(due).filter(|(end, _)| *end <= now).collect();
        due.sort_unstable();
        let mut outcomes = Vec::new();
        for (_, series) in due {
            let closed = self.series.get_mut(&series).map(|entry| entry.blocks.advance(now)).unwrap_or_default();
            self.close(series, closed, &mut outcomes);
        }
        outcomes
    }

    /// When the next open block ends, if one is open: then [`Engine::advance`] has something to do.
    pub fn next_end(&self) -> Option<Time> {
        self.series.values().filter_map(|entry| entry.blocks.next_end()).min()
    }

    /// The chart of a series in an operating state, if it has an `after` reference.
    pub fn chart(&self, series: SeriesId, state: StateId) -> Option<&ChartState> {
        self.pair(series, state)?.chart()
    }

    /// How that chart is designed, with its present share in the false-alarm rate.
    pub fn design(&self, series: SeriesId, state: StateId) -> Option<Design> {
        self.pair(series, state)?.design(self.arl_blocks())
    }

    /// The recent closed blocks, oldest first, [`RECENT_BLOCKS`] at most.
    pub fn recent(&self, series: SeriesId, state: StateId) -> impl Iterator<Item = &Block> {
        self.pair(series, state).into_iter().flat_map(Pair::recent)
    }

    /// How many readings of a series came too late for their block and were left out, since this engine was made.
    pub fn late_readings(&self, series: SeriesId) -> u64 {
        self.series.get(&series).map_or(0, |entry| entry.blocks.late())
    }

    /// Up to where the blocks of a series are closed: levels from here on have to be given again after a restart.
    pub fn closed_until(&self, series: SeriesId) -> Option<Time> {
        self.series.get(&series)?.blocks.closed_until()
    }

    /// Goes on where an earlier engine stopped, after its references have been laid again: its saved chart (none where
    /// there was no `after` reference) and its recent blocks, oldest first, the last [`RECENT_BLOCKS`] at least.
    /// Thereafter the levels from [`Engine::closed_until`] on are to be given again by [`Engine::observe`].
    ///
    /// If what the chart stood on has changed meanwhile (reference, `max_rise`), a new epoch follows the saved one.
    pub fn restore(
        &mut self,
        series: SeriesId,
        state: StateId,
        chart: Option<ChartState>,
        recent: &[Block],
    ) -> Vec<Outcome> {
        let entry = self.series.entry(series).or_default();
        let seen = chart.as_ref().and_then(|chart| chart.previous).map(|previous| previous.start);
        let last = recent.last().map(|block| block.start).max(seen);
        if let Some(last) = last {
            entry.blocks.resume_after(last + self.settings.block);
        }
        let pair = entry.states.entry(state).or_default();
        pair.remember_only(recent);
        chart.and_then(|chart| pair.resume(chart)).into_iter().collect()
    }

    fn pair(&self, series: SeriesId, state: StateId) -> Option<&Pair> {
        self.series.get(&series)?.states.get(&state)
    }

    /// The in-control run length of each chart, in blocks, that makes up the wanted rate of the site. It reckons with
    /// all pairs giving blocks all the time; operating states that exclude each other only make it rarer.
    fn arl_blocks(&self) -> f64 {
        let pairs = self.series.values().flat_map(|entry| entry.states.values()).filter(|pair| pair.chart().is_some());
        let FalseAlarms { count, per } = self.settings.false_alarms;
        per.as_secs_f64() / count * pairs.count() as f64 / self.settings.block.as_secs_f64()
    }

    fn share(&self, series: SeriesId, state: StateId) -> Share {
        Share { series, state, block: self.settings.block, arl_blocks: self.arl_blocks() }
    }

    fn close(&mut self, series: SeriesId, closed: Vec<(StateId, Block)>, outcomes: &mut Vec<Outcome>) {
        for (state, block) in closed {
            let share = self.share(series, state);
            outcomes.push(Outcome::BlockClosed { series, state, block });
            let Some(entry) = self.series.get_mut(&series) else { continue };
            let pair = entry.states.entry(state).or_default();
            pair.remember(block);
            outcomes.extend(pair.take(share, &block));
        }
    }
}
