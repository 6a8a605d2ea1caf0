//! What a choke does in a loop.

use hushwatch_quantity::{amplitude_to_db, power_to_db};
use num_complex::Complex;

use crate::choke::Choke;

/// Into how many parts a band is cut, equal on the logarithm of frequency. Materials and tables change little over a
/// part: even a decade per band is summed to 0.001 dB.
const PARTS: u32 = 400;

/// How much less current flows with the choke than without: 20 lg |1 + Z / (Zs + Zl)|, dB. `z_loop` is source and load
/// together. Below 0 dB the choke resonates with the loop, and the current rises.
pub fn insertion_loss_db(z_choke: Complex<f64>, z_loop: Complex<f64>) -> f64 {
    amplitude_to_db((1.0 + z_choke / z_loop).norm())
}

/// What the level of a band falls by, dB, from `from_hz` to `to_hz` (above 0), if the power without the choke is spread
/// evenly over it: the mean of powers, not of dB. A band that is all at one frequency falls by that frequency's loss.
pub fn band_insertion_loss_db(choke: &Choke, z_loop: Complex<f64>, from_hz: f64, to_hz: f64) -> f64 {
    let ratio = (to_hz / from_hz).powf(f64::from(PARTS).recip());
    // The middle of each part on the logarithmic axis, weighted with the part's width in Hz.
    let (mut left, mut width) = (0.0, 0.0);
    for part in 0..PARTS {
        let hz = from_hz * ratio.powf(f64::from(part) + 0.5);
        let gain = (1.0 + choke.impedance(hz) / z_loop).norm_sqr().recip();
        left += gain * hz;
        width += hz;
    }
    -power_to_db(left / width)
}

/// Frequencies from the first to the last, both included, equally far apart on the logarithm.
pub(crate) fn log_grid(from_hz: f64, to_hz: f64) -> impl Iterator<Item = f64> {
    let step = (to_hz / from_hz).ln() / f64::from(PARTS);
    let inner = (0..PARTS).map(move |part| from_hz * (step * f64::from(part)).exp());
    inner.chain([to_hz])
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_flat_choke_does_the_same_to_a_band_as_to_a_sine() {
        let choke = Choke::complex_table(&[(1e5, 200.0, 0.0)]).unwrap();
        let loss = band_insertion_loss_db(&choke, 100.0.into(), 2e6, 30e6);
        assert!((loss - insertion_loss_db(200.0.into(), 100.0.into())).abs() < 1e-9, "{loss}");
    }

    /// An ideal coil has |1 + j f/f0|^2 = 1 + (f/f0)^2: the mean of what is left over f is (f0/width) (atan b - atan
    /// a).
    #[test]
    fn the_band_of_a_coil_is_the_integral() {
        let coil = |hz: f64| (hz, 0.0, 100.0 * hz / 5e6);
        // Rows dense enough that joining them straight over the logarithm is the coil itself.
        let rows: Vec<_> = (0..=4000).map(|row| coil(1e6 * 10f64.powf(f64::from(row) / 2000.0))).collect();
        let choke = Choke::complex_table(&rows).unwrap();
        for (from, to) in [(1e6_f64, 2e6_f64), (2e6, 30e6), (1e6, 100e6)] {
            let left = 5e6 / (to - from) * ((to / 5e6).atan() - (from / 5e6).atan());
            let found = band_insertion_loss_db(&choke, 100.0.into(), from, to);
            assert!((found + power_to_db(left)).abs() < 1e-3, "{from} {to}: {found}");
        }
    }
}
