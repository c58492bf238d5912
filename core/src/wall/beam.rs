//! The beam: how far it stays together, how wide it gets, and how far its spreading moves an echo.
//!
//! A piston of diameter D that looks at a flat back wall does not receive a plane wave: the echo is
//! weaker and its phase is ahead, by up to a quarter of a cycle far away. [`crate::path::diffraction`] says how far
//! an arrival is found from where a plane wave's would be, and corrects it; here stands what nobody corrects, as the
//! budget needs it.

use crate::math;
use crate::path::diffraction::Diffraction;
use crate::units::{Decibels, Hertz, Metres, MetresPerSecond, Seconds};
use core::f32::consts::TAU;

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

/// S of a path in one medium: path times wavelength over the squared radius.
#[must_use]
pub fn normalised_distance(diameter: Metres, wavelength: Metres, path: Metres) -> f32 {
    4.0 * (path / diameter) * (wavelength / diameter)
}

/// Amplitude of an echo at a normalised distance relative to a plane wave's: what the spreading of the beam costs, as the
/// centre frequency feels it. 0 dB or a little above in the near field, falling by 6 dB where the distance doubles in
/// the far field.
#[must_use]
pub fn loss(s: f32) -> Decibels {
    Decibels::from_amplitude_ratio(Diffraction::at(s).magnitude())
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
    use crate::path::diffraction::tests::correlation_advance_over_60_lines as correlation_advance;
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
        // Rogers & Van Buren's factor with SciPy 1.17, in dB: S = 1, 10 and 100.
        for (s, db) in [(1.0, -1.850_37), (10.0, -10.342_49), (100.0, -30.059_86f32)] {
            assert!((loss(s).get() - db).abs() < 2e-4, "{s}: {}", loss(s));
        }
        // Root of 2 J1(x)/x = 10^(-3/20) from SciPy 1.17: sin θ = 0.513669776547 λ/D on each side.
        let width = beam_width(diameter, wavelength, Metres::from_mm(50.0));
        assert!((width.as_mm() - 2.0 * 0.513_669_8 * 1.184 / 6.0 * 50.0).abs() < 1e-4);
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
