//! What a receiver that is not ideal does to readings: the same walls through one effect after the other.
//!
//! Truth: the simulator's scene. Where a published law says what an effect must do to an arrival, it is
//! asserted; all else is printed, with the readings that had no doubt and yet lay outside their stated
//! uncertainty.

use halfpulse::{
    Gauge, GaugeSetup, Hertz, Material, Metres, MetresPerSecond, Probe, Scratch, Seconds, Span, Window, Zero,
};
use halfpulse_sim::front_end::{Purpose, Random};
use halfpulse_sim::scene::{Bursts, Hum, Scene, Spikes, Tone, TransmissionPulse};
use halfpulse_sim::synthesise::Synthesiser;

const VELOCITY: f64 = 5920.0;

/// A 5 MHz probe on steel at 50 MS/s and 12 bits, 40 dB of signal over noise.
fn scene(wall_mm: f64) -> Scene {
    let mut scene = Scene::contact(5.0, 60.0, "carbon steel", wall_mm);
    scene.wall.velocity_m_s = Some(VELOCITY);
    scene.record.samples = 2048;
    scene.noise.snr_db = Some(40.0);
    scene.transmission_pulse = Some(TransmissionPulse {
        amplitude_percent: 300.0,
        decay_ns: 40.0,
        recovery_percent: 20.0,
        recovery_ns: 200.0,
    });
    scene
}

fn setup(span: Span) -> GaugeSetup {
    GaugeSetup::new(
        Hertz::from_mhz(50.0),
        Probe::contact(Hertz::from_mhz(5.0), 0.6)
            .with_element_diameter(Metres::new(100.0))
            .with_couplant_film(Metres::ZERO),
        Material::new(MetresPerSecond::new(VELOCITY as f32), MetresPerSecond::ZERO),
        Zero::new(Seconds::ZERO, Seconds::ZERO),
        span,
        Window {
            from: Seconds::from_us(0.9),
            to: Seconds::from_us(40.0),
        },
    )
}

/// What came of one effect.
#[derive(Default)]
struct Tally {
    refused: u32,
    doubted: u32,
    outside: u32,
    gross: u32,
    /// Errors of all that was read and not gross, in metres.
    errors: Vec<f64>,
}

impl Tally {
    fn mean(&self) -> f64 {
        self.errors.iter().sum::<f64>() / self.errors.len() as f64
    }

    fn spread(&self) -> f64 {
        let mean = self.mean();
        let sum: f64 = self.errors.iter().map(|error| (error - mean).powi(2)).sum();
        (sum / (self.errors.len() - 1) as f64).sqrt()
    }
}

const SPANS: [Span; 2] = [Span::TransmissionPulseToBackWall, Span::BackWallToBackWall];

/// `walls` walls of 4 to 25 mm, `shots` shots of each, by both spans.
fn through(change: &dyn Fn(&mut Scene), walls: u64, shots: u64) -> [Tally; 2] {
    let mut scratch = Box::new(Scratch::<2048>::ZERO);
    let mut tallies = <[Tally; 2]>::default();
    for wall in 0..walls {
        let mut random = Random::new(20, Purpose::Variation, wall);
        let mut scene = scene(4.0 + 21.0 * random.uniform());
        change(&mut scene);
        let wall_mm = scene.wall.thickness_mm;
        let mut maker = Synthesiser::new(&scene).expect("the scene is sound");
        for number in 0..shots {
            let shot = maker.shot(wall, number);
            for (tally, span) in tallies.iter_mut().zip(SPANS) {
                let mut gauge = Gauge::new(setup(span), scratch.workspace()).expect("the set-up is sound");
                let Ok(reading) = gauge.measure(&shot.record()) else {
                    tally.refused += 1;
                    continue;
                };
                let error = f64::from(reading.thickness.get()) - wall_mm * 1e-3;
                let expanded = f64::from(reading.expanded().get());
                let gross = error.abs() > expanded + 0.25 * VELOCITY / 5e6;
                if reading.doubts.is_empty() {
                    tally.outside += u32::from(error.abs() > expanded);
                    tally.gross += u32::from(gross);
                } else {
                    tally.doubted += 1;
                }
                if !gross {
                    tally.errors.push(error);
                }
            }
        }
    }
    tallies
}

/// An effect by its name, and how it is put into a scene.
type Effect = (&'static str, fn(&mut Scene));

const EFFECTS: [Effect; 26] = [
    ("none", |_| {}),
    ("trigger jitter 1 ns", |s| s.timing.trigger_jitter_ns = 1.0),
    ("trigger jitter 10 ns", |s| s.timing.trigger_jitter_ns = 10.0),
    ("aperture jitter 1 ns", |s| s.timing.aperture_jitter_ns = 1.0),
    ("free-running clock", |s| s.timing.free_running = true),
    ("clock 1000 ppm fast", |s| s.timing.clock_error_ppm = 1000.0),
    ("band 2 to 10 MHz", |s| {
        s.receiver.high_pass_mhz = Some(2.0);
        s.receiver.low_pass_mhz = Some(10.0);
    }),
    ("band 4 to 6 MHz", |s| {
        s.receiver.high_pass_mhz = Some(4.0);
        s.receiver.low_pass_mhz = Some(6.0);
    }),
    ("8 bits", |s| s.record.bits = 8),
    ("8 bits, 3 % of full scale", |s| {
        s.record.bits = 8;
        s.record.first_back_wall_percent = Some(3.0);
    }),
    ("integral nonlinearity 8 steps", |s| {
        s.converter.integral_nonlinearity_steps = 8.0
    }),
    ("integral nonlinearity 100 steps", |s| {
        s.converter.integral_nonlinearity_steps = 100.0
    }),
    ("differential nonlinearity 0.5", |s| {
        s.converter.differential_nonlinearity_steps = 0.5
    }),
    ("20 % of codes missing", |s| s.converter.missing_codes_percent = 20.0),
    ("offset 50 steps", |s| s.converter.offset_steps = 50.0),
    ("bit 5 stuck high", |s| s.converter.bits_stuck_high = vec![5]),
    ("tone 1 MHz, 1 %", |s| tone(s, 1.0, 1.0)),
    ("tone 5 MHz, 1 %", |s| tone(s, 5.0, 1.0)),
    ("tone 5 MHz, 5 %", |s| tone(s, 5.0, 5.0)),
    ("hum 20 %", |s| {
        s.interference.hum = Some(Hum {
            frequency_hz: 50.0,
            amplitude_percent: 20.0,
        });
    }),
    ("bursts of 5 MHz, 10 %", |s| {
        s.interference.bursts = Some(Bursts {
            period_us: 8.0,
            length_us: 0.6,
            frequency_mhz: 5.0,
            amplitude_percent: 10.0,
            after_trigger_us: None,
        });
    }),
    ("spikes 100 per ms, 20 %", |s| {
        s.interference.spikes = Some(Spikes {
            rate_per_ms: 100.0,
            amplitude_percent: 20.0,
            decay_ns: 50.0,
        });
    }),
    ("1 % of samples missing", |s| s.drop_outs.missing_per_million = 10_000.0),
    ("one block repeated", |s| s.drop_outs.repeated_per_record = 1.0),
    ("one block skipped", |s| s.drop_outs.skipped_per_record = 1.0),
    ("every shot lost", |s| s.drop_outs.lost_shots_percent = 100.0),
];

fn tone(scene: &mut Scene, frequency_mhz: f64, amplitude_percent: f64) {
    scene.interference.tones = vec![Tone {
        frequency_mhz,
        amplitude_percent,
    }];
}

/// The table. What is asserted: without an effect nothing is outside beyond chance, and a record without
/// echoes is never read.
#[test]
fn prints_what_each_effect_does_to_readings() {
    println!("{:32} | pulse to back wall, 120 records   | back wall to back wall", "");
    println!("{:32} | refused, doubted, outside, gross, um rms", "effect");
    for (name, change) in EFFECTS {
        let tallies = through(&change, 30, 4);
        let mut line = format!("{name:32}");
        for tally in &tallies {
            let square: f64 = tally.errors.iter().map(|error| error * error).sum();
            line += &format!(
                " | {:4} {:4} {:4} {:4} {:8.2}",
                tally.refused,
                tally.doubted,
                tally.outside,
                tally.gross,
                1e6 * (square / tally.errors.len().max(1) as f64).sqrt()
            );
        }
        println!("{line}");
        for tally in &tallies {
            match name {
                // Two standard uncertainties leave 4.6 % of 120 outside: 5.5, and 13 with a chance of 0.2 %.
                "none" => assert!(tally.gross == 0 && tally.outside <= 13 && tally.refused == 0, "{line}"),
                "every shot lost" => assert_eq!(tally.refused, 120, "{line}"),
                _ => {}
            }
        }
    }
}

/// Trigger jitter moves all echoes together: its full weight on a reading from the pulse (1 ns is 2.96 um
/// of steel), none on one between echoes. A free-running clock adds sample period / sqrt(12), 5.77 ns, and
/// half a period on average. A clock that is 1000 ppm fast reads a thousandth thick.
#[test]
fn val_timing_errors_reach_readings_as_they_should() {
    let nanosecond = 0.5e-9 * VELOCITY;
    let at = |change: fn(&mut Scene)| {
        through(
            &|scene: &mut Scene| {
                scene.wall.thickness_mm = 10.0;
                change(scene);
            },
            1,
            250,
        )
    };
    let plain = at(|_| {});
    let added = |tally: &Tally, plain: &Tally| (tally.spread().powi(2) - plain.spread().powi(2)).max(0.0).sqrt();
    let jitter = at(|scene| scene.timing.trigger_jitter_ns = 3.0);
    println!(
        "trigger jitter 3 ns: {:.3} ns from the pulse",
        added(&jitter[0], &plain[0]) / nanosecond
    );
    assert!((added(&jitter[0], &plain[0]) / nanosecond - 3.0).abs() < 0.45);
    assert!((jitter[1].spread() / plain[1].spread() - 1.0).abs() < 0.2);
    let free = at(|scene| scene.timing.free_running = true);
    println!(
        "free-running: {:.3} ns, mean {:.2} ns",
        added(&free[0], &plain[0]) / nanosecond,
        (free[0].mean() - plain[0].mean()) / nanosecond
    );
    assert!((added(&free[0], &plain[0]) / nanosecond - 5.77).abs() < 0.6);
    assert!(((free[0].mean() - plain[0].mean()) / nanosecond - 10.0).abs() < 1.2);
    assert!((free[1].spread() / plain[1].spread() - 1.0).abs() < 0.2);
    let fast = at(|scene| scene.timing.clock_error_ppm = 1000.0);
    for (fast, plain) in fast.iter().zip(&plain) {
        let thicker = fast.mean() - plain.mean();
        println!("1000 ppm: {:.3} um on 10 mm", thicker * 1e6);
        assert!((thicker * 1e6 - 10.0).abs() < 0.2);
    }
}
