//! One series in one operating state: its references, its chart and its recent blocks.

use std::collections::VecDeque;

use hushwatch_quantity::{Span, Time};

use crate::chart::{Active, Signal};
use crate::engine::{DEFAULT_MAX_RISE_DB, LEAST_REPEATABILITY_DB, RECENT_BLOCKS};
use crate::{
    Block, ChartState, Design, Finding, Outcome, ReferenceFigure, SeriesId, SeriesSettings, StateId, change_point,
    robust, suppression,
};

/// A standing finding is told anew when its size has changed by this much, dB, ...
const TELL_CHANGE_DB: f64 = 0.5;

/// ... and not more often than this.
const TELL_EVERY: Span = Span::from_hours(1);

#[derive(Clone, Debug, Default)]
pub(crate) struct Pair {
    before: Option<ReferenceFigure>,
    after: Option<ReferenceFigure>,
    chart: Option<Chart>,
    /// The epoch of the last chart that was set aside.
    past_epoch: u32,
    recent: VecDeque<Block>,
}

#[derive(Clone, Debug)]
struct Chart {
    state: ChartState,
    /// Made at the first block that needs it, and anew when the run length to design for has changed.
    design: Option<(f64, Design)>,
}

/// What a pair needs to know of its surroundings.
#[derive(Clone, Copy)]
pub(crate) struct Share {
    pub(crate) series: SeriesId,
    pub(crate) state: StateId,
    /// Length of a block.
    pub(crate) block: Span,
    /// In-control run length that makes up this pair's share in the site's false alarms.
    pub(crate) arl_blocks: f64,
}

impl Pair {
    pub(crate) fn chart(&self) -> Option<&ChartState> {
        self.chart.as_ref().map(|chart| &chart.state)
    }

    pub(crate) fn design(&self, arl_blocks: f64) -> Option<Design> {
        Some(Design::new(self.after.as_ref()?, self.chart()?.max_rise_db, arl_blocks))
    }

    pub(crate) fn recent(&self) -> impl Iterator<Item = &Block> {
        self.recent.iter()
    }

    pub(crate) fn remember(&mut self, block: Block) {
        if self.recent.len() == RECENT_BLOCKS {
            self.recent.pop_front();
        }
        self.recent.push_back(block);
    }

    pub(crate) fn remember_only(&mut self, blocks: &[Block]) {
        self.recent.clear();
        self.recent.extend(&blocks[blocks.len().saturating_sub(RECENT_BLOCKS)..]);
    }

    pub(crate) fn set_before(&mut self, figure: ReferenceFigure, settings: &SeriesSettings) -> Option<Outcome> {
        self.before = Some(figure);
        self.adopt_max_rise(settings)
    }

    pub(crate) fn set_after(
        &mut self,
        figure: ReferenceFigure,
        from: Time,
        settings: &SeriesSettings,
    ) -> Option<Outcome> {
        let max_rise_db = max_rise(settings, self.before.as_ref(), &figure);
        self.after = Some(figure);
        let epoch = self.chart().map_or(self.past_epoch, |chart| chart.epoch) + 1;
        self.start(ChartState::new(epoch, from, figure.median_db, max_rise_db))
    }

    /// Forgets references, chart and recent blocks: what comes cannot be compared with them. Clears the finding that stood.
    pub(crate) fn set_aside(&mut self) -> Option<Outcome> {
        self.before = None;
        self.after = None;
        self.recent.clear();
        let former = self.chart.take()?;
        self.past_epoch = former.state.epoch;
        former.state.active.map(|active| Outcome::Cleared(active.finding))
    }

    /// Starts a new epoch if the settings and references now ask for another `max_rise`.
    pub(crate) fn adopt_max_rise(&mut self, settings: &SeriesSettings) -> Option<Outcome> {
        let (after, chart) = (self.after?, self.chart()?);
        let max_rise_db = max_rise(settings, self.before.as_ref(), &after);
        if max_rise_db == chart.max_rise_db {
            return None;
        }
        let from = chart.previous.map_or(chart.from, |previous| chart.from.max(previous.start));
        let state = ChartState::new(chart.epoch + 1, from, chart.target_db, max_rise_db);
        self.start(state)
    }

    /// Goes on with a saved chart if it stands on the same reference and question; else a new epoch follows it.
    pub(crate) fn resume(&mut self, saved: ChartState) -> Option<Outcome> {
        let chart = self.chart.as_mut()?;
        let same = |state: &ChartState| (state.from, state.target_db.to_bits(), state.max_rise_db.to_bits());
        if same(&chart.state) == same(&saved) {
            chart.state = saved;
            return None;
        }
        let fresh = ChartState { epoch: saved.epoch + 1, ..chart.state.clone() };
        chart.state = saved;
        self.start(fresh)
    }

    /// Puts a new chart in the place of the present one; clears the finding that stood.
    fn start(&mut self, state: ChartState) -> Option<Outcome> {
        let former = self.chart.replace(Chart { state, design: None })?;
        former.state.active.map(|active| Outcome::Cleared(active.finding))
    }

    /// Charts the recent blocks, after the start of an epoch that lies in the past.
    pub(crate) fn catch_up(&mut self, share: Share) -> Vec<Outcome> {
        let blocks: Vec<Block> = self.recent.iter().copied().collect();
        blocks.iter().filter_map(|block| self.take(share, block)).collect()
    }

    /// Charts a closed block, which is among the recent ones already.
    pub(crate) fn take(&mut self, share: Share, block: &Block) -> Option<Outcome> {
        let chart = self.chart.as_mut().filter(|chart| block.start >= chart.state.from)?;
        let design = match chart.design {
            Some((arl_blocks, design)) if arl_blocks == share.arl_blocks => design,
            _ => Design::new(self.after.as_ref()?, chart.state.max_rise_db, share.arl_blocks),
        };
        chart.design = Some((share.arl_blocks, design));
        let known = block.start + share.block;
        match chart.state.step(&design, share.block, block) {
            Signal::None => self.retell(known),
            Signal::Raise(statistic, threshold) => self.raise(share, (statistic, threshold), known),
            Signal::Return => self.clear(&design, known),
        }
    }

    fn raise(&mut self, share: Share, (statistic, threshold): (f64, f64), known: Time) -> Option<Outcome> {
        let state = &self.chart.as_ref()?.state;
        let (since, rise_db) = self.size(state, None, known)?;
        let finding = Finding {
            series: share.series,
            state: share.state,
            epoch: state.epoch,
            time: known,
            rise_db,
            since,
            target_db: state.target_db,
            max_rise_db: state.max_rise_db,
            statistic,
            threshold,
        };
        let active = Active { finding: finding.clone(), return_statistic: 0.0, return_blocks: 0 };
        self.chart.as_mut()?.state.active = Some(active);
        Some(Outcome::Raised(finding))
    }

    /// Tells a standing finding anew if it is time and its size has changed.
    fn retell(&mut self, known: Time) -> Option<Outcome> {
        let state = &self.chart.as_ref()?.state;
        let told = &state.active.as_ref()?.finding;
        if known - told.time < TELL_EVERY {
            return None;
        }
        let (since, rise_db) = self.size(state, Some(told.since), known)?;
        if (rise_db - told.rise_db).abs() < TELL_CHANGE_DB {
            return None;
        }
        let finding = &mut self.chart.as_mut()?.state.active.as_mut()?.finding;
        (finding.time, finding.since, finding.rise_db) = (known, since, rise_db);
        Some(Outcome::Updated(finding.clone()))
    }

    fn clear(&mut self, design: &Design, known: Time) -> Option<Outcome> {
        let state = &mut self.chart.as_mut()?.state;
        let Active { finding, return_statistic, return_blocks } = state.active.take()?;
        state.statistic = 0.0;
        state.gross = 0;
        let target_db = state.target_db;
        let back: Vec<f64> = self.recent.iter().rev().take(return_blocks as usize).map(|b| b.median_db).collect();
        let rise_db = robust::median(&back)? - target_db;
        let threshold = design.threshold;
        Some(Outcome::Cleared(Finding { time: known, rise_db, statistic: return_statistic, threshold, ..finding }))
    }

    /// Date and size of the rise that stands. The recent blocks may reach back less far than the rise: a date before them
    /// stays as it was.
    fn size(&self, state: &ChartState, dated: Option<Time>, known: Time) -> Option<(Time, f64)> {
        let blocks: Vec<&Block> =
            self.recent.iter().filter(|block| block.start >= state.from && block.start < known).collect();
        let earlier = dated.filter(|since| blocks.first().is_some_and(|block| block.start >= *since));
        let values: Vec<f64> = blocks.iter().map(|block| block.median_db).collect();
        let index = match earlier {
            Some(_) => 0,
            None => change_point::rise_from(&values, state.target_db)?,
        };
        let rise_db = robust::median(&values[index..])? - state.target_db;
        Some((earlier.unwrap_or(blocks[index].start), rise_db))
    }
}

/// The rise to look for: as asked for, else half of what was achieved or the default, not under twice the repeatability.
fn max_rise(settings: &SeriesSettings, before: Option<&ReferenceFigure>, after: &ReferenceFigure) -> f64 {
    if let Some(asked) = settings.max_rise_db.filter(|asked| asked.is_finite() && *asked > 0.0) {
        return asked;
    }
    let repeatability = after.sigma_db.max(LEAST_REPEATABILITY_DB);
    before.map_or(DEFAULT_MAX_RISE_DB, |before| suppression(before, after).db / 2.0).max(2.0 * repeatability)
}
