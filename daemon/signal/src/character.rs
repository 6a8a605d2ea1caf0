//! What carries a band: a few narrow lines (a clock, a broadcast), or noise that is spread (the pulses of a drive)?
//!
//! It decides by which law a level would change with the bandwidth, so it decides whether levels of two bandwidths can
//! be compared at all. A line stands out of the points around it; how much of the band's power the lines hold is the
//! character.

use hushwatch_quantity::db_to_power;

use crate::band::{Band, Trace};
use crate::bandwidth::BandwidthLaw;
use crate::cells::{cells, kept_ranges};
use crate::chain::CorrectionChain;

/// A line stands so far out of the median of the points around it, dB: with rms or average detectors the points of
/// noise do not (a tenth of a percent of them are 5 dB over the median if each averages three independent values).
pub const LINE_DB: f64 = 6.0;

/// So many points on each side are "around".
const AROUND: usize = 12;

/// From this share of the power on lines carry the band, and up to the rest of it noise does.
const MOSTLY: f64 = 0.8;

/// What carries a band.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Character {
    /// How many narrow lines stand out.
    pub lines: usize,
    /// The share of the band's power that they hold, 0 to 1.
    pub line_share: f64,
    /// How far the greatest point lies above the mean power of the points, dB.
    pub crest_db: f64,
}

impl Character {
    /// The law by which the level would change with the bandwidth; `None` where both lines and noise matter, so that
    /// none holds.
    pub fn law(&self) -> Option<BandwidthLaw> {
        if self.line_share >= MOSTLY {
            Some(BandwidthLaw::Tone)
        } else if self.line_share <= 1.0 - MOSTLY {
            Some(BandwidthLaw::Noise)
        } else {
            None
        }
    }
}

/// The character of a band, from the traces of [`crate::band_level`]; `None` if nothing of it was measured.
pub fn character(traces: &[Trace<'_>], chain: &CorrectionChain, band: &Band) -> Option<Character> {
    let kept = kept_ranges(band);
    let mut points: Vec<(f64, f64, f64)> = cells(traces, &kept)
        .iter()
        .filter(|cell| cell.counts())
        .map(|cell| (cell.hz, cell.width_hz, chain.level_db(cell.reading, cell.hz)))
        .collect();
    points.sort_by(|a, b| a.0.total_cmp(&b.0));
    let power: f64 = points.iter().map(|(_, width, db)| db_to_power(*db) * width).sum();
    let width: f64 = points.iter().map(|(_, width, _)| width).sum();
    let greatest = points.iter().map(|(_, _, db)| *db).max_by(f64::total_cmp)?;
    let peaks: Vec<f64> =
        (0..points.len()).filter(|at| stands_out(&points, *at, band.rbw_hz)).map(|at| points[at].0).collect();
    let near = |hz: f64| peaks.iter().any(|peak| (hz - peak).abs() <= band.rbw_hz);
    let in_lines: f64 = points.iter().filter(|(hz, ..)| near(*hz)).map(|(_, width, db)| db_to_power(*db) * width).sum();
    Some(Character {
        lines: peaks.len(),
        line_share: in_lines / power,
        crest_db: greatest - hushwatch_quantity::power_to_db(power / width),
    })
}

/// Is this point the top of a line? It is the greatest within a bandwidth and stands out of those around it.
fn stands_out(points: &[(f64, f64, f64)], at: usize, rbw_hz: f64) -> bool {
    let (hz, _, db) = points[at];
    let from = at.saturating_sub(AROUND);
    let to = (at + AROUND + 1).min(points.len());
    let close = |other: f64| (other - hz).abs() <= rbw_hz;
    let greatest =
        (from..to).all(|n| n == at || !close(points[n].0) || points[n].2 < db || (points[n].2 == db && n > at));
    // The skirts of the line itself are not what it stands out of.
    let mut around: Vec<f64> = (from..to).filter(|n| !close(points[*n].0)).map(|n| points[n].2).collect();
    if !greatest || around.is_empty() {
        return false;
    }
    let middle = around.len() / 2;
    let (_, median, _) = around.select_nth_unstable_by(middle, f64::total_cmp);
    db >= *median + LINE_DB
}

#[cfg(test)]
mod tests {
    use hushwatch_quantity::{Detector, FilterShape, ReceiverUnit};

    use super::*;
    use crate::chain::ProbeKind;
    use crate::curve::Curve;

    const RBW: f64 = 100e3;

    fn band() -> Band {
        Band {
            from_hz: 2e6,
            to_hz: 10e6,
            rbw_hz: RBW,
            shape: FilterShape::Gaussian6dB,
            detector: Detector::Rms,
            exclude: Vec::new(),
        }
    }

    /// Noise of 20 dB(uV) in each point, give or take a fixed wobble, and lines through the Gaussian filter.
    fn of(lines: &[(f64, f64)]) -> Character {
        let values: Vec<f64> = (0..161)
            .map(|n| {
                let hz = 2e6 + 50e3 * f64::from(n);
                let noise = db_to_power(20.0 + f64::from(n * 7919 % 11) / 5.0 - 1.0);
                let through = |(at, db): &(f64, f64)| {
                    db_to_power(*db) * (-2.0 * core::f64::consts::LN_2 * (2.0 * (hz - at) / RBW).powi(2)).exp()
                };
                hushwatch_quantity::power_to_db(noise + lines.iter().map(through).sum::<f64>())
            })
            .collect();
        let trace = Trace { start_hz: 2e6, stop_hz: 10e6, unit: ReceiverUnit::DbMicrovolt, values: &values };
        let chain = CorrectionChain { kind: ProbeKind::Direct, factor: Curve::flat(0.0), path_loss: Curve::flat(0.0) };
        character(&[trace], &chain, &band()).expect("a character")
    }

    #[test]
    fn noise_has_no_lines() {
        let noise = of(&[]);
        assert_eq!((noise.lines, noise.law()), (0, Some(BandwidthLaw::Noise)));
        assert!(noise.crest_db < 1.5, "{noise:?}");
    }

    #[test]
    fn lines_are_counted_and_weighed() {
        let clock = of(&[(2.5e6, 60.0), (5e6, 55.0), (7.53e6, 50.0)]);
        assert_eq!((clock.lines, clock.law()), (3, Some(BandwidthLaw::Tone)), "{clock:?}");
        assert!(clock.line_share > 0.98, "{clock:?}");
        // A line of as much power as the noise of the whole band: neither law holds.
        let both = of(&[(5e6, 20.0 + 10.0 * (8e6f64 / (0.75 * RBW)).log10())]);
        assert_eq!((both.lines, both.law()), (1, None), "{both:?}");
        // A faint one shows, but does not matter.
        let faint = of(&[(5e6, 28.5)]);
        assert_eq!((faint.lines, faint.law()), (1, Some(BandwidthLaw::Noise)), "{faint:?}");
    }

    #[test]
    fn nothing_measured_has_no_character() {
        let values = [f64::NAN; 161];
        let trace = Trace { start_hz: 2e6, stop_hz: 10e6, unit: ReceiverUnit::DbMicrovolt, values: &values };
        let chain = CorrectionChain { kind: ProbeKind::Direct, factor: Curve::flat(0.0), path_loss: Curve::flat(0.0) };
        assert_eq!(character(&[trace], &chain, &band()), None);
    }
}
