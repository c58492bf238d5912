//! The functions that the core works out itself, against printed tables and against SciPy.

use halfpulse::Decibels;
use halfpulse::math;
use halfpulse_published::Table;

/// Bessel functions of whole arguments, ten digits rounded to nine.
///
/// Source: M. Abramowitz and I. A. Stegun, Handbook of Mathematical Functions (1964), table 9.1 (from memory).
#[test]
fn val_bessel_functions_of_the_handbook() {
    for (x, j0, j1) in [
        (0.0, 1.0, 0.0),
        (1.0, 0.765_197_687, 0.440_050_586),
        (2.0, 0.223_890_779, 0.576_724_808),
        (3.0, -0.260_051_955, 0.339_058_959),
        (5.0, -0.177_596_771, -0.327_579_138),
        (10.0, -0.245_935_764, 0.043_472_746),
    ] {
        let found = math::bessel_j0_j1(x);
        assert!((f64::from(found.0) - j0).abs() < 3e-7, "J0({x}): {}", found.0);
        assert!((f64::from(found.1) - j1).abs() < 3e-7, "J1({x}): {}", found.1);
    }
}

/// Zeros of J0 and J1, where a relative error of the phase would show, and J0' = -J1 there.
///
/// Source: Abramowitz and Stegun, table 9.5 (from memory), and their formula 9.1.28.
#[test]
fn val_zeros_of_bessel_functions() {
    for zero in [2.404_825_557_7, 5.520_078_110_3, 8.653_727_912_9, 11.791_534_439_0] {
        let (j0, j1) = math::bessel_j0_j1(zero as f32);
        assert!(j0.abs() < 1e-6, "J0({zero}) = {j0}");
        let (before, _) = math::bessel_j0_j1((zero - 0.01) as f32);
        let (after, _) = math::bessel_j0_j1((zero + 0.01) as f32);
        assert!(((after - before) / 0.02 + j1).abs() < 1e-4, "J0' at {zero}");
    }
    for zero in [3.831_705_970_2, 7.015_586_669_8, 10.173_468_135_1] {
        let (_, j1) = math::bessel_j0_j1(zero as f32);
        assert!(j1.abs() < 1e-6, "J1({zero}) = {j1}");
    }
}

/// Bessel functions, error function, tail of the normal distribution and its inverse over all that is used of them.
///
/// Source: SciPy 1.17.1 (`scipy.special.j0`, `j1`, `erfc`, `ndtri`, `scipy.stats.norm.sf`), `tests/oracles/functions.py`.
#[test]
fn val_functions_of_scipy() {
    for row in Table::read("physics/functions.csv").rows() {
        let x = row.number("x");
        let (j0, j1) = math::bessel_j0_j1(x as f32);
        assert!((f64::from(j0) - row.number("j0")).abs() < 5e-7, "{row:?}: {j0}");
        assert!((f64::from(j1) - row.number("j1")).abs() < 5e-7, "{row:?}: {j1}");
        // Beyond 5 nothing is left that f32 arithmetic of probabilities would notice.
        if x <= 5.0 {
            let erfc = f64::from(math::erfc(x as f32)) / row.number("erfc");
            assert!((erfc - 1.0).abs() < 1e-5, "{row:?}: erfc {erfc}");
            let tail = f64::from(math::normal_tail(x as f32)) / row.number("normal_tail");
            assert!((tail - 1.0).abs() < 1e-5, "{row:?}: tail {tail}");
        }
        let quantile = f64::from(math::normal_quantile_of_tail((1.0 / (10.0 * x + 2.0)) as f32));
        assert!(
            (quantile - row.number("tail_quantile")).abs() < 5e-6,
            "{row:?}: quantile {quantile}"
        );
    }
}

/// Error function and normal tail at places that stand in every book.
///
/// Source: Abramowitz and Stegun, tables 7.1 and 26.1 (from memory).
#[test]
fn val_normal_distribution_of_the_handbook() {
    for (x, erf) in [
        (0.5, 0.520_499_877_8),
        (1.0, 0.842_700_792_9),
        (1.5, 0.966_105_146_5),
        (2.0, 0.995_322_265_0),
    ] {
        assert!((1.0 - f64::from(math::erfc(x)) - erf).abs() < 2e-7, "erf({x})");
        assert!(
            (f64::from(math::erfc(-x)) - 1.0 - erf).abs() < 2e-7,
            "the error function is odd"
        );
    }
    for (x, tail) in [(1.0, 0.158_655_253_9), (1.96, 0.024_997_895_1), (3.0, 0.001_349_898_0)] {
        assert!((f64::from(math::normal_tail(x)) / tail - 1.0).abs() < 2e-5, "Q({x})");
    }
    for (tail, x) in [(0.05, 1.644_853_6), (0.025, 1.959_964_0), (0.005, 2.575_829_3)] {
        let found = f64::from(math::normal_quantile_of_tail(tail));
        assert!((found - x).abs() < 1e-5, "{tail}: {found}");
    }
}

/// Levels of ratios of amplitudes.
///
/// Source: ISO 80000-1:2009, annex C: a level in decibels of a field quantity is 20 lg of the ratio (from memory); 2 is 6.0206 dB.
#[test]
fn val_decibels() {
    for (ratio, db) in [
        (1.0, 0.0),
        (2.0, 6.020_599_9),
        (10.0, 20.0),
        (0.1, -20.0),
        (0.501_187_2, -6.0),
    ] {
        assert!(
            (f64::from(Decibels::from_amplitude_ratio(ratio).get()) - db).abs() < 2e-5,
            "{ratio}"
        );
        let back = f64::from(Decibels::new(db as f32).as_amplitude_ratio()) / f64::from(ratio);
        assert!((back - 1.0).abs() < 2e-6, "{db} dB: {back}");
    }
}
