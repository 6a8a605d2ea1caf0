//! The chart: has the level risen by `max_rise` over its reference?
//!
//! **Question.** Null: the rise is at most `max_rise`/2. Alternative: `max_rise` or more. So a small true rise does not
//! alarm, and the false-alarm rate is that at the null's edge.
//!
//! **Statistic.** A one-sided CUSUM of the log-likelihood ratio of the two for AR(1) noise: of a block `m` block lengths
//! after its predecessor the part that is new is `e = (x - mu) - rho^m (x' - mu)`, with mean `(1 - rho^m) rise` and variance
//! `sigma^2 (1 - rho^(2m))`. It covers adjacent blocks (`m = 1`), holes, and a block without predecessor (`rho^m = 0`).
//! Increments are scaled to unit variance for adjacent blocks; a block after a hole tells more and weighs more.
//! `k`, half the distance of the hypotheses, is at most [`MAX_K`]. No block adds more than [`CAP`] of the threshold.
//!
//! **Threshold.** From the exact run length ([`crate::run_length`]) without that cap, which can only lengthen it.
//!
//! **The reference's own error.** The rate is to hold on average over the references that one may happen to have. With
//! `L = ln(ARL)`, a scale off by the relative error `v` changes `ln ARL` by `2 L v`, a location off by `d` by `2 L d / D`,
//! `D = max_rise/2`; for normal errors the mean of `1/ARL` is kept if the scale is widened by `sqrt(1 + 2 L var(v))` and
//! the chart's reference value raised by `L var(d) / D`, not beyond the 99 % limit of the error of the location.
//!
//! **Gross rises.** Where the reference is so short that nobody can tell how correlated its blocks are, the CUSUM becomes slow
//! for small rises, which is right, and for large ones, which is not. So [`GROSS_BLOCKS`] blocks in a row that lie farther
//! above the null's edge than chance takes a single one at a tenth of the wanted rate signal as well (a combined
//! Shewhart-CUSUM scheme, Lucas 1982; from memory). Only the reference's error of scale and location widens that limit: it
//! asks for the blocks themselves, not for their sums, so that their correlation does not matter.
//!
//! **Return.** While a finding stands, the mirrored chart asks the opposite (null: `max_rise` or more, alternative:
//! `max_rise`/2 or less) with the same threshold. When it signals, the finding is cleared and the chart starts from zero.

use hushwatch_quantity::{Span, Time};
use serde::{Deserialize, Serialize};

use crate::reference::{normal_quantile, t_quantile};
use crate::{Block, Finding, ReferenceFigure, run_length, stored};

/// Greatest reference value `k`, in sigma of an increment. Where the noise is far below `max_rise`, the tail of its
/// distribution is anybody's guess, and a larger `k` would gain nothing: at 1.5 a rise of just `max_rise` takes
/// about three blocks, which are needed anyway.
pub const MAX_K: f64 = 1.5;

/// The most that one block adds, as a share of the threshold: a hair over a third, so that three blocks at least make an
/// alarm (two give 0.668 of the threshold, three 1.002) and a burst within one block does not.
pub const CAP: f64 = 0.334;

/// So many blocks in a row, each far above what chance takes one, are a gross rise; no fewer than the cap asks for.
pub const GROSS_BLOCKS: u32 = 3;

/// The share of the wanted false alarms that the search for gross rises may take, at most.
const GROSS_SHARE: f64 = 0.1;

/// Shortest in-control run length that is designed for, in blocks: below, "false" alarms would be the rule.
pub const MIN_ARL_BLOCKS: f64 = 10.0;

/// Least threshold, in sigma of an increment: the cap needs one above zero.
const MIN_THRESHOLD: f64 = 0.5;

/// How sure the chart's reference value is raised at most, against an error of the reference's location.
const LOCATION_LIMIT: f64 = 0.99;

/// How a series is charted: all that follows from its reference, `max_rise` and the wanted run length.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Design {
    /// The level to be held, in the unit of the series.
    pub target_db: f64,
    /// The rise to be found, dB.
    pub max_rise_db: f64,
    /// Standard deviation of a block that is reckoned with, dB: the reference's, widened by its error, and not so small
    /// that `k` would exceed [`MAX_K`].
    pub sigma_db: f64,
    /// Lag-1 autocorrelation.
    pub rho: f64,
    /// Above this rise the statistic grows, dB: the middle of the hypotheses, raised by the error of the reference.
    pub reference_value_db: f64,
    /// Half the distance of the hypotheses in sigma of an increment.
    pub k: f64,
    /// The chart signals above it.
    pub threshold: f64,
    /// In-control run length that the threshold stands for, in blocks.
    pub arl_blocks: f64,
    /// A block that lies so far above the target, dB, is gross.
    pub gross_db: f64,
}

impl Design {
    /// Designs a chart about the `after` reference for a rise of `max_rise_db` (positive), with a false alarm every
    /// `arl_blocks` blocks at the null's edge.
    pub fn new(after: &ReferenceFigure, max_rise_db: f64, arl_blocks: f64) -> Self {
        let arl_blocks = arl_blocks.max(MIN_ARL_BLOCKS);
        let log_arl = arl_blocks.ln();
        let distance = max_rise_db / 2.0;
        let widened = after.sigma_db * (1.0 + 2.0 * log_arl * after.scale_variance()).sqrt();
        let newness = Newness::after(after.rho);
        let k = (distance / 2.0 / widened * newness.mean / newness.sigma).min(MAX_K);
        let sigma_db = distance / 2.0 / k * newness.mean / newness.sigma;
        let error = after.standard_error_db;
        let limit = error * t_quantile(LOCATION_LIMIT, after.scale_freedom());
        let raised = (log_arl * error * error / distance).min(limit);
        let scale = after.sigma_db * (1.0 + log_arl / after.scale_freedom()).sqrt();
        let gross_db = distance + raised + normal_quantile(1.0 - GROSS_SHARE / arl_blocks) * scale;
        Self {
            target_db: after.median_db,
            max_rise_db,
            sigma_db,
            rho: after.rho,
            reference_value_db: 0.75 * max_rise_db + raised,
            k,
            threshold: run_length::threshold_for(k, arl_blocks).max(MIN_THRESHOLD),
            arl_blocks,
            gross_db,
        }
    }

    /// Mean number of blocks until a lasting rise of `rise_db` is found, reckoned from the chart's start without the cap.
    /// What a short or a noisy reference costs is in it.
    pub fn expected_blocks(&self, rise_db: f64) -> f64 {
        let newness = Newness::after(self.rho);
        let drift = newness.mean * (rise_db - self.reference_value_db) / (newness.sigma * self.sigma_db);
        run_length::cusum_arl(0.0, self.threshold, drift).max((1.0 / CAP).ceil())
    }

    /// How far a deviation from the target speaks for a rise above `rise_db` (positive) or against it, in sigma of an
    /// increment. `previous`: how many block lengths ago the former block began, and its deviation.
    fn evidence(&self, deviation_db: f64, previous: Option<(i64, f64)>, rise_db: f64) -> f64 {
        let adjacent = Newness::after(self.rho);
        let (decay, former) = previous
            .map_or((0.0, 0.0), |(ago, former)| (self.rho.powi(ago.clamp(1, i64::from(i32::MAX)) as i32), former));
        let newness = Newness::after(decay);
        let weight = newness.mean / newness.sigma * adjacent.sigma / adjacent.mean;
        weight * (deviation_db - decay * former - newness.mean * rise_db) / (newness.sigma * self.sigma_db)
    }

    fn capped(&self, increment: f64) -> f64 {
        increment.min(CAP * self.threshold)
    }
}

/// What a block that remembers the share `decay` of its predecessor has of its own: share of a mean, share of sigma.
struct Newness {
    mean: f64,
    sigma: f64,
}

impl Newness {
    fn after(decay: f64) -> Self {
        Self { mean: 1.0 - decay, sigma: (1.0 - decay * decay).sqrt() }
    }
}

/// One step of a tabular CUSUM: `max(0, S + increment)` (Page 1954).
pub fn cusum_step(statistic: f64, increment: f64) -> f64 {
    (statistic + increment).max(0.0)
}

/// What a chart knows after the last block that it has seen: saved in the record with that block, and enough, with the
/// recent blocks, to go on as if nothing had happened.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct ChartState {
    /// Counts the starts of this chart from 1: a new `after` or another `max_rise` starts a new epoch.
    pub epoch: u32,
    /// Blocks from here on are charted.
    #[serde(with = "stored::time")]
    pub from: Time,
    /// The level to be held, in the unit of the series.
    pub target_db: f64,
    /// The rise to be found, dB.
    pub max_rise_db: f64,
    /// How many blocks were charted in this epoch.
    pub blocks: u64,
    /// The statistic; while a finding stands, what it was when that was raised.
    pub statistic: f64,
    /// How many blocks in a row, up to the last one, were gross.
    #[serde(default)]
    pub gross: u32,
    /// The last block seen.
    pub previous: Option<Previous>,
    /// The finding that stands, if any.
    pub active: Option<Active>,
}

/// The last block that a chart has seen.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct Previous {
    /// Where it began.
    #[serde(with = "stored::time")]
    pub start: Time,
    /// How far it lay above the target, dB.
    pub deviation_db: f64,
}

/// A finding that stands.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Active {
    /// As it was last told; `finding.time` tells when that was.
    pub finding: Finding,
    /// Statistic of the mirrored chart that looks for the return.
    pub return_statistic: f64,
    /// How many blocks ago that statistic was last zero.
    pub return_blocks: u32,
}

/// What a block led to.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(crate) enum Signal {
    None,
    /// By this statistic, which passed this threshold.
    Raise(f64, f64),
    Return,
}

impl ChartState {
    /// A chart that has seen nothing yet.
    pub(crate) fn new(epoch: u32, from: Time, target_db: f64, max_rise_db: f64) -> Self {
        Self { epoch, from, target_db, max_rise_db, blocks: 0, statistic: 0.0, gross: 0, previous: None, active: None }
    }

    /// Takes the next block, of length `length`. What comes out is for the engine to act on: `Raise` only without,
    /// `Return` only with an active finding.
    pub(crate) fn step(&mut self, design: &Design, length: Span, block: &Block) -> Signal {
        let deviation = block.median_db - self.target_db;
        let previous = self.previous.map(|previous| {
            let ago = (block.start - previous.start).as_micros() / length.as_micros().max(1);
            (ago, previous.deviation_db)
        });
        self.previous = Some(Previous { start: block.start, deviation_db: deviation });
        self.blocks += 1;
        let Some(active) = &mut self.active else {
            let evidence = design.evidence(deviation, previous, design.reference_value_db);
            self.statistic = cusum_step(self.statistic, design.capped(evidence));
            let adjacent = previous.is_some_and(|(ago, _)| ago == 1);
            self.gross = match deviation > design.gross_db {
                true if adjacent => self.gross + 1,
                true => 1,
                false => 0,
            };
            return if self.statistic > design.threshold {
                Signal::Raise(self.statistic, design.threshold)
            } else if self.gross >= GROSS_BLOCKS {
                Signal::Raise(deviation, design.gross_db)
            } else {
                Signal::None
            };
        };
        // The error of the reference does not hinder the return: too early a return costs a repeated alarm, not a lost one.
        let evidence = -design.evidence(deviation, previous, 0.75 * self.max_rise_db);
        active.return_statistic = cusum_step(active.return_statistic, design.capped(evidence));
        active.return_blocks = if active.return_statistic > 0.0 { active.return_blocks + 1 } else { 0 };
        if active.return_statistic > design.threshold { Signal::Return } else { Signal::None }
    }
}
