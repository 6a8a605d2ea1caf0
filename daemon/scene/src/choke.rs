//! Cores on a cable: reluctance of ferrite and air in series, permeability that relaxes.

use core::f64::consts::{PI, TAU};

use hushwatch_config::scene::{Choke, Material};
use num_complex::Complex;

/// Permeability of free space, H/m.
const MU_0: f64 = 4e-7 * PI;

/// Reference temperature of a material's permeability, degrees Celsius.
const REFERENCE_C: f64 = 25.0;

/// Relative permeability: one relaxation (Debye form). Its loss part makes the core a resistor above `relaxation_hz`.
pub(crate) fn permeability(material: &Material, hz: f64, celsius: f64) -> Complex<f64> {
    let susceptibility = (material.mu - 1.0) * (1.0 + material.per_kelvin * (celsius - REFERENCE_C));
    Complex::new(1.0, 0.0) + susceptibility / Complex::new(1.0, hz / material.relaxation_hz)
}

/// Impedance of a choke whose cores have this much air in their way (m, both gaps together), ohm.
///
/// A ring of rectangular section: its reluctance is that of the mean path through the ferrite and, in series, of the
/// gap, whose field spreads by half the gap on each side.
pub(crate) fn impedance(choke: &Choke, material: &Material, gap_m: f64, hz: f64, celsius: f64) -> Complex<f64> {
    let wall = (choke.outer_m - choke.inner_m) / 2.0;
    let area = wall * choke.length_m;
    // The path for which mu A / path is the inductance of a ring, mu h ln(OD/ID) / (2 pi).
    let path = TAU * wall / (choke.outer_m / choke.inner_m).ln();
    let ferrite = (path - gap_m) / (permeability(material, hz, celsius) * MU_0 * area);
    let each = gap_m / 2.0;
    let air = 2.0 * each / (MU_0 * (wall + each) * (choke.length_m + each));
    let turns = f64::from(choke.turns);
    let inductance = turns * turns / (ferrite + air);
    Complex::new(0.0, TAU * hz) * inductance * f64::from(choke.cores)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn clip(turns: u32) -> (Choke, Material) {
        let choke = Choke {
            material: "nizn-800".into(),
            outer_m: 26e-3,
            inner_m: 13e-3,
            length_m: 28e-3,
            gap_m: 0.0,
            turns,
            cores: 1,
            fitted: true,
        };
        (choke, Material { name: "nizn-800".into(), mu: 800.0, relaxation_hz: 7e6, per_kelvin: 0.0 })
    }

    #[test]
    fn at_low_frequency_it_is_an_inductor_of_its_shape() {
        // 2e-7 * 28 mm * ln 2 * 800 = 3.105 uH; at 10 kHz 0.195 ohm.
        let (choke, material) = clip(1);
        let z = impedance(&choke, &material, 0.0, 1e4, 25.0);
        assert!((z.im - 0.19511).abs() < 2e-4 && z.re / z.im < 0.01, "{z}");
        let (choke, material) = clip(2);
        let twice = impedance(&choke, &material, 0.0, 1e4, 25.0);
        assert!((twice.im / z.im - 4.0).abs() < 1e-9);
    }

    #[test]
    fn a_gap_costs_most_at_low_frequency() {
        let (choke, material) = clip(1);
        let ratio = |gap: f64, hz: f64| {
            impedance(&choke, &material, gap, hz, 25.0).norm() / impedance(&choke, &material, 0.0, hz, 25.0).norm()
        };
        assert!(ratio(0.1e-3, 1e5) < 0.5 && ratio(0.1e-3, 1e8) > 0.9);
        assert!(ratio(1e-3, 1e5) < 0.12 && ratio(1e-3, 1e8) < 0.9);
    }

    #[test]
    fn above_its_relaxation_it_is_a_resistor() {
        let (choke, material) = clip(1);
        let z = impedance(&choke, &material, 0.0, 1e8, 25.0);
        assert!(z.re > 5.0 * z.im.abs(), "{z}");
    }

    #[test]
    fn inductances_of_cores_as_they_are_published() {
        // core_inductance.csv: L = mu0 mu N^2 h ln(OD/ID) / (2 pi).
        let mut rows =
            csv::Reader::from_path(concat!(env!("CARGO_MANIFEST_DIR"), "/../../tests/reference/core_inductance.csv"))
                .expect("the table");
        let mut checked = 0;
        for row in rows.records().map(|row| row.expect("a row")) {
            let sizes = row[0].split(' ').nth(1).expect("sizes");
            let mm: Vec<f64> = sizes.split('/').map(|size| size.parse::<f64>().expect("mm") * 1e-3).collect();
            let choke = Choke {
                material: "m".into(),
                outer_m: mm[0],
                inner_m: mm[1],
                length_m: mm[2],
                gap_m: 0.0,
                turns: row[1].parse().expect("turns"),
                cores: 1,
                fitted: true,
            };
            let mu: f64 = row[2].parse().expect("mu");
            let material = Material { name: "m".into(), mu, relaxation_hz: 1e12, per_kelvin: 0.0 };
            let (hz, expected) = (1e4, row[3].parse::<f64>().expect("uH") * 1e-6);
            let got = impedance(&choke, &material, 0.0, hz, 25.0).im / (TAU * hz);
            assert!((got / expected - 1.0).abs() < 1e-5, "{row:?}: {got:e}");
            checked += 1;
        }
        assert!(checked > 5, "{checked} rows");
    }
}
