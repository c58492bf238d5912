//! The bound of a train that campaigns compare with, against the numerical Fisher matrix of the same train, which
//! knows no formula for trains (oracle::period_bound).

use halfpulse_sim::campaign::bound;
use halfpulse_sim::scene::Scene;
use halfpulse_sim::synthesise::Synthesiser;
use halfpulse_tests::oracle;

#[test]
fn val_bound_of_a_train() {
    for (decay, snr_db, wall, echoes, wider) in [
        (0.7, 20.0, 10.0, 6, 1.0),
        (0.85, 40.0, 6.0, 4, 1.0),
        (0.95, 50.0, 20.0, 2, 1.0),
        (0.8, 30.0, 8.0, 6, 2.0),
    ] {
        let mut scene = Scene::contact(5.0, 60.0, "carbon steel", wall);
        scene.record.samples = 2048;
        scene.record.sample_rate_mhz = 50.0 * wider;
        scene.wall.velocity_m_s = Some(5920.0);
        scene.echoes.back_walls = Some(echoes);
        scene.echoes.decay = Some(decay);
        scene.noise.snr_db = Some(snr_db);
        let maker = Synthesiser::new(&scene).expect("the scene is sound");
        let got = bound::thickness(&maker).expect("a clean train has a bound");
        let amplitude = 0.5 * 2048.0;
        let sigma = amplitude / 10f64.powf(snr_db / 20.0);
        let noise = (sigma * sigma + 1.0 / 12.0).sqrt();
        let rate = 50e6 * wider;
        let times: Vec<f64> = (0..2048).map(|i| f64::from(i) / rate).collect();
        let amplitudes: Vec<f64> = (0..echoes).map(|n| amplitude * decay.powi(n as i32)).collect();
        let period = 2e-3 * wall / 5920.0;
        let pulse = |t: f64| oracle::gaussian_pulse(t, 5e6, 0.6);
        let expected = 0.5 * 5920.0 * oracle::period_bound(pulse, &times, 0.0, period, &amplitudes, noise);
        println!(
            "decay {decay}, {snr_db} dB: {:.4} um, numerically {:.4} um",
            got * 1e6,
            expected * 1e6
        );
        assert!((got / expected - 1.0).abs() < 0.01, "{got} instead of {expected}");
    }
}

/// Where the assumptions do not hold there is no bound, rather than a wrong one.
#[test]
fn no_bound_where_it_is_not_defined() {
    let mut scene = Scene::contact(5.0, 60.0, "carbon steel", 10.0);
    scene.noise.snr_db = Some(30.0);
    let has = |scene: &Scene| bound::thickness(&Synthesiser::new(scene).expect("the scene is sound")).is_some();
    assert!(has(&scene));
    let mut changed = scene.clone();
    changed.wall.thickness_mm = 1.0;
    assert!(!has(&changed), "echoes overlap");
    let mut changed = scene.clone();
    changed.wall.attenuation_db_per_m = 20.0;
    assert!(!has(&changed), "echoes change their shape");
    let mut changed = scene.clone();
    changed.echoes.back_walls = Some(1);
    assert!(!has(&changed), "one echo has no period");
    scene.noise.snr_db = None;
    assert!(!has(&scene), "no noise, no bound");
}
