//! Measured impedances over frequency.

use core::f64::consts::FRAC_PI_2;

use num_complex::Complex;

use crate::choke::ChokeError;

/// An impedance at points of rising frequency, at least one.
#[derive(Clone, Debug, PartialEq)]
pub(crate) struct Table {
    points: Vec<Point>,
}

#[derive(Clone, Copy, Debug, PartialEq)]
struct Point {
    hz: f64,
    value: Value,
}

/// What is carried straight over the logarithm of frequency between points.
#[derive(Clone, Copy, Debug, PartialEq)]
enum Value {
    /// Logarithm of the magnitude, and phase in radians.
    Polar(f64, f64),
    /// Resistance and reactance, ohm.
    Complex(Complex<f64>),
}

impl Table {
    /// Of magnitudes alone, Hz and ohm above 0. The phase is Bode's for impedances without hidden delays, in its local
    /// form: a quarter turn times the slope of the magnitude in the double logarithmic plot, the mean of both sides at
    /// a point. A choke that rises with frequency is a coil, one that does no more is a resistor.
    pub(crate) fn of_magnitudes(rows: &[(f64, f64)]) -> Result<Self, ChokeError> {
        check(rows.iter().map(|(hz, ohm)| (*hz, ohm.is_finite() && *ohm > 0.0)))?;
        let slopes: Vec<f64> =
            rows.windows(2).map(|pair| (pair[1].1 / pair[0].1).ln() / (pair[1].0 / pair[0].0).ln()).collect();
        let point = |(index, (hz, ohm)): (usize, &(f64, f64))| {
            let before = index.checked_sub(1).and_then(|index| slopes.get(index));
            let slope = match (before, slopes.get(index)) {
                (Some(before), Some(after)) => f64::midpoint(*before, *after),
                (Some(slope), None) | (None, Some(slope)) => *slope,
                // One point alone: most chokes are told at 100 MHz, where they are resistors.
                (None, None) => 0.0,
            };
            Point { hz: *hz, value: Value::Polar(ohm.ln(), FRAC_PI_2 * slope.clamp(-1.0, 1.0)) }
        };
        Ok(Self { points: rows.iter().enumerate().map(point).collect() })
    }

    /// Of resistance, 0 ohm or above, and reactance, ohm.
    pub(crate) fn of_complex(rows: &[(f64, f64, f64)]) -> Result<Self, ChokeError> {
        check(rows.iter().map(|(hz, r, x)| (*hz, r.is_finite() && *r >= 0.0 && x.is_finite())))?;
        let point = |(hz, r, x): &(f64, f64, f64)| Point { hz: *hz, value: Value::Complex(Complex::new(*r, *x)) };
        Ok(Self { points: rows.iter().map(point).collect() })
    }

    /// Straight over the logarithm of frequency. Below the table the impedance falls with the frequency, as a coil's;
    /// above it is held.
    pub(crate) fn impedance(&self, hz: f64) -> Complex<f64> {
        let next = self.points.partition_point(|point| point.hz <= hz);
        match (next.checked_sub(1).and_then(|before| self.points.get(before)), self.points.get(next)) {
            (Some(low), Some(high)) => {
                let share = (hz / low.hz).ln() / (high.hz / low.hz).ln();
                low.value.towards(high.value, share).impedance()
            }
            (Some(last), None) => last.value.impedance(),
            (None, Some(first)) => first.value.impedance() * (hz / first.hz),
            (None, None) => Complex::default(),
        }
    }

    /// The frequencies of its points, Hz.
    pub(crate) fn frequencies(&self) -> impl Iterator<Item = f64> {
        self.points.iter().map(|point| point.hz)
    }
}

impl Value {
    fn towards(self, other: Self, share: f64) -> Self {
        let between = |from: f64, to: f64| from + (to - from) * share;
        match (self, other) {
            (Self::Polar(m1, p1), Self::Polar(m2, p2)) => Self::Polar(between(m1, m2), between(p1, p2)),
            (from, to) => {
                let (from, to) = (from.impedance(), to.impedance());
                Self::Complex(from + (to - from) * share)
            }
        }
    }

    fn impedance(self) -> Complex<f64> {
        match self {
            Self::Polar(magnitude, phase) => Complex::from_polar(magnitude.exp(), phase),
            Self::Complex(impedance) => impedance,
        }
    }
}

/// Each row: its frequency, and whether its impedance is one.
fn check(rows: impl Iterator<Item = (f64, bool)>) -> Result<(), ChokeError> {
    let mut before = None;
    for (index, (hz, is_impedance)) in rows.enumerate() {
        if !(is_impedance && hz.is_finite() && hz > 0.0) {
            return Err(ChokeError::NotAnImpedance(index));
        }
        if before.is_some_and(|before| hz <= before) {
            return Err(ChokeError::NotRising(index));
        }
        before = Some(hz);
    }
    before.map(|_| ()).ok_or(ChokeError::Empty)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn magnitudes_are_met_and_phases_follow_the_slope() {
        // A coil, then a resistor.
        let table = Table::of_magnitudes(&[(1e6, 10.0), (1e7, 100.0), (1e8, 100.0)]).unwrap();
        let degrees = |hz| table.impedance(hz).arg().to_degrees();
        for (hz, ohm) in [(1e6, 10.0), (2e6, 20.0), (1e7, 100.0), (5e7, 100.0), (1e9, 100.0), (1e5, 1.0)] {
            assert!((table.impedance(hz).norm() - ohm).abs() < 1e-9, "{hz}: {}", table.impedance(hz));
        }
        assert!((degrees(1e6) - 90.0).abs() < 1e-9 && (degrees(1e7) - 45.0).abs() < 1e-9);
        assert!(degrees(1e8).abs() < 1e-9 && degrees(1e9).abs() < 1e-9);
    }

    #[test]
    fn complex_rows_are_met_and_joined_straight() {
        let table = Table::of_complex(&[(1e6, 10.0, 40.0), (1e8, 190.0, -10.0)]).unwrap();
        for (hz, wanted) in [
            (1e6, Complex::new(10.0, 40.0)),
            (1e7, Complex::new(100.0, 15.0)),
            (1e9, Complex::new(190.0, -10.0)),
            (1e5, Complex::new(1.0, 4.0)),
        ] {
            assert!((table.impedance(hz) - wanted).norm() < 1e-9, "{hz}: {}", table.impedance(hz));
        }
    }

    #[test]
    fn what_is_no_table_is_refused() {
        assert_eq!(Table::of_magnitudes(&[]), Err(ChokeError::Empty));
        assert_eq!(Table::of_magnitudes(&[(1e6, 0.0)]), Err(ChokeError::NotAnImpedance(0)));
        assert_eq!(Table::of_magnitudes(&[(1e6, 1.0), (1e6, 2.0)]), Err(ChokeError::NotRising(1)));
        assert_eq!(Table::of_complex(&[(1e6, 1.0, 1.0), (2e6, -1.0, 1.0)]), Err(ChokeError::NotAnImpedance(1)));
        assert_eq!(Table::of_complex(&[(f64::NAN, 1.0, 1.0)]), Err(ChokeError::NotAnImpedance(0)));
    }
}
