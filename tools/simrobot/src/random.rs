//! Chance, seeded: the same seed gives the same draws on every machine.

use rand_pcg::Pcg64;
use rand_pcg::rand_core::{Rng, SeedableRng};
use trackhold_core::math;

/// A stream of random numbers. PCG XSL RR 128/64 (O'Neill, HMC-CS-2014-0905); everything derived from its words is
/// written here, so that no library update changes a run.
#[derive(Clone, Debug)]
pub(crate) struct Dice(Pcg64);

impl Dice {
    /// The stream of a seed. `purpose` keeps the streams of one seed apart.
    pub(crate) fn new(seed: u64, purpose: u64) -> Self {
        // An odd multiplier maps purposes one to one and far apart (2^64 divided by the golden ratio).
        Self(Pcg64::seed_from_u64(seed ^ purpose.wrapping_mul(0x9e37_79b9_7f4a_7c15)))
    }

    /// Uniform in [0, 1), in steps of 2⁻⁵³.
    pub(crate) fn uniform(&mut self) -> f64 {
        (self.0.next_u64() >> 11) as f64 * (1.0 / (1_u64 << 53) as f64)
    }

    /// True with probability `p`. Always draws one number.
    pub(crate) fn happens(&mut self, p: f64) -> bool {
        self.uniform() < p
    }

    /// A whole number from 0 to `below` − 1; always draws one number. The bias of 2⁻⁵³ does not matter here.
    pub(crate) fn below(&mut self, below: usize) -> usize {
        ((self.uniform() * below as f64) as usize).min(below.saturating_sub(1))
    }

    /// Two independent standard normal deviates (Box and Muller, Annals of Mathematical Statistics 29(2), 1958).
    pub(crate) fn normal_pair(&mut self) -> (f64, f64) {
        // 1 − u is in (0, 1], so the logarithm is finite.
        let radius = math::sqrt(-2.0 * math::ln(1.0 - self.uniform()));
        let (cos, sin) = math::cos_sin(math::TAU * self.uniform());
        (radius * cos, radius * sin)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn streams_repeat_and_differ_by_seed_and_purpose() {
        let draw = |seed, purpose| {
            let mut dice = Dice::new(seed, purpose);
            [dice.uniform(), dice.uniform(), dice.uniform()].map(f64::to_bits)
        };
        assert_eq!(draw(7, 1), draw(7, 1));
        assert_ne!(draw(7, 1), draw(8, 1));
        assert_ne!(draw(7, 1), draw(7, 2));
    }

    #[test]
    fn normal_deviates_have_the_moments_of_a_normal_distribution() {
        let mut dice = Dice::new(1, 0);
        let n = 200_000;
        let (mut mean, mut square, mut fourth, mut product) = (0.0, 0.0, 0.0, 0.0);
        for _ in 0..n / 2 {
            let (a, b) = dice.normal_pair();
            mean += a + b;
            square += a * a + b * b;
            fourth += a * a * a * a + b * b * b * b;
            product += a * b;
        }
        let n = f64::from(n);
        // Five standard errors: 1/√n, √(2/n), √(96/n), √(2/n).
        assert!((mean / n).abs() < 5.0 / n.sqrt());
        assert!((square / n - 1.0).abs() < 5.0 * (2.0 / n).sqrt());
        assert!((fourth / n - 3.0).abs() < 5.0 * (96.0 / n).sqrt());
        assert!((2.0 * product / n).abs() < 5.0 * (2.0 / n).sqrt());
    }

    #[test]
    fn chances_come_out_as_often_as_they_should() {
        let mut dice = Dice::new(3, 0);
        let hits = (0..100_000).filter(|_| dice.happens(0.3)).count() as f64;
        assert!((hits - 30_000.0).abs() < 5.0 * (100_000.0 * 0.3 * 0.7_f64).sqrt(), "{hits}");
        assert!((0..10_000).all(|_| dice.below(3) < 3));
        assert!(!dice.happens(0.0) && dice.happens(1.0));
    }
}
