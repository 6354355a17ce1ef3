//! Fresnel integrals, and the integral of a short piece of a clothoid, to full double precision.

use super::{PI, cos_sin};

/// Greatest |a| for which [`turning`] holds its error bound.
pub const TURNING_A: f64 = 0.25;
/// Greatest |b| for which [`turning`] holds its error bound.
pub const TURNING_B: f64 = 0.0625;

/// 1/(n + 1), so that the recurrence multiplies instead of dividing.
const RECIPROCALS: [f64; 17] = [
    1.0,
    1.0 / 2.0,
    1.0 / 3.0,
    1.0 / 4.0,
    1.0 / 5.0,
    1.0 / 6.0,
    1.0 / 7.0,
    1.0 / 8.0,
    1.0 / 9.0,
    1.0 / 10.0,
    1.0 / 11.0,
    1.0 / 12.0,
    1.0 / 13.0,
    1.0 / 14.0,
    1.0 / 15.0,
    1.0 / 16.0,
    1.0 / 17.0,
];

/// ∫₀¹ exp(i (a τ + b τ²/2)) dτ as (real, imaginary) part, for |a| ≤ [`TURNING_A`], |b| ≤ [`TURNING_B`].
///
/// Where a path turns by a along its length and its curvature grows by b in the same measure, this is the chord in units
/// of the length; with b = 0 an arc's, with a = b = 0 a line's, without a case apart for either. The integrand's power
/// series follows from f' = i (a + b τ) f: (n + 1) cₙ₊₁ = i (a cₙ + b cₙ₋₁). Left out are the terms from the 17th power on:
/// less than 3e-18 altogether, since they are bounded by those of exp(|a| τ + |b| τ²/2).
pub fn turning(a: f64, b: f64) -> (f64, f64) {
    debug_assert!(a.abs() <= TURNING_A * 1.000_001 && b.abs() <= TURNING_B * 1.000_001);
    let (mut before, mut here) = ((0.0, 0.0), (1.0, 0.0));
    let mut sum = (1.0, 0.0);
    for pair in RECIPROCALS.windows(2) {
        // Multiplication by i turns (x, y) into (−y, x).
        let next = (-(a * here.1 + b * before.1) * pair[0], (a * here.0 + b * before.0) * pair[0]);
        sum = (sum.0 + next.0 * pair[1], sum.1 + next.1 * pair[1]);
        (before, here) = (here, next);
    }
    sum
}

/// Beyond this argument the asymptotic series is exact to rounding.
const FAR: f64 = 5.0;
/// Pieces of this length keep [`turning`]'s bounds up to there, and begin at places that a double holds exactly.
const PIECE: f64 = 1.0 / 64.0;

/// Fresnel's integrals C(z) = ∫₀ᶻ cos(π t²/2) dt and S(z), likewise with the sine (Abramowitz & Stegun 7.3.1, 7.3.2).
///
/// Up to |z| = 5 pieces of [`turning`], beyond the asymptotic series of the auxiliary functions (7.3.27, 7.3.28), whose
/// first term left out is below 1e-18. Not for a tick: up to |z| = 5 it takes some 20 µs.
pub fn fresnel(z: f64) -> (f64, f64) {
    let x = z.abs();
    let (c, s) = if x.is_nan() {
        (x, x)
    } else if x.is_infinite() {
        (0.5, 0.5)
    } else if x < FAR {
        near(x)
    } else {
        far(x)
    };
    if z < 0.0 { (-c, -s) } else { (c, s) }
}

fn near(x: f64) -> (f64, f64) {
    let (mut c, mut s) = (0.0, 0.0);
    // From the end backwards, so that the small far pieces are summed before the large near ones.
    for index in (0..=(x / PIECE) as u32).rev() {
        let from = PIECE * f64::from(index);
        let step = (x - from).min(PIECE);
        let (along, across) = turning(PI * from * step, PI * step * step);
        let (cos, sin) = half_turns(from);
        c += step * (cos * along - sin * across);
        s += step * (sin * along + cos * across);
    }
    (c, s)
}

fn far(x: f64) -> (f64, f64) {
    let inverse = 1.0 / (PI * x * x);
    let square = inverse * inverse;
    let (mut f, mut g) = (1.0, 1.0);
    for m in (0..19).rev() {
        let odd = 4.0 * f64::from(m);
        f = 1.0 - f * (odd + 1.0) * (odd + 3.0) * square;
        g = 1.0 - g * (odd + 3.0) * (odd + 5.0) * square;
    }
    let (f, g) = (f / (PI * x), g * inverse / (PI * x));
    let (cos, sin) = half_turns(x);
    (0.5 + f * sin - g * cos, 0.5 - f * cos - g * sin)
}

/// Cosine and sine of π x²/2, the square exact and reduced before it is rounded.
fn half_turns(x: f64) -> (f64, f64) {
    let square = x * x;
    let rest = libm::fma(x, x, -square);
    cos_sin(0.5 * PI * (libm::fmod(square, 4.0) + rest))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_values_of_abramowitz_and_stegun() {
        // Abramowitz & Stegun, table 7.7, to its digits; further digits by SciPy 1.17.
        for (z, c, s) in [
            (0.5, 0.492_344_225_871, 0.064_732_432_86),
            (1.0, 0.779_893_400_377, 0.438_259_147_39),
            (2.0, 0.488_253_406_075, 0.343_415_678_364),
        ] {
            let (our_c, our_s) = fresnel(z);
            assert!((our_c - c).abs() < 1e-12 && (our_s - s).abs() < 1e-11, "{z}: {our_c} {our_s}");
            assert_eq!(fresnel(-z), (-our_c, -our_s));
        }
    }

    #[test]
    fn the_two_forms_meet_and_end_at_one_half() {
        for step in 0..100 {
            let x = FAR + 0.0007 * f64::from(step);
            let (near, far) = (near(x), far(x));
            assert!(
                (near.0 - far.0).abs() < 2e-15 && (near.1 - far.1).abs() < 2e-15,
                "{x}: {near:?} {far:?}"
            );
        }
        assert_eq!(fresnel(f64::INFINITY), (0.5, 0.5));
        assert_eq!(fresnel(f64::NEG_INFINITY), (-0.5, -0.5));
        assert_eq!(fresnel(0.0), (0.0, 0.0));
    }

    #[test]
    fn a_piece_without_change_of_curvature_is_an_arc() {
        for a in [-0.25, -1e-9, 0.0, 1e-300, 0.1, 0.25] {
            let (along, across) = turning(a, 0.0);
            let half: f64 = 0.5 * a;
            let chord = crate::math::sinc(half);
            let (cos, sin) = cos_sin(half);
            assert!((along - chord * cos).abs() < 3e-16 && (across - chord * sin).abs() < 1e-16, "{a}");
        }
    }
}
