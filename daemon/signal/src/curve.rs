//! Factors and losses over frequency.

use core::fmt;

/// A quantity in dB over frequency, given at points. Between them it runs straight in dB over the logarithm of
/// frequency, as factors are plotted and interpolated in the trade; outside it keeps the value of the nearest end.
#[derive(Clone, Debug, PartialEq)]
pub struct Curve {
    /// Hz and dB, rising, at least one.
    points: Vec<(f64, f64)>,
    /// Where it is known, Hz.
    range: (f64, f64),
}

/// Why points make no curve. Points are counted from 0.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum CurveError {
    /// There is no point.
    Empty,
    /// The frequency of this point is not above 0, or one of its numbers is not finite.
    NotANumber(usize),
    /// The frequency of this point is not above that of the one before.
    NotRising(usize),
}

impl fmt::Display for CurveError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::Empty => f.write_str("a curve needs at least one point"),
            Self::NotANumber(index) => write!(f, "point {index} of a curve is no finite value at a positive frequency"),
            Self::NotRising(index) => write!(f, "the frequency of point {index} of a curve does not rise"),
        }
    }
}

impl core::error::Error for CurveError {}

impl Curve {
    /// A curve through points of Hz and dB.
    ///
    /// # Errors
    /// There is no point, a number is not finite, a frequency is not above 0, or they do not rise.
    pub fn new(points: Vec<(f64, f64)>) -> Result<Self, CurveError> {
        let (Some(first), Some(last)) = (points.first(), points.last()) else {
            return Err(CurveError::Empty);
        };
        let range = (first.0, last.0);
        if let Some(index) = points.iter().position(|(hz, db)| !(hz.is_finite() && *hz > 0.0 && db.is_finite())) {
            return Err(CurveError::NotANumber(index));
        }
        if let Some(index) = points.windows(2).position(|pair| pair[1].0 <= pair[0].0) {
            return Err(CurveError::NotRising(index + 1));
        }
        Ok(Self { points, range })
    }

    /// The same `db` at all frequencies.
    pub fn flat(db: f64) -> Self {
        Self { points: vec![(1.0, db)], range: (0.0, f64::INFINITY) }
    }

    /// The value at a frequency, dB.
    pub fn at(&self, hz: f64) -> f64 {
        let next = self.points.partition_point(|(point, _)| *point <= hz);
        match (next.checked_sub(1).and_then(|before| self.points.get(before)), self.points.get(next)) {
            (Some((low, from)), Some((high, to))) => from + (to - from) * (hz / low).ln() / (high / low).ln(),
            (Some((_, db)), None) | (None, Some((_, db))) => *db,
            (None, None) => 0.0,
        }
    }

    /// Is the value known at this frequency, and not held from an end?
    pub fn covers(&self, hz: f64) -> bool {
        (self.range.0..=self.range.1).contains(&hz)
    }

    /// The first and the last frequency at which it is known, Hz; 0 and infinity if it is flat.
    pub fn range(&self) -> (f64, f64) {
        self.range
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn straight_over_the_logarithm_of_frequency_and_held_outside() {
        let curve = Curve::new(vec![(1e5, 2.0), (1e6, 12.0), (1e7, 14.0)]).unwrap();
        for (hz, db) in [(1e3, 2.0), (1e5, 2.0), (1e5 * 10f64.sqrt(), 7.0), (1e6, 12.0), (1e7, 14.0), (1e9, 14.0)] {
            assert!((curve.at(hz) - db).abs() < 1e-12, "{hz}: {}", curve.at(hz));
        }
        assert_eq!(curve.range(), (1e5, 1e7));
        assert!(curve.covers(1e5) && curve.covers(1e7) && !curve.covers(0.99e5) && !curve.covers(1.01e7));
    }

    #[test]
    fn one_point_is_held_but_known_there_alone_and_flat_is_known_everywhere() {
        let point = Curve::new(vec![(1e6, 20.0)]).unwrap();
        assert_eq!((point.at(1.0), point.at(1e9)), (20.0, 20.0));
        assert!(point.covers(1e6) && !point.covers(2e6));
        let flat = Curve::flat(-3.0);
        assert_eq!(flat.at(5e7), -3.0);
        assert!(flat.covers(1.0) && flat.covers(1e12));
    }

    #[test]
    fn what_is_no_curve_is_refused() {
        assert_eq!(Curve::new(Vec::new()), Err(CurveError::Empty));
        assert_eq!(Curve::new(vec![(1.0, 0.0), (2.0, f64::NAN)]), Err(CurveError::NotANumber(1)));
        assert_eq!(Curve::new(vec![(0.0, 0.0)]), Err(CurveError::NotANumber(0)));
        assert_eq!(Curve::new(vec![(f64::INFINITY, 0.0)]), Err(CurveError::NotANumber(0)));
        assert_eq!(Curve::new(vec![(1.0, 0.0), (1.0, 1.0)]), Err(CurveError::NotRising(1)));
    }
}
