//! The only door to mathematical functions.
//!
//! Roots, logarithms, exponentials and arcs come from `libm`, compiled from the same source on host and
//! target, so that a reading is the same to the last bit on both. Sine, cosine and the Bessel functions
//! are polynomials of our own, checked against `libm` in the tests: `libm` works them out in double
//! precision for arguments of any size, which costs 1300 instructions a call, 11 KiB of flash and
//! 0.9 KiB of stack on a core without double precision.
//!
//! The fast approximations of `micromath` are never used here: its square root is wrong by up to 6 %.

/// Square root; 0 for negative input and for "not a number".
#[must_use]
pub fn sqrt(x: f32) -> f32 {
    if x > 0.0 { libm::sqrtf(x) } else { 0.0 }
}

/// Sine of an angle in radians: 4e-7 off up to 200 rad, then by the angle's own last digit.
#[must_use]
pub fn sin(x: f32) -> f32 {
    sine_of_reduced(reduce(x))
}

/// Cosine of an angle in radians: as exact as [`sin`].
#[must_use]
pub fn cos(x: f32) -> f32 {
    let quarter_on = reduce(x) + core::f32::consts::FRAC_PI_2;
    let wrapped = if quarter_on > core::f32::consts::PI {
        quarter_on - core::f32::consts::TAU
    } else {
        quarter_on
    };
    sine_of_reduced(wrapped)
}

/// Takes whole turns out of an angle, in three steps so that no digit is lost (Cody and Waite): the
/// result lies within ±π.
fn reduce(x: f32) -> f32 {
    // 2π in parts; the first has so few digits that its products with whole numbers are exact.
    const HIGH: f32 = 6.281_25;
    const MIDDLE: f32 = 1.935_005_2e-3;
    const LOW: f32 = 3.019_916e-7;
    let turns = floor(x * (1.0 / core::f32::consts::TAU) + 0.5);
    ((x - turns * HIGH) - turns * MIDDLE) - turns * LOW
}

/// Sine of an angle within ±π.
fn sine_of_reduced(x: f32) -> f32 {
    let magnitude = sin_pi_unit(smaller(x.abs() * core::f32::consts::FRAC_1_PI, 1.0));
    if x < 0.0 { -magnitude } else { magnitude }
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

/// Bessel functions of the first kind of orders 0 and 1, for x of at least 0.
///
/// Polynomials of Abramowitz and Stegun, Handbook of Mathematical Functions, 9.4.1 to 9.4.6 (E. E.
/// Allen), up to 1e-7 off; coefficients from memory, checked against `libm`.
#[must_use]
pub fn bessel_j0_j1(x: f32) -> (f32, f32) {
    /// Σ c_k y^k, highest power first.
    fn polynomial(y: f32, coefficients: &[f32]) -> f32 {
        coefficients.iter().fold(0.0, |sum, c| sum * y + c)
    }
    if x <= 3.0 {
        let y = (x / 3.0) * (x / 3.0);
        let j0 = polynomial(
            y,
            &[
                0.000_21,
                -0.003_944_4,
                0.044_447_9,
                -0.316_386_6,
                1.265_620_8,
                -2.249_999_7,
                1.0,
            ],
        );
        let j1 = polynomial(
            y,
            &[
                0.000_011_09,
                -0.000_317_61,
                0.004_433_19,
                -0.039_542_89,
                0.210_935_73,
                -0.562_499_8,
                0.5,
            ],
        );
        return (j0, x * j1);
    }
    let y = 3.0 / x;
    let amplitude0 = polynomial(
        y,
        &[
            0.000_144_76,
            -0.000_728_05,
            0.001_372_37,
            -0.000_095_12,
            -0.005_527_4,
            -0.000_000_77,
            0.797_884_6,
        ],
    );
    let phase0 = polynomial(
        y,
        &[
            0.000_135_58,
            -0.000_293_33,
            -0.000_541_25,
            0.002_625_73,
            -0.000_039_54,
            -0.041_663_97,
            -core::f32::consts::FRAC_PI_4,
        ],
    );
    let amplitude1 = polynomial(
        y,
        &[
            -0.000_200_33,
            0.001_136_53,
            -0.002_495_11,
            0.000_171_05,
            0.016_596_67,
            0.000_001_56,
            0.797_884_6,
        ],
    );
    let phase1 = polynomial(
        y,
        &[
            -0.000_291_66,
            0.000_798_24,
            0.000_743_48,
            -0.006_378_79,
            0.000_056_5,
            0.124_996_12,
            -2.356_194_5,
        ],
    );
    let root = sqrt(x);
    let angle = reduce(x);
    (
        amplitude0 / root * cos(angle + phase0),
        amplitude1 / root * cos(angle + phase1),
    )
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

/// 1 / sqrt(3): the standard uncertainty of a rectangular distribution over its half-width
/// (JCGM 100:2008, 4.3.7).
pub const RECTANGULAR: f32 = 0.577_350_26;

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

/// The x that a standard normal variable exceeds with this probability: the inverse of [`normal_tail`]. Infinite for a
/// probability of 0 or 1, "not a number" beyond.
///
/// Wichura 1988, algorithm AS 241, PPND7 (coefficients from memory, checked against SciPy): relative error about 1e-6
/// in `f32`.
#[must_use]
pub fn normal_quantile_of_tail(probability: f32) -> f32 {
    fn ratio(x: f32, above: [f32; 4], below: [f32; 3]) -> f32 {
        let [a, b, c, d] = above;
        let [e, f, g] = below;
        (((d * x + c) * x + b) * x + a) / (((g * x + f) * x + e) * x + 1.0)
    }
    let from_middle = 0.5 - probability;
    if from_middle.abs() <= 0.425 {
        return from_middle
            * ratio(
                0.180_625 - from_middle * from_middle,
                [3.387_132_7, 50.434_27, 159.291_13, 59.109_375],
                [17.895_17, 78.757_76, 67.187_56],
            );
    }
    let smaller = if from_middle > 0.0 {
        probability
    } else {
        1.0 - probability
    };
    if !(smaller > 0.0) {
        return if smaller == 0.0 {
            f32::INFINITY * from_middle
        } else {
            f32::NAN
        };
    }
    let r = sqrt(-ln(smaller));
    let x = if r <= 5.0 {
        ratio(
            r - 1.6,
            [1.423_437_3, 2.756_815_4, 1.306_728_4, 0.170_238_21],
            [0.737_001_64, 0.120_211_33, 0.0],
        )
    } else {
        ratio(
            r - 5.0,
            [6.657_905, 3.081_226_4, 0.428_682_94, 0.017_337_203],
            [0.241_978_94, 0.012_258_202, 0.0],
        )
    };
    if from_middle > 0.0 { x } else { -x }
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
    fn val_sine_and_cosine_agree_with_libm() {
        for i in -40_000..=40_000 {
            let x = i as f32 * 0.005;
            assert!(
                (sin(x) - libm::sinf(x)).abs() < 4e-7,
                "sin {x}: {} {}",
                sin(x),
                libm::sinf(x)
            );
            assert!(
                (cos(x) - libm::cosf(x)).abs() < 4e-7,
                "cos {x}: {} {}",
                cos(x),
                libm::cosf(x)
            );
        }
        for i in 0..=1000 {
            let x = i as f32 / 1000.0;
            assert!(
                (sin_pi_unit(x) - libm::sinf(core::f32::consts::PI * x)).abs() < 4e-7,
                "{x}"
            );
        }
        for odd in [f32::NAN, f32::INFINITY, f32::NEG_INFINITY, 1e30, -1e30] {
            assert!(!(sin(odd).abs() > 1.0) && !(cos(odd).abs() > 1.0));
        }
    }

    #[test]
    fn val_bessel_agrees_with_libm() {
        for i in 0..20_000 {
            let x = i as f32 * 0.01;
            let (j0, j1) = bessel_j0_j1(x);
            assert!((j0 - libm::j0f(x)).abs() < 4e-7, "J0({x}): {j0} {}", libm::j0f(x));
            assert!((j1 - libm::j1f(x)).abs() < 4e-7, "J1({x}): {j1} {}", libm::j1f(x));
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
    fn val_normal_quantile() {
        // scipy.stats.norm.isf (SciPy 1.17).
        for (tail, x) in [
            (0.5, 0.0),
            (0.4, 0.253_347_1),
            (0.2, 0.841_621_2),
            (0.075, 1.439_531_5),
            (0.05, 1.644_853_6),
            (0.025, 1.959_964),
            (0.01, 2.326_347_9),
            (0.001, 3.090_232_3),
            (1e-9, 5.997_807),
            (0.9, -1.281_551_6),
            (0.99, -2.326_347_9f32),
        ] {
            let found = normal_quantile_of_tail(tail);
            assert!((found - x).abs() < 3e-6 * (1.0 + x.abs()), "{tail}: {found} {x}");
            assert!((normal_tail(found) - tail).abs() < 2e-5 * tail);
        }
        assert_eq!(normal_quantile_of_tail(0.0), f32::INFINITY);
        assert_eq!(normal_quantile_of_tail(1.0), f32::NEG_INFINITY);
        assert!(normal_quantile_of_tail(f32::NAN).is_nan() && normal_quantile_of_tail(1.5).is_nan());
    }
}
