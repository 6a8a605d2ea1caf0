//! What a reading becomes in another bandwidth.

use hushwatch_quantity::{amplitude_to_db, power_to_db};

/// How a reading goes with the bandwidth; it depends on the signal.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash)]
pub enum BandwidthLaw {
    /// Noise, read by power: 10 lg of the ratio of noise bandwidths.
    Noise,
    /// A sine: not at all.
    Tone,
    /// The peak of impulses rarer than the bandwidth: 20 lg of the ratio of impulse bandwidths.
    Impulse,
}

/// A reading in dB, taken with the bandwidth `from_hz`, as it would be with `to_hz`. Both must be of the same filter
/// shape and named alike; what law the signal follows is for the caller to know.
pub fn rescale_bandwidth(db: f64, from_hz: f64, to_hz: f64, law: BandwidthLaw) -> f64 {
    let ratio = to_hz / from_hz;
    db + match law {
        BandwidthLaw::Noise => power_to_db(ratio),
        BandwidthLaw::Tone => 0.0,
        BandwidthLaw::Impulse => amplitude_to_db(ratio),
    }
}
