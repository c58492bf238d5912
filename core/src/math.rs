//! The only door to mathematical functions.
//!
//! All of them come from `libm`, compiled from the same source on host and target, so that a
//! reading is the same to the last bit on both. The fast approximations of `micromath` are never
//! used here: its square root is wrong by up to 6 %.

/// Square root; 0 for negative input and for "not a number".
#[must_use]
pub fn sqrt(x: f32) -> f32 {
    if x > 0.0 { libm::sqrtf(x) } else { 0.0 }
}

/// Sine of an angle in radians.
#[must_use]
pub fn sin(x: f32) -> f32 {
    libm::sinf(x)
}

/// sin(πx) for x from 0 to 1, to 1e-7: a polynomial, ten times cheaper than [`sin`], for the
/// interpolation that needs one in every step.
#[must_use]
pub fn sin_pi_unit(x: f32) -> f32 {
    // Mirrored to at most a quarter turn; Taylor series to the 11th power, 6e-8 off at its end.
    let y = core::f32::consts::PI * if x > 0.5 { 1.0 - x } else { x };
    let y2 = y * y;
    let tail = 1.0 / 362_880.0 - y2 * (1.0 / 39_916_800.0);
    y * (1.0 - y2 * (1.0 / 6.0 - y2 * (1.0 / 120.0 - y2 * (1.0 / 5040.0 - y2 * tail))))
}

/// Cosine of an angle in radians.
#[must_use]
pub fn cos(x: f32) -> f32 {
    libm::cosf(x)
}

/// Angle of the point (x, y) in radians, from -π to π.
#[must_use]
pub fn atan2(y: f32, x: f32) -> f32 {
    libm::atan2f(y, x)
}

/// Arc cosine in radians; arguments beyond ±1 are taken as ±1.
#[must_use]
pub fn acos(x: f32) -> f32 {
    libm::acosf(clamp(x, -1.0, 1.0))
}

/// Natural logarithm.
#[must_use]
pub fn ln(x: f32) -> f32 {
    libm::logf(x)
}

/// Decimal logarithm.
#[must_use]
pub fn log10(x: f32) -> f32 {
    libm::log10f(x)
}

/// Exponential function.
#[must_use]
pub fn exp(x: f32) -> f32 {
    libm::expf(x)
}

/// Complementary error function.
#[must_use]
pub fn erfc(x: f32) -> f32 {
    libm::erfcf(x)
}

/// Bessel functions of the first kind of orders 0 and 1.
#[must_use]
pub fn bessel_j0_j1(x: f32) -> (f32, f32) {
    (libm::j0f(x), libm::j1f(x))
}

/// Largest whole number not above `x`.
#[must_use]
pub fn floor(x: f32) -> f32 {
    libm::floorf(x)
}

/// To the nearest integer, halves away from zero; saturates, and "not a number" becomes 0.
#[must_use]
pub const fn round_to_i32(x: f32) -> i32 {
    if x < 0.0 { (x - 0.5) as i32 } else { (x + 0.5) as i32 }
}

/// Towards zero; saturates, and "not a number" becomes 0.
#[must_use]
pub const fn saturating_i32(x: f32) -> i32 {
    x as i32
}

/// The smaller of two. Unlike `f32::min` the result for ±0 does not depend on the machine: the
/// first argument is kept unless the second is truly below it.
#[must_use]
pub const fn smaller(a: f32, b: f32) -> f32 {
    if b < a { b } else { a }
}

/// The larger of two; the first is kept unless the second is truly above it.
#[must_use]
pub const fn larger(a: f32, b: f32) -> f32 {
    if b > a { b } else { a }
}

/// `x`, or the limit that it passes; "not a number" stays. Unlike `f32::clamp` it cannot panic.
#[must_use]
pub const fn clamp(x: f32, low: f32, high: f32) -> f32 {
    if x < low {
        low
    } else if x > high {
        high
    } else {
        x
    }
}

/// Probability that a standard normal variable exceeds `x`.
#[must_use]
pub fn normal_tail(x: f32) -> f32 {
    0.5 * erfc(x * core::f32::consts::FRAC_1_SQRT_2)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn edges_are_tame() {
        assert_eq!(sqrt(-1.0), 0.0);
        assert_eq!(sqrt(f32::NAN), 0.0);
        assert_eq!(round_to_i32(-0.5), -1);
        assert_eq!(round_to_i32(f32::NAN), 0);
        assert_eq!(round_to_i32(1e20), i32::MAX);
        assert_eq!(clamp(3.0, 0.0, 1.0), 1.0);
        assert_eq!(acos(1.000_1), 0.0);
    }

    #[test]
    fn sine_polynomial_agrees_with_libm() {
        for i in 0..=1000 {
            let x = i as f32 / 1000.0;
            assert!((sin_pi_unit(x) - sin(core::f32::consts::PI * x)).abs() < 3e-7, "{x}");
        }
    }

    #[test]
    fn val_normal_tail() {
        // Abramowitz and Stegun, Handbook of Mathematical Functions, table 26.1 (from memory).
        for (x, tail) in [
            (0.0, 0.5),
            (1.0, 0.158_655_25),
            (2.0, 0.022_750_13),
            (3.0, 0.001_349_898),
        ] {
            assert!((normal_tail(x) - tail).abs() < 2e-7, "Q({x})");
        }
    }

    #[test]
    fn val_bessel() {
        // Abramowitz and Stegun, table 9.1: J0(1), J1(1) (from memory).
        let (j0, j1) = bessel_j0_j1(1.0);
        assert!((j0 - 0.765_197_7).abs() < 1e-6);
        assert!((j1 - 0.440_050_6).abs() < 1e-6);
    }
}
