//! What a source puts out: lines, and noise.

use core::f64::consts::{LN_2, PI};

use hushwatch_config::scene::{Source, SourceKind};

/// Bandwidth in which the level of bursts is told, Hz.
const BURST_BANDWIDTH_HZ: f64 = 100e3;

/// Noise bandwidth over the 6 dB width of a Gaussian filter: sqrt(pi / (4 ln 2)) / sqrt 2.
pub(crate) fn noise_bandwidth_hz(rbw_hz: f64) -> f64 {
    rbw_hz * (PI / (8.0 * LN_2)).sqrt()
}

/// How much of the power of a line so far off gets through a Gaussian filter named by its 6 dB width.
fn filter(off_hz: f64, rbw_hz: f64) -> f64 {
    (-2.0 * LN_2 * (2.0 * off_hz / rbw_hz).powi(2)).exp()
}

/// A line that a source puts out: frequency, Hz, and mean square of its voltage, V^2.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(crate) struct SourceLine {
    pub(crate) hz: f64,
    pub(crate) volt_squared: f64,
}

/// The lines of a source within a range of frequencies; none for bursts, which are noise.
pub(crate) fn lines(source: &Source, from_hz: f64, to_hz: f64) -> Vec<SourceLine> {
    match source.kind {
        SourceKind::Drive { carrier_hz, .. } => multiples(carrier_hz, from_hz, to_hz)
            .map(|n| SourceLine { hz: n * carrier_hz, volt_squared: drive_line(&source.kind, n) })
            .collect(),
        SourceKind::Clock { hz, level_dbuv } => multiples(hz, from_hz, to_hz)
            .map(|n| SourceLine { hz: n * hz, volt_squared: volt_squared(level_dbuv) / (n * n) })
            .collect(),
        SourceKind::Broadcast { hz, level_dbuv } if (from_hz..=to_hz).contains(&hz) => {
            vec![SourceLine { hz, volt_squared: volt_squared(level_dbuv) }]
        }
        SourceKind::Broadcast { .. } | SourceKind::Bursts { .. } => Vec::new(),
    }
}

fn multiples(hz: f64, from_hz: f64, to_hz: f64) -> impl Iterator<Item = f64> {
    let first = (from_hz / hz).ceil().max(1.0) as u64;
    let last = (to_hz / hz).floor() as u64;
    (first..=last).map(|n| n as f64)
}

fn volt_squared(dbuv: f64) -> f64 {
    1e-12 * 10f64.powf(dbuv / 10.0)
}

/// Mean square of the nth line of a drive: a trapezoid whose width varies from period to period, so that sin^2 of the
/// width is one half on average, times the square of the resonance.
fn drive_line(kind: &SourceKind, n: f64) -> f64 {
    let SourceKind::Drive { step_v, carrier_hz, rise_s, ring_hz, ring_q, ring_db } = *kind else { return 0.0 };
    let hz = n * carrier_hz;
    let edges = sinc(hz * rise_s);
    // Amplitude 2 A / (pi n) * |sin(n pi d)| * |sinc(f tr)|: mean square half of its square.
    let amplitude = 2.0 * step_v / (PI * n) * edges;
    let trapezoid = amplitude * amplitude / 2.0 * 0.5;
    let detune = ring_q * (hz / ring_hz - ring_hz / hz);
    let peak = 10f64.powf(ring_db / 10.0) - 1.0;
    trapezoid * (1.0 + peak / (1.0 + detune * detune))
}

/// sin(pi x) / (pi x).
fn sinc(x: f64) -> f64 {
    if x.abs() < 1e-9 { 1.0 } else { (PI * x).sin() / (PI * x) }
}

/// Mean square of the voltage that a filter of this width lets through at a frequency, V^2. Bursts are given as if one
/// were on.
pub(crate) fn through_filter(source: &Source, hz: f64, rbw_hz: f64) -> f64 {
    if let SourceKind::Bursts { level_dbuv, .. } = source.kind {
        return volt_squared(level_dbuv) * noise_bandwidth_hz(rbw_hz) / noise_bandwidth_hz(BURST_BANDWIDTH_HZ);
    }
    let reach = 2.5 * rbw_hz;
    let through = |line: SourceLine| line.volt_squared * filter(line.hz - hz, rbw_hz);
    lines(source, (hz - reach).max(1.0), hz + reach).into_iter().map(through).sum()
}

#[cfg(test)]
mod tests {
    use super::*;

    fn source(kind: SourceKind) -> Source {
        Source {
            name: "s".into(),
            node: "cabinet".into(),
            impedance_ohm: 10.0,
            kind,
            states: Vec::new(),
            fluctuation_db: 0.0,
            memory: 0.0,
            place: 0..0,
        }
    }

    #[test]
    fn a_line_comes_through_whole_in_the_middle_and_by_a_quarter_at_the_edge() {
        let broadcast = source(SourceKind::Broadcast { hz: 6e6, level_dbuv: 60.0 });
        let through = |hz| through_filter(&broadcast, hz, 9e3);
        assert!((through(6e6) / 1e-6 - 1.0).abs() < 1e-9);
        assert!((through(6e6 + 4.5e3) / 1e-6 - 0.25).abs() < 1e-9);
        assert_eq!(through(6.1e6), 0.0);
    }

    #[test]
    fn dense_lines_add_up_to_noise_of_the_same_power() {
        let drive = source(SourceKind::Drive {
            step_v: 1.0,
            carrier_hz: 8e3,
            rise_s: 1e-7,
            ring_hz: 4e6,
            ring_q: 2.0,
            ring_db: 0.0,
        });
        let (hz, rbw) = (2e6, 100e3);
        let density = lines(&drive, hz - 4e3, hz + 4e3).iter().map(|line| line.volt_squared).sum::<f64>() / 8e3;
        let expected = density * noise_bandwidth_hz(rbw);
        assert!((through_filter(&drive, hz, rbw) / expected - 1.0).abs() < 0.02);
    }

    #[test]
    fn the_envelope_falls_by_twenty_then_forty_decibels_a_decade() {
        // Corners of a trapezoid: 1/(pi width) and 1/(pi rise), after which it falls by 40 dB a decade (Paul,
        // Introduction to Electromagnetic Compatibility, ch. 3; from memory).
        let kind =
            SourceKind::Drive { step_v: 1.0, carrier_hz: 1e4, rise_s: 1e-7, ring_hz: 1e3, ring_q: 1.0, ring_db: 0.0 };
        let peak = |hz: f64| {
            let around = lines(&source(kind.clone()), hz * 0.5, hz * 2.0);
            10.0 * around.iter().map(|line| line.volt_squared * line.hz * line.hz).fold(0.0, f64::max).log10()
        };
        assert!((peak(1e5) - peak(1e6)).abs() < 0.5, "flat after times f: 20 dB a decade");
        let drop = peak(3e7) - peak(3e8);
        assert!((drop - 20.0).abs() < 1.0, "20 dB more: {drop}");
    }

    #[test]
    fn lines_of_a_trapezoid_as_they_are_published() {
        // trapezoid_spectrum.csv: Fourier series of a trapezoid with equal edges. There the width is fixed, here it
        // varies: sin^2(n pi D) of each row stands in for its mean of one half.
        let mut rows = csv::Reader::from_path(concat!(
            env!("CARGO_MANIFEST_DIR"),
            "/../../tests/reference/trapezoid_spectrum.csv"
        ))
        .expect("the table");
        let mut checked = 0;
        for row in rows.records().map(|row| row.expect("a row")) {
            let value = |column: usize| row[column].parse::<f64>().unwrap_or(f64::NAN);
            let (step_v, carrier_hz, duty, rise_ns, n) = (value(0), value(1), value(2), value(3), value(4));
            let amplitude = value(6);
            let share = (n * PI * duty).sin().powi(2);
            if share < 1e-6 {
                continue;
            }
            let (rise_s, ring_hz) = (rise_ns * 1e-9, 1e3);
            let kind = SourceKind::Drive { step_v, carrier_hz, rise_s, ring_hz, ring_q: 1.0, ring_db: 0.0 };
            let expected = amplitude * amplitude / 2.0;
            let got = drive_line(&kind, n) * share / 0.5;
            assert!((got / expected - 1.0).abs() < 1e-5, "D {duty}, n {n}: {got:e} instead of {expected:e}");
            checked += 1;
        }
        assert!(checked > 10, "{checked} rows");
    }
}
