//! What `halfpulse calibrate` learns of the pulse, and what it says of a gauge that has drifted. Records are made from
//! formulas.

#![allow(clippy::disallowed_methods)] // No bits are compared between machines here.

mod support;

use halfpulse_sim::setup_file::SetupFile;
use support::{Bench, Train, setup};

/// A pulse that the gauge's model does not know, and a zero of 0.4 us.
const PROBE: Train = Train {
    zero_us: 0.4,
    skew: 1.6,
    phase: 0.9,
    samples: 1500,
    ..Train::CLEAN
};

fn block(wall_mm: f64) -> Train {
    Train { wall_mm, ..PROBE }
}

/// Shots whose trigger jitters by up to `jitter_us` either way.
fn jittering(train: Train, count: u64, seed: u64, jitter_us: f64) -> Vec<Vec<i16>> {
    (0..count)
        .map(|shot| {
            let late = jitter_us * ((shot as f64) * 2.4).sin();
            let train = Train {
                zero_us: train.zero_us + late,
                ..train
            };
            train.shot(seed * 1000 + shot)
        })
        .collect()
}

fn calibrate(bench: &Bench, arguments: &[&str]) -> String {
    let run = bench.run(&[&["calibrate"], arguments].concat());
    assert_eq!(run.status, 0, "{}{}", run.out, run.errors);
    run.out
}

/// The pulse of shots that jitter by a fifth of a cycle is the true one: the formula's, sampled where the learned one
/// says its origin is. Its stated noise is 5 codes in 1500 over the root of the shots.
#[test]
fn val_the_pulse_of_jittering_shots() {
    let bench = Bench::new();
    bench.write("in.toml", setup("transmission-pulse-to-back-wall", 6.0, 100.0));
    for (shots, limit) in [(16u64, 0.004), (144, 0.002)] {
        bench.write_shots("block.npy", &jittering(block(12.0), shots, 1, 0.04));
        let said = calibrate(
            &bench,
            &["--setup", "in.toml", "--block", "12mm=block.npy", "-o", "ready.toml"],
        );
        assert_eq!(said.contains("has less noise of its own"), shots < 128, "{said}");
        assert!(said.contains("the block is not the part"), "{said}");
        let file = SetupFile::read(&bench.path("ready.toml")).unwrap();
        let pulse = file.reference_pulse().unwrap().unwrap();
        // Least squares against the formula over a fine grid of shifts and the best height.
        let truth = |shift: f64| -> Vec<f64> {
            (0..pulse.len())
                .map(|i| {
                    let t = (i as f64 - shift) / 50.0;
                    let sigma = 1.175_394 / (std::f64::consts::PI * 3.0) * if t > 0.0 { 1.6 } else { 1.0 };
                    (-0.5 * (t / sigma).powi(2)).exp() * (std::f64::consts::TAU * 5.0 * t + 0.9).cos()
                })
                .collect()
        };
        let left = (0..4000)
            .map(|step| {
                let other = truth(10.0 + f64::from(step) * 0.01);
                let dot = |a: &[f64], b: &[f64]| a.iter().zip(b).map(|(x, y)| x * y).sum::<f64>();
                let own: Vec<f64> = pulse.iter().map(|s| f64::from(*s)).collect();
                1.0 - dot(&own, &other).powi(2) / dot(&own, &own) / dot(&other, &other)
            })
            .fold(1.0f64, f64::min);
        // The cut and tapered ends hold some thousandths of the amplitude.
        println!(
            "{shots} shots: {:.2} % of the pulse's amplitude differ from the truth",
            100.0 * left.sqrt()
        );
        assert!(left.sqrt() < 0.01 + limit, "{shots} shots: {}", left.sqrt());

        let keys = &file.keys.probe;
        let noise = keys.reference_pulse_noise_percent.unwrap();
        let expected = 100.0 * (25.0f64 + 1.0 / 12.0).sqrt() / 1500.0 / (shots as f64).sqrt();
        assert!((noise / expected - 1.0).abs() < 0.1, "{noise} {expected}");
        let mismatch = keys.reference_pulse_mismatch_percent.unwrap();
        println!("{shots} shots: noise {noise:.4} %, mismatch {mismatch:.3} %");
        assert!(mismatch < 1.0, "{mismatch}");
        // The core gets what the file says.
        let mut scratch = halfpulse_sim::measuring::HeapScratch::new(1500);
        let facts = file.gauge(scratch.workspace()).unwrap().pulse().facts;
        assert!((f64::from(facts.noise) - 0.01 * noise).abs() < 1e-7);
    }
}

/// Another block, whose metal has changed the pulse: a tail that is an eighth longer.
#[test]
fn another_blocks_echo_counts_into_the_mismatch() {
    let bench = Bench::new();
    bench.write("in.toml", setup("transmission-pulse-to-back-wall", 60.0, 100.0));
    bench.write_shots("thin.npy", &block(6.0).shots(32, 2));
    let mismatch = |skew: f64| {
        let thick = Train {
            skew,
            first: 1200.0,
            ..block(14.0)
        };
        bench.write_shots("thick.npy", &thick.shots(32, 3));
        let blocks = ["--block", "6mm+-0.001mm=thin.npy", "--block", "14mm+-0.001mm=thick.npy"];
        calibrate(
            &bench,
            &[&["--setup", "in.toml", "-o", "two.toml"], &blocks[..]].concat(),
        );
        let keys = SetupFile::read(&bench.path("two.toml")).unwrap().keys;
        keys.probe.reference_pulse_mismatch_percent.unwrap()
    };
    let (alike, longer) = (mismatch(1.6), mismatch(1.8));
    println!("another block: mismatch {alike:.2} % alike, {longer:.2} % with a longer tail");
    assert!(alike < 1.0 && longer > 3.0 * alike.max(0.5), "{alike} {longer}");
}

/// A check says within, outside and undecided, by how much, and with the exit status.
#[test]
fn a_check_finds_drift() {
    let bench = Bench::new();
    let text = setup("transmission-pulse-to-back-wall", 6.0, 100.0);
    bench.write(
        "in.toml",
        text.replace("[material]", "element_diameter_mm = 60\n[material]"),
    );
    bench.write_shots("block.npy", &block(10.0).shots(32, 4));
    let arguments = [
        "--setup",
        "in.toml",
        "--block",
        "10mm+-0.001mm=block.npy",
        "-o",
        "ready.toml",
    ];
    calibrate(&bench, &arguments);
    let check = |file: &str, format: &str| {
        let block = format!("12.000mm+-0.001mm={file}");
        bench.run(&[
            "calibrate",
            "--check",
            "--setup",
            "ready.toml",
            "--block",
            &block,
            "--format",
            format,
        ])
    };
    bench.write_shots("good.npy", &block(12.0).shots(8, 5));
    let run = check("good.npy", "text");
    assert_eq!(run.status, 0, "{}{}", run.out, run.errors);
    assert!(run.out.contains("within; nothing to do"), "{}", run.out);

    // 10 ns of drift are 29.6 um (by hand); the velocity's 6 m/s act on the 2 mm beyond the block: 2 um.
    let late = Train {
        zero_us: 0.41,
        ..block(12.0)
    };
    bench.write_shots("late.npy", &late.shots(8, 6));
    let run = check("late.npy", "json");
    assert_eq!(run.status, 2, "{}{}", run.out, run.errors);
    let json = &run.json()[0];
    assert_eq!(json["state"], "outside");
    let value = |key: &str| json[key].as_f64().unwrap();
    assert!((value("difference_mm") - 0.0296).abs() < 0.002, "{json}");
    assert!((value("ratio") - value("difference_mm") / value("expanded_uncertainty_mm")).abs() < 0.01);
    assert!(value("ratio") > 2.0 && json["no_reading"].is_null(), "{json}");
    let run = check("late.npy", "text");
    assert!(
        run.out.contains(": outside") && run.out.contains("; couple again and repeat"),
        "{}",
        run.out
    );

    // What the part may differ by must not hide it.
    let ready = bench.read("ready.toml");
    let wide = ready.replace(
        "velocity_standard_uncertainty_m_s = 6.0",
        "velocity_standard_uncertainty_m_s = 6.0\npart_velocity_standard_uncertainty_m_s = 200",
    );
    bench.write("ready.toml", wide);
    assert_eq!(check("late.npy", "json").json()[0]["state"], "outside");

    // No echo, no verdict.
    bench.write_shots(
        "air.npy",
        &Train {
            first: 0.0,
            ..block(12.0)
        }
        .shots(8, 7),
    );
    let run = check("air.npy", "json");
    assert_eq!(run.status, 2);
    assert_eq!(run.json()[0]["state"], "undecided");
    assert!(run.json()[0]["no_reading"].is_string());
    // Two blocks that are outside: a hint what it may be.
    let twice = ["--block", "12mm+-0.001mm=late.npy", "--block", "12mm+-0.001mm=late.npy"];
    let run = bench.run(&[&["calibrate", "--check", "--setup", "ready.toml"], &twice[..]].concat());
    assert!(run.out.contains("speak of the zero"), "{}", run.out);
    // A check writes nothing, and learning needs a name to write to.
    let run = bench.run(&[
        "calibrate",
        "--check",
        "--setup",
        "ready.toml",
        "-o",
        "x.toml",
        "--block",
        "12mm=late.npy",
    ]);
    assert_eq!(run.status, 1);
    let run = bench.run(&["calibrate", "--setup", "ready.toml", "--block", "12mm=late.npy"]);
    assert_eq!(run.status, 1);
}

/// The zero belongs to the blocks' temperature: learned warm and read cold, only the part's velocity changes.
#[test]
fn val_zero_learned_warm() {
    let bench = Bench::new();
    let text = setup("transmission-pulse-to-back-wall", 6.0, 100.0).replace(
        "[zero]",
        "velocity_temperature_coefficient_m_s_k = -0.8\n[part]\ntemperature_c = -10\n[zero]",
    );
    bench.write("in.toml", text);
    // At 45 degrees: 5920 - 0.8 x 25 = 5900 m/s; at -10: 5944 m/s (by hand).
    let warm = Train {
        velocity: 5900.0,
        ..block(10.0)
    };
    bench.write_shots("block.npy", &warm.shots(16, 8));
    let arguments = [
        "--setup",
        "in.toml",
        "--block",
        "10mm+-0.001mm=block.npy",
        "-o",
        "ready.toml",
    ];
    let run = bench.run(&[&["calibrate"], &arguments[..]].concat());
    assert!(run.error().contains("add --temperature"), "{}", run.errors);
    calibrate(&bench, &[&arguments[..], &["--temperature", "45"]].concat());
    let keys = SetupFile::read(&bench.path("ready.toml")).unwrap().keys;
    assert_eq!(keys.calibration.as_ref().unwrap().temperature_c, Some(45.0));
    assert_eq!(keys.material.velocity_m_s, 5920.0);
    // By hand, over 3390 ns: 6 m/s are 3.447 ns; 1 K and 0.16 m/s/K over 25 K are 4.079 m/s and 2.344 ns; 1 um is 0.339 ns.
    // Only the first is an error of the velocity that the set-up keeps.
    let u = keys.zero.standard_uncertainty_ns.unwrap();
    assert!((u - 4.18).abs() < 0.03, "{u}");
    let correlation = keys.calibration.as_ref().unwrap().velocity_zero_correlation.unwrap();
    assert!((correlation - 3.447 / 4.18).abs() < 0.01, "{correlation}");
    let cold = Train {
        velocity: 5944.0,
        ..block(14.0)
    };
    bench.write_shots("part.npy", &cold.shots(8, 9));
    let run = bench.run(&[
        "read",
        "part.npy",
        "--setup",
        "ready.toml",
        "--average",
        "--format",
        "json",
    ]);
    let json = &run.json()[0];
    let (thickness, expanded) = (
        json["thickness_mm"].as_f64().unwrap(),
        json["expanded_uncertainty_mm"].as_f64().unwrap(),
    );
    assert!((thickness - 14.0).abs() < 0.004 && expanded < 0.05, "{json}");

    // A velocity that is learned holds at the blocks' temperature.
    let learn = [
        &arguments[..5],
        &["v.toml", "--learn", "velocity", "--temperature", "45"],
    ]
    .concat();
    let between = bench.read("in.toml").replace("transmission-pulse-to", "back-wall-to");
    bench.write("in.toml", between);
    calibrate(&bench, &learn);
    let keys = SetupFile::read(&bench.path("v.toml")).unwrap().keys;
    assert_eq!(keys.material.velocity_temperature_c, Some(45.0));
    assert!((keys.material.velocity_m_s - 5900.0).abs() < 2.0, "{:?}", keys.material);
    let run = bench.run(&["read", "part.npy", "--setup", "v.toml", "--average", "--format", "json"]);
    let thickness = run.json()[0]["thickness_mm"].as_f64().unwrap();
    assert!((thickness - 14.0).abs() < 0.01, "{thickness}");
}
