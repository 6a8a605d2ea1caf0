//! What a receiver is set to: detector, filter shape, unit of its answer.

use core::fmt;

/// How the envelope behind the resolution filter becomes one number.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub enum Detector {
    /// Root mean square: adds up over frequency whatever the signal is.
    Rms,
    /// Linear average of the envelope.
    Average,
    /// Peak, shown as the rms value of the sine that peaks alike.
    Peak,
    /// Quasi-peak after CISPR 16-1-1.
    QuasiPeak,
    /// RMS-average after CISPR 16-1-1.
    RmsAverage,
}

impl Detector {
    /// All detectors, in the order of their documentation.
    pub const ALL: [Self; 5] = [Self::Rms, Self::Average, Self::Peak, Self::QuasiPeak, Self::RmsAverage];

    /// The word for it in site and dialect files.
    pub fn label(self) -> &'static str {
        match self {
            Self::Rms => "rms",
            Self::Average => "average",
            Self::Peak => "peak",
            Self::QuasiPeak => "quasi-peak",
            Self::RmsAverage => "rms-average",
        }
    }
}

impl fmt::Display for Detector {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.pad(self.label())
    }
}

/// The shape of the resolution filter and the width by which it is named.
///
/// Receivers after CISPR are named by their 6 dB width, spectrum analysers by their 3 dB width; the same
/// "9 kHz" lets noise of 1.5 dB more through in the second case.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub enum FilterShape {
    /// Gaussian, named by its 6 dB width.
    Gaussian6dB,
    /// Gaussian, named by its 3 dB width.
    Gaussian3dB,
    /// Two critically coupled stages, named by the 6 dB width: the classic CISPR filter.
    CriticallyCoupled6dB,
}

impl FilterShape {
    /// All shapes, the default one first.
    pub const ALL: [Self; 3] = [Self::Gaussian6dB, Self::Gaussian3dB, Self::CriticallyCoupled6dB];

    /// The word for it in site and dialect files.
    pub fn label(self) -> &'static str {
        match self {
            Self::Gaussian6dB => "gaussian-6dB",
            Self::Gaussian3dB => "gaussian-3dB",
            Self::CriticallyCoupled6dB => "critically-coupled-6dB",
        }
    }

    /// Noise bandwidth over the width by which the filter is named.
    ///
    /// Gaussian: sqrt(pi / (4 ln 2)) of the 3 dB width, which is 1/sqrt 2 of the 6 dB width. Two critically
    /// coupled stages have the amplitude response 1/(1 + u^4), half at u = 1: the integral of its square over
    /// both sides is 3 pi/(4 sqrt 2), over a width of 2.
    pub fn noise_bandwidth_ratio(self) -> f64 {
        use core::f64::consts::{LN_2, PI, SQRT_2};
        let gaussian_3db = (PI / (4.0 * LN_2)).sqrt();
        match self {
            Self::Gaussian3dB => gaussian_3db,
            Self::Gaussian6dB => gaussian_3db / SQRT_2,
            Self::CriticallyCoupled6dB => 3.0 * PI / (8.0 * SQRT_2),
        }
    }
}

impl fmt::Display for FilterShape {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.pad(self.label())
    }
}

/// The unit of a receiver's answer, in its 50 ohm input.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub enum ReceiverUnit {
    /// dB over 1 milliwatt.
    Dbm,
    /// dB over 1 microvolt.
    DbMicrovolt,
}

impl ReceiverUnit {
    /// What to add to a value in this unit to have dB(uV) in 50 ohm: +90 + 10 lg 50 from dBm.
    pub fn to_db_microvolt(self) -> f64 {
        match self {
            Self::Dbm => 90.0 + 10.0 * 50f64.log10(),
            Self::DbMicrovolt => 0.0,
        }
    }

    /// The unit as it is written.
    pub fn label(self) -> &'static str {
        match self {
            Self::Dbm => "dBm",
            Self::DbMicrovolt => "dB(uV)",
        }
    }
}

impl fmt::Display for ReceiverUnit {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.pad(self.label())
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Closed forms of the Gaussian and the critically coupled filter; the ratios 0.75269, 1.06447
    /// and 0.83304 are tabulated in tests/reference/filter_bandwidths.csv (computed by numerical integration).
    #[test]
    fn noise_bandwidths() {
        for (shape, ratio) in [
            (FilterShape::Gaussian6dB, 0.75269),
            (FilterShape::Gaussian3dB, 1.06447),
            (FilterShape::CriticallyCoupled6dB, 0.83304),
        ] {
            assert!((shape.noise_bandwidth_ratio() - ratio).abs() < 1e-5, "{shape}: {}", shape.noise_bandwidth_ratio());
        }
    }

    #[test]
    fn dbm_in_50_ohm() {
        assert!((ReceiverUnit::Dbm.to_db_microvolt() - 106.9897).abs() < 1e-4);
    }
}
