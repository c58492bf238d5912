//! The beam: how far it stays together, how wide it gets, and how far its spreading moves an echo.
//!
//! A piston of diameter D that looks at a flat back wall does not receive a plane wave: the echo is
//! weaker and its phase is ahead, by up to a quarter of a cycle far away. Nothing here corrects a
//! reading; the shift stands in the budget.

use crate::math;
use crate::units::{Hertz, Metres, MetresPerSecond, Seconds};
use core::f32::consts::{FRAC_PI_2, TAU};

/// Length of the near field, D² / (4 λ): the usual short form.
#[must_use]
pub fn near_field_length(diameter: Metres, wavelength: Metres) -> Metres {
    diameter * (diameter / wavelength) * 0.25
}

/// Distance of the last pressure maximum on the axis, (D² - λ²) / (4 λ); 0 if the element is smaller
/// than a wavelength.
#[must_use]
pub fn near_field_length_exact(diameter: Metres, wavelength: Metres) -> Metres {
    let length = near_field_length(diameter, wavelength) - wavelength * 0.25;
    if length < Metres::ZERO { Metres::ZERO } else { length }
}

/// Full width of the beam at `range`, to -6 dB in pulse-echo: 1.0273 λ z / D, from the directivity
/// 2 J1(x) / x at 3 dB one way, x = 1.61374. For small angles and beyond the near field; closer than
/// that the beam is about as wide as the element, and this function says less.
#[must_use]
pub fn beam_width(diameter: Metres, wavelength: Metres, range: Metres) -> Metres {
    range * (wavelength / diameter) * 1.027_339_6
}

/// What diffraction does to one frequency of a pulse that a piston sends and receives again:
/// D(S) = 1 - exp(-ju) [J0(u) + j J1(u)], u = 2 π / S.
///
/// Rogers & Van Buren 1974 (formula from memory). S is the sum of path times wavelength over the
/// squared element radius, over the whole round trip. It is the paraxial form: within 1 % of the exact
/// integral for elements of five wavelengths and more and paths beyond a third of the radius. Shear
/// waves from the element's edge are neglected, and the effective element can be smaller than the one
/// on the data sheet.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Diffraction {
    /// Real part.
    pub in_phase: f32,
    /// Imaginary part.
    pub quadrature: f32,
    /// How far the phase is ahead of a plane wave's, in radians, 0 to π/2.
    pub phase_advance: f32,
}

impl Diffraction {
    /// The factor at the normalised distance `s`. 0 or less is a plane wave: factor 1.
    #[must_use]
    pub fn at(s: f32) -> Self {
        let u = TAU / s;
        if s <= 0.0 || u == f32::INFINITY {
            return Self {
                in_phase: 1.0,
                quadrature: 0.0,
                phase_advance: 0.0,
            };
        }
        if u < 0.5 {
            // Far away the real part is the small difference of large numbers. The power series of
            // both parts, divided by u so that the phase survives however small u gets.
            let square = u * u;
            let real = u * (0.25 - square * (7.0 / 192.0 - square * (11.0 / 3840.0)));
            let imaginary = 0.5 - square * (5.0 / 48.0 - square * (7.0 / 640.0));
            return Self {
                in_phase: u * real,
                quadrature: u * imaginary,
                phase_advance: math::atan2(imaginary, real),
            };
        }
        let (j0, j1) = math::bessel_j0_j1(u);
        let (sin, cos) = (math::sin(u), math::cos(u));
        let in_phase = 1.0 - (cos * j0 + sin * j1);
        let quadrature = sin * j0 - cos * j1;
        Self {
            in_phase,
            quadrature,
            phase_advance: math::clamp(math::atan2(quadrature, in_phase), 0.0, FRAC_PI_2),
        }
    }

    /// Amplitude relative to a plane wave, 0 to about 1.
    #[must_use]
    pub fn magnitude(&self) -> f32 {
        math::sqrt(self.in_phase * self.in_phase + self.quadrature * self.quadrature)
    }
}

/// S of a path in one medium: path times wavelength over the squared radius.
#[must_use]
pub fn normalised_distance(diameter: Metres, wavelength: Metres, path: Metres) -> f32 {
    4.0 * (path / diameter) * (wavelength / diameter)
}

/// How far diffraction that nobody corrects moves the difference of two arrivals, from the phase at
/// the centre frequency. `path_from` and `path_to` are round trips (2 d for the first back wall, 0 for
/// the element itself). Not negative, at most a quarter of a cycle.
///
/// Later echoes come too early, so that an uncorrected reading is too thin. An arrival found by
/// correlation follows the phase within 2 % (60 % bandwidth), one found at the envelope's peak errs the
/// other way.
///
/// Behind a delay line of unknown length use `path_from` = 0 and the path in the part alone. The phase
/// rises from 0 to 90 degrees with ripples in the near field; averaged over a pulse of 60 % bandwidth no
/// path gains more from an addition than that addition would have gained on its own (within 3 %), so this is
/// the conservative choice. (At 30 % bandwidth the ripples break that by up to 8 %, which the k = 2
/// interval of a rectangular distribution still holds.)
#[must_use]
pub fn uncorrected_shift(
    diameter: Metres,
    velocity: MetresPerSecond,
    frequency: Hertz,
    path_from: Metres,
    path_to: Metres,
) -> Seconds {
    let wavelength = velocity / frequency;
    let advance = |path| Diffraction::at(normalised_distance(diameter, wavelength, path)).phase_advance;
    (frequency.period() * ((advance(path_to) - advance(path_from)) / TAU)).abs()
}

/// The same for the period of a train of back walls in direct contact, `round_trip` = 2 d: the largest
/// shift between neighbours among the first four. A fitted period is a mean of such differences, and
/// they do not fall steadily: the phase can rise faster between the second and the third echo than
/// between the first two.
#[must_use]
pub fn uncorrected_period_shift(
    diameter: Metres,
    velocity: MetresPerSecond,
    frequency: Hertz,
    round_trip: Metres,
) -> Seconds {
    let first = normalised_distance(diameter, velocity / frequency, round_trip);
    let mut before = Diffraction::at(first).phase_advance;
    let mut largest = 0.0;
    for multiple in 2..=4u8 {
        let here = Diffraction::at(first * f32::from(multiple)).phase_advance;
        largest = math::larger(largest, here - before);
        before = here;
    }
    frequency.period() * (largest / TAU)
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;
    use std::vec::Vec;

    const STEEL: MetresPerSecond = MetresPerSecond::new(5920.0);
    const FIVE: Hertz = Hertz::from_mhz(5.0);
    /// (2/√3): the k = 2 interval of a rectangular distribution, over its half-width.
    const COVERED: f32 = 1.154_700_5;

    #[test]
    fn near_field_and_width() {
        // Arithmetic of the two formulas: 6 mm, 5 MHz, 5920 m/s.
        let (diameter, wavelength) = (Metres::from_mm(6.0), STEEL / FIVE);
        assert!((near_field_length(diameter, wavelength).as_mm() - 7.601_351).abs() < 1e-5);
        assert!((near_field_length_exact(diameter, wavelength).as_mm() - 7.305_351).abs() < 1e-5);
        assert_eq!(
            near_field_length_exact(Metres::from_mm(1.0), Metres::from_mm(2.0)),
            Metres::ZERO
        );
        // Root of 2 J1(x)/x = 10^(-3/20) from SciPy 1.17: sin θ = 0.513669776547 λ/D on each side.
        let width = beam_width(diameter, wavelength, Metres::from_mm(50.0));
        assert!((width.as_mm() - 2.0 * 0.513_669_8 * 1.184 / 6.0 * 50.0).abs() < 1e-4);
    }

    #[test]
    fn val_diffraction_factor() {
        // Rogers & Van Buren 1974 (formula from memory), evaluated with SciPy 1.17; S = 0.5 also with
        // mpmath to 30 digits.
        for (s, real, imaginary, degrees) in [
            (0.05, 0.949_721_1, 0.050_179_4, 3.024_463_6),
            (0.1, 0.928_966_6, 0.070_753_59, 4.355_453_4),
            (0.5, 0.842_492_6, 0.154_530_82, 10.393_716),
            (1.0, 0.779_723_1, 0.212_382_53, 15.236_704),
            (1.5, 0.694_230_1, 0.260_043_94, 20.534_89),
            (2.0, 0.695_757_8, 0.284_615_34, 22.248_117),
            (3.0, 0.592_241_9, 0.431_480_25, 36.075_36),
            (5.0, 0.314_330_6, 0.452_789_44, 55.231_26),
            (10.0, 0.093_186_78, 0.289_366_46, 72.149_51),
            (30.0, 0.010_896_318, 0.103_767_17, 84.005_49),
            (100.0, 0.000_986_392_4, 0.031_390_1, 88.200_15),
        ] {
            let factor = Diffraction::at(s);
            assert!((factor.in_phase - real).abs() < 1.5e-6, "S = {s}: {factor:?}");
            assert!((factor.quadrature - imaginary).abs() < 1.5e-6, "S = {s}: {factor:?}");
            assert!(
                (factor.phase_advance.to_degrees() - degrees).abs() < 2e-4,
                "S = {s}: {factor:?}"
            );
            assert!((factor.magnitude() - real.hypot(imaginary)).abs() < 2e-6);
        }
    }

    #[test]
    fn edges_of_the_factor() {
        assert_eq!(Diffraction::at(0.0).in_phase, 1.0);
        assert_eq!(Diffraction::at(1e-40).phase_advance, 0.0);
        assert_eq!(Diffraction::at(-1.0).phase_advance, 0.0);
        assert_eq!(Diffraction::at(f32::INFINITY).phase_advance, FRAC_PI_2);
        assert!(Diffraction::at(f32::NAN).phase_advance.is_nan());
        // The series and the closed form meet: S = 4π.
        let (below, above) = (Diffraction::at(12.566_3), Diffraction::at(12.566_5));
        assert!((below.in_phase - above.in_phase).abs() < 2e-5);
        assert!((below.phase_advance - above.phase_advance).abs() < 2e-5);
    }

    #[test]
    fn val_shift_of_the_first_back_wall() {
        // (element mm, wall mm, phase ns, correlation ns, zero crossing ns), Gaussian pulse 5 MHz, 60 %,
        // steel 5920 m/s: Rogers & Van Buren's factor applied in the frequency domain with SciPy 1.17.
        for (diameter, wall, phase, correlation, crossing) in [
            (6.0, 1.0, 4.173_853_5, 3.957_160_4, 4.422_423),
            (6.0, 2.0, 6.139_241_5, 5.848_885_4, 6.522_933_6),
            (6.0, 10.0, 17.128_37, 16.290_27, 18.369_784),
            (6.0, 50.0, 42.434_98, 39.532_36, 42.446_465),
            (10.0, 2.0, 3.466_790_5, 3.303_299_2, 3.694_632_7),
            (10.0, 10.0, 8.142_593, 8.234_137, 9.184_119),
            (10.0, 50.0, 29.693_563, 27.314_366, 29.937_715),
        ] {
            let shift = uncorrected_shift(
                Metres::from_mm(diameter),
                STEEL,
                FIVE,
                Metres::ZERO,
                Metres::from_mm(2.0 * wall),
            )
            .as_ns();
            assert!(
                (shift - phase).abs() < 0.002,
                "{diameter} mm, wall {wall} mm: {shift} ns"
            );
            assert!((shift - correlation).abs() < 0.09 * shift && correlation < COVERED * shift);
            assert!(crossing < COVERED * shift, "{crossing} ns beyond {shift} ns");
        }
        // Williams' exact integral, correlation, the same pulse (SciPy 1.17).
        for (diameter, wall, exact) in [(6.0, 2.0, 5.945_472), (6.0, 10.0, 16.502_28), (10.0, 2.0, 3.358_901)] {
            let shift = uncorrected_shift(
                Metres::from_mm(diameter),
                STEEL,
                FIVE,
                Metres::ZERO,
                Metres::from_mm(2.0 * wall),
            );
            assert!((shift.as_ns() - exact).abs() < 0.05 * exact);
        }
    }

    #[test]
    fn val_shift_of_the_period() {
        // First to second back wall by correlation (element mm, wall mm, ns), made as above.
        for (diameter, wall, correlation) in [
            (6.0, 2.0, 2.938_450_5),
            (6.0, 5.0, 6.088_722_8),
            (6.0, 10.0, 12.788_267),
            (6.0, 25.0, 7.123_566),
            (10.0, 2.0, 1.548_056_9),
            (10.0, 5.0, 2.727_947),
            (10.0, 10.0, 3.866_988),
            (10.0, 25.0, 12.730_103),
        ] {
            let shift =
                uncorrected_period_shift(Metres::from_mm(diameter), STEEL, FIVE, Metres::from_mm(2.0 * wall)).as_ns();
            assert!(
                correlation < COVERED * shift,
                "{diameter} mm, {wall} mm: {shift} ns does not hold {correlation}"
            );
            assert!(
                shift < 2.2 * correlation,
                "{diameter} mm, {wall} mm: {shift} ns is far above {correlation}"
            );
        }
        // Behind 8 mm of polystyrene (S = 0.836) the spacing of the first two back walls of 4.000 mm steel reads
        // 3.980367 mm (independent numpy model of a delay-line A-scan), and 3.985901 mm from the interface: the
        // bound that ignores the delay line must hold both.
        let bound = uncorrected_shift(Metres::from_mm(6.0), STEEL, FIVE, Metres::ZERO, Metres::from_mm(8.0));
        for reading in [3.980_367f32, 3.985_901] {
            let early = (4.0 - reading) * 1e6 / 2960.0;
            assert!(
                early < bound.as_ns() && early > 0.5 * bound.as_ns(),
                "{early} ns, {bound}"
            );
        }
    }

    /// How far correlation with the undisturbed pulse finds an echo too early, in cycles of the centre frequency:
    /// Newton's method on the correlation's peak, over a Gaussian spectrum of the given -6 dB width.
    fn correlation_advance(s: f64, bandwidth: f64) -> f64 {
        const LINES: i32 = 60;
        let lines: Vec<(f64, f64, f64)> = (1..=LINES)
            .map(|line| 1.0 + 1.3 * bandwidth * (2.0 * f64::from(line) / f64::from(LINES) - 1.0))
            .filter(|f| *f > 0.02)
            .map(|f| {
                let factor = Diffraction::at((s / f) as f32);
                let weight = (-(f - 1.0).powi(2) * 8.0 * std::f64::consts::LN_2 / bandwidth.powi(2)).exp();
                (
                    f,
                    weight * f64::from(factor.in_phase),
                    weight * f64::from(factor.quadrature),
                )
            })
            .collect();
        let mut advance = f64::from(Diffraction::at(s as f32).phase_advance) / std::f64::consts::TAU;
        for _ in 0..8 {
            let (mut slope, mut curve) = (0.0, 0.0);
            for &(f, re, im) in &lines {
                let omega = std::f64::consts::TAU * f;
                let (sin, cos) = (omega * advance).sin_cos();
                slope += omega * (im * cos - re * sin);
                curve -= omega * omega * (re * cos + im * sin);
            }
            advance -= slope / curve;
        }
        advance
    }

    #[test]
    fn no_start_makes_an_added_path_worse_than_a_start_at_the_element() {
        for (bandwidth, allowed) in [(0.3, 1.09), (0.6, 1.03), (1.0, 1.0)] {
            // One table on a grid, so that sums of paths are on the grid too.
            let table: Vec<f64> = (0..400)
                .map(|i| {
                    if i == 0 {
                        0.0
                    } else {
                        correlation_advance(f64::from(i) * 0.05, bandwidth)
                    }
                })
                .collect();
            for added in 1..200usize {
                let bound = f64::from(Diffraction::at(added as f32 * 0.05).phase_advance) / std::f64::consts::TAU;
                for start in 0..200usize {
                    let gained = table[start + added] - table[start];
                    assert!(
                        gained <= allowed * bound,
                        "{bandwidth}: {start} + {added}: {gained} beyond {bound}"
                    );
                }
            }
        }
    }

    #[test]
    fn the_periods_bound_holds_correlation_in_every_distance() {
        for bandwidth in [0.3, 0.6, 1.0] {
            for step in 1..400 {
                let s = f64::from(step) * 0.03;
                let found: Vec<f64> = (1..=4)
                    .map(|n| correlation_advance(s * f64::from(n), bandwidth))
                    .collect();
                let worst = found.windows(2).map(|w| w[1] - w[0]).fold(0.0, f64::max);
                // S = path x wavelength / radius²: with 1 m/s, 1 Hz and a radius of 1 m the path is S.
                let bound = uncorrected_period_shift(
                    Metres::new(2.0),
                    MetresPerSecond::new(1.0),
                    Hertz::new(1.0),
                    Metres::new(s as f32),
                );
                assert!(
                    worst < 1.09 * f64::from(bound.get()),
                    "{bandwidth}, S = {s}: {worst} beyond {bound:?}"
                );
            }
        }
    }

    proptest! {
        #[test]
        fn phase_stays_between_nothing_and_a_quarter(s in 1e-6f32..1e9) {
            let factor = Diffraction::at(s);
            prop_assert!((0.0..=FRAC_PI_2).contains(&factor.phase_advance));
            prop_assert!(factor.magnitude() <= 1.001);
        }

        #[test]
        fn shifts_are_bounded_for_any_input(d in any::<f32>(), c in any::<f32>(), f in any::<f32>(), a in any::<f32>(), b in any::<f32>()) {
            let (d, c, f) = (Metres::new(d), MetresPerSecond::new(c), Hertz::new(f));
            let shift = uncorrected_shift(d, c, f, Metres::new(a), Metres::new(b));
            let quarter = (f.period() * 0.25).abs().get() * 1.000_1;
            prop_assert!(!shift.is_finite() || shift.get() <= quarter);
            let period = uncorrected_period_shift(d, c, f, Metres::new(a));
            prop_assert!(!period.is_finite() || period.get().abs() <= quarter);
        }
    }
}
