//! The level of a band from sweeps over it, with its quality.

use hushwatch_quantity::{Detector, FilterShape, Quality, Reason, ReceiverUnit, db_to_power, power_to_db};

use crate::cells::{Cell, cells, kept_ranges};
use crate::chain::CorrectionChain;
use crate::receiver::Receiver;

/// Readings beyond +-1000 dB(uV) are no readings: some devices say "over range" and "no value" by huge numbers.
const MOST_DB: f64 = 1000.0;

/// Rounding leaves this share of a band uncovered without anything missing.
const ROUNDING: f64 = 1e-6;

/// From this share of missing width on a level is bad (our rule).
const MISSING_IS_BAD: f64 = 0.1;

/// Nearer to the floor than this, dB, a level is uncertain: an error of the reading counts twice (our rule).
const NEAR_FLOOR_DB: f64 = 3.0;

/// Nearer to the floor than this, dB, a level is bad: an error of the reading counts fivefold (our rule).
const AT_FLOOR_DB: f64 = 1.0;

/// A frequency range that is reduced to one level, and how it was swept.
#[derive(Clone, Debug, PartialEq)]
pub struct Band {
    /// Lower limit, Hz.
    pub from_hz: f64,
    /// Upper limit, Hz; above the lower one.
    pub to_hz: f64,
    /// Resolution bandwidth by the name of the receiver's filter, Hz.
    pub rbw_hz: f64,
    /// The shape of that filter and what it is named by.
    pub shape: FilterShape,
    /// The detector.
    pub detector: Detector,
    /// Ranges that do not count, Hz; in any order, they may overlap.
    pub exclude: Vec<(f64, f64)>,
}

impl Band {
    /// The noise bandwidth of its filter, Hz.
    pub fn noise_bandwidth_hz(&self) -> f64 {
        self.rbw_hz * self.shape.noise_bandwidth_ratio()
    }

    fn excludes(&self, hz: f64) -> bool {
        self.exclude.iter().any(|(low, high)| (*low..=*high).contains(&hz))
    }
}

/// The answer to one segment of a sweep.
#[derive(Clone, Copy, Debug)]
pub struct Trace<'a> {
    /// Frequency of the first value, Hz.
    pub start_hz: f64,
    /// Frequency of the last value, Hz; the others lie between them at equal steps.
    pub stop_hz: f64,
    /// The unit of the values.
    pub unit: ReceiverUnit,
    /// What the receiver read; NaN was not measured, plus infinity was over range.
    pub values: &'a [f64],
}

/// The level of a band, at the cable and in the unit of the probe's kind.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct BandLevel {
    /// The power in the band, dB.
    pub level_db: f64,
    /// The greatest single point outside exclusions, dB. With noise it depends on the bandwidth.
    pub peak_db: f64,
    /// Where that point is, Hz.
    pub peak_hz: f64,
    /// How far all this may be trusted.
    pub quality: Quality,
}

/// The level of a band from the traces that cover it (any number, in any order; they may overlap), by the law in the
/// room's documentation. `given` is what is already known of its quality. `None` if no point of the band was
/// measured, or exclusions leave nothing of it.
///
/// Where points are missing the rest stands for them, in proportion to width: uncertain, or bad from a tenth of the
/// band on. A reading at or above the receiver's overload, in an exclusion too, makes the level bad: what an
/// overloaded receiver mixes up may fall anywhere. Quality sees the floor through the same sum as the level.
pub fn band_level(
    traces: &[Trace<'_>],
    chain: &CorrectionChain,
    band: &Band,
    receiver: &Receiver,
    given: Quality,
) -> Option<BandLevel> {
    let kept = kept_ranges(band);
    let cells = cells(traces, &kept);
    let noise_bandwidth = band.noise_bandwidth_hz();
    let floor_reading = receiver.floor_reading(noise_bandwidth, band.detector);
    let wanted_hz: f64 = kept.iter().map(|(from, to)| to - from).sum();

    let (mut power, mut floor, mut measured_hz) = (0.0, 0.0, 0.0);
    for cell in cells.iter().filter(|cell| cell.counts()) {
        let correction = chain.correction_db(cell.hz);
        power += db_to_power(cell.reading + correction) * cell.width_hz;
        floor += floor_reading.map_or(0.0, |reading| db_to_power(reading + correction) * cell.width_hz);
        measured_hz += cell.width_hz;
    }
    let (peak_hz, peak_db) = peak(&cells, chain, band)?;

    let overloaded = cells.iter().any(|cell| is_overload(cell.reading, receiver.overload_dbuv));
    let missing = 1.0 - measured_hz / wanted_hz;
    let quality = given
        .worse(if overloaded { Quality::bad(Reason::Overload) } else { Quality::GOOD })
        .worse(missing_quality(missing))
        .worse(factor_quality(&kept, chain.range()))
        .worse(floor_reading.map_or(Quality::GOOD, |_| floor_quality(power_to_db(power / floor))));
    let level_db = power_to_db(power / noise_bandwidth * (wanted_hz / measured_hz));
    Some(BandLevel { level_db, peak_db, peak_hz, quality })
}

impl Cell {
    fn is_measured(&self) -> bool {
        self.reading.abs() <= MOST_DB
    }

    pub(crate) fn counts(&self) -> bool {
        self.width_hz > 0.0 && self.is_measured()
    }
}

/// Frequency and level of the greatest point that counts. A point in an exclusion, whose cell reaches out of it, is
/// taken only if there is no other.
fn peak(cells: &[Cell], chain: &CorrectionChain, band: &Band) -> Option<(f64, f64)> {
    let greatest = |wanted: &dyn Fn(&Cell) -> bool| {
        cells
            .iter()
            .filter(|cell| cell.counts() && wanted(cell))
            .map(|cell| (cell.hz, chain.level_db(cell.reading, cell.hz)))
            .max_by(|a, b| a.1.total_cmp(&b.1))
    };
    greatest(&|cell| !band.excludes(cell.hz)).or_else(|| greatest(&|_| true))
}

/// At or above the overload, or so huge that it is the device's word for over range; NaN is neither.
fn is_overload(reading: f64, overload_dbuv: Option<f64>) -> bool {
    reading > MOST_DB || overload_dbuv.is_some_and(|limit| reading >= limit)
}

fn missing_quality(share: f64) -> Quality {
    if share >= MISSING_IS_BAD {
        Quality::bad(Reason::MissingPoints)
    } else if share > ROUNDING {
        Quality::uncertain(Reason::MissingPoints)
    } else {
        Quality::GOOD
    }
}

fn factor_quality(kept: &[(f64, f64)], (first, last): (f64, f64)) -> Quality {
    let inside = |(from, to): &(f64, f64)| *from >= first && *to <= last;
    if kept.iter().all(inside) { Quality::GOOD } else { Quality::uncertain(Reason::OutsideFactor) }
}

fn floor_quality(above_floor_db: f64) -> Quality {
    if above_floor_db < AT_FLOOR_DB {
        Quality::bad(Reason::NearFloor)
    } else if above_floor_db < NEAR_FLOOR_DB {
        Quality::uncertain(Reason::NearFloor)
    } else {
        Quality::GOOD
    }
}
