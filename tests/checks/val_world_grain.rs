//! Grain noise: its level, its spectrum, and that averaging leaves it.

use halfpulse_sim::scene::{Grain, Scene};
use halfpulse_sim::synthesise::{Synthesiser, synthesise};
use halfpulse_tests::published::Table;

/// A thick wall whose first echo lies behind the record, so that grains are all there is.
fn grains_only(grain: Grain) -> Scene {
    let mut scene = Scene::contact(5.0, 60.0, "carbon steel", 500.0);
    scene.record.samples = 4096;
    scene.record.bits = 16;
    scene.record.first_back_wall_percent = Some(50.0);
    scene.probe.element_diameter_mm = Some(6.0);
    scene.grain = Some(grain);
    scene
}

/// Root mean square over first back wall's peak, over many seeds, in decibels; from 2 us on, since the
/// noise starts at the surface.
fn level(scene: &Scene, seeds: u64) -> f64 {
    let mut maker = Synthesiser::new(scene).expect("a good scene");
    let (mut sum, mut count) = (0.0, 0usize);
    for seed in 0..seeds {
        let shot = maker.shot(seed, 0);
        sum += shot.codes[100..]
            .iter()
            .map(|&code| f64::from(code).powi(2))
            .sum::<f64>();
        count += shot.codes.len() - 100;
    }
    20.0 * ((sum / count as f64).sqrt() / 16384.0).log10()
}

/// Campbell's theorem: the rms is what the scene says, whether scatterers are many or few.
#[test]
fn val_grain_noise_has_the_stated_level() {
    for (scatterers_per_us, tolerance) in [(100.0, 0.15), (2.0, 0.3)] {
        let scene = grains_only(Grain {
            level_db: Some(-30.0),
            scatterers_per_us,
            ..Grain::default()
        });
        let found = level(&scene, 60);
        assert!((found + 30.0).abs() < tolerance, "{scatterers_per_us}: {found} dB");
    }
}

/// Single-scattering (Born) levels of alpha iron under a 6 mm element, evaluated with NumPy 2.4. The
/// scene's steel is 7850 kg/m3 and 5920 m/s, the table's iron 7860 kg/m3 and 5930 m/s: below 0.1 dB.
#[test]
fn val_grain_size_sets_the_level() {
    let mut checked = 0;
    for row in Table::read("physics/grain_noise.csv").rows() {
        if row.text("material") != "alpha-Fe" || row.number("f_Hz") != 5e6 {
            continue;
        }
        let mut scene = grains_only(Grain {
            size_um: Some(1e6 * row.number("D_m")),
            scatterers_per_us: 100.0,
            ..Grain::default()
        });
        // The converter's steps would be coarser than the noise: more gain, and that taken off again.
        scene.record.first_back_wall_percent = Some(5000.0);
        let found = level(&scene, 25) - 40.0;
        assert!(
            (found - row.number("carrier_rms_dB")).abs() < 0.3,
            "{row:?}: {found} dB"
        );
        checked += 1;
    }
    assert_eq!(checked, 4);
}

/// The square of frequency lifts a Gaussian's energy from its centre: the mean frequency of
/// |f^2 exp(-(f - f0)^2 / 2 s^2)|^2 is that of moments of a normal distribution with s / sqrt(2),
/// (m^5 + 10 m^3 v + 15 m v^2) / (m^4 + 6 m^2 v + 3 v^2) = 5.548 MHz at 5 MHz and 60 %.
#[test]
fn val_grain_noise_is_weighted_with_the_square_of_frequency() {
    let scene = grains_only(Grain {
        level_db: Some(-20.0),
        scatterers_per_us: 100.0,
        ..Grain::default()
    });
    let mut maker = Synthesiser::new(&scene).expect("a good scene");
    // Mean square of the derivative over that of the signal is the second moment of frequency.
    let (mut slopes, mut values) = (0.0, 0.0);
    for seed in 0..30 {
        let shot = maker.shot(seed, 0);
        for pair in shot.codes[100..].windows(3) {
            // The central difference's own factor is taken out at the centre of the band below.
            slopes += f64::from(pair[2] - pair[0]).powi(2);
            values += f64::from(pair[1]).powi(2);
        }
    }
    let (m, v) = (5.0, 1.276_16f64.powi(2) / 2.0);
    // E[4 sin^2(2 pi f / rate)] over the weighted spectrum, by summation.
    let (mut expected, mut weight) = (0.0, 0.0);
    for step in 0..1500 {
        let f = f64::from(step) * 0.01;
        let power = f.powi(4) * (-(f - m).powi(2) / (2.0 * v)).exp();
        expected += power * 4.0 * (2.0 * std::f64::consts::PI * f / 50.0).sin().powi(2);
        weight += power;
    }
    let found: f64 = slopes / values;
    assert!(
        (found / (expected / weight) - 1.0).abs() < 0.02,
        "{found} {}",
        expected / weight
    );
}

/// The mean of 64 shots of one place has the same grains: the receiver's noise falls by 18 dB, the
/// grains' stays. Another place has others.
#[test]
fn law_averaging_does_not_lower_grain_noise() {
    let mut scene = grains_only(Grain {
        level_db: Some(-30.0),
        scatterers_per_us: 100.0,
        ..Grain::default()
    });
    scene.noise.snr_db = Some(30.0);
    let mut maker = Synthesiser::new(&scene).expect("a good scene");
    let mut mean = vec![0.0; 4096];
    for shot in 0..64 {
        for (sum, &code) in mean.iter_mut().zip(&maker.shot(7, shot).codes) {
            *sum += f64::from(code) / 64.0;
        }
    }
    let rms = |values: &[f64]| (values.iter().map(|v| v * v).sum::<f64>() / values.len() as f64).sqrt();
    let left = 20.0 * (rms(&mean[100..]) / 16384.0).log10();
    assert!((left + 30.0).abs() < 0.7, "{left} dB");
    scene.noise.snr_db = None;
    let still = synthesise(&scene, 7).expect("a good scene").codes;
    let rest: Vec<f64> = mean.iter().zip(&still).map(|(a, &b)| a - f64::from(b)).collect();
    let rest = 20.0 * (rms(&rest[100..]) / 16384.0).log10();
    assert!((rest + 48.0).abs() < 0.5, "{rest} dB");
    scene.grain.as_mut().expect("grain").place = 1;
    assert_ne!(synthesise(&scene, 7).expect("a good scene").codes, still);
}
