//! The sums: how long a sweep takes on this line, which cadence is reached, and what is written a day.

use std::fmt;

use hushwatch_config::dialect::Coding;
use hushwatch_config::site::{Parity, Site};
use hushwatch_quantity::Span;
use hushwatch_record::{LEVEL_BYTES, SWEEP_BYTES};
use hushwatch_signal as signal;

/// Cadence of a cable that does not say, s: as fast as the line allows, but not faster.
const EVERY_S: f64 = 10.0;

/// Bytes of an ASCII level with its comma, as `-78.123456,` (common practice: six decimals or an exponent).
const ASCII_BYTES: f64 = 13.0;

/// Bytes of questions and other answers of one segment: settings read back, error queue.
const TALK_BYTES: usize = 600;

/// Least that a commit writes to the disk, bytes: some pages of the log, and as many again when it is copied back.
const COMMIT_BYTES: f64 = 5.0 * 4096.0 * 2.0;

/// What a sweep of a cable takes.
#[derive(Clone, Debug)]
pub(super) struct Budget {
    /// Points of each band.
    pub(super) points: Vec<usize>,
    pub(super) scan_s: f64,
    pub(super) transfer_s: f64,
    pub(super) settle_s: f64,
    pub(super) every_s: f64,
}

impl Budget {
    pub(super) fn of(site: &Site, cable: usize) -> Self {
        let cable = &site.cables[cable];
        let instrument = &site.instruments[cable.instrument];
        let bands = hushwatch_plan::bands(cable, instrument);
        let most = usize::try_from(instrument.dialect.sweep.max_points).unwrap_or(usize::MAX);
        let segments = signal::plan_segments(&bands, most);
        let of_band = |index: usize| segments.iter().filter(|one| one.band == index).map(|one| one.points).sum();
        let points: Vec<usize> = (0..bands.len()).map(of_band).collect();
        let bytes = match instrument.format {
            Coding::Ascii => ASCII_BYTES,
            Coding::Real32 => 4.0,
        };
        let bits = 9 + u32::from(instrument.parity != Parity::None) + u32::from(instrument.stop_bits);
        let all: usize = points.iter().sum();
        let talk = segments.len() * TALK_BYTES;
        let several = site.cables.iter().filter(|one| one.instrument == cable.instrument).count() > 1;
        Self {
            points,
            scan_s: signal::scan_time_s(&segments, instrument.dwell.as_secs_f64()),
            transfer_s: signal::transfer_time_s(all, bytes, instrument.baud, bits)
                + signal::transfer_time_s(talk, 1.0, instrument.baud, bits),
            settle_s: if several { instrument.settle.as_secs_f64() } else { 0.0 },
            every_s: cable.every.map_or(EVERY_S, Span::as_secs_f64),
        }
    }

    /// From the first question to the last answer, s.
    pub(super) fn whole_s(&self) -> f64 {
        self.scan_s + self.transfer_s + self.settle_s
    }
}

impl fmt::Display for Budget {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let span = |secs: f64| Span::from_millis((secs * 1e3).round() as i64);
        let points: usize = self.points.iter().sum();
        write!(f, "{points} points: {} to scan, {} on the line", span(self.scan_s), span(self.transfer_s))?;
        if self.settle_s > 0.0 {
            write!(f, ", {} to settle", span(self.settle_s))?;
        }
        write!(f, "; together {}, asked for every {}", span(self.whole_s()), span(self.every_s))
    }
}

/// The time in which an instrument comes round all its cables if it does nothing else, s.
pub(super) fn reached_s(site: &Site, budgets: &[Budget], instrument: usize) -> f64 {
    site.cables.iter().zip(budgets).filter(|(cable, _)| cable.instrument == instrument).map(|(_, b)| b.whole_s()).sum()
}

/// Sweeps of a cable in a day.
fn sweeps_a_day(site: &Site, budgets: &[Budget], cable: usize) -> f64 {
    let instrument = site.cables[cable].instrument;
    let of_this = || site.cables.iter().zip(budgets).filter(|(one, _)| one.instrument == instrument);
    let busy: f64 = of_this().map(|(_, budget)| budget.whole_s() / budget.every_s).sum();
    86_400.0 / (budgets[cable].every_s * busy.max(1.0))
}

/// Bytes by which the record grows in a day.
pub(super) fn bytes_a_day(site: &Site, budgets: &[Budget]) -> f64 {
    (0..budgets.len())
        .map(|cable| {
            let levels = site.cables[cable].bands.len() as f64;
            sweeps_a_day(site, budgets, cable) * (SWEEP_BYTES + LEVEL_BYTES * levels)
        })
        .sum()
}

/// Commits in a day.
pub(super) fn commits_a_day(site: &Site) -> f64 {
    86_400.0 / site.record.commit_every.as_secs_f64()
}

/// What is written a day, in words.
pub(super) fn record(site: &Site, budgets: &[Budget]) -> String {
    let grows = bytes_a_day(site, budgets);
    let commits = commits_a_day(site);
    format!(
        "grows by about {} a day; {commits:.0} commits a day write about {} to the disk (flash wears by that)",
        megabytes(grows),
        megabytes(commits * COMMIT_BYTES + 2.0 * grows)
    )
}

fn megabytes(bytes: f64) -> String {
    match bytes {
        1e9.. => format!("{:.1} GB", bytes / 1e9),
        1e7.. => format!("{:.0} MB", bytes / 1e6),
        _ => format!("{:.1} MB", bytes / 1e6),
    }
}
