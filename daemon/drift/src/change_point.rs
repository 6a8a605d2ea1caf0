//! Since when: the date of a change of level, by exact least squares.
//!
//! A change is named by the index of the first value after it, so `values[..index]` lie before (0 to `len - 1`).

/// A split of a series in two levels.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Change {
    /// Index of the first value after the change.
    pub index: usize,
    /// Mean of the values before.
    pub before: f64,
    /// Mean of the values from the change on.
    pub after: f64,
    /// Sum of squares about the two means.
    pub sum_of_squares: f64,
    /// Sum of squares about one common mean.
    pub sum_of_squares_unsplit: f64,
}

/// The split into two parts, both levels unknown, that leaves the least sum of squares; the earliest among equals.
/// Every split is tried, in linear time. `None` if no split is better than none (fewer than two values, or all equal).
pub fn change_point(values: &[f64]) -> Option<Change> {
    let n = values.len() as f64;
    let mean = values.iter().sum::<f64>() / n;
    let unsplit: f64 = values.iter().map(|value| (value - mean).powi(2)).sum();
    // With deviations from the common mean, a split at i explains sum^2 (1/i + 1/(n - i)) of the sum of squares.
    let mut sum = 0.0;
    let mut best: Option<(usize, f64, f64)> = None;
    for (index, value) in values.iter().enumerate() {
        let before = index as f64;
        let explained = if index == 0 { 0.0 } else { sum * sum * n / (before * (n - before)) };
        if explained > best.map_or(0.0, |(_, most, _)| most) {
            best = Some((index, explained, sum));
        }
        sum += value - mean;
    }
    let (index, explained, sum) = best?;
    let before = index as f64;
    Some(Change {
        index,
        before: mean + sum / before,
        after: mean - sum / (n - before),
        sum_of_squares: (unsplit - explained).max(0.0),
        sum_of_squares_unsplit: unsplit,
    })
}

/// The date of a rise above a known level: the split whose values before it lie at `target` and whose values from it on
/// lie at one unknown higher level that leaves the least sum of squares; the earliest among equals. It may be 0: all
/// values lie higher. `None` if no end of the series lies above `target`.
///
/// This is the date to take after a chart has signalled, since the level before is the reference's, not a free number.
pub fn rise_from(values: &[f64], target: f64) -> Option<usize> {
    let mut sum = 0.0;
    let mut best: Option<(usize, f64)> = None;
    for (index, value) in values.iter().enumerate().rev() {
        sum += value - target;
        let explained = sum * sum / (values.len() - index) as f64;
        if sum > 0.0 && best.is_none_or(|(_, most)| explained >= most) {
            best = Some((index, explained));
        }
    }
    best.map(|(index, _)| index)
}
