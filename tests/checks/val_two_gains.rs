//! A wall behind a delay line whose interface echo is five hundred times its back wall (54 dB), from records at two gains. Truth: the signal that
//! the check itself makes (oracle.rs): interface, back walls, noise of the receiver's input, an ideal converter; and the
//! simulator's walls, which share no code with the core.

use halfpulse::{
    AdcFormat, Decibels, Gauge, GaugeSetup, Hertz, Material, Metres, MetresPerSecond, NoReading, Probe, Record,
    SampleClock, Scratch, Seconds, Span, TwoGains, TwoGainsError, Window, Zero,
};
use halfpulse_sim::scene::{Back, DelayLine, ProbeKind, Scene};
use halfpulse_sim::synthesise::{Shot, Synthesiser};
use halfpulse_tests::oracle::{self, Random};
use halfpulse_tests::page::Figures;

const RATE: f64 = 50e6;
const SAMPLES: usize = 1024;
/// Interface echo at the quiet gain, in steps of 12 bits; the first back wall is 54 dB lower, the next ones by a third each.
const INTERFACE: f64 = 1400.0;

/// A place, and what the receiver does.
struct Place {
    wall_mm: f64,
    interface_us: f64,
    /// Of the receiver, at the quiet gain, rms in steps.
    noise: f64,
    jitter_ns: f64,
}

impl Place {
    fn shot(&self, gain_db: f64, random: &mut Random) -> Vec<i16> {
        let gain = 10f64.powf(gain_db / 20.0);
        let trip = 2e-3 * self.wall_mm / 5920.0;
        let late = 1e-9 * self.jitter_ns * random.normal();
        let samples: Vec<f64> = (0..SAMPLES)
            .map(|i| {
                let t = i as f64 / RATE - 1e-6 * self.interface_us - late;
                let pulse = |n: f64| oracle::gaussian_pulse(t - n * trip, 5e6, 0.6);
                let echoes = pulse(0.0) - 0.002 * (pulse(1.0) + 0.66 * pulse(2.0) + 0.44 * pulse(3.0));
                gain * (INTERFACE * echoes + self.noise * random.normal())
            })
            .collect();
        oracle::codes(&samples, 12)
    }
}

fn record(codes: &[i16]) -> Record<'_> {
    Record::new(codes, AdcFormat::signed(12), SampleClock::new(Hertz::new(RATE as f32)))
}

fn setup(span: Span) -> GaugeSetup {
    GaugeSetup::new(
        Hertz::new(RATE as f32),
        Probe::delay_line(Hertz::from_mhz(5.0), 0.6)
            .with_element_diameter(Metres::new(100.0))
            .with_couplant_film(Metres::ZERO),
        Material::new(MetresPerSecond::new(5920.0), MetresPerSecond::ZERO),
        Zero::new(Seconds::ZERO, Seconds::ZERO),
        span,
        Window {
            from: Seconds::from_us(4.0),
            to: Seconds::from_us(20.0),
        },
    )
}

/// Readings right within k = 2 as often as they should be, whatever the gain step's error; the loud record alone is refused or
/// doubted, the quiet one alone several times less certain.
#[test]
fn val_two_gains() {
    let mut figures = Figures::of("val_two_gains");
    let mut scratch = Box::new(Scratch::<SAMPLES>::ZERO);
    let stated = Decibels::new(46.0);
    for (step_error, jitter_ns, noise) in [
        (0.0, 0.0, 0.05),
        (1.5, 0.0, 0.05),
        (-1.5, 0.0, 0.05),
        (0.0, 1.0, 0.05),
        (0.0, 0.0, 0.15),
    ] {
        let setup = setup(Span::InterfaceToBackWall).with_trigger_jitter(Seconds::from_ns(jitter_ns as f32));
        let mut gauge = Gauge::new(setup, scratch.workspace()).expect("a sound set-up");
        let mut random = Random::new(91);
        let trials = 250;
        let (mut inside, mut read, mut squares, mut uncertainties, mut doubted) = (0, 0, 0.0, 0.0, 0);
        let (mut alone, mut quiet_squares) = (0, 0.0);
        for _ in 0..trials {
            let place = Place {
                wall_mm: 6.0 + 4.0 * random.uniform(),
                interface_us: 6.5 + 0.1 * random.uniform(),
                noise,
                jitter_ns,
            };
            let (quiet, loud) = (place.shot(0.0, &mut random), place.shot(46.0 + step_error, &mut random));
            let error = |wall: Metres| f64::from(wall.get()) * 1e6 - 1e3 * place.wall_mm;
            let pair = TwoGains::new(record(&quiet), record(&loud), stated).expect("two gains");
            if let Ok(reading) = gauge.measure_two_gains(&pair) {
                let u = f64::from(reading.standard_uncertainty.get()) * 1e6;
                let error = error(reading.thickness);
                read += 1;
                doubted += u32::from(!reading.doubts.is_empty());
                inside += u32::from(error.abs() <= 2.0 * u);
                squares += error * error;
                uncertainties += u;
            }
            // The loud record alone, and the quiet one alone.
            alone += u32::from(
                gauge
                    .measure(&record(&loud))
                    .is_ok_and(|reading| reading.doubts.is_empty()),
            );
            if let Ok(reading) = gauge.measure(&record(&quiet)) {
                quiet_squares += error(reading.thickness).powi(2).min(1e6) / f64::from(trials);
            }
        }
        let share = f64::from(inside) / f64::from(read);
        figures.line(&format!(
            "step error {step_error} dB, jitter {jitter_ns} ns, noise {noise} steps: {read} of {trials} read, {doubted} doubted, {:.1} +- {:.1} % inside, {:.3} um rms, stated {:.3} um; loud record alone undoubted {alone}, quiet one alone {:.2} um rms",
            100.0 * share,
            196.0 * (share * (1.0 - share) / f64::from(read)).sqrt(),
            (squares / f64::from(read)).sqrt(),
            uncertainties / f64::from(read),
            quiet_squares.sqrt()
        ));
        assert!(read >= trials * 97 / 100 && share >= 0.93 && doubted <= trials / 50);
        assert_eq!(alone, 0);
        assert!(jitter_ns > 0.0 || quiet_squares > 3.0 * squares / f64::from(read));
    }
    figures.check();
}

/// What contradicts itself is a set-up error; what shows no interface is refused.
#[test]
fn two_gains_that_contradict() {
    let mut random = Random::new(92);
    let place = Place {
        wall_mm: 8.0,
        interface_us: 6.5,
        noise: 0.3,
        jitter_ns: 0.0,
    };
    let (quiet, loud) = (place.shot(0.0, &mut random), place.shot(20.0, &mut random));
    let pair = |step: f32| TwoGains::new(record(&quiet), record(&loud), Decibels::new(step)).map(|_| ());
    assert_eq!(pair(20.0), Ok(()));
    for step in [0.0, -20.0, 81.0, f32::NAN] {
        assert_eq!(pair(step), Err(TwoGainsError::Step));
    }
    for step in [10.0, 30.0] {
        let Err(TwoGainsError::Contradicted { seen }) = pair(step) else {
            panic!("{step} dB passed");
        };
        assert!((seen.get() - 20.0).abs() < 0.5, "{seen:?}");
    }
    // Swapped.
    let swapped = TwoGains::new(record(&loud), record(&quiet), Decibels::new(20.0));
    assert!(matches!(swapped, Err(TwoGainsError::Contradicted { .. })));
    let late = SampleClock {
        first_sample: Seconds::from_ns(20.0),
        ..record(&loud).clock()
    };
    let moved = Record::new(&loud, AdcFormat::signed(12), late);
    let differs = TwoGains::new(record(&quiet), moved, Decibels::new(20.0));
    assert!(matches!(differs, Err(TwoGainsError::RecordsDiffer)));
    let mut scratch = Box::new(Scratch::<SAMPLES>::ZERO);
    let mut gauge = Gauge::new(setup(Span::InterfaceToBackWall), scratch.workspace()).expect("a sound set-up");
    let silence: Vec<i16> = (0..SAMPLES).map(|_| random.normal().round() as i16).collect();
    let pair = TwoGains::new(record(&silence), record(&loud), Decibels::new(20.0)).expect("nothing to contradict");
    assert!(matches!(gauge.measure_two_gains(&pair), Err(NoReading::NoEcho { .. })));
}

/// A simulated steel wall between plastic and a medium hardly softer, so that its back wall returns 15 %: 31 dB below the
/// interface echo, the next one 16 dB lower. `gain_db` is asked of a receiver whose steps are off by 0.3 dB rms.
fn simulated(wall_mm: f64, delay_mm: f64, gain_db: f64, shot: u64) -> Shot {
    let mut scene = Scene::contact(5.0, 60.0, "carbon steel", wall_mm);
    scene.probe.kind = ProbeKind::DelayLine;
    scene.delay_line = Some(DelayLine {
        material: Some("polystyrene".into()),
        length_mm: Some(delay_mm),
        attenuation_exponent: 1.0,
        ..DelayLine::default()
    });
    scene.wall.velocity_m_s = Some(5920.0);
    scene.back = Back {
        impedance_mrayl: Some(34.3),
        ..Back::default()
    };
    scene.record.samples = SAMPLES;
    scene.record.first_sample_us = 9.0;
    (scene.record.first_back_wall_percent, scene.record.gain_db) = (None, Some(gain_db));
    (scene.noise.snr_db, scene.noise.rms_steps) = (None, Some(0.3));
    scene.receiver.thermal_noise_uv = 60.0;
    (scene.receiver.gain_step_db, scene.receiver.gain_error_db) = (0.5, 0.3);
    Synthesiser::new(&scene).expect("a sound scene").shot(93, shot)
}

/// The same of simulated walls: quiet and loud record of each wall read right within k = 2; the loud one alone, whose interface echo
/// is clipped, hardly ever without a doubt, and never grossly wrong then.
#[test]
fn val_two_gains_of_simulated_walls() {
    let mut scratch = Box::new(Scratch::<SAMPLES>::ZERO);
    let mut setup = setup(Span::InterfaceToBackWall);
    setup.window = Window {
        from: Seconds::from_us(10.0),
        to: Seconds::from_us(29.0),
    };
    let mut gauge = Gauge::new(setup, scratch.workspace()).expect("a sound set-up");
    let mut random = Random::new(94);
    let trials = 150;
    let (mut read, mut inside, mut doubted, mut alone) = (0, 0, 0, 0);
    let (mut squares, mut uncertainties, mut gross) = (0.0, 0.0, 0);
    for shot in 0..trials {
        let wall_mm = 5.0 + 6.0 * random.uniform();
        let delay_mm = 14.0 + 0.5 * random.uniform();
        let (quiet, loud) = (
            simulated(wall_mm, delay_mm, 0.0, 2 * shot),
            simulated(wall_mm, delay_mm, 26.0, 2 * shot + 1),
        );
        assert!(loud.codes.iter().any(|&code| code == 2047 || code == -2048));
        let pair = TwoGains::new(quiet.record(), loud.record(), Decibels::new(26.0)).expect("two gains of one place");
        match gauge.measure_two_gains(&pair) {
            Ok(reading) => {
                let error = f64::from(reading.thickness.as_mm()) - wall_mm;
                let u = f64::from(reading.standard_uncertainty.as_mm());
                read += 1;
                doubted += u32::from(!reading.doubts.is_empty());
                inside += u32::from(error.abs() <= 2.0 * u);
                gross += u32::from(error.abs() > 2.0 * u + 0.25 * 5920.0 / 5e6 * 1e3);
                squares += error * error;
                uncertainties += u;
            }
            Err(why) => println!("{wall_mm:.3} mm: {why}"),
        }
        if let Ok(reading) = gauge.measure(&loud.record())
            && reading.doubts.is_empty()
        {
            // What is left of the interface echo may tell its place.
            let error = f64::from(reading.thickness.as_mm()) - wall_mm;
            alone += 1;
            gross += u32::from(error.abs() > f64::from(reading.expanded().as_mm()) + 0.25 * 5920.0 / 5e6 * 1e3);
        }
    }
    let share = f64::from(inside) / f64::from(read);
    println!(
        "simulated walls, 26 dB apart: {read} of {trials} read, {doubted} doubted, {:.1} +- {:.1} % inside, {gross} gross, {:.3} um rms, stated {:.3} um; loud record alone undoubted {alone}",
        100.0 * share,
        196.0 * (share * (1.0 - share) / f64::from(read)).sqrt(),
        1e3 * (squares / f64::from(read)).sqrt(),
        1e3 * uncertainties / f64::from(read)
    );
    assert!(read >= trials as u32 * 97 / 100 && share >= 0.91 && doubted <= trials as u32 / 20);
    assert!(gross == 0 && alone <= trials as u32 / 10);
}
