//! From levels to findings: robust blocks, references, charts, change dates and verdicts.
//!
//! Levels of a series (one band of one cable) are reduced to the median of a block, per operating state
//! ([`Block`]). Blocks of a labelled interval make a [`ReferenceFigure`]; two of them make a [`Suppression`].
//! From its `after` reference on, each series is charted per operating state: a one-sided CUSUM that asks
//! whether the level has risen by `max_rise`, at a false-alarm rate that holds for the whole site ([`Engine`],
//! [`Design`], [`run_length`]). A finding tells how large the rise is and since when ([`change_point`]); the table
//! in [`verdict`](mod@verdict) says what all this means for the cable.
//!
//! The room is pure: time comes with the readings, equal input gives equal output, whatever the batches.

pub mod block;
pub mod change_point;
pub mod chart;
pub mod engine;
mod pair;
pub mod reference;
pub mod robust;
pub mod run_length;
mod stored;
pub mod verdict;

pub use block::Block;
pub use chart::{Active, ChartState, Design, Previous};
pub use engine::{Engine, EngineSettings, FalseAlarms, Finding, Outcome, Reading, SeriesSettings};
pub use reference::{
    ReferenceError, ReferenceFigure, ReferenceKind, Standing, Suppression, reference_figure, standing, suppression,
};
pub use verdict::{Verdict, VerdictInput, verdict};

/// A series: one band of one cable, in one unit. The record gives the numbers.
pub type SeriesId = u32;

/// An operating state. The record gives the numbers.
pub type StateId = u32;
