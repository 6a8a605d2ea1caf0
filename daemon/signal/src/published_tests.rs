//! Checks against tables: tests/reference/README.md tells their sources and tolerances.

use hushwatch_quantity::{FilterShape, ReceiverUnit, amplitude_to_db, db_to_amplitude, power_sum_db, power_to_db};

use crate::*;

macro_rules! table {
    ($name:literal) => {
        rows(include_str!(concat!(env!("CARGO_MANIFEST_DIR"), "/../../tests/reference/", $name)))
    };
}

/// The rows of a table, without its header.
fn rows(text: &str) -> Vec<csv::StringRecord> {
    let rows: Vec<_> = csv::Reader::from_reader(text.as_bytes()).into_records().map(Result::unwrap).collect();
    assert!(!rows.is_empty());
    rows
}

fn number(row: &csv::StringRecord, column: usize) -> f64 {
    row[column].parse().unwrap()
}

fn near(found: f64, wanted: f64, tolerance: f64, what: &csv::StringRecord) {
    assert!((found - wanted).abs() <= tolerance, "{found} instead of {wanted}: {what:?}");
}

fn chain(kind: ProbeKind, factor: f64) -> CorrectionChain {
    CorrectionChain { kind, factor: Curve::flat(factor), path_loss: Curve::flat(0.0) }
}

/// units_examples.csv: definitions; the tolerance is the last digit given.
#[test]
fn units() {
    let dbm = ReceiverUnit::Dbm.to_db_microvolt();
    let level = |kind, factor, reading| chain(kind, factor).level_db(reading, 1e6);
    let mut checked = 0;
    let mut loop_voltage = None;
    for row in &table!("units_examples.csv") {
        let found = match (&row[0], &row[1]) {
            ("dBm to dB(uV)", "R=50 ohm") | ("0 dBm in 50 ohm", "") if &row[2] != "V rms" => dbm,
            ("0 dBm in 50 ohm", "") => db_to_amplitude(dbm) * 1e-6,
            ("dBm to dB(uA)", "R=50 ohm") => level(ProbeKind::Current, amplitude_to_db(50.0), dbm),
            ("dB(uV) to dB(uA) through current probe", _) => -level(ProbeKind::Current, 0.0, 0.0),
            ("example clamp", condition) if condition.starts_with("V=54") => level(ProbeKind::Current, 20.0, 54.0),
            ("example clamp", _) => level(ProbeKind::Current, 14.0, dbm - 60.0),
            ("example clamp linear", _) => db_to_amplitude(level(ProbeKind::Current, 20.0, 54.0)),
            // The voltage that 1 uA/m induces, then the factor that must bring it back to 0 dB(uA/m).
            (quantity, _) if quantity.starts_with("small-loop open-circuit") => {
                loop_voltage = Some(amplitude_to_db(number(row, 3)));
                continue;
            }
            (quantity, _) if quantity.starts_with("small-loop magnetic") => {
                near(level(ProbeKind::Loop, number(row, 3), loop_voltage.unwrap()), 0.0, 1e-3, row);
                checked += 1;
                continue;
            }
            _ => continue,
        };
        near(found, number(row, 3), 1e-4 * number(row, 3).abs().clamp(0.01, 1.0), row);
        checked += 1;
    }
    assert_eq!(checked, 14, "rows of the table that are this room's");
}

/// rbw_conversion.csv: computed; to the last digit given.
#[test]
fn changes_of_bandwidth() {
    for row in &table!("rbw_conversion.csv") {
        for (column, law) in [(2, BandwidthLaw::Noise), (3, BandwidthLaw::Tone), (4, BandwidthLaw::Impulse)] {
            let found = rescale_bandwidth(0.0, number(row, 0), number(row, 1), law);
            near(found, number(row, column), 6e-5, row);
        }
    }
}

/// filter_bandwidths.csv: computed by numerical integration; to the last digit given.
#[test]
fn noise_bandwidths_of_filters() {
    let rows = table!("filter_bandwidths.csv");
    let ratio = |shape: FilterShape| shape.noise_bandwidth_ratio();
    near(ratio(FilterShape::Gaussian3dB), number(&rows[0], 1), 6e-6, &rows[0]);
    near(ratio(FilterShape::Gaussian6dB), number(&rows[0], 2), 6e-6, &rows[0]);
    near(power_to_db(ratio(FilterShape::Gaussian6dB)), number(&rows[0], 5), 6e-5, &rows[0]);
    near(ratio(FilterShape::CriticallyCoupled6dB), number(&rows[1], 2), 6e-6, &rows[1]);
    near(power_to_db(ratio(FilterShape::CriticallyCoupled6dB)), number(&rows[1], 5), 6e-5, &rows[1]);
}

/// noise_floor.csv: kTB at 290 K, computed; 0.01 dB.
#[test]
fn noise_floors() {
    for row in &table!("noise_floor.csv") {
        let (bandwidth, figure) = (number(row, 1), number(row, 2));
        near(Floor::NoiseFigureDb(figure).db_microvolt(bandwidth), number(row, 4), 0.01, row);
        let density = number(row, 3) - power_to_db(bandwidth);
        near(Floor::DbmPerHz(density).db_microvolt(bandwidth), number(row, 4), 0.01, row);
    }
}

/// floor_subtraction.csv and floor_addition.csv: computed; to the last digit given.
#[test]
fn floors_are_taken_off_and_added() {
    for row in &table!("floor_subtraction.csv") {
        let above = number(row, 0);
        near(subtract_floor(20.0 + above, 20.0).unwrap() - 20.0 - above, number(row, 1), 6e-5, row);
        // How an error of the reading grows: the slope of the result.
        let slope = |step: f64| subtract_floor(above + step, 0.0).unwrap();
        near((slope(1e-4) - slope(-1e-4)) / 2e-4, number(row, 2), 1e-3, row);
    }
    for row in &table!("floor_addition.csv") {
        let signal = number(row, 0);
        let reading = power_sum_db([signal, 0.0]);
        near(reading - signal, number(row, 1), 6e-5, row);
        near(subtract_floor(reading, 0.0).unwrap(), signal, 1e-9, row);
    }
    assert_eq!(subtract_floor(10.0, 10.0), None);
    assert_eq!(subtract_floor(9.0, 10.0), None);
}

/// limit_interpolation.csv: lines that run straight in dB over the logarithm of frequency, as curves here do; computed.
#[test]
fn curves_run_straight_over_the_logarithm_of_frequency() {
    for row in &table!("limit_interpolation.csv") {
        let ends = [(1, 3), (2, 4)].map(|(hz, db)| (number(row, hz) * 1e6, number(row, db)));
        near(Curve::new(ends.to_vec()).unwrap().at(number(row, 0) * 1e6), number(row, 5), 6e-5, row);
    }
}

/// averaging_statistics.csv: closed forms; 1e-4 dB.
#[test]
fn averages_of_noise() {
    let mut checked = 0;
    for row in &table!("averaging_statistics.csv") {
        let Some((averages, what)) = row[0].strip_prefix("K=").and_then(|rest| rest.split_once([' ', ':'])) else {
            continue;
        };
        let averages = averages.parse().unwrap();
        let found = if what.contains("bias") { mean_of_noise_db_bias(averages) } else { noise_db_spread(averages) };
        near(found, number(row, 1), 1e-4, row);
        checked += 1;
    }
    assert_eq!(checked, 18);
}

/// The two kinds of average on numbers that can be done by hand, and on noise (averaging_statistics.csv: -2.50682 dB).
#[test]
fn averages_of_levels() {
    assert_eq!(mean_power_db(&[]), None);
    assert_eq!(mean_of_db(&[]), None);
    assert!((mean_power_db(&[10.0, 20.0]).unwrap() - power_to_db(55.0)).abs() < 1e-12);
    assert_eq!(mean_of_db(&[10.0, 20.0]), Some(15.0));
    // Quantiles of the exponential distribution at equal steps: its averages without chance.
    let count = 1_000_000;
    let powers = (0..count).map(|index| -((f64::from(index) + 0.5) / f64::from(count)).ln());
    let levels: Vec<f64> = powers.map(power_to_db).collect();
    let bias = mean_of_db(&levels).unwrap() - mean_power_db(&levels).unwrap();
    assert!((bias + 2.50682).abs() < 1e-3, "{bias}");
}
