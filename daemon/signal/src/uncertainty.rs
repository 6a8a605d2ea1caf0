//! How far a level may be off, by what is known of the chain: probe, receiver, mismatch between them, repeatability.
//!
//! The parts are independent, so their standard uncertainties add by squares; the sum is told with the coverage factor
//! k = 2, about 95 % (GUM, JCGM 100:2008, 5.1 and 6.2; from memory). Only the repeatability matters when a level is held
//! against another one of the same chain: what is off today was off yesterday.

use hushwatch_quantity::amplitude_to_db;

/// Coverage factor.
const COVERAGE: f64 = 2.0;

/// A probe without a word of its own, dB, k = 2: what calibration laboratories state for current probes (common practice).
pub const PROBE_DB: f64 = 1.0;

/// A receiver without a word of its own, dB, k = 2: CISPR 16-1-1 allows 2 dB for sine waves (from memory).
pub const RECEIVER_DB: f64 = 2.0;

/// Voltage standing wave ratio of a receiver's input: 2 without attenuation, 1.2 from 10 dB on (CISPR 16-1-1; from
/// memory).
pub const RECEIVER_VSWR: (f64, f64) = (2.0, 1.2);

/// Voltage standing wave ratio of what leads to it; a bare clamp is no better (common practice).
pub const SOURCE_VSWR: f64 = 2.0;

/// Standard deviation from one day to the next of the same clamp at the same place, dB (common practice).
pub const REPEATABILITY_DB: f64 = 0.5;

/// Standard deviation where a millimetre of the probe's place matters, as with a loop probe, dB (common practice).
pub const LOOP_REPEATABILITY_DB: f64 = 2.0;

/// What is known of a chain.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct ChainKnowledge {
    /// Of factor and path together, dB, k = 2.
    pub probe_db: f64,
    /// Of the receiver, dB, k = 2.
    pub receiver_db: f64,
    /// Standing wave ratio of the receiver's input, 1 or more.
    pub receiver_vswr: f64,
    /// Standing wave ratio of what leads to it, 1 or more.
    pub source_vswr: f64,
    /// Standard deviation of repeating the measurement, dB.
    pub repeatability_db: f64,
}

/// The standard uncertainty of each part, and all of them together.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Uncertainty {
    /// Of factor and path, dB.
    pub probe_db: f64,
    /// Of the receiver, dB.
    pub receiver_db: f64,
    /// Of the mismatch between them, dB.
    pub mismatch_db: f64,
    /// Of the repetition, dB.
    pub repeatability_db: f64,
    /// Of a level, dB, k = 2.
    pub expanded_db: f64,
}

/// The uncertainty of a level from what is known of its chain.
pub fn uncertainty(known: &ChainKnowledge) -> Uncertainty {
    let (probe_db, receiver_db) = (known.probe_db / COVERAGE, known.receiver_db / COVERAGE);
    let mismatch_db = mismatch_db(known.source_vswr, known.receiver_vswr);
    let parts = [probe_db, receiver_db, mismatch_db, known.repeatability_db];
    let expanded_db = COVERAGE * parts.iter().map(|part| part * part).sum::<f64>().sqrt();
    Uncertainty { probe_db, receiver_db, mismatch_db, repeatability_db: known.repeatability_db, expanded_db }
}

/// Standard uncertainty of the mismatch of two ports, dB: the reading lies anywhere between 20 lg (1 - |G1 G2|) and
/// 20 lg (1 + |G1 G2|) as their phases fall, most often near the ends (U-shaped, Harris & Warner 1981; from memory).
/// The greater of the two limits is taken.
fn mismatch_db(source_vswr: f64, receiver_vswr: f64) -> f64 {
    let reflection = |vswr: f64| (vswr - 1.0) / (vswr + 1.0);
    let product = reflection(source_vswr) * reflection(receiver_vswr);
    -amplitude_to_db(1.0 - product) / core::f64::consts::SQRT_2
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn mismatch_is_that_of_the_formula() {
        // VSWR 2 is a reflection of 1/3, VSWR 1.2 of 1/11: 20 lg (1 - 1/33) = -0.2673 dB; by sqrt 2: 0.189 dB.
        assert!((mismatch_db(2.0, 1.2) - 0.18899).abs() < 1e-4, "{}", mismatch_db(2.0, 1.2));
        // 1/9: 20 lg (8/9) = -1.0231 dB; 0.7234 dB.
        assert!((mismatch_db(2.0, 2.0) - 0.72341).abs() < 1e-4);
        assert!(mismatch_db(1.0, 2.0).abs() < 1e-12);
    }

    #[test]
    fn parts_add_by_squares() {
        let known = ChainKnowledge {
            probe_db: 1.0,
            receiver_db: 2.0,
            receiver_vswr: 1.0,
            source_vswr: 2.0,
            repeatability_db: 0.5,
        };
        let all = uncertainty(&known);
        // sqrt(0.5^2 + 1^2 + 0.5^2) = 1.2247; twice.
        assert!((all.expanded_db - 2.449_49).abs() < 1e-5, "{all:?}");
        let perfect = ChainKnowledge { probe_db: 0.0, receiver_db: 0.0, repeatability_db: 0.0, ..known };
        assert!(uncertainty(&perfect).expanded_db.abs() < 1e-12);
    }
}
