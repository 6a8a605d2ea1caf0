//! Which part of a band each point of a sweep stands for.

use crate::band::{Band, Trace};

/// A point of a sweep with what it stands for.
#[derive(Clone, Copy, Debug)]
pub(crate) struct Cell {
    /// Its frequency, Hz.
    pub(crate) hz: f64,
    /// What the receiver read, dB(uV); anything but a finite number was not measured.
    pub(crate) reading: f64,
    /// How much of the band it stands for, Hz; 0 if it lies outside or in an exclusion.
    pub(crate) width_hz: f64,
}

/// The parts of a band that count, rising and apart: the band without its exclusions.
pub(crate) fn kept_ranges(band: &Band) -> Vec<(f64, f64)> {
    let mut exclude = band.exclude.clone();
    exclude.sort_by(|a, b| a.0.total_cmp(&b.0));
    let mut kept = Vec::new();
    let mut from = band.from_hz;
    for (low, high) in exclude {
        let to = low.min(band.to_hz);
        if to > from {
            kept.push((from, to));
        }
        from = from.max(high);
    }
    if band.to_hz > from {
        kept.push((from, band.to_hz));
    }
    kept
}

/// The points of all traces, rising, each with its cell: half a step to both sides, but no farther than the middle
/// between it and the next point, whichever trace that is of. So two traces that meet at one frequency, or one step
/// apart, make one whole, nothing is counted twice where they overlap, and what no trace covers stays without a cell.
pub(crate) fn cells(traces: &[Trace<'_>], kept: &[(f64, f64)]) -> Vec<Cell> {
    let mut points: Vec<(f64, f64, f64)> = traces.iter().flat_map(points_of).collect();
    points.sort_by(|a, b| a.0.total_cmp(&b.0));
    let cell = |index: usize| {
        let (hz, reading, reach) = points[index];
        let low = index.checked_sub(1).map_or(f64::NEG_INFINITY, |before| f64::midpoint(points[before].0, hz));
        let high = points.get(index + 1).map_or(f64::INFINITY, |next| f64::midpoint(hz, next.0));
        Cell { hz, reading, width_hz: overlap((low.max(hz - reach), high.min(hz + reach)), kept) }
    };
    (0..points.len()).map(cell).collect()
}

/// Frequency, reading in dB(uV) and half a step of each point. A trace of one value stands for its whole range.
fn points_of<'a>(trace: &'a Trace<'_>) -> impl Iterator<Item = (f64, f64, f64)> + 'a {
    let span = trace.stop_hz - trace.start_hz;
    let steps = trace.values.len().saturating_sub(1) as f64;
    let (first, step) =
        if steps > 0.0 { (trace.start_hz, span / steps) } else { (f64::midpoint(trace.start_hz, trace.stop_hz), span) };
    // A hair more than half: rounding must leave no slit between cells.
    let reach = step.abs() * (0.5 + 1e-6);
    let to_db_microvolt = trace.unit.to_db_microvolt();
    trace
        .values
        .iter()
        .enumerate()
        .map(move |(index, value)| (first + step * index as f64, value + to_db_microvolt, reach))
        .filter(|(hz, _, _)| hz.is_finite())
}

/// The length of the part of a range that lies in any of `kept`, Hz.
fn overlap((low, high): (f64, f64), kept: &[(f64, f64)]) -> f64 {
    let first = kept.partition_point(|(_, to)| *to <= low);
    kept[first..]
        .iter()
        .take_while(|(from, _)| *from < high)
        .map(|(from, to)| (high.min(*to) - low.max(*from)).max(0.0))
        .sum()
}

#[cfg(test)]
mod tests {
    use hushwatch_quantity::{Detector, FilterShape, ReceiverUnit};

    use super::*;

    fn band(exclude: Vec<(f64, f64)>) -> Band {
        let shape = FilterShape::Gaussian6dB;
        Band { from_hz: 100.0, to_hz: 200.0, rbw_hz: 20.0, shape, detector: Detector::Rms, exclude }
    }

    #[test]
    fn exclusions_are_cut_out_in_any_order_and_may_overlap() {
        let exclude = vec![(150.0, 160.0), (90.0, 105.0), (155.0, 170.0), (195.0, 300.0)];
        assert_eq!(kept_ranges(&band(exclude)), [(105.0, 150.0), (170.0, 195.0)]);
        assert_eq!(kept_ranges(&band(vec![(0.0, 1e3)])), []);
        assert_eq!(kept_ranges(&band(vec![(10.0, 50.0), (250.0, 300.0)])), [(100.0, 200.0)]);
    }

    #[test]
    fn cells_share_the_band_exactly() {
        let kept = kept_ranges(&band(vec![(112.0, 131.0)]));
        let values = [0.0; 11];
        let trace = Trace { start_hz: 100.0, stop_hz: 200.0, unit: ReceiverUnit::DbMicrovolt, values: &values };
        let widths: Vec<f64> = cells(&[trace], &kept).iter().map(|cell| cell.width_hz).collect();
        let wanted = [5.0, 7.0, 0.0, 4.0, 10.0, 10.0, 10.0, 10.0, 10.0, 10.0, 5.0];
        for (width, wanted) in widths.iter().zip(wanted) {
            assert!((width - wanted).abs() < 1e-9, "{widths:?}");
        }
    }

    #[test]
    fn traces_that_meet_overlap_or_leave_a_hole() {
        let values = [0.0; 6];
        let trace = |start_hz, stop_hz| Trace { start_hz, stop_hz, unit: ReceiverUnit::DbMicrovolt, values: &values };
        let kept = kept_ranges(&band(Vec::new()));
        let total = |traces: &[Trace<'_>]| cells(traces, &kept).iter().map(|cell| cell.width_hz).sum::<f64>();
        assert!((total(&[trace(100.0, 150.0), trace(150.0, 200.0)]) - 100.0).abs() < 1e-6, "a shared edge");
        assert!((total(&[trace(100.0, 160.0), trace(140.0, 200.0)]) - 100.0).abs() < 1e-6, "an overlap");
        assert!((total(&[trace(100.0, 110.0), trace(190.0, 200.0)]) - 22.0).abs() < 1e-3, "a hole");
        assert!((total(&[trace(150.0, 200.0), trace(150.0, 100.0)]) - 100.0).abs() < 1e-6, "a falling sweep");
    }
}
