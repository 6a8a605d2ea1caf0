//! Averages of levels: which one, and what noise does to the other.

use core::f64::consts::{LN_10, PI};

use hushwatch_quantity::{power_sum_db, power_to_db};

/// Euler's constant.
const EULER_GAMMA: f64 = 0.577_215_664_901_532_9;

/// The level of the mean power of levels in dB; `None` of nothing.
pub fn mean_power_db(levels: &[f64]) -> Option<f64> {
    (!levels.is_empty()).then(|| power_sum_db(levels.iter().copied()) - power_to_db(levels.len() as f64))
}

/// The mean of the dB values themselves; `None` of nothing. Of noise it is lower than [`mean_power_db`] by
/// [`mean_of_noise_db_bias`].
pub fn mean_of_db(levels: &[f64]) -> Option<f64> {
    (!levels.is_empty()).then(|| levels.iter().sum::<f64>() / levels.len() as f64)
}

/// How far the mean of dB values of Gaussian noise lies off the dB of its mean power, if each value is already a power
/// average of `averages` independent ones (1 or more): 10/ln 10 (psi(K) - ln K), -2.51 dB for 1, -0.22 dB for 10.
pub fn mean_of_noise_db_bias(averages: u32) -> f64 {
    let averages = averages.max(1);
    let digamma = (1..averages).map(|n| f64::from(n).recip()).sum::<f64>() - EULER_GAMMA;
    10.0 / LN_10 * (digamma - f64::from(averages).ln())
}

/// The standard deviation of one dB value of Gaussian noise that is a power average of `averages` independent ones (1
/// or more): 10/ln 10 sqrt(psi'(K)), 5.57 dB for 1.
pub fn noise_db_spread(averages: u32) -> f64 {
    let trigamma = PI * PI / 6.0 - (1..averages.max(1)).map(|n| f64::from(n).powi(-2)).sum::<f64>();
    10.0 / LN_10 * trigamma.sqrt()
}
