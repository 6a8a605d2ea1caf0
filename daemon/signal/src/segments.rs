//! Which frequencies are swept, and how long that takes.

use hushwatch_quantity::FilterShape;

use crate::band::Band;

/// A stretch of a band that is swept at once.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Segment {
    /// The band, by its place in the list of bands.
    pub band: usize,
    /// First frequency, Hz.
    pub start_hz: f64,
    /// Last frequency, Hz.
    pub stop_hz: f64,
    /// Number of points, equally spaced, both ends included; 2 or more.
    pub points: usize,
}

/// The segments in which bands are swept, in the order of the bands and rising within a band.
///
/// Points are at most half the resolution bandwidth apart, a third with the critically coupled filter: a sine between
/// two of them keeps its level within 0.1 dB in the sum over its neighbours, and its peak is read at most 1.5 dB low. A
/// band that needs more than `max_points` (2 at least) is split in segments of equally many points; the step between
/// two segments is the same as within them, so that no frequency is swept twice. A band narrower than its step has two
/// points, its limits. Bands must have a width and a bandwidth above 0.
pub fn plan_segments(bands: &[Band], max_points: usize) -> Vec<Segment> {
    let max_points = max_points.max(2);
    let of_band = |(index, band): (usize, &Band)| {
        let width = band.to_hz - band.from_hz;
        // A width that is a whole number of steps must not get one more from rounding.
        let steps = (width / (band.rbw_hz * widest_step(band.shape)) - 1e-9).ceil().max(1.0) as usize;
        let needed = steps.saturating_add(1);
        let count = needed.div_ceil(max_points);
        let points = needed.div_ceil(count);
        let step_hz = width / (count * points - 1) as f64;
        let (from_hz, to_hz) = (band.from_hz, band.to_hz);
        (0..count).map(move |segment| Segment {
            band: index,
            start_hz: from_hz + (segment * points) as f64 * step_hz,
            stop_hz: if segment + 1 == count {
                to_hz
            } else {
                from_hz + (segment * points + points - 1) as f64 * step_hz
            },
            points,
        })
    };
    bands.iter().enumerate().flat_map(of_band).collect()
}

/// The widest step over the resolution bandwidth. Half is common practice; the sum over a Gaussian response then has
/// the level of a sine to 0.01 dB. The critically coupled one has a flatter top and is sampled too coarsely by that:
/// +-0.44 dB by where the sine falls, with a third below 0.1 dB.
fn widest_step(shape: FilterShape) -> f64 {
    match shape {
        FilterShape::Gaussian6dB | FilterShape::Gaussian3dB => 1.0 / 2.0,
        FilterShape::CriticallyCoupled6dB => 1.0 / 3.0,
    }
}

/// How long the receiver dwells on all points together, s. What it needs between points and for answering comes on top.
pub fn scan_time_s(segments: &[Segment], dwell_s: f64) -> f64 {
    segments.iter().map(|segment| segment.points as f64 * dwell_s).sum()
}

/// How long a serial line carries an answer, s: `bytes_per_point` with their separators, and `bits_per_byte` with
/// start, parity and stop bits (10 for eight data bits, no parity and one stop bit).
pub fn transfer_time_s(points: usize, bytes_per_point: f64, baud: u32, bits_per_byte: u32) -> f64 {
    points as f64 * bytes_per_point * f64::from(bits_per_byte) / f64::from(baud.max(1))
}

#[cfg(test)]
mod tests {
    use hushwatch_quantity::{Detector, FilterShape};

    use super::*;

    fn band(from_hz: f64, to_hz: f64, rbw_hz: f64) -> Band {
        let shape = FilterShape::Gaussian6dB;
        Band { from_hz, to_hz, rbw_hz, shape, detector: Detector::Rms, exclude: Vec::new() }
    }

    #[test]
    fn steps_are_at_most_half_the_bandwidth_and_limits_are_met() {
        for (from, to, rbw, most) in
            [(150e3, 30e6, 9e3, 1001), (2e6, 10e6, 9e3, 100_000), (1e6, 1.009e6, 9e3, 2), (1e6, 1.001e6, 9e3, 50)]
        {
            let segments = plan_segments(&[band(from, to, rbw)], most);
            assert_eq!(segments.first().unwrap().start_hz, from);
            assert_eq!(segments.last().unwrap().stop_hz, to);
            for segment in &segments {
                assert!((2..=most).contains(&segment.points), "{segment:?}");
                assert_eq!(segment.points, segments[0].points);
                let step = (segment.stop_hz - segment.start_hz) / (segment.points - 1) as f64;
                assert!(step <= rbw / 2.0 * (1.0 + 1e-9), "{segment:?}");
            }
            for pair in segments.windows(2) {
                let step = (pair[0].stop_hz - pair[0].start_hz) / (pair[0].points - 1) as f64;
                assert!((pair[1].start_hz - pair[0].stop_hz - step).abs() < 1e-3, "{pair:?}");
            }
        }
    }

    #[test]
    fn bands_keep_their_order_and_number() {
        let bands = [band(10e6, 30e6, 9e3), band(1e6, 2e6, 9e3)];
        let segments = plan_segments(&bands, 3000);
        assert_eq!(segments.iter().map(|segment| segment.band).collect::<Vec<_>>(), [0, 0, 1]);
        assert_eq!(segments[2].points, 224, "1 MHz in steps of 4.5 kHz");
    }

    /// The whole conducted range at 9 kHz: some 6600 points, two minutes at a mains period each; and 1001 points of
    /// 11.5 characters fill a second at 115200 Bd.
    #[test]
    fn times_of_the_conducted_range() {
        let segments = plan_segments(&[band(150e3, 30e6, 9e3)], 1001);
        let points: usize = segments.iter().map(|segment| segment.points).sum();
        assert!((6600..6700).contains(&points), "{points}");
        assert!((scan_time_s(&segments, 0.02) - 0.02 * points as f64).abs() < 1e-9);
        assert!((transfer_time_s(1001, 11.5, 115_200, 10) - 0.9993).abs() < 1e-4);
    }
}
