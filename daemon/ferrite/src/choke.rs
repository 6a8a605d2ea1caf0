//! A choke: its impedance at any frequency.

use core::f64::consts::TAU;
use core::fmt;

use num_complex::Complex;

use crate::core_shape::Core;
use crate::insertion_loss::{insertion_loss_db, log_grid};
use crate::material::Material;
use crate::table::Table;

/// A choke on a cable, by its cores or by a table of its impedance.
#[derive(Clone, Debug, PartialEq)]
pub struct Choke {
    make: Make,
    parallel_farad: f64,
}

#[derive(Clone, Debug, PartialEq)]
enum Make {
    Cores { material: Material, core: Core, turns: u32, cores: u32 },
    Table(Table),
}

/// Why there is no such choke. Rows are counted from 0.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum ChokeError {
    /// The dimensions make no ring: each must be above 0, the gap 0 or above, the inner diameter below the outer one.
    NoRing,
    /// No turn, or no core.
    NoTurns,
    /// The table has no row.
    Empty,
    /// The frequency of this row is not above 0, or its impedance is none: a magnitude must be above 0, a resistance 0
    /// or above, all of them finite.
    NotAnImpedance(usize),
    /// The frequency of this row is not above that of the one before.
    NotRising(usize),
}

impl fmt::Display for ChokeError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::NoRing => f.write_str("these dimensions make no ring"),
            Self::NoTurns => f.write_str("a choke has at least one turn and one core"),
            Self::Empty => f.write_str("an impedance table needs at least one row"),
            Self::NotAnImpedance(row) => write!(f, "row {row} is no impedance at a positive frequency"),
            Self::NotRising(row) => write!(f, "the frequency of row {row} does not rise"),
        }
    }
}

impl core::error::Error for ChokeError {}

impl Choke {
    /// `cores` like cores in a row, the cable `turns` times through all of them; straight through is one turn.
    ///
    /// # Errors
    /// The core is no ring, or there is no turn or no core.
    pub fn cores(material: &Material, core: Core, turns: u32, cores: u32) -> Result<Self, ChokeError> {
        let Core { outer_m, inner_m, length_m, gap_m } = core;
        let is_ring = [outer_m, inner_m, length_m, gap_m].iter().all(|length| length.is_finite())
            && inner_m > 0.0
            && outer_m > inner_m
            && length_m > 0.0
            && gap_m >= 0.0;
        if !is_ring {
            return Err(ChokeError::NoRing);
        }
        if turns == 0 || cores == 0 {
            return Err(ChokeError::NoTurns);
        }
        Ok(Self::of(Make::Cores { material: *material, core, turns, cores }))
    }

    /// By the magnitude of the whole choke's impedance: Hz and ohm, rising. The phase is taken from the slope (a coil
    /// where it rises with frequency, a resistor where it is flat). Below the first row the impedance falls with the
    /// frequency, above the last it is held: see [`Self::range`].
    ///
    /// # Errors
    /// There is no row, frequencies do not rise, or a row is no impedance.
    pub fn magnitude_table(rows: &[(f64, f64)]) -> Result<Self, ChokeError> {
        Table::of_magnitudes(rows).map(|table| Self::of(Make::Table(table)))
    }

    /// By resistance and reactance of the whole choke: Hz, ohm, ohm, rising; outside as in [`Self::magnitude_table`].
    ///
    /// # Errors
    /// There is no row, frequencies do not rise, or a row is no impedance.
    pub fn complex_table(rows: &[(f64, f64, f64)]) -> Result<Self, ChokeError> {
        Table::of_complex(rows).map(|table| Self::of(Make::Table(table)))
    }

    fn of(make: Make) -> Self {
        Self { make, parallel_farad: 0.0 }
    }

    /// The same choke with a capacitance across it, F, from its first turn to its last: some pF, which bound what more
    /// turns give at high frequency.
    #[must_use]
    pub fn with_parallel_capacitance(self, farad: f64) -> Self {
        Self { parallel_farad: farad, ..self }
    }

    /// Its impedance at a frequency above 0 Hz, ohm.
    pub fn impedance(&self, hz: f64) -> Complex<f64> {
        let angular = TAU * hz;
        let own = match &self.make {
            Make::Cores { material, core, turns, cores } => {
                let permeability = core.effective_permeability(material.permeability(hz));
                let turns = f64::from(*turns);
                Complex::<f64>::i()
                    * permeability
                    * (angular * core.inductance_at_mu_1() * turns * turns * f64::from(*cores))
            }
            Make::Table(table) => table.impedance(hz),
        };
        // Not by admittances: an impedance may be 0.
        own / (1.0 + own * Complex::new(0.0, angular * self.parallel_farad))
    }

    /// The frequencies for which its impedance is told, Hz; for cores 0 and infinity.
    pub fn range(&self) -> (f64, f64) {
        match &self.make {
            Make::Cores { .. } => (0.0, f64::INFINITY),
            Make::Table(table) => {
                table.frequencies().fold((f64::INFINITY, 0.0), |(low, high), hz| (low.min(hz), high.max(hz)))
            }
        }
    }

    /// The greatest insertion loss, dB, at any frequency from `from_hz` to `to_hz` (above 0) in a loop of `loop_ohm`,
    /// source and load together. What is asked of a choke beyond this it cannot give.
    pub fn best_insertion_loss_db(&self, loop_ohm: f64, from_hz: f64, to_hz: f64) -> f64 {
        let loss = |hz: f64| insertion_loss_db(self.impedance(hz), loop_ohm.into());
        let rows: Vec<f64> = match &self.make {
            Make::Cores { .. } => Vec::new(),
            Make::Table(table) => table.frequencies().filter(|hz| (from_hz..=to_hz).contains(hz)).collect(),
        };
        log_grid(from_hz, to_hz).chain(rows).map(loss).fold(f64::NEG_INFINITY, f64::max)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn clip(cores: u32, gap_m: f64, material: &str) -> Choke {
        let core = Core { outer_m: 0.026, inner_m: 0.013, length_m: 0.028, gap_m };
        Choke::cores(Material::by_name(material).unwrap(), core, 1, cores).unwrap()
    }

    fn loss(choke: &Choke, loop_ohm: f64, hz: f64) -> f64 {
        insertion_loss_db(choke.impedance(hz), loop_ohm.into())
    }

    /// What a clip can do depends on the loop. 5.9 ohm at 300 kHz is w mu0 mu length ln 2 / (2 pi) at mu 800; a
    /// material of mu 1600 has twice that and 0.03 dB in 150 + 150 ohm.
    #[test]
    fn one_clip_in_two_loops() {
        let clip = |material| clip(1, 0.0, material);
        let (small, large) = (clip("nizn-800"), clip("nizn-1600"));
        assert!((small.impedance(300e3).norm() - 5.85).abs() < 0.02, "{}", small.impedance(300e3));
        assert!((large.impedance(300e3).norm() - 12.0).abs() < 0.3, "{}", large.impedance(300e3));
        assert!((loss(&large, 300.0, 300e3) - 0.03).abs() < 0.005, "{}", loss(&large, 300.0, 300e3));
        assert!(loss(&small, 300.0, 300e3) < 0.01);
        for choke in [&small, &large] {
            assert!((3.0..5.0).contains(&loss(choke, 300.0, 100e6)), "{}", loss(choke, 300.0, 100e6));
            for hz in [4e6, 10e6, 30e6, 100e6] {
                assert!(loss(choke, 50.0, hz) > 6.0, "{hz}: {}", loss(choke, 50.0, hz));
            }
            // Amid the 100 to 300 ohm of one-turn clips at 25 and 100 MHz (common practice).
            assert!((100.0..300.0).contains(&choke.impedance(25e6).norm()));
            assert!((100.0..300.0).contains(&choke.impedance(100e6).norm()));
        }
    }

    #[test]
    fn three_clips_do_six_db_in_a_motor_cable_from_two_megahertz() {
        let clips = clip(3, 0.0, "nizn-800");
        for hz in [2e6, 5e6, 10e6, 30e6] {
            assert!(loss(&clips, 50.0, hz) > 6.0, "{hz}: {}", loss(&clips, 50.0, hz));
        }
        let best = clips.best_insertion_loss_db(50.0, 2e6, 30e6);
        assert!((best - loss(&clips, 50.0, 30e6)).abs() < 1e-9, "{best}");
        assert!(clips.best_insertion_loss_db(300.0, 2e6, 30e6) < 9.0);
    }

    #[test]
    fn an_open_clip_costs_most_at_low_frequency() {
        let lost = |gap_m: f64, hz: f64| {
            20.0 * (clip(1, 0.0, "nizn-800").impedance(hz).norm() / clip(1, gap_m, "nizn-800").impedance(hz).norm())
                .log10()
        };
        assert!(lost(1e-4, 1e6) > 6.0 && lost(1e-4, 100e6) < 0.3, "{} {}", lost(1e-4, 1e6), lost(1e-4, 100e6));
        assert!(lost(1e-3, 1e6) > 20.0 && lost(1e-3, 100e6) > 3.0, "{} {}", lost(1e-3, 1e6), lost(1e-3, 100e6));
    }

    #[test]
    fn the_best_of_a_table_is_found_at_its_rows() {
        let choke = Choke::complex_table(&[(1e6, 10.0, 40.0), (7.123e6, 400.0, 0.0), (30e6, 50.0, -100.0)]).unwrap();
        let best = choke.best_insertion_loss_db(100.0, 1e6, 30e6);
        assert!((best - 20.0 * 5f64.log10()).abs() < 1e-12, "{best}");
        assert_eq!(choke.range(), (1e6, 30e6));
    }

    #[test]
    fn what_is_no_choke_is_refused() {
        let material = Material::by_name("mnzn").unwrap();
        let core = Core { outer_m: 0.026, inner_m: 0.013, length_m: 0.028, gap_m: 0.0 };
        for core in [
            Core { inner_m: 0.026, ..core },
            Core { inner_m: 0.0, ..core },
            Core { length_m: 0.0, ..core },
            Core { gap_m: -1e-6, ..core },
            Core { gap_m: f64::NAN, ..core },
        ] {
            assert_eq!(Choke::cores(material, core, 1, 1), Err(ChokeError::NoRing), "{core:?}");
        }
        assert_eq!(Choke::cores(material, core, 0, 1), Err(ChokeError::NoTurns));
        assert_eq!(Choke::cores(material, core, 1, 0), Err(ChokeError::NoTurns));
    }
}
