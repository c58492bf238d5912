//! A reference pulse that was learned through a thick block has that way's turned phase in it. What is corrected is
//! D(S) / D(S_ref): against Williams' exact integral, and through a whole calibration in the simulated world.

use halfpulse::echo::pulse::PulseQuality;
use halfpulse::{
    AdcFormat, EchoRole, Gauge, GaugeSetup, Hertz, Material, Metres, MetresPerSecond, Probe, Record, SampleClock,
    Scratch, Seconds, Span, Window, Zero,
};
use halfpulse_sim::calibrating::block::BlockRecord;
use halfpulse_sim::calibrating::{Learn, calibrate};
use halfpulse_sim::measuring::HeapScratch;
use halfpulse_sim::record_file::RecordFile;
use halfpulse_sim::scene::{Layer, Scene};
use halfpulse_sim::setup_file::SetupFile;
use halfpulse_sim::synthesise::{Synthesiser, synthesise};
use halfpulse_tests::oracle::Random;
use std::f64::consts::{PI, TAU};
use std::path::Path;

const VELOCITY: f64 = 5920.0;
const CENTRE: f64 = 5e6;
const RATE: f64 = 50e6;
const SAMPLES: usize = 4096;
const BLOCK_MM: f64 = 25.0;

/// Williams' integral for the round trip `z` of a piston of radius `a` at wavenumber `k` (formula from memory; the table in
/// tests/published was made of it with SciPy), by the midpoint rule:
/// 1 - (4/π) ∫ exp(-jk [sqrt(z² + 4 a² cos² ϑ) - z]) sin² ϑ dϑ over 0 to π/2.
fn williams(k: f64, z: f64, a: f64) -> (f64, f64) {
    const STEPS: usize = 600;
    let (mut re, mut im) = (0.0, 0.0);
    for step in 0..STEPS {
        let (sin, cos) = (PI / 2.0 * (step as f64 + 0.5) / STEPS as f64).sin_cos();
        // sqrt(z² + x²) - z without the difference of near numbers.
        let squared = 4.0 * a * a * cos * cos;
        let further = squared / ((z * z + squared).sqrt() + z);
        let (s, c) = (k * further).sin_cos();
        re += c * sin * sin;
        im -= s * sin * sin;
    }
    let scale = 4.0 / PI * (PI / 2.0) / STEPS as f64;
    (1.0 - scale * re, -scale * im)
}

/// Two back walls of a wall, 5 MHz and 60 %, with the exact diffraction of a 6 mm element, on a 50 MS/s record.
fn samples(wall_mm: f64) -> Vec<f64> {
    let spread = 0.6 * CENTRE / 2.350_788;
    let step = RATE / SAMPLES as f64;
    let mut out = vec![0.0; SAMPLES];
    for line in (0.6e6 / step) as usize..(9.4e6 / step) as usize {
        let f = line as f64 * step;
        let weight = (-(f - CENTRE).powi(2) / (2.0 * spread * spread)).exp();
        for (multiple, height) in [(1.0, 1.0), (2.0, 0.6)] {
            let path = multiple * 2e-3 * wall_mm;
            let delay = 1e-6 + path / VELOCITY;
            if delay > 79e-6 {
                continue;
            }
            let (re, im) = williams(TAU * f / VELOCITY, path, 3e-3);
            // A rotation from sample to sample.
            let (mut sin, mut cos) = (-TAU * f * delay).sin_cos();
            let (turn_sin, turn_cos) = (TAU * f / RATE).sin_cos();
            for sample in &mut out {
                *sample += height * weight * (re * cos - im * sin);
                (cos, sin) = (cos * turn_cos - sin * turn_sin, sin * turn_cos + cos * turn_sin);
            }
        }
    }
    out
}

fn codes(samples: &[f64], random: &mut Random) -> Vec<i16> {
    let highest = samples.iter().fold(0.0f64, |m, s| m.max(s.abs()));
    samples
        .iter()
        .map(|s| (s / highest * 20_000.0 + 3.0 * random.normal()).round() as i16)
        .collect()
}

fn setup(zero: Seconds) -> GaugeSetup {
    GaugeSetup::new(
        Hertz::new(RATE as f32),
        Probe::contact(Hertz::new(CENTRE as f32), 0.6)
            .with_element_diameter(Metres::from_mm(6.0))
            .with_couplant_film(Metres::ZERO),
        Material::new(MetresPerSecond::new(VELOCITY as f32), MetresPerSecond::ZERO),
        Zero::new(zero, Seconds::ZERO).with_learned_on(Metres::ZERO),
        Span::TransmissionPulseToBackWall,
        Window {
            from: Seconds::from_us(1.6),
            to: Seconds::from_us(80.0),
        },
    )
}

/// A pulse learned on 25 mm and the zero learned with it on the same block, then 4 to 100 mm: by how much readings
/// are off, in micrometres, with what the set-up says of the pulse's way.
fn errors(learned_on: Option<Metres>) -> Vec<(f64, f64, f64)> {
    let mut random = Random::new(11);
    let block = samples(BLOCK_MM);
    let place = ((1e-6 + 2e-3 * BLOCK_MM / VELOCITY) * RATE) as usize;
    let pulse: Vec<f32> = block[place - 26..place + 30].iter().map(|&s| s as f32).collect();
    let mut scratch = Box::new(Scratch::<SAMPLES>::ZERO);
    let mut gauge = Gauge::new(setup(Seconds::from_us(1.0)), scratch.workspace()).expect("a good set-up");
    let quality = PulseQuality {
        learned_on,
        ..PulseQuality::UNKNOWN
    };
    gauge.learn_pulse_of_quality(&pulse, quality).expect("a pulse");
    assert_eq!(gauge.pulse_learned_on(), learned_on);
    let mut look = |gauge: &mut Gauge<'_>, samples: &[f64]| {
        let codes = codes(samples, &mut random);
        let record = Record::new(&codes, AdcFormat::signed(16), SampleClock::new(Hertz::new(RATE as f32)));
        let reading = gauge.measure(&record).expect("a reading");
        let first = gauge
            .findings()
            .echoes
            .iter()
            .find(|echo| echo.role == EchoRole::BackWall(1));
        (reading, first.expect("a first back wall").arrival)
    };
    let (_, arrival) = look(&mut gauge, &block);
    let thickness = Metres::from_mm(BLOCK_MM as f32);
    let straight = arrival - gauge.path_deviation(thickness);
    let zero = straight - Seconds::new((2e-3 * BLOCK_MM / VELOCITY) as f32);
    gauge.change_setup(setup(zero)).expect("a good set-up");
    assert_eq!(gauge.pulse_learned_on(), learned_on);
    [4.0, 6.0, 10.0, 16.0, 25.0, 40.0, 60.0, 100.0]
        .into_iter()
        .map(|mm| {
            let (reading, _) = look(&mut gauge, &samples(mm));
            assert!(reading.doubts.is_empty(), "{mm} mm: {}", reading.doubts);
            let error = (f64::from(reading.thickness.as_mm()) - mm) * 1e3;
            (mm, error, f64::from(reading.expanded().as_mm()) * 1e3)
        })
        .collect()
}

/// Exact integral: what the beam does between 25 mm and the wall is up to 90 µm; a fifteenth of it is left where the pulse's
/// way is known, and more where it is not.
#[test]
fn val_a_pulse_learned_on_25_mm_against_the_exact_integral() {
    let shift = |mm: f64| {
        let (re, im) = williams(TAU * CENTRE / VELOCITY, 2e-3 * mm, 3e-3);
        im.atan2(re) / (TAU * CENTRE) * VELOCITY / 2.0 * 1e6
    };
    let known = errors(Some(Metres::from_mm(BLOCK_MM as f32)));
    let unknown = errors(None);
    let (mut worst, mut worst_unknown, mut most) = (0.0f64, 0.0f64, 0.0f64);
    for ((mm, error, expanded), (_, of_unknown, _)) in known.iter().zip(&unknown) {
        let uncorrected = shift(*mm) - shift(BLOCK_MM);
        println!(
            "{mm} mm: beam {uncorrected:+.1} um against the block, off by {error:+.2} um (U {expanded:.2}), pulse's way not known {of_unknown:+.2}"
        );
        assert!(error.abs() < *expanded, "{mm} mm: {error} of {expanded}");
        worst = worst.max(error.abs());
        worst_unknown = worst_unknown.max(of_unknown.abs());
        most = most.max(uncorrected.abs());
    }
    println!("worst {worst:.2} um, {worst_unknown:.2} um with the pulse's way not known, of {most:.1} um");
    assert!(
        worst < most / 15.0 && worst < worst_unknown,
        "{worst} {worst_unknown} {most}"
    );
}

/// The simulated world's own beam and a whole calibration: pulse and zero learned on 25 mm by `calibrate`, then 4 to 100 mm
/// read with the set-up that it wrote. Applied once: at the block itself nothing is left.
#[test]
fn val_calibrated_on_a_thick_block() {
    let scene = |mm: f64| {
        let mut scene = Scene::contact(5.0, 60.0, "carbon steel", mm);
        scene.record.samples = SAMPLES;
        scene.record.sample_rate_mhz = 50.0;
        scene.record.bits = 14;
        scene.probe.element_diameter_mm = Some(6.0);
        scene.probe.beam_diffraction = true;
        scene.wall = Layer {
            velocity_m_s: Some(VELOCITY),
            ..scene.wall
        };
        scene.noise.snr_db = Some(45.0);
        scene
    };
    let text = "version = 1\n[record]\nsample_rate_mhz = 50.0\nbits = 14\n[probe]\nkind = \"contact\"\n\
        centre_frequency_mhz = 5.0\nrelative_bandwidth_percent = 60\nelement_diameter_mm = 6.0\ncouplant_film_um = 0\n\
        [material]\nvelocity_m_s = 5920.0\nvelocity_standard_uncertainty_m_s = 0\n[zero]\noffset_ns = 0\n\
        standard_uncertainty_ns = 5\n[measure]\nspan = \"transmission-pulse-to-back-wall\"\nfrom_us = 0.8\nto_us = 80\n";
    let file = SetupFile::parse(Path::new("setup.toml"), text).expect("a good set-up");
    let mut maker = Synthesiser::new(&scene(BLOCK_MM)).expect("a good scene");
    let shots: Vec<_> = (0..64).map(|number| maker.shot(5, number)).collect();
    let (format, clock) = (shots[0].format, shots[0].clock);
    let record = RecordFile::from_codes(shots.into_iter().map(|shot| shot.codes).collect(), format);
    let block = BlockRecord::new(Path::new("block"), (BLOCK_MM, 0.0005), record, clock).expect("a block");
    let learned = calibrate(&file, &[block], Learn::Zero, "pulse.npy").expect("a calibration");
    assert_eq!(learned.keys.probe.reference_pulse_learned_on_mm, Some(BLOCK_MM));
    let written = SetupFile::parse(Path::new("setup.toml"), &learned.keys.to_toml()).expect("what was written");
    let mut scratch = HeapScratch::new(SAMPLES);
    let mut gauge = written
        .gauge_with_pulse(scratch.workspace(), Some(&learned.pulse))
        .expect("a gauge");
    assert_eq!(gauge.pulse_learned_on(), Some(Metres::from_mm(BLOCK_MM as f32)));
    for mm in [4.0, 6.0, 10.0, 16.0, 25.0, 40.0, 60.0, 100.0] {
        let shot = synthesise(&scene(mm), 9).expect("a good scene");
        let reading = gauge.measure(&shot.record()).expect("a reading");
        let error = (f64::from(reading.thickness.as_mm()) - mm) * 1e3;
        let expanded = f64::from(reading.expanded().as_mm()) * 1e3;
        println!("{mm} mm: {error:+.2} um, U {expanded:.2} um, {}", reading.doubts);
        assert!(error.abs() < expanded, "{mm} mm: {error} of {expanded}");
        assert!(mm != BLOCK_MM || error.abs() < 1.5, "{error} at the block");
    }
}
