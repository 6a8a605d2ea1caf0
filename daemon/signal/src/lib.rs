//! A spectrum becomes the levels of its bands.
//!
//! What a level means here, once and for all:
//!
//! - **Levels are rms.** dB over 1 uA, 1 uA/m or 1 uV of the rms value; a peak detector shows the rms value of the sine
//!   that peaks alike (practice after CISPR 16-1-1). Nothing in this room is in peak volts.
//! - **The receiver has 50 ohm.** dBm become dB(uV) by adding 90 + 10 lg 50 = 106.99 dB ([`ReceiverUnit`]). Probe
//!   factors contain that 50 ohm load already: nothing else is to be added for it.
//! - **Signs.** The path loss is added to what the receiver reads, so an amplifier has a negative one. A current
//!   probe's factor, dB(ohm), is taken off: I = V - Zt (CISPR 16-1-2). A loop probe's magnetic factor, dB(S/m), is
//!   added: H = V + AF. The factor of a direct connection is a ratio of voltages out over in and is taken off. See
//!   [`CorrectionChain`].
//! - **Between points** a factor runs straight in dB over the logarithm of frequency; outside it is held, and the level
//!   is marked.
//! - **The level of a band** is the power in it: 10 lg of the sum, over the points of the sweep, of corrected power
//!   times width of the point's cell, over the *noise bandwidth* of the resolution filter. A flat noise density gives
//!   density times width; one sine gives its own level within 0.1 dB, whatever the bandwidth and wherever it falls
//!   between points, as long as the step is small enough for the filter ([`plan_segments`] sees to that). A sine nearer
//!   than a bandwidth to a limit of the band or of an exclusion counts in part. A sum over points without the division
//!   would count a sine several times and depend on the step.
//! - **Bandwidths** are named by the receiver, at 6 dB or at 3 dB; noise goes by the noise bandwidth, which is 0.75 to
//!   1.06 times that width ([`FilterShape::noise_bandwidth_ratio`]).
//! - **Detectors.** The law above is that of the rms detector. The other detectors' readings are summed by the same
//!   law: such a level goes up and down with the noise, is comparable with levels of the same detector and settings
//!   alone, and is no power. Changing the detector makes a new series.
//! - **The peak of a band** is its greatest single corrected point, at the cable, outside exclusions.
//! - **Quality** is the worst of what was given and of what is found here: overload, missing points, outside the
//!   factor's range, near the receiver's floor. The floor is never subtracted unasked: [`subtract_floor`].
//! - **Averages** of power and averages of dB differ by up to 2.5 dB: [`mean_power_db`] and [`mean_of_db`] say which.
//!
//! The room is pure: numbers in, numbers out.
//!
//! [`ReceiverUnit`]: hushwatch_quantity::ReceiverUnit
//! [`FilterShape::noise_bandwidth_ratio`]: hushwatch_quantity::FilterShape::noise_bandwidth_ratio

#![forbid(unsafe_code)]

mod averages;
mod band;
mod bandwidth;
mod cells;
mod chain;
mod character;
mod curve;
mod receiver;
mod segments;
pub mod uncertainty;

#[cfg(test)]
mod level_tests;
#[cfg(test)]
mod published_tests;

pub use averages::{mean_of_db, mean_of_noise_db_bias, mean_power_db, noise_db_spread};
pub use band::{Band, BandLevel, Trace, band_level};
pub use bandwidth::{BandwidthLaw, rescale_bandwidth};
pub use chain::{CorrectionChain, ProbeKind};
pub use character::{Character, LINE_DB, character};
pub use curve::{Curve, CurveError};
pub use receiver::{Floor, Receiver, subtract_floor};
pub use segments::{Segment, plan_segments, scan_time_s, transfer_time_s};
pub use uncertainty::{ChainKnowledge, Uncertainty, uncertainty};
