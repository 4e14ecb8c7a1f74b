//! Random draws that repeat: a seed gives the same figures on every machine, so a failure can be run again.
//!
//! Generator: SplitMix64 (Steele, Lea and Flood, 2014; constants from memory), good enough for drawing measurement
//! errors, not for anything secret. Normal draws by Box and Muller (1958), cut nowhere.

/// A source of draws.
#[derive(Clone, Debug)]
pub struct Draws {
    state: u64,
}

impl Draws {
    /// Draws that follow from a seed.
    #[must_use]
    pub const fn new(seed: u64) -> Self {
        Self { state: seed }
    }

    /// 64 evenly distributed bits.
    pub const fn bits(&mut self) -> u64 {
        self.state = self.state.wrapping_add(0x9e37_79b9_7f4a_7c15);
        let mut z = self.state;
        z = (z ^ (z >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
        z = (z ^ (z >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
        z ^ (z >> 31)
    }

    /// Evenly distributed in `low..high`.
    pub fn between(&mut self, low: f64, high: f64) -> f64 {
        let unit = (self.bits() >> 11) as f64 / (1_u64 << 53) as f64;
        low + (high - low) * unit
    }

    /// From the normal distribution with mean 0 and standard deviation 1.
    pub fn normal(&mut self) -> f64 {
        let radius = (-2.0 * (1.0 - self.between(0.0, 1.0)).ln()).sqrt(); // 1 − [0, 1) is never 0
        radius * (core::f64::consts::TAU * self.between(0.0, 1.0)).cos()
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn normal_draws_have_the_moments_and_tails_of_the_distribution() {
        let mut draws = Draws::new(1);
        let n = 200_000;
        let all: Vec<f64> = (0..n).map(|_| draws.normal()).collect();
        let mean = all.iter().sum::<f64>() / f64::from(n);
        let variance = all.iter().map(|x| (x - mean) * (x - mean)).sum::<f64>() / f64::from(n);
        let inside = all.iter().filter(|x| x.abs() <= 1.96).count() as f64 / f64::from(n);
        // Four standard errors of each figure.
        assert!(mean.abs() < 0.009, "{mean}");
        assert!((variance - 1.0).abs() < 0.013, "{variance}");
        assert!((inside - 0.95).abs() < 0.002, "{inside}");
    }
}
