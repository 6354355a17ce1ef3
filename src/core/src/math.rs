//! The only door to elementary functions. `std`'s have no specified precision and differ between machines; these are
//! `libm`'s, one version, so that a recording replays bit for bit.

pub mod fresnel;

pub use core::f64::consts::{FRAC_PI_2, PI, TAU};

/// Sine and cosine of an angle in rad, as (cos, sin).
pub fn cos_sin(angle_rad: f64) -> (f64, f64) {
    let (sin, cos) = libm::sincos(angle_rad);
    (cos, sin)
}

/// Arc tangent, rad in [−π/2, π/2].
pub fn atan(ratio: f64) -> f64 {
    libm::atan(ratio)
}

/// Angle of the vector (x, y), rad in [−π, π].
pub fn atan2(y: f64, x: f64) -> f64 {
    libm::atan2(y, x)
}

/// Tangent.
pub fn tan(angle_rad: f64) -> f64 {
    libm::tan(angle_rad)
}

/// Square root, correctly rounded.
pub fn sqrt(value: f64) -> f64 {
    libm::sqrt(value)
}

/// Cube root.
pub fn cbrt(value: f64) -> f64 {
    libm::cbrt(value)
}

/// The least whole number that is not below `value`.
pub fn ceil(value: f64) -> f64 {
    libm::ceil(value)
}

/// The exponential function.
pub fn exp(value: f64) -> f64 {
    libm::exp(value)
}

/// Natural logarithm.
pub fn ln(value: f64) -> f64 {
    libm::log(value)
}

/// Length of the vector (x, y).
pub fn length(x: f64, y: f64) -> f64 {
    sqrt(x * x + y * y)
}

/// Nearest whole number, halves away from zero.
pub fn round(value: f64) -> f64 {
    libm::round(value)
}

/// The same angle in (−π, π].
pub fn wrap(angle_rad: f64) -> f64 {
    if angle_rad > -PI && angle_rad <= PI {
        return angle_rad;
    }
    let turned = angle_rad - TAU * libm::ceil((angle_rad - PI) / TAU);
    // Rounding in the quotient can leave the result one turn off at the ends of the interval.
    if turned <= -PI {
        turned + TAU
    } else if turned > PI {
        turned - TAU
    } else {
        turned
    }
}

/// sin(x)/x, exact to rounding for every x.
pub fn sinc(x: f64) -> f64 {
    let square = x * x;
    if square < 0.01 {
        // Alternating Taylor series; the first term left out is below x¹²/13! < 2e-22.
        let inner = 1.0 / 362_880.0 - square / 39_916_800.0;
        let inner = 1.0 / 5040.0 - square * inner;
        let inner = 1.0 / 120.0 - square * inner;
        return 1.0 - square * (1.0 / 6.0 - square * inner);
    }
    libm::sin(x) / x
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn wrap_lands_in_the_half_open_interval() {
        let below = f64::from_bits(PI.to_bits() - 1);
        for (angle, expected) in
            [(0.0, 0.0), (PI, PI), (-PI, PI), (below, below), (3.0 * PI, PI), (-3.0 * PI, PI)]
        {
            assert_eq!(wrap(angle), expected, "{angle}");
        }
        for step in -4000..4000 {
            let angle = f64::from(step) * 0.01;
            let wrapped = wrap(angle);
            assert!(wrapped > -PI && wrapped <= PI, "{angle} gave {wrapped}");
            let turns = (angle - wrapped) / TAU;
            assert!((turns - round(turns)).abs() < 1e-12, "{angle} gave {wrapped}");
        }
    }

    #[test]
    fn sinc_joins_its_series_without_a_step() {
        for x in [0.0, 1e-12, 1e-4, 0.05, 0.0999999, 0.1000001, 0.5, 3.0] {
            let direct = if x == 0.0 { 1.0 } else { libm::sin(x) / x };
            assert!((sinc(x) - direct).abs() < 3e-16, "{x}: {} against {direct}", sinc(x));
        }
    }
}
