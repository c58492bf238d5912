//! Records through a receiver that is not ideal, against closed forms.

use crate::front_end::band_limits::BandLimits;
use crate::scene::{EquivalentTime, Scene, Tone, TransmissionPulse};
use crate::synthesise::{Synthesiser, Variation, synthesise};
use halfpulse::Hertz;
use halfpulse::record::average::Interleaver;
use halfpulse::{Record, SampleClock};

/// One echo of 5 MHz and 60 % at 100 MS/s, 16 bits.
fn one_echo() -> Scene {
    let mut scene = Scene::contact(5.0, 60.0, "carbon steel", 10.0);
    scene.record.sample_rate_mhz = 100.0;
    scene.record.samples = 1024;
    scene.record.bits = 16;
    scene.record.gain_db = Some(0.0);
    scene.echoes.back_walls = Some(1);
    scene
}

fn moments(values: &[f64]) -> (f64, f64) {
    let mean = values.iter().sum::<f64>() / values.len() as f64;
    let variance = values.iter().map(|x| (x - mean).powi(2)).sum::<f64>() / (values.len() - 1) as f64;
    (mean, variance.sqrt())
}

/// By how much each shot's echo is later than in the ideal record: least squares in the known slope, which
/// is the maximum-likelihood delay for small shifts.
fn delays(scene: &Scene, shots: u64) -> Vec<f64> {
    let ideal = Synthesiser::new(&Scene {
        timing: Default::default(),
        ..scene.clone()
    });
    let mut ideal = ideal.unwrap();
    let step = 0.2e-9;
    let mut at = |time_shift| {
        let shifted = Variation {
            time_shift,
            ..Variation::default()
        };
        ideal
            .varied_shot(0, 0, shifted)
            .codes
            .iter()
            .map(|c| f64::from(*c))
            .collect::<Vec<_>>()
    };
    let (before, plain, after) = (at(-step), at(0.0), at(step));
    let slope: Vec<f64> = after.iter().zip(&before).map(|(a, b)| (a - b) / (2.0 * step)).collect();
    let power: f64 = slope.iter().map(|x| x * x).sum();
    let mut maker = Synthesiser::new(scene).unwrap();
    (0..shots)
        .map(|shot| {
            let codes = maker.shot(11, shot).codes;
            let found: f64 = codes
                .iter()
                .zip(&plain)
                .zip(&slope)
                .map(|((code, plain), slope)| (f64::from(*code) - plain) * slope)
                .sum();
            found / power
        })
        .collect()
}

/// sigma_tau = sigma_j sqrt(sum s'^4) / sum s'^2, evaluated with NumPy as 0.2156 sigma_j for the Gaussian
/// pulse of 5 MHz and 60 % at 100 MS/s (closed form sigma_j sqrt(1.5 / (fs sigma_t sqrt(2 pi))): 0.2191).
#[test]
fn val_aperture_jitter() {
    let mut scene = one_echo();
    scene.timing.aperture_jitter_ns = 1.0;
    let (mean, spread) = moments(&delays(&scene, 1500));
    println!(
        "aperture jitter 1 ns: arrival {:.4} ns rms, stated 0.2156; mean {:.4} ns",
        spread * 1e9,
        mean * 1e9
    );
    assert!((spread * 1e9 / 0.2156 - 1.0).abs() < 0.06);
    assert!(mean.abs() < 0.03e-9);
}

/// Trigger jitter moves the whole record: the arrival's spread is the jitter itself, and the truth knows
/// each shot's share.
#[test]
fn val_trigger_jitter() {
    let mut scene = one_echo();
    scene.timing.trigger_jitter_ns = 1.0;
    let found = delays(&scene, 300);
    let (_, spread) = moments(&found);
    println!("trigger jitter 1 ns: arrival {:.4} ns rms", spread * 1e9);
    assert!((spread * 1e9 - 1.0).abs() < 0.12);
    let mut maker = Synthesiser::new(&scene).unwrap();
    for (shot, &found) in (0..20).zip(&found) {
        let late = maker.shot(11, shot).truth.receiver.unwrap().late_ns;
        assert!((late - found * 1e9).abs() < 0.05, "{late} {found}");
    }
    // The mean of many jittered records is low-passed: exp(-(w0 s)^2 / 2), 0.95185 at 10 ns, for one
    // frequency. Projected on the Gaussian pulse, with q = (s / sigma_t)^2 / 2 and sigma_t 124.7 ns:
    // exp(-(w0 s)^2 / 2 / (1 + q)) / sqrt(1 + q) = 0.9505.
    scene.timing.trigger_jitter_ns = 10.0;
    let mut maker = Synthesiser::new(&scene).unwrap();
    let plain = synthesise(&one_echo(), 1).unwrap().codes;
    let (mut product, mut square) = (0.0, 0.0);
    for shot in 0..800 {
        for (&plain, code) in plain.iter().zip(maker.shot(2, shot).codes) {
            product += f64::from(plain) * f64::from(code) / 800.0;
        }
    }
    for code in plain {
        square += f64::from(code).powi(2);
    }
    let share = product / square;
    println!("average at 10 ns: {share:.4} of the amplitude, closed form 0.9505");
    assert!((share - 0.9505).abs() < 0.008, "{share}");
}

/// A clock that is 1000 ppm fast takes the n-th sample n / (1.001 rate) after the trigger.
#[test]
fn val_clock_error() {
    let mut scene = one_echo();
    scene.timing.clock_error_ppm = 1000.0;
    let shot = synthesise(&scene, 1).unwrap();
    assert_eq!(shot.clock.rate, Hertz::from_mhz(100.0));
    let amplitude = shot.truth.echoes[0].amplitude_percent * 327.68;
    let (arrival, pulse) = (0.02 / 5920.0, scene.pulse());
    for (i, &code) in shot.codes.iter().enumerate() {
        let expected = -amplitude * pulse.value(i as f64 / 100.1e6 - arrival);
        assert!((f64::from(code) - expected).abs() < 0.6, "{i}: {code} {expected}");
    }
}

/// Echo and noise behind the limits: the echo's spectrum changes by the response, noise has the stated rms
/// whatever the band, in proportion to the gain, and the band's own correlation.
#[test]
fn val_band_limits_and_thermal_noise() {
    let mut scene = one_echo();
    scene.receiver.high_pass_mhz = Some(2.0);
    scene.receiver.low_pass_mhz = Some(7.0);
    scene.receiver.low_pass_order = 3;
    let limits = BandLimits::of(&scene.receiver).unwrap();
    let limited = synthesise(&scene, 1).unwrap();
    let open = synthesise(&one_echo(), 1).unwrap();
    let line = |codes: &[i16], frequency: f64| {
        let (mut re, mut im) = (0.0, 0.0);
        for (i, &code) in codes.iter().enumerate() {
            let angle = std::f64::consts::TAU * frequency * i as f64 / 100e6;
            re += f64::from(code) * angle.cos();
            im += f64::from(code) * angle.sin();
        }
        re.hypot(im)
    };
    for frequency in [3e6, 4e6, 5e6, 6.5e6, 8e6] {
        let ratio = line(&limited.codes, frequency) / line(&open.codes, frequency);
        let expected = limits.response(frequency).magnitude();
        assert!((ratio / expected - 1.0).abs() < 2e-3, "{frequency}: {ratio} {expected}");
    }
    // 100 uV over 1 V at 20 dB is a thousandth of full scale, 32.768 steps.
    scene.receiver.thermal_noise_uv = 100.0;
    scene.record.gain_db = Some(20.0);
    scene.probe.face_impedance_mrayl = Some(0.01);
    let mut maker = Synthesiser::new(&scene).unwrap();
    assert!((maker.truth().noise_rms_codes - 32.768).abs() < 1e-9);
    let (mut power, mut next) = (0.0, 0.0);
    for shot in 0..40 {
        let codes = maker.shot(3, shot).codes;
        // Before the echo.
        for pair in codes[..280].windows(2) {
            power += f64::from(pair[0]).powi(2) / (40.0 * 279.0);
            next += f64::from(pair[0]) * f64::from(pair[1]) / (40.0 * 279.0);
        }
    }
    let (mut weight, mut correlated) = (0.0, 0.0);
    for k in 0..500 {
        let frequency = (f64::from(k) + 0.5) * 1e5;
        let share = limits.response(frequency).magnitude().powi(2);
        weight += share;
        correlated += share * (std::f64::consts::TAU * frequency / 100e6).cos();
    }
    println!(
        "thermal: {:.2} steps rms of 32.77, neighbour correlation {:.4} of {:.4}",
        power.sqrt(),
        next / power,
        correlated / weight
    );
    assert!((power.sqrt() / 32.768 - 1.0).abs() < 0.05);
    assert!((next / power - correlated / weight).abs() < 0.01);
}

/// A quiet receiver saturates under the transmission pulse and is back when the pulse's own law says so.
#[test]
fn transmission_pulse_saturates_and_recovers() {
    let mut scene = one_echo();
    scene.record.bits = 12;
    scene.transmission_pulse = Some(TransmissionPulse {
        amplitude_percent: 0.0,
        decay_ns: 100.0,
        recovery_percent: 1000.0,
        recovery_ns: 300.0,
    });
    // With and without another effect the same law holds.
    for jitter in [0.0, 1e-6] {
        scene.timing.trigger_jitter_ns = jitter;
        let codes = synthesise(&scene, 1).unwrap().codes;
        let saturated = codes.iter().filter(|code| **code == 2047).count();
        // 10 exp(-t / 300 ns) = 1 at 690.8 ns.
        assert!((saturated as f64 - 69.0).abs() <= 5.0, "{saturated}");
        for i in [100, 150, 200] {
            let expected = 20480.0 * (-(i as f64) / 30.0).exp();
            assert!(
                (f64::from(codes[i]) - expected).abs() < 1.5,
                "{i}: {} {expected}",
                codes[i]
            );
        }
    }
}

fn slow(phases: u8) -> Scene {
    let mut scene = Scene::contact(5.0, 60.0, "carbon steel", 8.0);
    scene.record.sample_rate_mhz = 100.0 / f64::from(phases);
    scene.record.samples = 1280 / usize::from(phases);
    scene.record.bits = 14;
    scene.equivalent_time = Some(EquivalentTime {
        phases,
        ..EquivalentTime::default()
    });
    scene
}

/// All phases of a scene, interleaved by the core.
fn interleaved(scene: &Scene, codes: &mut [i16]) -> SampleClock {
    let mut maker = Synthesiser::new(scene).unwrap();
    let undelayed = maker.shot(1, 0).clock;
    let mut interleaver = Interleaver::new(codes, undelayed, scene.phases()).unwrap();
    for number in (0..u64::from(scene.phases())).rev() {
        let made = maker.phased_shot(1, number);
        interleaver
            .add(&Record::new(&made.codes, made.format, made.clock))
            .unwrap();
    }
    interleaver.finish_unwatched().unwrap().clock()
}

/// The interleaved record is the directly sampled one: within the rounding of both and of the phases'
/// offsets, which the interleaver takes off; also with 20 phases, whose base rate of 5 MHz is the probe's frequency,
/// so that a phase meets every echo at the same place of its cycle. With delay errors of 1 ns rms it differs by
/// about slope x error; with offsets alone it does not differ.
#[test]
fn law_interleaved_record_is_the_dense_one() {
    for (phases, offset) in [(5, 0.0), (20, 0.0), (20, 40.0)] {
        let mut scene = slow(phases);
        scene.equivalent_time.as_mut().unwrap().offset_steps = offset;
        let mut codes = vec![0; 1280];
        let clock = interleaved(&scene, &mut codes);
        let mut direct = scene.clone();
        direct.equivalent_time = None;
        direct.record.sample_rate_mhz = 100.0;
        direct.record.samples = 1280;
        direct.record.first_sample_us = f64::from(clock.first_sample.get()) * 1e6;
        let direct = synthesise(&direct, 1).unwrap().codes;
        assert_eq!(clock.rate, Hertz::from_mhz(100.0));
        let worst = codes.iter().zip(&direct).map(|(a, b)| (a - b).abs()).max().unwrap();
        println!("{phases} phases, offsets {offset}: {worst} steps apart at worst");
        assert!(worst <= 3, "{phases}: {worst}");
    }
    let mut scene = slow(5);
    scene.equivalent_time.as_mut().unwrap().delay_error_ns = 1.0;
    let (mut wrong, mut right) = (vec![0; 1280], vec![0; 1280]);
    interleaved(&scene, &mut wrong);
    interleaved(&slow(5), &mut right);
    let (mut power, mut slope) = (0.0, 0.0);
    for (i, (a, b)) in wrong.iter().zip(&right).enumerate().skip(1).take(1278) {
        power += f64::from(a - b).powi(2);
        slope += (f64::from(right[i + 1] - right[i - 1]) / 20.0).powi(2);
    }
    let table = scene.equivalent_time.clone().unwrap();
    let errors: f64 = (0..5).map(|n| (table.phase(0, n).late * 1e9).powi(2)).sum::<f64>() / 5.0;
    let ratio = (power / slope).sqrt();
    println!("delay errors {:.3} ns rms seen as {ratio:.3} ns", errors.sqrt());
    assert!((ratio / errors.sqrt() - 1.0).abs() < 0.1);
}

/// What is switched on leaves all other draws as they were.
#[test]
fn effects_do_not_disturb_each_other() {
    let mut scene = one_echo();
    scene.noise.rms_steps = Some(50.0);
    let plain = synthesise(&scene, 9).unwrap();
    // A tone of no height goes the long way through the receiver and changes no bit.
    scene.interference.tones = vec![Tone {
        frequency_mhz: 1.0,
        amplitude_percent: 0.0,
    }];
    let long_way = synthesise(&scene, 9).unwrap();
    assert_eq!(plain.codes, long_way.codes);
    assert!(plain.truth.receiver.is_none() && long_way.truth.receiver.is_some());
    scene.drop_outs.lost_shots_percent = 100.0;
    let lost = synthesise(&scene, 9).unwrap();
    assert!(lost.truth.receiver.unwrap().lost && lost.truth.echoes.is_empty());
    let (_, spread) = moments(&lost.codes.iter().map(|c| f64::from(*c)).collect::<Vec<_>>());
    assert!((spread - 50.0).abs() < 4.0);
    let mut stepped = one_echo();
    stepped.receiver.gain_step_db = 2.0;
    stepped.receiver.gain_error_db = 1.0;
    stepped.record.gain_db = Some(-6.4);
    let made = synthesise(&stepped, 1).unwrap().truth;
    let mut plain = one_echo();
    plain.record.gain_db = Some(-6.0);
    let expected = synthesise(&plain, 1).unwrap().truth.echoes[0].amplitude_percent;
    let seen = 20.0 * (made.echoes[0].amplitude_percent / expected).log10();
    let error = made.receiver.unwrap().gain_error_db;
    assert!((seen - error).abs() < 1e-9 && error != 0.0);
}
