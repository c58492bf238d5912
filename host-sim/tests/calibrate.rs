//! `halfpulse calibrate` as it is typed, on blocks made from formulas.

#![allow(clippy::disallowed_methods)] // No bits are compared between machines here.

mod support;

use halfpulse::{AdcFormat, Hertz, SampleClock};
use halfpulse_sim::calibrating::block::BlockRecord;
use halfpulse_sim::calibrating::{Learn, calibrate};
use halfpulse_sim::measuring::{HeapScratch, measure};
use halfpulse_sim::record_file::RecordFile;
use halfpulse_sim::setup_file::SetupFile;
use std::path::Path;
use support::{Bench, Train, setup};

/// Normal deviates from hashes, so that each trial has its own.
fn deviate(trial: u64, which: u64) -> f64 {
    let uniform = |salt: u64| {
        let mut z = (trial * 1000 + which * 10 + salt).wrapping_mul(0x9e37_79b9_7f4a_7c15);
        z = (z ^ (z >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
        z = (z ^ (z >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
        (((z ^ (z >> 31)) >> 11) as f64 + 0.5) / (1u64 << 53) as f64
    };
    (-2.0 * uniform(1).ln()).sqrt() * (std::f64::consts::TAU * uniform(2)).cos()
}

/// The record of a block that claims `nominal_mm` and is `real_mm` thick.
fn record(nominal_mm: f64, uncertainty_mm: f64, real_mm: f64, noise: f64, seed: u64) -> BlockRecord {
    let train = Train {
        noise,
        ..block(real_mm)
    };
    let file = RecordFile::from_codes(train.shots(2, seed), AdcFormat::signed(12));
    let clock = SampleClock::new(Hertz::from_mhz(50.0));
    BlockRecord::new(Path::new("block.npy"), (nominal_mm, uncertainty_mm), file, clock).unwrap()
}

/// Calibrations on blocks whose errors are drawn from their stated uncertainty, each followed by a reading
/// of another wall: how often does the k = 2 interval hold the truth, and how far does the velocity scatter
/// against its uncertainty? The truth is that of the formulas that make the records.
#[test]
fn val_calibrated_readings_cover_the_truth() {
    const TRIALS: u64 = 300;
    let text = setup("transmission-pulse-to-back-wall", 60.0, 100.0);
    let (mut covered, mut squares) = (0, 0.0);
    for trial in 0..TRIALS {
        let file = SetupFile::parse(Path::new("s.toml"), &text).unwrap();
        let real = |nominal: f64, which| nominal + 0.002 * deviate(trial, which);
        let blocks = [
            record(5.0, 0.002, real(5.0, 1), 20.0, 10 * trial + 1),
            record(25.0, 0.002, real(25.0, 2), 20.0, 10 * trial + 2),
        ];
        let learned = calibrate(&file, &blocks, Learn::ZeroAndVelocity, "pulse.npy").unwrap();
        let off = f64::from(learned.material.velocity.get()) - support::VELOCITY;
        squares += (off / f64::from(learned.material.velocity_standard_uncertainty.get())).powi(2);

        let mut keys = learned.keys;
        keys.probe.reference_pulse = None;
        keys.zero.reference_pulse_checksum = None;
        let ready = SetupFile::from_keys(keys, Path::new("ready.toml"));
        let mut scratch = HeapScratch::new(PROBE.samples);
        let mut gauge = ready.gauge(scratch.workspace()).unwrap();
        gauge.learn_pulse(&learned.pulse).unwrap();
        let wall = 6.0 + 18.0 * trial as f64 / TRIALS as f64;
        let part = record(wall, 0.0, wall, 20.0, 10 * trial + 3);
        let measured = measure(&mut gauge, "part", &part.shots[0], part.clock);
        let reading = measured.outcome.unwrap();
        let error = f64::from(reading.thickness.as_mm()) - wall;
        covered += u64::from(error.abs() <= f64::from(reading.expanded().as_mm()));
    }
    let coverage = covered as f64 / TRIALS as f64;
    let pull = (squares / TRIALS as f64).sqrt();
    println!(
        "calibrated on two blocks: coverage of k = 2 {:.1} %, velocity scatter over uncertainty {pull:.3}",
        100.0 * coverage
    );
    // 95.4 % with a binomial standard deviation of 1.2 %; the pull's is 4 %. Three of each.
    assert!((0.918..=0.99).contains(&coverage), "{coverage}");
    assert!((0.88..=1.12).contains(&pull), "{pull}");
}

/// Long enough for thick walls.
const PROBE: Train = Train {
    samples: 3000,
    ..Train::UNMODELLED
};

fn block(wall_mm: f64) -> Train {
    PROBE.of_wall(wall_mm)
}

/// Measures a wall with a set-up and returns thickness, expanded uncertainty and doubts.
fn read(bench: &Bench, setup: &str, wall: Train) -> (f64, f64, String) {
    bench.write_shots("part.npy", &wall.shots(8, 99));
    let run = bench.run(&["read", "part.npy", "--setup", setup, "--average", "--format", "json"]);
    assert_eq!(run.status, 0, "{}{}", run.out, run.errors);
    let record = &run.json()[0];
    (
        record["thickness_mm"].as_f64().unwrap(),
        record["expanded_uncertainty_mm"].as_f64().unwrap(),
        record["doubts"].to_string(),
    )
}

#[test]
fn one_block_teaches_pulse_and_zero() {
    let bench = Bench::new();
    bench.write("in.toml", setup("transmission-pulse-to-back-wall", 6.0, 100.0));
    bench.write_shots("block.npy", &block(10.0).shots(16, 1));
    bench.calibrate(&[
        "--setup",
        "in.toml",
        "--block",
        "10.000mm+-0.001mm=block.npy",
        "-o",
        "ready.toml",
        "--date",
        "2026-01-31",
        "--temperature",
        "21.5",
    ]);
    let file = SetupFile::read(&bench.path("ready.toml")).unwrap();
    let pulse = file.reference_pulse().unwrap().expect("a learned pulse");
    assert!(pulse.len() > 20 && pulse.len() < 100, "{}", pulse.len());
    let calibration = file.keys.calibration.clone().unwrap();
    assert_eq!(calibration.date.as_deref(), Some("2026-01-31"));
    assert_eq!(calibration.temperature_c, Some(21.5));
    assert_eq!((calibration.from_mm, calibration.to_mm), (Some(10.0), Some(10.0)));
    assert_eq!(calibration.blocks_mm, [10.0]);
    // By hand: 2 x 10 mm / 5920 m/s x 6 / 5920 = 3.424 ns of the velocity; 1 um of the block is 0.338 ns.
    let u = file.keys.zero.standard_uncertainty_ns.unwrap();
    assert!((u - 3.441).abs() < 0.05, "{u}");
    assert!((calibration.velocity_zero_correlation.unwrap() - 3.424 / u).abs() < 0.01);
    assert_eq!(file.keys.material.velocity_m_s, 5920.0);

    // At the block's own thickness velocity and zero compensate each other: only block and noise are left.
    let (thickness, expanded, _) = read(&bench, "ready.toml", block(10.0));
    assert!((thickness - 10.0).abs() < 1.5 * expanded, "{thickness} +- {expanded}");
    assert!(expanded < 0.004, "{expanded}");

    // Elsewhere the velocity's doubt shows, and is no reason for a doubt of its own. By hand: 6 m/s in 5920
    // over 8 mm are 8.1 um, twice that 16.2 um.
    let (thickness, expanded, doubts) = read(&bench, "ready.toml", block(18.0));
    assert!((thickness - 18.0).abs() < expanded, "{thickness} +- {expanded}");
    assert!((expanded - 0.0163).abs() < 0.0005, "{expanded}");
    assert!(!doubts.contains("outside-calibrated-range"), "{doubts}");

    // The same file with another pulse is refused.
    let mut other = pulse.clone();
    other[3] += 0.01;
    halfpulse_sim::record_file::npy::write_pulse(&bench.path("ready-pulse.npy"), &other).unwrap();
    let run = bench.run(&["read", "part.npy", "--setup", "ready.toml"]);
    assert!(run.error().contains("learned with another pulse"), "{}", run.errors);
}

#[test]
fn two_blocks_teach_zero_and_velocity() {
    let bench = Bench::new();
    // The set-up's velocity is 1.5 % wrong.
    let wrong = setup("transmission-pulse-to-back-wall", 60.0, 100.0).replace("= 5920", "= 6010");
    bench.write("in.toml", wrong);
    bench.write_shots("thin.npy", &block(5.0).shots(16, 2));
    bench.write_shots("thick.npy", &block(20.0).shots(16, 3));
    bench.calibrate(&[
        "--setup",
        "in.toml",
        "--block",
        "5.000mm+-0.001mm=thin.npy",
        "--block",
        "20.000mm+-0.001mm=thick.npy",
        "-o",
        "ready.toml",
    ]);
    let file = SetupFile::read(&bench.path("ready.toml")).unwrap();
    let material = &file.keys.material;
    let (velocity, u) = (material.velocity_m_s, material.velocity_standard_uncertainty_m_s);
    // By hand: 1 um twice in 15 mm is 0.56 m/s; noise adds a little.
    assert!((0.5..0.8).contains(&u), "{u}");
    // The blocks are exact here, so that only the noise's part can show.
    assert!((velocity - 5920.0).abs() < 2.0 * u, "{velocity}");
    let calibration = file.keys.calibration.unwrap();
    assert!(calibration.velocity_zero_correlation.unwrap() > 0.5);
    assert_eq!((calibration.from_mm, calibration.to_mm), (Some(5.0), Some(20.0)));
    // Beyond the blocks the reading says so, and its uncertainty grows: by hand, 0.56 m/s in 5920 over 30 mm are 2.8 um, over
    // 19 mm 1.8 um. Between them it says nothing, nor a micrometre beyond.
    let (far, far_expanded, doubts) = read(&bench, "ready.toml", block(30.0));
    assert!(doubts.contains("outside-calibrated-range"), "{doubts}");
    let (_, near_expanded, doubts) = read(&bench, "ready.toml", block(20.001));
    assert!(!doubts.contains("outside-calibrated-range"), "{doubts}");
    assert!(
        (far - 30.0).abs() < 1.5 * far_expanded && far_expanded > 1.3 * near_expanded,
        "{far} {far_expanded} {near_expanded}"
    );
    for wall in [6.0, 12.0, 19.0] {
        let (thickness, expanded, doubts) = read(&bench, "ready.toml", block(wall));
        assert!(
            (thickness - wall).abs() < 1.5 * expanded,
            "{wall}: {thickness} +- {expanded}"
        );
        assert!(
            expanded < 0.006 && doubts == "[\"beam-unknown\"]",
            "{wall}: {expanded} {doubts}"
        );
    }
}

#[test]
fn velocity_and_back_wall_spans() {
    let bench = Bench::new();
    bench.write("known.toml", setup("transmission-pulse-to-back-wall", 60.0, 1.0));
    bench.write(
        "between.toml",
        setup("back-wall-to-back-wall", 60.0, 100.0).replace("= 5920", "= 6010"),
    );
    let slow = Train {
        velocity: 5800.0,
        ..block(10.0)
    };
    bench.write_shots("block.npy", &slow.shots(16, 4));
    bench.calibrate(&[
        "--setup",
        "between.toml",
        "--block",
        "10mm+-0.001mm=block.npy",
        "--learn",
        "velocity",
        "-o",
        "v.toml",
    ]);
    let keys = SetupFile::read(&bench.path("v.toml")).unwrap().keys;
    let u = keys.material.velocity_standard_uncertainty_m_s;
    assert!(
        (keys.material.velocity_m_s - 5800.0).abs() < 3.0 * u && u < 2.0,
        "{:?}",
        keys.material
    );
    // The set-up's zero of 0 +- 100 ns is carried over to the learned pulse, whose origin lies elsewhere.
    assert!(
        keys.zero.offset_ns.abs() < 150.0 && keys.zero.standard_uncertainty_ns > Some(99.9),
        "{:?}",
        keys.zero
    );

    bench.calibrate(&[
        "--setup",
        "between.toml",
        "--block",
        "10mm+-0.001mm=block.npy",
        "--learn",
        "zero-and-velocity",
        "-o",
        "both.toml",
    ]);
    let keys = SetupFile::read(&bench.path("both.toml")).unwrap().keys;
    assert!(
        (keys.material.velocity_m_s - 5800.0).abs() < 3.0 * u,
        "{:?}",
        keys.material
    );
    let (thickness, expanded, doubts) = read(&bench, "both.toml", Train { wall_mm: 8.0, ..slow });
    assert!((thickness - 8.0).abs() < 1.5 * expanded, "{thickness} +- {expanded}");
    assert!(!doubts.contains("zero-contradicted"), "{doubts}");

    // The set-up's zero was learned with another pulse: with the modelled one. Its value is what the
    // modelled pulse sees on a block of known velocity; the velocity must come out right all the same.
    let modelled = bench.run(&[
        "read",
        "block.npy",
        "--setup",
        "known.toml",
        "--average",
        "--format",
        "json",
    ]);
    let arrival = modelled.json()[0]["echoes"][0]["arrival_ns"].as_f64().unwrap();
    let zero = arrival - 20e6 / 5800.0;
    assert!(
        (zero - 400.0).abs() > 5.0,
        "the pulses must differ for this to test anything: {zero}"
    );
    bench.write(
        "known.toml",
        setup("transmission-pulse-to-back-wall", 60.0, 1.0).replace("offset_ns = 0.0", &format!("offset_ns = {zero}")),
    );
    bench.calibrate(&[
        "--setup",
        "known.toml",
        "--block",
        "10mm+-0.001mm=block.npy",
        "--learn",
        "velocity",
        "-o",
        "k.toml",
    ]);
    let keys = SetupFile::read(&bench.path("k.toml")).unwrap().keys;
    let u = keys.material.velocity_standard_uncertainty_m_s;
    // By hand: 1 ns of the zero in 3.448 us is 1.68 m/s, 1 um of the block 0.58 m/s.
    assert!((u - 1.78).abs() < 0.1, "{u}");
    assert!((keys.material.velocity_m_s - 5800.0).abs() < u, "{:?}", keys.material);
    let (thickness, expanded, _) = read(&bench, "k.toml", Train { wall_mm: 15.0, ..slow });
    assert!((thickness - 15.0).abs() < expanded, "{thickness} +- {expanded}");
}

#[test]
fn interface_span_and_clipped_blocks() {
    let bench = Bench::new();
    let text = setup("interface-to-back-wall", 60.0, 1.0)
        .replace("\"contact\"", "\"delay-line\"")
        .replace("= 5920", "= 5980");
    bench.write("in.toml", text);
    let behind_delay_line = |wall_mm| Train {
        zero_us: 7.0,
        interface: 1900.0,
        first: 1000.0,
        ..block(wall_mm)
    };
    bench.write_shots("thin.npy", &behind_delay_line(5.0).shots(16, 5));
    bench.write_shots("thick.npy", &behind_delay_line(20.0).shots(16, 6));
    bench.calibrate(&[
        "--setup",
        "in.toml",
        "--block",
        "5.000mm+-0.001mm=thin.npy",
        "--block",
        "20.000mm+-0.001mm=thick.npy",
        "-o",
        "ready.toml",
    ]);
    let keys = SetupFile::read(&bench.path("ready.toml")).unwrap().keys;
    let u = keys.material.velocity_standard_uncertainty_m_s;
    assert!(
        (keys.material.velocity_m_s - 5920.0).abs() < 2.0 * u && u < 1.0,
        "{:?}",
        keys.material
    );
    let u = keys.zero.standard_uncertainty_ns.unwrap();
    assert!(keys.zero.offset_ns.abs() < 3.0 * u && u < 1.0, "{:?}", keys.zero);
    let (thickness, expanded, doubts) = read(&bench, "ready.toml", behind_delay_line(12.0));
    assert!(
        (thickness - 12.0).abs() < expanded && expanded < 0.01,
        "{thickness} +- {expanded} {doubts}"
    );

    let clipped = Train {
        interface: 3000.0,
        ..behind_delay_line(5.0)
    };
    bench.write_shots("interface.npy", &clipped.shots(4, 7));
    let loud = Train {
        first: 3000.0,
        ..behind_delay_line(5.0)
    };
    bench.write_shots("loud.npy", &loud.shots(4, 8));
    for (file, expected) in [
        ("interface.npy", "the interface echo is clipped"),
        ("loud.npy", "the back wall is clipped"),
    ] {
        let block = format!("5mm={file}");
        let run = bench.run(&["calibrate", "--setup", "in.toml", "--block", &block, "-o", "no.toml"]);
        assert!(
            run.error().starts_with(&format!("{file}: {expected}")),
            "{}",
            run.errors
        );
        assert!(!bench.path("no.toml").exists());
    }
}
