//! Ferrites by name: complex permeability over frequency.

use num_complex::Complex;

/// Domain-wall part of a permeability: a damped resonance, Kd fd^2 / (fd^2 - f^2 + j beta f).
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct DomainWall {
    /// Its part of the permeability at low frequency, Kd.
    pub at_rest: f64,
    /// Resonance, fd, Hz.
    pub resonance_hz: f64,
    /// Damping, beta, Hz: the width of the resonance.
    pub damping_hz: f64,
}

/// Spin part of a permeability: gyromagnetic, Ks fs (fs + j alpha f) / ((fs + j alpha f)^2 - f^2). With alpha far above
/// 1, as in nickel-zinc ferrites, it relaxes at fs / alpha.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Spin {
    /// Its part of the permeability at low frequency, Ks.
    pub at_rest: f64,
    /// Resonance, fs, Hz.
    pub resonance_hz: f64,
    /// Damping, alpha, a number.
    pub damping: f64,
}

/// A ferrite: mu = 1 + domain-wall part + spin part, the form of Tsutaoka, J. Appl. Phys. 93, 2789 (2003), with
/// ordinary frequency in place of angular frequency.
///
/// The three that have a name stand for classes of material, not for anybody's product; real batches differ by a
/// quarter (common practice). A measured impedance of the choke is always better.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Material {
    /// The name in site files.
    pub name: &'static str,
    /// Its domain walls.
    pub domain_wall: DomainWall,
    /// Its spins.
    pub spin: Spin,
}

static MATERIALS: [Material; 3] = [
    // Parameters invented in the range of common practice: together 800 at rest, most loss at 5 to 10 MHz, spin part
    // times its relaxation 7.9 GHz (Snoek's limit is 5.6 to 9.3 GHz for 0.3 to 0.5 T); a one-turn clip of
    // 26/13/28 mm then has 166 and 191 ohm at 25 and 100 MHz, amid the 100 to 300 ohm of such clips.
    Material {
        name: "nizn-800",
        domain_wall: DomainWall { at_rest: 240.0, resonance_hz: 5.6e6, damping_hz: 7e6 },
        spin: Spin { at_rest: 559.0, resonance_hz: 1100e6, damping: 78.0 },
    },
    // Values from memory of the paper named above; tests/reference/permeability_models.csv is computed with them.
    Material {
        name: "nizn-1600",
        domain_wall: DomainWall { at_rest: 485.0, resonance_hz: 2.8e6, damping_hz: 3.5e6 },
        spin: Spin { at_rest: 1130.0, resonance_hz: 1100e6, damping: 161.0 },
    },
    // Values from memory, as above. For MHz and below; it conducts, and large cores do less than this at high
    // frequency.
    Material {
        name: "mnzn",
        domain_wall: DomainWall { at_rest: 3282.0, resonance_hz: 2.5e6, damping_hz: 9.3e6 },
        spin: Spin { at_rest: 1438.0, resonance_hz: 6.5e6, damping: 1.28 },
    },
];

impl Material {
    /// The material of this name.
    pub fn by_name(name: &str) -> Option<&'static Self> {
        MATERIALS.iter().find(|material| material.name == name)
    }

    /// The names of all materials.
    pub fn names() -> impl Iterator<Item = &'static str> {
        MATERIALS.iter().map(|material| material.name)
    }

    /// Relative permeability mu' - j mu'' at a frequency in Hz, 0 or above, for small fields.
    pub fn permeability(&self, hz: f64) -> Complex<f64> {
        let DomainWall { at_rest, resonance_hz, damping_hz } = self.domain_wall;
        let resonance = resonance_hz * resonance_hz;
        let walls = at_rest * resonance / Complex::new(resonance - hz * hz, damping_hz * hz);
        let Spin { at_rest, resonance_hz, damping } = self.spin;
        let damped = Complex::new(resonance_hz, damping * hz);
        let spins = damped * resonance_hz * at_rest / (damped * damped - hz * hz);
        1.0 + walls + spins
    }

    /// Relative permeability at rest.
    pub fn initial_permeability(&self) -> f64 {
        1.0 + self.domain_wall.at_rest + self.spin.at_rest
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn every_name_finds_its_material() {
        assert_eq!(Material::names().collect::<Vec<_>>(), ["nizn-800", "nizn-1600", "mnzn"]);
        for name in Material::names() {
            let material = Material::by_name(name).unwrap();
            let at_rest = material.permeability(0.0);
            assert!((at_rest - material.initial_permeability()).norm() < 1e-9, "{name}: {at_rest}");
        }
        assert_eq!(Material::by_name("nizn-800").unwrap().initial_permeability(), 800.0);
        assert_eq!(Material::by_name("nizn"), None);
    }

    /// A ferrite that gave power back would be none.
    #[test]
    fn losses_are_losses() {
        for name in Material::names() {
            for step in 0..600 {
                let hz = 10f64.powf(2.0 + f64::from(step) / 80.0);
                let mu = Material::by_name(name).unwrap().permeability(hz);
                assert!(mu.im < 0.0, "{name} at {hz}: {mu}");
            }
        }
    }

    /// Snoek's limit, (2/3) gamma Ms: 5.60 to 9.34 GHz for 0.3 to 0.5 T (28.025 GHz/T).
    #[test]
    fn spins_of_the_invented_material_keep_to_snoek() {
        let spin = Material::by_name("nizn-800").unwrap().spin;
        let product = spin.at_rest * spin.resonance_hz / spin.damping;
        assert!((5.60e9..9.34e9).contains(&product), "{product}");
    }
}
