//! What the level of a band must be, from signals whose level is known.

use hushwatch_quantity::{
    Detector, FilterShape, Grade, Quality, Reason, ReceiverUnit, amplitude_to_db, db_to_power, power_to_db,
};

use crate::*;

const MOST_POINTS: usize = 1001;

fn band(from_hz: f64, to_hz: f64) -> Band {
    let shape = FilterShape::Gaussian6dB;
    Band { from_hz, to_hz, rbw_hz: 9e3, shape, detector: Detector::Rms, exclude: Vec::new() }
}

fn direct() -> CorrectionChain {
    CorrectionChain { kind: ProbeKind::Direct, factor: Curve::flat(0.0), path_loss: Curve::flat(0.0) }
}

/// What a receiver answers to a spectrum, given as its reading in dB(uV) at each frequency.
fn sweep(band: &Band, most_points: usize, reading: impl Fn(f64) -> f64) -> Vec<(Segment, Vec<f64>)> {
    let values = |segment: Segment| {
        let step = (segment.stop_hz - segment.start_hz) / (segment.points - 1) as f64;
        (segment, (0..segment.points).map(|point| reading(segment.start_hz + step * point as f64)).collect())
    };
    plan_segments(std::slice::from_ref(band), most_points).into_iter().map(values).collect()
}

fn traces(answer: &[(Segment, Vec<f64>)]) -> Vec<Trace<'_>> {
    answer
        .iter()
        .map(|(segment, values)| Trace {
            start_hz: segment.start_hz,
            stop_hz: segment.stop_hz,
            unit: ReceiverUnit::DbMicrovolt,
            values,
        })
        .collect()
}

fn level(answer: &[(Segment, Vec<f64>)], chain: &CorrectionChain, band: &Band) -> BandLevel {
    band_level(&traces(answer), chain, band, &Receiver::default(), Quality::GOOD).unwrap()
}

/// Amplitude response of the filter, dB, from its definition; no real one rejects more than 100 dB.
fn response_db(shape: FilterShape, rbw_hz: f64, offset_hz: f64) -> f64 {
    let u = 2.0 * offset_hz / rbw_hz;
    let response: f64 = match shape {
        FilterShape::Gaussian6dB => amplitude_to_db(0.5) * u * u,
        FilterShape::Gaussian3dB => power_to_db(0.5) * u * u,
        FilterShape::CriticallyCoupled6dB => -amplitude_to_db(1.0 + u.powi(4)),
    };
    response.max(-100.0)
}

/// A small generator (Knuth's MMIX constants), from 0 to 1: the same numbers everywhere.
struct Random(u64);

impl Random {
    fn next(&mut self) -> f64 {
        self.0 = self.0.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1_442_695_040_888_963_407);
        (self.0 >> 11) as f64 / (1u64 << 53) as f64
    }
}

#[test]
fn a_flat_density_gives_density_times_width() {
    for shape in FilterShape::ALL {
        for (from, to, rbw_hz) in [(2e6, 10e6, 9e3), (150e3, 2e6, 9e3), (30e6, 31.3e6, 120e3), (1e6, 1.01e6, 9e3)] {
            let band = Band { rbw_hz, shape, ..band(from, to) };
            // 0 dB(uV) in 1 Hz, as the receiver reads it in its noise bandwidth.
            let reading = power_to_db(band.noise_bandwidth_hz());
            let level = level(&sweep(&band, MOST_POINTS, |_| reading), &direct(), &band).level_db;
            assert!((level - power_to_db(to - from)).abs() < 1e-5, "{shape} {from}: {level}");
        }
    }
}

#[test]
fn a_sine_gives_its_own_level_wherever_it_falls() {
    let mut random = Random(1);
    for shape in FilterShape::ALL {
        for rbw_hz in [9e3, 10e3, 120e3] {
            let band = Band { rbw_hz, shape, ..band(2e6, 10e6) };
            for _ in 0..50 {
                let tone_hz = 3e6 + 6e6 * random.next();
                let answer = sweep(&band, MOST_POINTS, |hz| 60.0 + response_db(shape, rbw_hz, hz - tone_hz));
                let found = level(&answer, &direct(), &band);
                assert!((found.level_db - 60.0).abs() < 0.1, "{shape} {tone_hz}: {}", found.level_db);
                assert!((found.peak_hz - tone_hz).abs() <= rbw_hz / 4.0 + 1e-3, "{}", found.peak_hz);
                assert!((-1.6..=0.0).contains(&(found.peak_db - 60.0)), "{}", found.peak_db);
            }
        }
    }
}

#[test]
fn exclusions_are_cut_out_to_the_hertz() {
    let exclude = vec![(6.1e6, 6.3e6), (5.9e6, 6.2e6), (9.9e6, 12e6)];
    let band = Band { exclude, ..band(2e6, 10e6) };
    let density = power_to_db(band.noise_bandwidth_hz());
    let found = level(&sweep(&band, MOST_POINTS, |_| density), &direct(), &band);
    assert!((found.level_db - power_to_db(7.5e6)).abs() < 1e-5, "{}", found.level_db);

    // A broadcast carrier in the middle of an exclusion neither counts nor is the peak; one outside is.
    let carriers = |hz: f64| {
        let loud = 90.0 + response_db(band.shape, band.rbw_hz, hz - 6e6);
        let quiet = 50.0 + response_db(band.shape, band.rbw_hz, hz - 7e6);
        power_to_db(db_to_power(loud) + db_to_power(quiet))
    };
    let found = level(&sweep(&band, MOST_POINTS, carriers), &direct(), &band);
    assert!((found.level_db - 50.0).abs() < 0.1, "{}", found.level_db);
    assert!((found.peak_hz - 7e6).abs() < 3e3, "{}", found.peak_hz);

    let nothing = Band { exclude: vec![(1e6, 11e6)], ..band };
    let answer = sweep(&nothing, MOST_POINTS, |_| 20.0);
    assert_eq!(band_level(&traces(&answer), &direct(), &nothing, &Receiver::default(), Quality::GOOD), None);
}

#[test]
fn split_in_segments_gives_the_same_as_in_one() {
    let band = band(2e6, 10e6);
    // A line spectrum on a slope, smooth enough that another step does not sample another signal.
    let reading = |hz: f64| 80.0 - 20.0 * (hz / 2e6).log10() + 5.0 * (hz / 3e5).sin();
    let whole = level(&sweep(&band, 100_000, reading), &direct(), &band);
    for most_points in [2, 3, 17, 200, 1001] {
        let split = level(&sweep(&band, most_points, reading), &direct(), &band);
        assert!((split.level_db - whole.level_db).abs() < 2e-3, "{most_points}: {}", split.level_db);
        assert_eq!(split.quality, Quality::GOOD);
        let mut turned = sweep(&band, most_points, reading);
        turned.reverse();
        assert_eq!(level(&turned, &direct(), &band), split, "the order of the traces is nothing");
    }
}

#[test]
fn each_point_is_corrected_at_its_own_frequency() {
    let band = band(2e6, 10e6);
    let chain = CorrectionChain {
        kind: ProbeKind::Current,
        factor: Curve::new(vec![(1e6, 0.0), (1e7, 20.0)]).unwrap(),
        path_loss: Curve::flat(3.0),
    };
    // What such a probe makes of a flat density of current: the voltage rises by 20 dB per decade.
    let density = power_to_db(band.noise_bandwidth_hz()) + 30.0;
    let answer = sweep(&band, MOST_POINTS, |hz| density + 20.0 * (hz / 1e6).log10() - 3.0);
    let found = level(&answer, &chain, &band);
    assert!((found.level_db - power_to_db(8e6) - 30.0).abs() < 1e-5, "{}", found.level_db);
    assert!((found.peak_db - density).abs() < 1e-9, "{}", found.peak_db);
}

#[test]
fn dbm_and_microvolts_give_the_same() {
    let band = band(2e6, 10e6);
    let microvolts = vec![40.0; 1001];
    let dbm = vec![40.0 - ReceiverUnit::Dbm.to_db_microvolt(); 1001];
    let found = [(ReceiverUnit::DbMicrovolt, &microvolts), (ReceiverUnit::Dbm, &dbm)].map(|(unit, values)| {
        let trace = Trace { start_hz: 2e6, stop_hz: 10e6, unit, values };
        band_level(&[trace], &direct(), &band, &Receiver::default(), Quality::GOOD).unwrap().level_db
    });
    assert!((found[0] - found[1]).abs() < 1e-9, "{found:?}");
}

#[test]
fn noise_is_read_without_bias() {
    let band = band(2e6, 10e6);
    let mut random = Random(7);
    // Powers of single readings of Gaussian noise are exponential about their mean, here 40 dB(uV) in the bandwidth.
    let values: Vec<f64> = (0..1001).map(|_| 40.0 + power_to_db(-(1.0 - random.next()).ln())).collect();
    let trace = Trace { start_hz: 2e6, stop_hz: 10e6, unit: ReceiverUnit::DbMicrovolt, values: &values };
    let found = band_level(&[trace], &direct(), &band, &Receiver::default(), Quality::GOOD).unwrap();
    let wanted = 40.0 + power_to_db(8e6 / band.noise_bandwidth_hz());
    // Five standard deviations of a mean of 1001 powers: 5 * 4.34 / sqrt 1001 dB.
    assert!((found.level_db - wanted).abs() < 0.69, "{} {wanted}", found.level_db);
}

fn quality_of(values: &[f64], receiver: &Receiver, chain: &CorrectionChain, given: Quality) -> Quality {
    let band = band(2e6, 10e6);
    let trace = Trace { start_hz: 2e6, stop_hz: 10e6, unit: ReceiverUnit::DbMicrovolt, values };
    band_level(&[trace], chain, &band, receiver, given).unwrap().quality
}

#[test]
fn an_overload_is_bad_in_an_exclusion_too() {
    let receiver = Receiver { floor: None, overload_dbuv: Some(107.0) };
    let mut values = vec![40.0; 1778];
    assert_eq!(quality_of(&values, &receiver, &direct(), Quality::GOOD), Quality::GOOD);
    values[900] = 107.0;
    assert_eq!(quality_of(&values, &receiver, &direct(), Quality::GOOD), Quality::bad(Reason::Overload));
    let band = Band { exclude: vec![(5e6, 7e6)], ..band(2e6, 10e6) };
    let trace = Trace { start_hz: 2e6, stop_hz: 10e6, unit: ReceiverUnit::DbMicrovolt, values: &values };
    let found = band_level(&[trace], &direct(), &band, &receiver, Quality::GOOD).unwrap();
    assert_eq!(found.quality, Quality::bad(Reason::Overload));
    assert_eq!(found.peak_db, 40.0);
    values[900] = f64::INFINITY;
    let over_range = quality_of(&values, &Receiver::default(), &direct(), Quality::GOOD);
    assert_eq!(over_range, Quality::bad(Reason::Overload), "over range is an overload, known or not");
}

#[test]
fn missing_points_are_made_up_for_and_told() {
    let band = band(2e6, 10e6);
    let mut values = vec![40.0; 1001];
    let whole = |values: &[f64]| {
        let trace = Trace { start_hz: 2e6, stop_hz: 10e6, unit: ReceiverUnit::DbMicrovolt, values };
        band_level(&[trace], &direct(), &band, &Receiver::default(), Quality::GOOD)
    };
    let full = whole(&values).unwrap();
    values[10] = f64::NAN;
    let one_missing = whole(&values).unwrap();
    assert!((one_missing.level_db - full.level_db).abs() < 1e-9);
    assert_eq!(one_missing.quality, Quality::uncertain(Reason::MissingPoints));
    values[..99].fill(f64::NAN);
    assert_eq!(whole(&values).unwrap().quality, Quality::uncertain(Reason::MissingPoints));
    values[..102].fill(f64::NAN);
    assert_eq!(whole(&values).unwrap().quality, Quality::bad(Reason::MissingPoints));
    assert!((whole(&values).unwrap().level_db - full.level_db).abs() < 1e-9);
    values.fill(f64::NAN);
    assert_eq!(whole(&values), None);
    assert_eq!(whole(&[]), None);

    // A hole that no trace covers is missing as well.
    let part = [40.0; 500];
    let trace = Trace { start_hz: 2e6, stop_hz: 9.5e6, unit: ReceiverUnit::DbMicrovolt, values: &part };
    let found = band_level(&[trace], &direct(), &band, &Receiver::default(), Quality::GOOD).unwrap();
    assert_eq!(found.quality, Quality::uncertain(Reason::MissingPoints));
}

#[test]
fn a_band_outside_the_factor_is_uncertain() {
    let values = vec![40.0; 1778];
    let chain =
        |first, last| CorrectionChain { factor: Curve::new(vec![(first, 0.0), (last, 0.0)]).unwrap(), ..direct() };
    let quality = |chain| quality_of(&values, &Receiver::default(), &chain, Quality::GOOD);
    assert_eq!(quality(chain(2e6, 10e6)), Quality::GOOD);
    assert_eq!(quality(chain(2.1e6, 10e6)), Quality::uncertain(Reason::OutsideFactor));
    assert_eq!(quality(chain(2e6, 9e6)), Quality::uncertain(Reason::OutsideFactor));
    let short_loss = CorrectionChain { path_loss: Curve::new(vec![(3e6, 0.0), (3e7, 0.0)]).unwrap(), ..direct() };
    assert_eq!(quality(short_loss), Quality::uncertain(Reason::OutsideFactor));
}

#[test]
fn near_its_floor_a_level_is_uncertain_then_bad() {
    let floor = Floor::NoiseFigureDb(20.0);
    let receiver = Receiver { floor: Some(floor), overload_dbuv: None };
    let at_floor = floor.db_microvolt(band(2e6, 10e6).noise_bandwidth_hz());
    // A probe weak at low frequencies lifts floor and signal alike: only their distance counts.
    let chain = CorrectionChain { factor: Curve::new(vec![(1e6, -30.0), (1e7, 10.0)]).unwrap(), ..direct() };
    for (above, wanted) in [
        (0.0, Quality::bad(Reason::NearFloor)),
        (0.9, Quality::bad(Reason::NearFloor)),
        (1.1, Quality::uncertain(Reason::NearFloor)),
        (2.9, Quality::uncertain(Reason::NearFloor)),
        (3.1, Quality::GOOD),
    ] {
        let values = vec![at_floor + above; 1778];
        assert_eq!(quality_of(&values, &receiver, &chain, Quality::GOOD), wanted, "{above}");
    }
    // An average detector reads the mean of the envelope of its own noise, 1.05 dB less.
    let band = Band { detector: Detector::Average, ..band(2e6, 10e6) };
    let values = vec![at_floor + 2.1; 1778];
    let trace = Trace { start_hz: 2e6, stop_hz: 10e6, unit: ReceiverUnit::DbMicrovolt, values: &values };
    assert_eq!(band_level(&[trace], &chain, &band, &receiver, Quality::GOOD).unwrap().quality, Quality::GOOD);
}

#[test]
fn what_is_given_stands_unless_worse_is_found() {
    let values = vec![40.0; 1778];
    let assumed = Quality { grade: Grade::Good, reason: Some(Reason::Assumed) };
    assert_eq!(quality_of(&values, &Receiver::default(), &direct(), assumed), assumed);
    let settings = Quality::bad(Reason::Settings);
    let receiver = Receiver { floor: None, overload_dbuv: Some(30.0) };
    assert_eq!(quality_of(&values, &receiver, &direct(), settings), settings);
    assert_eq!(quality_of(&values, &receiver, &direct(), assumed), Quality::bad(Reason::Overload));
}
