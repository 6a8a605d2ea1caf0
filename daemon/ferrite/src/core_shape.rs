//! A core's geometry, and what an air gap does to it.

use core::f64::consts::TAU;

use num_complex::Complex;

/// mu0 / (2 pi), H/m, with mu0 = 4 pi 1e-7 H/m.
const MU0_BY_TAU: f64 = 2e-7;

/// A sleeve or ring, whole or of two halves, around a cable.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Core {
    /// Outer diameter, m.
    pub outer_m: f64,
    /// Inner diameter, m; above 0 and below the outer one.
    pub inner_m: f64,
    /// Length along the cable, m.
    pub length_m: f64,
    /// Air between two halves, m, both gaps together; 0 if it is whole or its halves meet.
    pub gap_m: f64,
}

impl Core {
    /// Inductance of one turn at a permeability of 1: mu0 / (2 pi) length ln(outer / inner), H.
    pub fn inductance_at_mu_1(&self) -> f64 {
        MU0_BY_TAU * self.length_m * (self.outer_m / self.inner_m).ln()
    }

    /// Mean magnetic path, pi (outer - inner) / ln(outer / inner), m: the circumference at which path times inductance
    /// is that of the whole ring.
    pub fn path_m(&self) -> f64 {
        TAU / 2.0 * (self.outer_m - self.inner_m) / (self.outer_m / self.inner_m).ln()
    }

    /// What the gap counts for in [`gapped_permeability`], m: less than it is long, since the field bulges out of it.
    ///
    /// Each of the two gaps is taken as wide and as deep as the pole face plus its own length (common practice: half a
    /// gap length of fringe on each side). That holds within some percent while one gap is below a tenth of the smaller
    /// side of the face; beyond, more fringes than this, and the gap is overrated ([`Self::gap_is_wide`]). It never
    /// falls with a growing gap.
    pub fn counted_gap_m(&self) -> f64 {
        let (width, depth) = self.pole_face();
        // Beyond this length the formula would fall again.
        let one_gap = (self.gap_m / 2.0).min((width * depth).sqrt());
        2.0 * one_gap * (width / (width + one_gap)) * (depth / (depth + one_gap))
    }

    /// Is the gap so wide that its formula tells no more than the order of magnitude?
    pub fn gap_is_wide(&self) -> bool {
        let (width, depth) = self.pole_face();
        self.gap_m / 2.0 > width.min(depth) / 10.0
    }

    /// The permeability that the core shows with its gap, made of a material of this permeability.
    pub fn effective_permeability(&self, material: Complex<f64>) -> Complex<f64> {
        gapped_permeability(material, self.counted_gap_m(), self.path_m())
    }

    /// The sides of one cut through the ring, m: thickness of the wall and length.
    fn pole_face(&self) -> (f64, f64) {
        ((self.outer_m - self.inner_m) / 2.0, self.length_m)
    }
}

/// mu / (1 + mu gap / path): a ring whose path is interrupted by air, gap and path in m. With complex mu it shows that
/// a gap takes much where mu is large, at low frequency, and hardly anything where losses have brought it down. It
/// knows no fringing.
pub fn gapped_permeability(material: Complex<f64>, gap_m: f64, path_m: f64) -> Complex<f64> {
    material / (1.0 + material * (gap_m / path_m))
}

#[cfg(test)]
mod tests {
    use super::*;

    fn core(gap_m: f64) -> Core {
        Core { outer_m: 0.026, inner_m: 0.013, length_m: 0.028, gap_m }
    }

    #[test]
    fn a_wider_gap_never_leaves_more() {
        let mu = Complex::new(800.0, -30.0);
        let mut before = f64::INFINITY;
        for step in 0..400 {
            let left = core(1e-4 * f64::from(step)).effective_permeability(mu).norm();
            assert!(left <= before && left > 1.0, "{step}: {left}");
            before = left;
        }
        assert!((core(0.0).effective_permeability(mu) - mu).norm() < 1e-9);
    }

    #[test]
    fn fringing_is_nothing_in_a_thin_gap_and_told_in_a_wide_one() {
        assert!((core(2e-5).counted_gap_m() / 2e-5 - 1.0).abs() < 0.002);
        // By hand: 0.5 mm on a face of 6.5 by 28 mm, 6.5/7 * 28/28.5.
        assert!((core(1e-3).counted_gap_m() / 1e-3 - 0.912_281).abs() < 1e-6);
        assert!(!core(1e-3).gap_is_wide());
        assert!(core(1.5e-3).gap_is_wide());
    }
}
