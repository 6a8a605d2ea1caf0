//! Decibels: conversions that are written once, so that 10 and 20 are never mixed up.

/// Ten times the decimal logarithm: a power ratio in dB. Zero gives minus infinity.
pub fn power_to_db(ratio: f64) -> f64 {
    10.0 * ratio.log10()
}

/// The power ratio of a value in dB.
pub fn db_to_power(db: f64) -> f64 {
    10f64.powf(db / 10.0)
}

/// Twenty times the decimal logarithm: an amplitude ratio in dB. Zero gives minus infinity.
pub fn amplitude_to_db(ratio: f64) -> f64 {
    20.0 * ratio.log10()
}

/// The amplitude ratio of a value in dB.
pub fn db_to_amplitude(db: f64) -> f64 {
    10f64.powf(db / 20.0)
}

/// The level of several powers together, each given in dB; minus infinity if there are none.
pub fn power_sum_db(levels: impl IntoIterator<Item = f64>) -> f64 {
    power_to_db(levels.into_iter().map(db_to_power).sum())
}

/// Hundredths of a dB, as the record stores them; `None` for what is not a finite number or does not
/// fit (beyond +-20 million dB).
pub fn to_centi(db: f64) -> Option<i32> {
    let centi = (db * 100.0).round();
    (centi.is_finite() && centi.abs() <= f64::from(i32::MAX)).then_some(centi as i32)
}

/// dB from the record's hundredths.
pub fn from_centi(centi: i32) -> f64 {
    f64::from(centi) / 100.0
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn two_equal_powers_are_three_db_more() {
        assert!((power_sum_db([40.0, 40.0]) - 43.0103).abs() < 1e-4);
    }

    #[test]
    fn nothing_sums_to_minus_infinity() {
        assert_eq!(power_sum_db([]), f64::NEG_INFINITY);
    }

    #[test]
    fn centi_rounds_and_refuses_what_is_no_number() {
        assert_eq!(to_centi(-12.345), Some(-1235));
        assert_eq!(to_centi(f64::NAN), None);
        assert_eq!(to_centi(f64::NEG_INFINITY), None);
        assert_eq!(from_centi(4217), 42.17);
    }
}
