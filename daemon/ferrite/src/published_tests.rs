//! Checks against tables: tests/reference/README.md tells their sources and tolerances.

use num_complex::Complex;

use crate::{Choke, Core, Material, gapped_permeability, insertion_loss_db};

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

/// Tables give six digits: half a unit of the sixth is 5e-6 at most.
fn near(found: f64, wanted: f64, relative: f64, what: &csv::StringRecord) {
    assert!((found - wanted).abs() <= relative * wanted.abs(), "{found} instead of {wanted}: {what:?}");
}

/// The core of choke_impedance.csv and gap_signature.csv.
fn sleeve(gap_m: f64) -> Core {
    Core { outer_m: 0.026, inner_m: 0.013, length_m: 0.0285, gap_m }
}

fn nizn() -> &'static Material {
    Material::by_name("nizn-1600").unwrap()
}

/// permeability_models.csv: the dispersion of two materials, computed.
#[test]
fn permeabilities() {
    for row in &table!("permeability_models.csv") {
        let material = if row[0].starts_with("NiZn_A") { nizn() } else { Material::by_name("mnzn").unwrap() };
        let mu = material.permeability(number(row, 1));
        near(mu.re, number(row, 2), 6e-6, row);
        near(-mu.im, number(row, 3), 6e-6, row);
    }
}

/// core_inductance.csv: computed; 1e-6.
#[test]
fn inductances() {
    for row in &table!("core_inductance.csv") {
        let (_, size) = row[0].split_once(' ').unwrap();
        let mm: Vec<f64> = size.trim_end_matches(" mm").split('/').map(|text| text.parse().unwrap()).collect();
        let core = Core { outer_m: mm[0] * 1e-3, inner_m: mm[1] * 1e-3, length_m: mm[2] * 1e-3, gap_m: 0.0 };
        let turns = number(row, 1);
        near(core.inductance_at_mu_1() * number(row, 2) * turns * turns * 1e6, number(row, 3), 1e-6, row);
        near(core.path_m() * 1e3, number(row, 4), 1e-6, row);
    }
}

/// choke_impedance.csv: R, X and Z of one sleeve by turns, with and without capacitance; computed, six digits.
#[test]
fn impedances() {
    for row in &table!("choke_impedance.csv") {
        let turns = row[0].parse().unwrap();
        let choke = Choke::cores(nizn(), sleeve(0.0), turns, 1).unwrap();
        let choke = choke.with_parallel_capacitance(number(row, 1) * 1e-12);
        let impedance = choke.impedance(number(row, 2));
        near(impedance.re, number(row, 3), 6e-6, row);
        near(impedance.im, number(row, 4), 6e-6, row);
        near(impedance.norm(), number(row, 5), 6e-6, row);
    }
}

/// air_gap_mu_e.csv: the gap formula with real permeability; computed, 1e-6.
#[test]
fn gaps() {
    for row in &table!("air_gap_mu_e.csv") {
        let mu = gapped_permeability(number(row, 1).into(), number(row, 0) * 1e-6, number(row, 2) * 1e-3);
        near(mu.re, number(row, 3), 1e-6, row);
    }
}

/// gap_signature.csv: the same with complex permeability and without fringing; computed, six digits (insertion loss in
/// 150 + 150 ohm: 1e-4 dB). The choke itself counts fringing: hardly other below 0.1 mm, up to a tenth more at 1 mm.
#[test]
fn gap_signatures() {
    for row in &table!("gap_signature.csv") {
        let (gap_m, hz) = (number(row, 0) * 1e-6, number(row, 1));
        let core = sleeve(gap_m);
        let mu = gapped_permeability(nizn().permeability(hz), gap_m, core.path_m());
        near(mu.re, number(row, 2), 6e-6, row);
        near(-mu.im, number(row, 3), 6e-6, row);
        let impedance = Complex::<f64>::i() * mu * (std::f64::consts::TAU * hz * core.inductance_at_mu_1());
        near(impedance.re, number(row, 4), 6e-6, row);
        near(impedance.im, number(row, 5), 6e-6, row);
        near(impedance.norm(), number(row, 6), 6e-6, row);
        assert!((insertion_loss_db(impedance, 300.0.into()) - number(row, 7)).abs() <= 6e-5, "{row:?}");

        let fringed = Choke::cores(nizn(), core, 1, 1).unwrap().impedance(hz).norm() / impedance.norm();
        let most = if gap_m <= 1e-4 { 1.01 } else { 1.1 };
        assert!((1.0 - 1e-9..most).contains(&fringed), "{fringed}: {row:?}");
    }
}

/// insertion_loss.csv: by the formula, and as -S21 of a series element by a network library (scikit-rf); 1e-6 dB.
#[test]
fn insertion_losses() {
    for row in &table!("insertion_loss.csv") {
        let z_loop = complex(&row[0]) + complex(&row[1]);
        let found = insertion_loss_db(Complex::new(number(row, 2), number(row, 3)), z_loop);
        for column in [4, 5] {
            if !row[column].is_empty() {
                assert!((found - number(row, column)).abs() <= 1e-6, "{found}: {row:?}");
            }
        }
    }
}

/// `50` or `(5-150j)`.
fn complex(text: &str) -> Complex<f64> {
    text.trim_matches(['(', ')']).parse().unwrap()
}
