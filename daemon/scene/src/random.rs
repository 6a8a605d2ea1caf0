//! Chance that can be repeated: splitmix64 (Steele, Lea & Flood 2014; from memory), and normal numbers by the polar
//! method (Marsaglia 1964; from memory).

/// A sequence of numbers that depends on its seed alone.
#[derive(Clone, Debug)]
pub(crate) struct Random {
    state: u64,
    spare: Option<f64>,
}

impl Random {
    pub(crate) fn new(seed: u64) -> Self {
        Self { state: seed, spare: None }
    }

    fn next(&mut self) -> u64 {
        self.state = self.state.wrapping_add(0x9e37_79b9_7f4a_7c15);
        let mut z = self.state;
        z = (z ^ (z >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
        z = (z ^ (z >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
        z ^ (z >> 31)
    }

    /// From 0 up to, not including, 1.
    pub(crate) fn uniform(&mut self) -> f64 {
        (self.next() >> 11) as f64 / (1u64 << 53) as f64
    }

    /// Normal, mean 0 and variance 1.
    pub(crate) fn normal(&mut self) -> f64 {
        if let Some(spare) = self.spare.take() {
            return spare;
        }
        loop {
            let (x, y) = (2.0 * self.uniform() - 1.0, 2.0 * self.uniform() - 1.0);
            let s = x * x + y * y;
            if s > 0.0 && s < 1.0 {
                let scale = (-2.0 * s.ln() / s).sqrt();
                self.spare = Some(y * scale);
                return x * scale;
            }
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn normal_numbers_are_normal_and_come_again() {
        let mut random = Random::new(3);
        let values: Vec<f64> = (0..40_000).map(|_| random.normal()).collect();
        let mean = values.iter().sum::<f64>() / 4e4;
        let variance = values.iter().map(|x| x * x).sum::<f64>() / 4e4;
        let tail = values.iter().filter(|x| x.abs() > 1.96).count() as f64 / 4e4;
        assert!(mean.abs() < 0.02 && (variance - 1.0).abs() < 0.03 && (tail - 0.05).abs() < 0.005);
        let mut again = Random::new(3);
        assert!(values.iter().all(|value| *value == again.normal()));
    }
}
