//! Frequency ranges, each of which is reduced to one level.

use hushwatch_quantity::Detector;

use super::points::read_frequency;
use super::shelf::Shelved;
use crate::faults::Fault;
use crate::walk::{FREQUENCY, Table, Value};

/// Below this frequency a band is measured with 9 kHz, from it on with 120 kHz, as in bands B and C of CISPR 16-1-1.
const WIDE_FROM_HZ: f64 = 30e6;

/// The bands of a site that names none, Hz: the conducted range of CISPR 16-1-1's band B in three parts, as chokes
/// and faults of chokes act differently on them (common practice).
const BY_DEFAULT: [(f64, f64); 3] = [(150e3, 2e6), (2e6, 10e6), (10e6, 30e6)];

/// A frequency range that is reduced to one level.
#[derive(Clone, Debug, PartialEq)]
pub struct Band {
    /// Its name.
    pub name: String,
    /// Lower limit, Hz.
    pub from_hz: f64,
    /// Upper limit, Hz; above the lower one.
    pub to_hz: f64,
    /// Resolution bandwidth, Hz, by the name of the receiver's filter; not wider than the band.
    pub rbw_hz: f64,
    /// How the envelope becomes a number.
    pub detector: Detector,
    /// Ranges within the band that do not count, Hz: lower and upper limit, sorted; they may overlap.
    pub exclude: Vec<(f64, f64)>,
}

impl Band {
    /// The default bands as far as they lie within a range of frequencies, Hz. A part that is narrower than the
    /// resolution bandwidth is left out. They are called by their limits.
    pub(super) fn by_default(range: (f64, f64)) -> Vec<Self> {
        let cut = BY_DEFAULT.iter().map(|(from, to)| (from.max(range.0), to.min(range.1)));
        let bands = cut.map(|(from_hz, to_hz)| Self {
            name: format!("{}-{}MHz", from_hz / 1e6, to_hz / 1e6),
            from_hz,
            to_hz,
            rbw_hz: rbw_by_default(from_hz),
            detector: Detector::Rms,
            exclude: Vec::new(),
        });
        bands.filter(|band| band.to_hz - band.from_hz >= band.rbw_hz).collect()
    }

    /// The share of the band, 0 to 1, that lies within a range of frequencies, Hz.
    pub(super) fn share_within(&self, range: (f64, f64)) -> f64 {
        let within = self.to_hz.min(range.1) - self.from_hz.max(range.0);
        (within / (self.to_hz - self.from_hz)).clamp(0.0, 1.0)
    }
}

fn rbw_by_default(from_hz: f64) -> f64 {
    if from_hz < WIDE_FROM_HZ { 9e3 } else { 120e3 }
}

impl Shelved for Band {
    const KEY: &'static str = "band";
    const KEYS: &'static [&'static str] = &["name", "from", "to", "rbw", "detector", "exclude"];
    type Context = ();

    fn read(table: &mut Table<'_>, name: &str, (): &()) -> Option<Self> {
        let detectors = Detector::ALL.map(|detector| (detector.label(), detector));
        let limits = read_limits(table);
        let rbw_hz = table.read_if_any("rbw", |value| value.quantity_within(&FREQUENCY, 1.0..=1e9));
        let detector = table.read_or("detector", Detector::Rms, |value| value.choice(&detectors));
        let exclude = table.read_or("exclude", Vec::new(), |value| read_exclusions(value, limits));
        let (from_hz, to_hz) = limits?;
        let rbw_hz = rbw_hz?.unwrap_or_else(|| rbw_by_default(from_hz));
        check_width((from_hz, to_hz), rbw_hz, table)?;
        let exclude = check_rest((from_hz, to_hz), exclude?, table)?;
        Some(Self { name: name.to_owned(), from_hz, to_hz, rbw_hz, detector: detector?, exclude })
    }
}

fn read_limits(table: &Table<'_>) -> Option<(f64, f64)> {
    let from = table.required("from", "from = \"2 MHz\"");
    let to = table.required("to", "to = \"30 MHz\"");
    let (from_hz, to_hz) = (from.and_then(read_frequency), to.and_then(read_frequency));
    let (from, to, from_hz, to_hz) = (from?, to?, from_hz?, to_hz?);
    if from_hz < to_hz {
        return Some((from_hz, to_hz));
    }
    let what = format!("this band ends at {} and begins at {}", FREQUENCY.write(to_hz), FREQUENCY.write(from_hz));
    let fault = Fault::new(to.span(), what).with_related(from.span(), "its lower limit");
    table.push(fault.with_help("the upper limit `to` lies above the lower one `from`"));
    None
}

fn check_width((from_hz, to_hz): (f64, f64), rbw_hz: f64, table: &Table<'_>) -> Option<()> {
    if to_hz - from_hz >= rbw_hz {
        return Some(());
    }
    let (width, rbw_text) = (FREQUENCY.write(to_hz - from_hz), FREQUENCY.write(rbw_hz));
    let place = table.optional("rbw").map_or(table.span(), |value| value.span());
    let fault = Fault::new(place, format!("this band is {width} wide, narrower than its bandwidth of {rbw_text}"));
    table.push(fault.with_help("widen the band, or write a smaller `rbw`"));
    None
}

/// Ranges within the limits of the band, if these are known.
fn read_exclusions(value: Value<'_>, limits: Option<(f64, f64)>) -> Option<Vec<(f64, f64)>> {
    const EXAMPLE: &str = "[\"5.9 MHz\", \"6.2 MHz\"]";
    let read = value.list()?.into_iter().map(|range| {
        let [from, to] = range.tuple(EXAMPLE)?;
        let (from, to) = (read_frequency(from), read_frequency(to));
        let (from, to) = (from?, to?);
        if from >= to {
            return range
                .refuse("this range ends before it begins", format!("write the lower limit first, as in `{EXAMPLE}`"));
        }
        match limits {
            Some((least, most)) if from < least || to > most => {
                let band = format!("{} to {}", FREQUENCY.write(least), FREQUENCY.write(most));
                range.refuse("this range reaches beyond the band", format!("cut it to the band's limits, {band}"))
            }
            _ => Some((from, to)),
        }
    });
    read.collect::<Vec<_>>().into_iter().collect()
}

/// Sorts the exclusions and sees that they leave something.
fn check_rest(band: (f64, f64), mut exclude: Vec<(f64, f64)>, table: &Table<'_>) -> Option<Vec<(f64, f64)>> {
    exclude.sort_by(|a, b| a.0.total_cmp(&b.0));
    // Walks up the band: where is the first frequency that nothing excludes?
    let open = exclude.iter().fold(band.0, |at, (from, to)| if *from <= at { at.max(*to) } else { at });
    if open < band.1 {
        return Some(exclude);
    }
    let place = table.optional("exclude").map_or(table.span(), |value| value.span());
    table.push(Fault::new(place, "nothing of the band is left").with_help("exclude less, or leave the band out"));
    None
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn default_bands_are_cut_to_the_range_of_the_factor() {
        let named = |range| Band::by_default(range).into_iter().map(|band| band.name).collect::<Vec<_>>();
        assert_eq!(named((9e3, 1e9)), ["0.15-2MHz", "2-10MHz", "10-30MHz"]);
        assert_eq!(named((1e6, 10e6)), ["1-2MHz", "2-10MHz"]);
        assert_eq!(named((1.995e6, 30e6)), ["2-10MHz", "10-30MHz"]);
        assert!(named((30e6, 1e9)).is_empty());
    }

    #[test]
    fn the_share_within_a_range() {
        let band = &Band::by_default((9e3, 30e6))[1];
        assert_eq!(band.share_within((9e3, 30e6)), 1.0);
        assert_eq!(band.share_within((6e6, 30e6)), 0.5);
        assert_eq!(band.share_within((20e6, 30e6)), 0.0);
    }
}
