//! Several shots of one place on the command line: averages, interleaved delays, the trigger's jitter.
//!
//! Truth: trains made from formulas (support), and for delayed shots the simulator's scenes.

mod support;

use serde_json::Value;
use support::{Bench, Train, setup};

fn read<'a>(bench: &Bench, file: &'a str, more: &[&'a str]) -> support::Run {
    let mut arguments = vec!["read", file, "--setup", "setup.toml", "--format", "json"];
    arguments.extend(more);
    bench.run(&arguments)
}

/// The reading lies within five standard uncertainties of the truth.
fn assert_right(record: &Value, wall_mm: f64) {
    let number = |key: &str| record[key].as_f64().unwrap_or_else(|| panic!("{key}: {record}"));
    let error = number("thickness_mm") - wall_mm;
    assert!(
        error.abs() < 5.0 * number("standard_uncertainty_mm"),
        "{error} {record}"
    );
}

#[test]
fn so_many_shots_at_a_time_are_averaged() {
    let bench = Bench::new();
    bench.write_shots("a.npy", &Train::CLEAN.shots(16, 2));
    let run = read(&bench, "a.npy", &["--average=4"]);
    assert_eq!(run.status, 0, "{}", run.errors);
    let records = run.json();
    assert_eq!(records.len(), 4);
    for (number, record) in records.iter().enumerate() {
        assert_eq!(record["shot"], number);
        assert_right(record, 10.0);
    }
    let error = read(&bench, "a.npy", &["--average=5"]).error().to_string();
    assert!(
        error.contains("a.npy") && error.contains("16 shots") && error.contains("averages of 5"),
        "{error}"
    );
    for wrong in ["--average=0", "--average=513", "--average=x"] {
        let _ = read(&bench, "a.npy", &[wrong]).error();
    }
    // One shot is its own average.
    bench.write_shots("one.npy", &Train::CLEAN.shots(1, 2));
    let run = read(&bench, "one.npy", &["--average"]);
    assert_right(&run.json()[0], 10.0);
    // Without a set-up there are echoes all the same.
    let run = bench.run(&["read", "a.npy", "--bits", "12", "--average", "--format", "json"]);
    assert_eq!(run.status, 2);
    assert!(run.json()[0]["echoes"].as_array().unwrap().len() >= 3 && run.json()[0]["shot"].is_null());
}

#[test]
fn what_only_half_of_the_shots_have_is_no_echo() {
    let bench = Bench::new();
    let moved = |wall_mm: f64| Train {
        wall_mm,
        ..Train::CLEAN
    };
    for (name, second) in [
        ("moved.npy", moved(10.01)),
        ("far.npy", moved(10.3)),
        (
            "gone.npy",
            Train {
                first: 0.0,
                ..Train::CLEAN
            },
        ),
    ] {
        let mut shots = Train::CLEAN.shots(8, 3);
        shots.extend(second.shots(8, 4));
        bench.write_shots(name, &shots);
        let run = read(&bench, name, &["--average"]);
        assert_eq!(run.status, 2, "{name} {}", run.out);
        let record = &run.json()[0];
        assert_eq!(record["no_reading"]["reason"], "unsteady", "{name} {record}");
        assert!(
            record["no_reading"]["detail"].as_str().unwrap().contains("still"),
            "{record}"
        );
    }
}

/// A scene of a slow converter, and the set-up of the dense record.
fn slow(bench: &Bench, phases: u32, wall_mm: f64, name: &str) {
    let base = 50.0 / f64::from(phases);
    let samples = 1500 / phases;
    bench.write(
        name,
        format!(
            "version = 1
[record]
sample_rate_mhz = {base}
samples = {samples}
bits = 12
first_back_wall_percent = 60.0
[probe]
kind = \"contact\"
centre_frequency_mhz = 5.0
relative_bandwidth_percent = 60.0
[wall]
material = \"carbon steel\"
velocity_m_s = 5920.0
thickness_mm = {wall_mm}
[noise]
snr_db = 40.0
[equivalent_time]
phases = {phases}
offset_steps = 4.0
"
        ),
    );
    // Losses of a real material disperse: half a micrometre or so.
    bench.write("setup.toml", setup("back-wall-to-back-wall", 1.0, 1.0));
}

#[test]
fn delayed_shots_of_a_slow_converter_are_read() {
    let bench = Bench::new();
    for phases in [25, 10, 5] {
        slow(&bench, phases, 10.0, "slow.toml");
        let delays = phases.to_string();
        for (rounds, shots) in [("1", phases + 1), ("2", 2 * phases), ("5", 5 * phases)] {
            let run = bench.run(&["simulate", "slow.toml", "--rounds", rounds, "-o", "slow.npy"]);
            assert!(run.out.contains(&format!("{shots} shots")), "{}{}", run.out, run.errors);
            let run = read(&bench, "slow.npy", &["--interleave", &delays]);
            assert_eq!(run.status, 0, "{phases} {rounds} {}{}", run.out, run.errors);
            let record = &run.json()[0];
            assert_right(record, 10.0);
            assert!(record["shot"].is_null() && run.json().len() == 1);
        }
    }
    // The file's own rate is the slow one.
    let run = bench.run(&["simulate", "slow.toml", "--rounds", "1", "-o", "slow.csv"]);
    assert_eq!(run.status, 0, "{}", run.errors);
    assert_right(&read(&bench, "slow.csv", &["--interleave", "5"]).json()[0], 10.0);
    let error = read(&bench, "slow.csv", &["--interleave", "3"]).error().to_string();
    assert!(error.contains("10 MHz") && error.contains("3 delays of"), "{error}");
}

#[test]
fn shots_that_make_no_dense_record() {
    let bench = Bench::new();
    slow(&bench, 10, 10.0, "slow.toml");
    slow(&bench, 10, 10.2, "moved.toml");
    let simulated = |scene: &str, shots: &str| {
        let run = bench.run(&["simulate", scene, "--shots", shots, "-o", "a.npy"]);
        assert_eq!(run.status, 0, "{}", run.errors);
    };
    let interleave = ["--interleave", "10"];
    for (shots, words) in [("9", "9 shots"), ("10", "--still"), ("25", "whole number of rounds")] {
        simulated("slow.toml", shots);
        let error = read(&bench, "a.npy", &interleave).error().to_string();
        assert!(error.contains("a.npy") && error.contains(words), "{error}");
    }
    simulated("slow.toml", "10");
    assert_right(
        &read(&bench, "a.npy", &["--interleave", "10", "--still"]).json()[0],
        10.0,
    );
    for wrong in [
        &["--interleave", "1"][..],
        &["--interleave", "65"],
        &["--still"],
        &["--interleave", "10", "--average"],
    ] {
        let _ = read(&bench, "a.npy", wrong).error();
    }
    // A wall that moves: the delay that is fired again, or the second round, shows it.
    let taken = |scene: &str| {
        simulated(scene, "20");
        let coding = halfpulse_sim::record_file::Coding {
            bits: Some(12),
            ..halfpulse_sim::record_file::Coding::default()
        };
        halfpulse_sim::record_file::read(&bench.path("a.npy"), &coding)
            .unwrap()
            .shots
    };
    let (still, moved) = (taken("slow.toml"), taken("moved.toml"));
    for again in [1, 10] {
        let mut shots = still[..10].to_vec();
        shots.extend_from_slice(&moved[..again]);
        halfpulse_sim::record_file::write(&bench.path("b.npy"), &shots, 5e6, 0.0).unwrap();
        let run = read(&bench, "b.npy", &interleave);
        assert_eq!(run.status, 2, "{}{}", run.out, run.errors);
        assert_eq!(run.json()[0]["no_reading"]["reason"], "unsteady", "{}", run.out);
    }
}

#[test]
fn the_triggers_jitter_is_told() {
    let bench = Bench::new();
    slow(&bench, 1, 10.0, "scene.toml");
    let scene = bench.read("scene.toml");
    let (scene, _) = scene.split_once("[equivalent_time]").unwrap();
    bench.write("still.toml", scene);
    bench.write("jitters.toml", format!("{scene}[timing]\ntrigger_jitter_ns = 2.0\n"));
    for (name, jitter) in [("still", 0.0), ("jitters", 2.0)] {
        let scene = format!("{name}.toml");
        let run = bench.run(&["simulate", &scene, "--shots", "64", "-o", "a.npy"]);
        assert_eq!(run.status, 0, "{}", run.errors);
        let run = read(&bench, "a.npy", &["--average", "--jitter"]);
        let found = &run.json()[0]["jitter"];
        let number = |key: &str| found[key].as_f64().unwrap_or_else(|| panic!("{key}: {found}"));
        let off = number("rms_ns") - jitter;
        assert!(
            off.abs() < 3.0 * number("standard_uncertainty_ns") && off.abs() < 0.6,
            "{found}"
        );
        assert_eq!((&found["shots"], &found["wanders"]), (&64.into(), &false.into()));
        let text = bench.run(&["read", "a.npy", "--setup", "setup.toml", "--average", "--jitter"]);
        assert!(
            text.out.contains("trigger jitter: ") && text.out.contains("64 shots"),
            "{}",
            text.out
        );
    }
    // A wall that slides is said to.
    let shots: Vec<Vec<i16>> = (0..32u32)
        .map(|n| {
            let wall_mm = 10.0 + 0.003 * f64::from(n);
            Train {
                wall_mm,
                ..Train::CLEAN
            }
            .shot(u64::from(n))
        })
        .collect();
    bench.write_shots("slides.npy", &shots);
    let run = read(&bench, "slides.npy", &["--jitter"]);
    assert_eq!(run.json()[0]["jitter"]["wanders"], true, "{}", run.out);
    // Nothing to tell it from; and no set-up, no echo that is known.
    bench.write_shots("one.npy", &Train::CLEAN.shots(1, 2));
    let run = read(&bench, "one.npy", &["--jitter"]);
    assert!(
        run.json()[0]["jitter"].is_null() && run.errors.contains("note: one.npy"),
        "{}",
        run.errors
    );
    let _ = bench.run(&["read", "one.npy", "--jitter"]).error();
}
