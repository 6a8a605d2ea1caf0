//! What the receiver itself adds: its noise, and where it is overloaded.

use hushwatch_quantity::{Detector, ReceiverUnit, db_to_power, power_to_db};

/// Boltzmann's constant, J/K (exact in the SI since 2019).
const BOLTZMANN: f64 = 1.380_649e-23;

/// The temperature to which noise figures are referred, K.
const REFERENCE_KELVIN: f64 = 290.0;

/// Mean of the envelope of Gaussian noise over its rms value, dB: 20 lg (sqrt pi / 2)
/// (tests/reference/averaging_statistics.csv).
const MEAN_ENVELOPE_DB: f64 = -1.0491;

/// The receiver's own noise at its input.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Floor {
    /// Noise figure, dB over the thermal noise of a source at 290 K.
    NoiseFigureDb(f64),
    /// Noise density, dBm/Hz.
    DbmPerHz(f64),
}

impl Floor {
    /// The rms noise within a noise bandwidth in Hz, dB(uV) in 50 ohm. The noise bandwidth is not the width by which
    /// the filter is named.
    pub fn db_microvolt(self, noise_bandwidth_hz: f64) -> f64 {
        let density = match self {
            // kT in mW/Hz: -173.975 dBm/Hz.
            Self::NoiseFigureDb(figure) => power_to_db(BOLTZMANN * REFERENCE_KELVIN * 1e3) + figure,
            Self::DbmPerHz(density) => density,
        };
        density + power_to_db(noise_bandwidth_hz) + ReceiverUnit::Dbm.to_db_microvolt()
    }
}

/// What bears on quality in a receiver; both may be unknown.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Receiver {
    /// Its own noise.
    pub floor: Option<Floor>,
    /// From this reading on it is overloaded, dB(uV) at its input.
    pub overload_dbuv: Option<f64>,
}

impl Receiver {
    /// What it reads of its own noise, dB(uV). Average detectors read the mean of the envelope. Peak and quasi-peak
    /// detectors read more than rms, the more the longer they dwell; that is not known here, and rms is told: levels
    /// of these detectors count as clear of the floor some dB too early.
    pub(crate) fn floor_reading(&self, noise_bandwidth_hz: f64, detector: Detector) -> Option<f64> {
        let envelope = if detector == Detector::Average { MEAN_ENVELOPE_DB } else { 0.0 };
        self.floor.map(|floor| floor.db_microvolt(noise_bandwidth_hz) + envelope)
    }
}

/// The level without the receiver's noise, both in the same unit; `None` unless the level is above the floor.
///
/// For power averages (rms) alone: not for peak, quasi-peak or averaged dB. An error of the reading grows by
/// 1/(1 - 10^(-d/10)) for a reading d dB above the floor: twofold at 3 dB, fivefold at 1 dB.
pub fn subtract_floor(level_db: f64, floor_db: f64) -> Option<f64> {
    let signal = db_to_power(level_db) - db_to_power(floor_db);
    (signal > 0.0).then(|| power_to_db(signal))
}
