//! What a labelled interval of the log says: location, scale and memory of a level, and differences of two of them.
//!
//! The location is the median of the block medians: it stands a burst that fills almost half of the interval, and
//! anyone can check it from the record by hand. Its price, a variance `pi/2` times that of the mean, is in the standard
//! error. Scale is the median absolute deviation, memory the lag-1 autocorrelation; the errors of both are told, since
//! a chart must not trust a short reference as if it were a long one ([`crate::Design`]).

use std::borrow::Cow;

use hushwatch_quantity::Span;
use serde::{Deserialize, Serialize};
use statrs::distribution::{ContinuousCDF, Normal, StudentsT};

use crate::{Block, robust, stored};

/// Fewest blocks of which a reference is made: a median absolute deviation of fewer says next to nothing.
pub const MIN_BLOCKS: usize = 5;

/// No chain of clamp, cable and receiver repeats better than this, in dB, whatever a quiet hour suggests (common practice;
/// ten times the record's step of 0.01 dB). It also keeps the scale of a coarse log, whose deviation may be zero, above zero.
pub const REPEATABILITY_FLOOR_DB: f64 = 0.1;

/// Greatest autocorrelation that is believed; beyond it blocks say nothing new and a longer block is the answer.
pub const MAX_RHO: f64 = 0.95;

/// Blocks farther than this many sigma from the median (bursts) do not speak on the autocorrelation.
const BURST_SIGMAS: f64 = 3.0;

const CONFIDENCE_TWO_SIDED: f64 = 0.975;
const DAY: Span = Span::from_days(1);

/// Which side of the fix a reference describes.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, PartialOrd, Ord, Serialize, Deserialize)]
#[serde(rename_all = "lowercase")]
pub enum ReferenceKind {
    /// Without the choke.
    Before,
    /// With the choke: the level that is to be held.
    After,
}

impl ReferenceKind {
    /// `before` or `after`.
    pub fn label(self) -> &'static str {
        match self {
            Self::Before => "before",
            Self::After => "after",
        }
    }

    /// The kind that is written `label`.
    pub fn from_label(label: &str) -> Option<Self> {
        [Self::Before, Self::After].into_iter().find(|kind| kind.label() == label)
    }
}

/// A reference, reduced to what charts and verdicts need; one series in one operating state.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct ReferenceFigure {
    /// Median of the block medians, in the unit of the series.
    pub median_db: f64,
    /// Standard deviation of one block about it, dB: robust, not under [`REPEATABILITY_FLOOR_DB`].
    pub sigma_db: f64,
    /// Lag-1 autocorrelation of adjacent blocks, 0 to [`MAX_RHO`].
    pub rho: f64,
    /// How many blocks it stands on.
    pub blocks: u32,
    /// How many independent blocks would fix a mean as well: [`effective_blocks`].
    pub effective_blocks: f64,
    /// Standard error of `median_db`, dB: scale, correlation and the step of the log.
    pub standard_error_db: f64,
    /// From the start of the first block to the end of the last.
    #[serde(with = "stored::span")]
    pub covered: Span,
    /// Does it cover less than a day (give or take the cut blocks at both ends)?
    pub provisional: bool,
}

/// Why there is no figure.
#[derive(Clone, Copy, Debug, PartialEq, Eq, thiserror::Error)]
pub enum ReferenceError {
    /// Too few blocks with usable levels.
    #[error(
        "{have} blocks with usable levels in the interval, at least {need} are needed: take a longer interval or shorter blocks"
    )]
    TooFewBlocks {
        /// Found.
        have: usize,
        /// Needed.
        need: usize,
    },
}

impl ReferenceFigure {
    /// Relative variance of the noise that a chart has to expect, as this reference knows it: the error of the scale (a
    /// median absolute deviation has the efficiency 0.3675) and that of the autocorrelation (asymptotic variance
    /// `(1 - rho^2)/n`, carried over to the long-run deviation `sigma sqrt((1 + rho)/(1 - rho))`).
    pub fn scale_variance(&self) -> f64 {
        let memory = f64::from(self.blocks) * (1.0 - self.rho * self.rho);
        0.5 / self.scale_freedom() + 1.0 / memory
    }

    /// Degrees of freedom of the scale, at least one. For a variance, `n` correlated blocks count as
    /// `n (1 - rho^2)/(1 + rho^2)`.
    pub fn scale_freedom(&self) -> f64 {
        let squared = self.rho * self.rho;
        (robust::MAD_EFFICIENCY * f64::from(self.blocks) * (1.0 - squared) / (1.0 + squared)).max(1.0)
    }
}

/// Reduces the blocks of a labelled interval, in any order; `block` is their length.
///
/// # Errors
/// [`ReferenceError::TooFewBlocks`] under [`MIN_BLOCKS`].
pub fn reference_figure(blocks: &[Block], block: Span) -> Result<ReferenceFigure, ReferenceError> {
    let too_few = ReferenceError::TooFewBlocks { have: blocks.len(), need: MIN_BLOCKS };
    if blocks.len() < MIN_BLOCKS {
        return Err(too_few);
    }
    let blocks = in_order(blocks);
    let values: Vec<f64> = blocks.iter().map(|block| block.median_db).collect();
    let (Some(median_db), Some(first), Some(last)) = (robust::median(&values), blocks.first(), blocks.last()) else {
        return Err(too_few);
    };
    let sigma_db = robust::mad_sigma(&values, median_db).unwrap_or(0.0).max(REPEATABILITY_FLOOR_DB);
    let rho = autocorrelation(&blocks, block, median_db, sigma_db);
    let effective = effective_blocks(blocks.len(), rho);
    let covered = last.start + block - first.start;
    // An interval of exactly a day loses the blocks that it cuts at its ends.
    let cut = (block + block).min(Span::from_hours(1));
    Ok(ReferenceFigure {
        median_db,
        sigma_db,
        rho,
        blocks: blocks.len() as u32,
        effective_blocks: effective,
        standard_error_db: median_error(sigma_db, effective, step(&values)),
        covered,
        provisional: covered + cut < DAY,
    })
}

fn in_order(blocks: &[Block]) -> Cow<'_, [Block]> {
    if blocks.is_sorted_by_key(|block| block.start) {
        return Cow::Borrowed(blocks);
    }
    let mut sorted = blocks.to_vec();
    sorted.sort_by_key(|block| block.start);
    Cow::Owned(sorted)
}

/// Standard error of a median of correlated normal blocks, with the error of rounding to `step`. The inflation of a mean's
/// variance is taken for that of a median's, which is smaller under positive correlation: the error is on the safe side.
fn median_error(sigma_db: f64, effective: f64, step: f64) -> f64 {
    (robust::MEDIAN_VARIANCE_RATIO * sigma_db * sigma_db / effective + step * step / 12.0).sqrt()
}

/// The step in which the values were written: the smallest distance between two that differ; zero if none do.
fn step(values: &[f64]) -> f64 {
    let mut sorted = values.to_vec();
    sorted.sort_by(f64::total_cmp);
    let gaps = sorted.windows(2).map(|pair| pair[1] - pair[0]).filter(|gap| *gap > 0.0);
    gaps.min_by(f64::total_cmp).unwrap_or(0.0)
}

/// Lag-1 autocorrelation over the pairs of adjacent blocks in which neither is a burst, corrected for the bias
/// `-(1 + 3 rho)/n` of an estimate about an estimated location (Marriott & Pope 1954, Kendall 1954; from memory).
fn autocorrelation(blocks: &[Block], block: Span, median_db: f64, sigma_db: f64) -> f64 {
    let (mut product, mut former, mut latter, mut pairs) = (0.0, 0.0, 0.0, 0u32);
    for pair in blocks.windows(2) {
        let (x, y) = (pair[0].median_db - median_db, pair[1].median_db - median_db);
        let adjacent = pair[1].start - pair[0].start == block;
        if adjacent && x.abs().max(y.abs()) <= BURST_SIGMAS * sigma_db {
            product += x * y;
            former += x * x;
            latter += y * y;
            pairs += 1;
        }
    }
    let scale = (former * latter).sqrt();
    if pairs < MIN_BLOCKS as u32 - 1 || scale <= 0.0 {
        return 0.0;
    }
    let count = f64::from(pairs);
    ((count * product / scale + 1.0) / (count - 3.0).max(1.0)).clamp(0.0, MAX_RHO)
}

/// How many independent blocks carry as much about a mean as `count` blocks with lag-1 correlation `rho` (AR(1)):
/// `n / (1 + 2 sum_{k<n} (1 - k/n) rho^k)`, which tends to `n (1 - rho)/(1 + rho)`.
pub fn effective_blocks(count: usize, rho: f64) -> f64 {
    let n = count as f64;
    let tail = rho * (1.0 - rho.powf(n).copysign(if count % 2 == 1 { rho } else { 1.0 }));
    if count == 0 { 0.0 } else { n / (1.0 + 2.0 * (rho / (1.0 - rho) - tail / (n * (1.0 - rho).powi(2)))) }
}

/// A difference of two levels in dB with its 95 % interval.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct Suppression {
    /// The estimate.
    pub db: f64,
    /// Lower end of the interval.
    pub low_db: f64,
    /// Upper end of the interval.
    pub high_db: f64,
}

/// A location with its error and that error's degrees of freedom.
#[derive(Clone, Copy)]
struct Location {
    db: f64,
    error_db: f64,
    freedom: f64,
}

impl From<&ReferenceFigure> for Location {
    fn from(figure: &ReferenceFigure) -> Self {
        Self { db: figure.median_db, error_db: figure.standard_error_db, freedom: figure.scale_freedom() }
    }
}

/// `before - after` with the 95 % interval of Welch and Satterthwaite from both standard errors.
pub fn suppression(before: &ReferenceFigure, after: &ReferenceFigure) -> Suppression {
    difference(before.into(), after.into())
}

fn difference(of: Location, from: Location) -> Suppression {
    let db = of.db - from.db;
    let (first, second) = (of.error_db * of.error_db, from.error_db * from.error_db);
    let variance = first + second;
    let freedom = variance * variance / (first * first / of.freedom + second * second / from.freedom);
    let half = variance.sqrt() * t_quantile(CONFIDENCE_TWO_SIDED, freedom);
    Suppression { db, low_db: db - half, high_db: db + half }
}

/// Quantile of Student's t; infinite where there are no degrees of freedom, for then nothing is known.
pub(crate) fn t_quantile(probability: f64, freedom: f64) -> f64 {
    StudentsT::new(0.0, 1.0, freedom).map_or(f64::INFINITY, |t| t.inverse_cdf(probability))
}

/// Quantile of the normal distribution.
pub(crate) fn normal_quantile(probability: f64) -> f64 {
    Normal::standard().inverse_cdf(probability)
}

/// How a series stands now, in one operating state.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Standing {
    /// Median of the recent blocks, in the unit of the series.
    pub now_db: Option<f64>,
    /// What the choke achieved: before - after.
    pub achieved: Option<Suppression>,
    /// What is held of it: before - now.
    pub held: Option<Suppression>,
    /// What was lost of it: achieved - held = now - after. Negative if more is held than was achieved.
    pub drop: Option<Suppression>,
}

/// How a series stands, from its references and its recent blocks. For the drop since commissioning, `after` is the
/// commissioning reference. Recent blocks are few, so their correlation and least scale are those of the reference.
pub fn standing(before: Option<&ReferenceFigure>, after: Option<&ReferenceFigure>, recent: &[Block]) -> Standing {
    let values: Vec<f64> = recent.iter().map(|block| block.median_db).collect();
    let now_db = robust::median(&values);
    let now = after.or(before).zip(now_db).map(|(like, db)| {
        let own = if values.len() < MIN_BLOCKS { None } else { robust::mad_sigma(&values, db) };
        let sigma_db = own.unwrap_or(0.0).max(like.sigma_db);
        let error_db = median_error(sigma_db, effective_blocks(values.len(), like.rho), step(&values));
        Location { db, error_db, freedom: like.scale_freedom() }
    });
    Standing {
        now_db,
        achieved: before.zip(after).map(|(before, after)| suppression(before, after)),
        held: before.zip(now).map(|(before, now)| difference(before.into(), now)),
        drop: now.zip(after).map(|(now, after)| difference(now, after.into())),
    }
}
