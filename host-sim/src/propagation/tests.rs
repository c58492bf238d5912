//! Paths against closed forms, the exact layer model and published values.

use super::*;
use crate::fourier::Complex;
use crate::layered::{ExactLayer, reflection};
use std::f64::consts::{LN_10, TAU};

const EVERYTHING: Limits = Limits {
    until: 1.0,
    smallest: 0.0,
    wall_trips: 60,
};

fn plain(thickness: f64, velocity: f64, impedance: f64) -> Layer {
    Layer {
        thickness,
        velocity,
        impedance,
        attenuation: Attenuation::new(0.0, 1.0, 5e6),
    }
}

fn coated() -> Stack {
    Stack {
        zero: 0.0,
        delay_line: Some(plain(0.0, 2350.0, 2.48e6)),
        face_impedance: 2.48e6,
        near_end: 0.0,
        film: None,
        coating: Some(plain(0.8e-3, 2600.0, 2.99e6)),
        wall: plain(6e-3, 5920.0, 46.47e6),
        back_impedance: 1e-3,
        back_roughness: 0.0,
        tilt: 0.0,
        columns: Vec::new(),
        mode_conversion: None,
        dual: None,
        reference: 5e6,
    }
}

/// Times and amplitudes of delay line | 0.8 mm coat | 6 mm steel | air: closed forms evaluated and
/// compared with the inverse transform of the exact layer model, with NumPy 2.4.
#[test]
fn amplitudes_match_the_closed_forms() {
    let limits = Limits {
        until: 5e-6,
        ..EVERYTHING
    };
    let paths = coated().paths(&limits).unwrap();
    for (coats, trips, time, amplitude, role) in [
        (0, 0, 0.0, 0.093_235_831_809_9, Role::Interface),
        (1, 0, 6.153_846_153_85e-7, 0.871_452_321_551, Role::Coating),
        (1, 1, 2.642_411_642_41e-6, -0.225_218_382_921, Role::BackWall),
        (1, 2, 4.669_438_669_44e-6, -0.197_988_178_112, Role::BackWall),
        (2, 0, 1.230_769_230_77e-6, -0.071_426_916_881_2, Role::Coating),
        (2, 1, 3.257_796_257_8e-6, 0.036_919_184_949_6, Role::Coating),
    ] {
        let path = paths
            .iter()
            .find(|p| (p.coating_trips, p.wall_trips) == (coats, trips))
            .unwrap();
        assert!((path.arrival - time).abs() < 1e-17, "{path:?}");
        assert!((path.amplitude - amplitude).abs() < 1e-9, "{path:?}");
        assert_eq!(path.role, role);
        assert_eq!(path.multiple, (role == Role::BackWall).then_some(trips));
    }
    assert!(paths.is_sorted_by(|a, b| a.arrival <= b.arrival));
}

/// Steel plate in water: interface +0.93755865, then -0.11342939, -0.09970627, -0.08764343, each
/// 0.87901622 of the one before (Airy's formula for the plate, evaluated with NumPy 2.4).
#[test]
fn bare_plate_in_water_matches_the_closed_form() {
    let stack = Stack {
        coating: None,
        face_impedance: 1.4805e6,
        wall: plain(6e-3, 5920.0, 45.94e6),
        back_impedance: 1.4805e6,
        ..coated()
    };
    let paths = stack.paths(&EVERYTHING).unwrap();
    for (path, expected) in paths
        .iter()
        .zip([0.937_558_65, -0.113_429_39, -0.099_706_27, -0.087_643_43])
    {
        assert!((path.amplitude - expected).abs() < 1e-8, "{path:?}");
    }
}

/// Summed over all round trips, the paths are the exact reflection of the layered part; what is left
/// of 0.88 after 90 returns bounds the difference.
#[test]
fn sum_over_paths_is_the_exact_reflection() {
    for (face, coat, back) in [(2.48e6, 2.99e6, 413.0), (6e6, 3.3e6, 1.48e6), (3.2e6, 9.0e6, 1.5e6)] {
        let mut stack = coated();
        stack.face_impedance = face;
        stack.back_impedance = back;
        stack.coating = Some(plain(0.3e-3, 2300.0, coat));
        let layers =
            [(0.3e-3, 2300.0, coat), (6e-3, 5920.0, 46.47e6)].map(|(thickness, velocity, impedance)| ExactLayer {
                thickness,
                velocity,
                impedance,
            });
        let limits = Limits {
            until: 2e-3,
            smallest: 1e-15,
            wall_trips: 90,
        };
        let paths = stack.paths(&limits).unwrap();
        let sum_at = |frequency: f64| {
            let mut sum = Complex::ZERO;
            for path in &paths {
                sum += Complex::polar(path.amplitude, -TAU * frequency * path.arrival);
            }
            sum
        };
        for frequency in [0.73e6, 2.1e6, 4.96e6, 5.17e6, 9.3e6] {
            let exact = reflection(face, &layers, back, frequency);
            let summed = sum_at(frequency);
            assert!(
                (exact - summed).magnitude() < 1e-5,
                "{face} {coat} {frequency}: {exact:?} {summed:?}"
            );
        }
    }
}

/// Closed forms of the Kramers-Kronig relations for a power law, checked against a numerically
/// evaluated subtracted dispersion integral with SciPy 1.17: slowness at 2 w0 for a = 1.
#[test]
fn dispersion_is_causal() {
    for (exponent, expected) in [
        (0.5, -0.292_893_218_8),
        (1.0, -0.441_271_200_3),
        (1.5, -0.414_213_562_4),
        (2.0, 0.0),
        (2.5, 1.828_427_124_7),
    ] {
        // w0 = 1 rad/s and alpha = 1 Np/m there.
        let law = Attenuation::new(20.0 / LN_10, exponent, 1.0 / TAU);
        let change = law.slowness_change(2.0 / TAU);
        assert!((change - expected).abs() < 1e-9, "{exponent}: {change}");
    }
    // An acrylic-like plastic, 450 dB/m at 5 MHz, y = 1: 2717.465 m/s at 1 MHz, 2735.434 at 10 MHz.
    let plastic = Attenuation::new(450.0, 1.0, 5e6);
    for (frequency, velocity) in [(1e6, 2717.465), (2.5e6, 2724.587), (10e6, 2735.434)] {
        let computed = 1.0 / (1.0 / 2730.0 + plastic.slowness_change(frequency));
        assert!((computed - velocity).abs() < 1e-3, "{frequency}: {computed}");
    }
}

/// Rogers and Van Buren 1974 (formula from memory), evaluated with mpmath and SciPy 1.17.
#[test]
fn diffraction_has_the_published_values() {
    for (s, re, im) in [
        (0.1, 0.928_966_592_5, 0.070_753_593_9),
        (0.5, 0.842_492_607_517_9, 0.154_530_815_584_2),
        (1.0, 0.779_723_091_5, 0.212_382_530_1),
        (10.0, 0.093_186_779_4, 0.289_366_457_0),
        (100.0, 0.000_986_392_4, 0.031_390_098_7),
    ] {
        let value = diffraction(s);
        assert!((value - Complex::new(re, im)).magnitude() < 1e-9, "{s}: {value:?}");
    }
    let (near, far) = (diffraction(0.999_999e6), diffraction(1.000_001e6));
    assert!((near - far).magnitude() < 1e-9);
}

#[test]
fn too_many_paths_are_refused() {
    let mut stack = coated();
    stack.wall.thickness = 1e-7;
    assert!(
        stack
            .paths(&Limits {
                wall_trips: u32::MAX,
                ..EVERYTHING
            })
            .is_none()
    );
}

/// Film, coating, wall, back medium behind a delay line that rings: summed over all round trips and
/// all orders, with the film's factors at each frequency, the paths are the exact reflection seen from
/// the transducer, r + (1 - r^2) times the sum. Compared in time, up to 8 us: paths are followed to 14,
/// and what rings on beyond the transform's period of 80 us is weak.
#[test]
fn sum_over_paths_is_exact_with_film_and_ringing_delay_line() {
    for (transducer, line, film, coat, back) in [
        (2.0e6, 2.48e6, 8e-6, Some((0.8e-3, 2600.0, 2.99e6)), 1.48e6),
        (4.0e6, 3.2e6, 3e-6, None, 413.0),
        (20.0e6, 38.5e6, 1e-6, None, 1.5e6),
    ] {
        let mut stack = coated();
        stack.delay_line = Some(plain(1.1e-3, 2350.0, line));
        stack.face_impedance = line;
        stack.near_end = reflection_factor(line, transducer);
        stack.back_impedance = back;
        stack.coating = coat.map(|(thickness, velocity, impedance)| plain(thickness, velocity, impedance));
        stack.wall = plain(4e-3, 5920.0, 46.47e6);
        let couplant = ExactLayer {
            thickness: film,
            velocity: 1740.0,
            impedance: 1.51e6,
        };
        stack.film = Some(border::Film {
            couplant,
            roughness: 0.0,
            part_velocity: 5920.0,
            curvature: None,
        });
        let exact_layer = |layer: &Layer| ExactLayer {
            thickness: layer.thickness,
            velocity: layer.velocity,
            impedance: layer.impedance,
        };
        let mut layers = vec![exact_layer(&stack.delay_line.unwrap()), couplant];
        layers.extend(stack.coating.as_ref().map(exact_layer));
        layers.push(exact_layer(&stack.wall));
        let limits = Limits {
            until: 14e-6,
            smallest: 1e-5,
            wall_trips: 60,
        };
        let paths = stack.paths(&limits).unwrap();
        let (near, far) = stack.border_impedances();
        let (spacing, bins) = (1.0 / 80e-6, 1600u32);
        let pulse = |frequency: f64| {
            let offset = (frequency - 5e6) / 1.27616e6;
            libm::exp(-0.5 * offset * offset)
        };
        let first = reflection_factor(transducer, line);
        let (mut exact, mut summed) = (Vec::new(), Vec::new());
        for bin in 1..bins {
            let frequency = f64::from(bin) * spacing;
            let seen = reflection(transducer, &layers, back, frequency);
            let part = (seen - Complex::new(first, 0.0)).scaled(1.0 / (1.0 - first * first));
            exact.push(part.scaled(pulse(frequency)));
            let factors = stack.film.as_ref().unwrap().factors(near, far, frequency);
            let mut sum = Complex::ZERO;
            for path in &paths {
                let turned = Complex::polar(path.weight, -TAU * frequency * path.arrival);
                sum += turned * factors.product(path.meetings);
            }
            summed.push(sum.scaled(pulse(frequency)));
        }
        let at = |spectrum: &[Complex], time: f64| -> f64 {
            let turned = spectrum.iter().enumerate().map(|(bin, value)| {
                let frequency = (bin + 1) as f64 * spacing;
                (*value * Complex::polar(1.0, TAU * frequency * time)).re
            });
            turned.sum()
        };
        let highest = (0..400)
            .map(|i| at(&exact, f64::from(i) * 20e-9).abs())
            .fold(0.0, f64::max);
        let worst = (0..400)
            .map(|i| f64::from(i) * 20e-9)
            .map(|time| (at(&exact, time) - at(&summed, time)).abs())
            .fold(0.0, f64::max);
        assert!(worst < 2e-3 * highest, "{transducer} {line}: {worst} of {highest}");
    }
}
