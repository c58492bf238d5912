//! The joint fit of a back-wall train against its Cramér-Rao bound, and what the stated uncertainty covers.
//!
//! Truth: the simulator's clean train (5 MHz, 60 %, 50 MS/s, 12 bit, six echoes), whose period is known. The
//! bound is worked out numerically from the pulse's samples with start and all amplitudes free
//! (Kay, Fundamentals of Statistical Signal Processing, chapter 3: Fisher information of a signal in white
//! noise; from memory). The reference pulse is learned on a block, as `halfpulse calibrate` does; the set-up's
//! velocity is exact and no other term enters.

use halfpulse::{
    Gauge, GaugeSetup, Hertz, Material, Metres, MetresPerSecond, Probe, Scratch, Seconds, Span, Window, Zero,
};
use halfpulse_sim::calibrating::block::{self, BlockRecord};
use halfpulse_sim::calibrating::cut;
use halfpulse_sim::front_end::{Purpose, Random};
use halfpulse_sim::record_file::RecordFile;
use halfpulse_sim::scene::Scene;
use halfpulse_sim::synthesise::{Synthesiser, Variation};
use halfpulse_tests::page::Figures;
use halfpulse_tests::{oracle, readme};
use std::path::Path;

const SHOTS: u64 = 2000;
const WALL_MM: f64 = 10.0;
const VELOCITY: f64 = 5920.0;
const RATE: f64 = 50e6;

fn train(decay: f64, snr_db: f64) -> Scene {
    let mut scene = Scene::contact(5.0, 60.0, "carbon steel", WALL_MM);
    scene.record.samples = 4096;
    scene.wall.velocity_m_s = Some(VELOCITY);
    scene.echoes.back_walls = Some(6);
    scene.echoes.decay = Some(decay);
    scene.noise.snr_db = Some(snr_db);
    scene
}

fn setup() -> GaugeSetup {
    GaugeSetup::new(
        Hertz::from_mhz(50.0),
        // So wide an element has a plane beam: no term for its spreading.
        Probe::contact(Hertz::from_mhz(5.0), 0.6)
            .with_couplant_film(Metres::ZERO)
            .with_element_diameter(Metres::new(100.0)),
        Material::new(MetresPerSecond::new(VELOCITY as f32), MetresPerSecond::ZERO),
        Zero::new(Seconds::ZERO, Seconds::ZERO),
        Span::BackWallToBackWall,
        Window {
            from: Seconds::from_us(0.5),
            to: Seconds::from_us(80.0),
        },
    )
}

/// Learns the pulse from 256 shots on a block, at 40 dB.
fn learn(gauge: &mut Gauge<'_>) {
    let mut maker = Synthesiser::new(&train(0.7, 40.0)).expect("the scene is sound");
    let shots: Vec<_> = (0..256).map(|shot| maker.shot(99, shot)).collect();
    let (format, clock) = (shots[0].format, shots[0].clock);
    let file = RecordFile::from_codes(shots.into_iter().map(|shot| shot.codes).collect(), format);
    let block = BlockRecord::new(Path::new("block"), (WALL_MM, 0.001), file, clock).expect("the block is sound");
    let times = block::measure(gauge, &block, false).expect("the block can be read");
    let pulse = cut::reference_pulse(&block, &times, gauge.setup()).expect("a pulse can be cut");
    gauge.learn_pulse(&pulse).expect("the pulse fits");
}

/// Standard deviation of a thickness at the bound.
fn bound(decay: f64, snr_db: f64, amplitude: f64) -> f64 {
    let sigma = amplitude / 10f64.powf(snr_db / 20.0);
    let noise = (sigma * sigma + 1.0 / 12.0).sqrt();
    let times: Vec<f64> = (0..4096).map(|i| f64::from(i) / RATE).collect();
    let amplitudes: Vec<f64> = (0..6).map(|n| amplitude * decay.powi(n)).collect();
    let period = 2.0 * WALL_MM * 1e-3 / VELOCITY;
    let pulse = |t: f64| oracle::gaussian_pulse(t, 5e6, 0.6);
    0.5 * VELOCITY * oracle::period_bound(pulse, &times, 0.0, period, &amplitudes, noise)
}

#[test]
fn val_train_fit() {
    let mut figures = Figures::of("val_train_fit");
    let mut scratch = Box::new(Scratch::<4096>::ZERO);
    let mut gauge = Gauge::new(setup(), scratch.workspace()).expect("the set-up is sound");
    learn(&mut gauge);
    let (mut ratios, mut covered, mut all) = (Vec::new(), 0u32, 0u32);
    let (mut beyond, mut doubted, mut refused) = (0u32, 0u32, 0u32);
    let half_cycle = 0.5 * VELOCITY * 0.5 / 5e6;
    // Noise of its own for each, so that their scatter tells how sure the figures are.
    for (seed, decay, snr_db) in [
        (5, 0.7, 16.0),
        (6, 0.85, 16.0),
        (7, 0.7, 20.0),
        (8, 0.85, 20.0),
        (9, 0.7, 30.0),
        (10, 0.85, 30.0),
        (11, 0.7, 40.0),
        (12, 0.85, 40.0),
    ] {
        let mut maker = Synthesiser::new(&train(decay, snr_db)).expect("the scene is sound");
        let mut errors = Vec::new();
        let mut inside = 0u32;
        for shot in 0..SHOTS {
            let mut random = Random::new(seed, Purpose::Variation, shot);
            let wall_change = (random.uniform() - 0.5) * 2e-4;
            let variation = Variation {
                time_shift: random.uniform() / RATE,
                wall_change,
                ..Variation::default()
            };
            let simulated = maker.varied_shot(seed, shot, variation);
            match gauge.measure(&simulated.record()) {
                Ok(reading) => {
                    let error = f64::from(reading.thickness.get()) - (WALL_MM * 1e-3 + wall_change);
                    beyond += u32::from(error.abs() > half_cycle);
                    inside += u32::from(error.abs() <= f64::from(reading.expanded().get()));
                    doubted += u32::from(!reading.doubts.is_empty());
                    errors.push(error);
                }
                Err(_) => refused += 1,
            }
        }
        let (bias, deviation) = oracle::mean_and_deviation(&errors);
        let amplitude = 0.5 * 2048.0;
        let ratio = deviation / bound(decay, snr_db, amplitude);
        let share = f64::from(inside) / errors.len() as f64;
        figures.line(&format!(
            "decay {decay}, {snr_db} dB: deviation over bound {ratio:.3} +- {:.3}, bias over deviation {:+.3}, within k = 2 {:.1} %",
            ratio * 2.0 / (2.0 * errors.len() as f64).sqrt(),
            bias / deviation,
            100.0 * share
        ));
        let chance = 2.0 / (2.0 * errors.len() as f64).sqrt();
        assert!(
            ratio <= 1.06 + chance,
            "decay {decay}, {snr_db} dB: {ratio} of the bound"
        );
        assert!(
            (0.93..0.97).contains(&share),
            "decay {decay}, {snr_db} dB: {share} within k = 2"
        );
        ratios.push(ratio);
        covered += inside;
        all += errors.len() as u32;
    }
    assert_eq!(beyond, 0, "errors beyond half a cycle");
    let (lowest, highest) = ratios
        .iter()
        .fold((f64::MAX, 0.0f64), |(l, h), &r| (l.min(r), h.max(r)));
    let test = "val_train_fit";
    readme::figure(
        "scatter of the thickness over the Cramér-Rao bound (six echoes, 16 to 40 dB)",
        &format!("{lowest:.2} to {highest:.2}"),
        test,
    );
    readme::figure(
        "true thickness inside the stated uncertainty, k = 2 (ideal 95.4 %)",
        &format!("{:.1} % of {all}", 100.0 * f64::from(covered) / f64::from(all)),
        test,
    );
    readme::figure("errors beyond half a cycle", &format!("{beyond} of {all}"), test);
    readme::figure(
        "of these shots doubted / refused",
        &format!("{doubted} / {refused}"),
        test,
    );
    figures.check();
}
