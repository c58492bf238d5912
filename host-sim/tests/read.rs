//! `halfpulse read` as it is typed: readings, JSON, exit status.

mod support;

use serde_json::Value;
use support::{Bench, Train, setup};

const KEYS: [&str; 24] = [
    "file",
    "shot",
    "span",
    "thickness_mm",
    "standard_uncertainty_mm",
    "expanded_uncertainty_mm",
    "coverage_factor",
    "coating_mm",
    "coating_standard_uncertainty_mm",
    "coating_round_trip_ns",
    "coating_round_trip_standard_uncertainty_ns",
    "interpretation",
    "wrong_cycle_probability",
    "doubts",
    "no_reading",
    "echoes",
    "pulse",
    "separation",
    "smallest_wall_mm",
    "largest_wall_mm",
    "budget",
    "dominating_term",
    "limits",
    "jitter",
];

fn keys(value: &Value) -> Vec<&str> {
    value
        .as_object()
        .expect("an object")
        .keys()
        .map(String::as_str)
        .collect()
}

#[test]
fn a_clean_train_reads_right_and_json_has_every_key() {
    let bench = Bench::new();
    bench.write_shots("a.npy", &Train::CLEAN.shots(3, 1));
    let run = bench.run(&["read", "a.npy", "--setup", "setup.toml", "--format", "json"]);
    assert_eq!(run.status, 0, "{}{}", run.out, run.errors);
    assert_eq!(run.errors, "");
    let records = run.json();
    assert_eq!(records.len(), 3);
    for (number, record) in records.iter().enumerate() {
        for key in KEYS {
            assert!(record.get(key).is_some(), "{key} is missing: {record}");
        }
        assert_eq!(record["file"], "a.npy");
        assert_eq!(record["shot"], number);
        assert_eq!(record["span"], "back-wall-to-back-wall");
        let (thickness, expanded) = (
            record["thickness_mm"].as_f64().unwrap(),
            record["expanded_uncertainty_mm"].as_f64().unwrap(),
        );
        // Five sigma of a right uncertainty.
        assert!((thickness - 10.0).abs() < 2.5 * expanded, "{record}");
        assert!(expanded < 0.01 && record["no_reading"].is_null());
        // The set-up names no element, and a tenth of a micrometre is less than any beam's spreading.
        assert_eq!(record["doubts"], serde_json::json!(["beam-unknown"]), "{record}");
        let echo = &record["echoes"][0];
        assert_eq!(
            keys(echo),
            [
                "amplitude_percent",
                "arrival_ns",
                "multiple",
                "polarity",
                "role",
                "snr_db",
                "standard_uncertainty_ns"
            ]
        );
        assert_eq!(
            (&echo["role"], &echo["multiple"], &echo["polarity"]),
            (&"back-wall".into(), &1.into(), &"positive".into())
        );
        assert!(
            (echo["arrival_ns"].as_f64().unwrap() - 20e3 / 5.92).abs() < 5.0,
            "{echo}"
        );
        // 1500 of 2048 codes, and 1500 over 5 codes of noise.
        assert!(
            (echo["amplitude_percent"].as_f64().unwrap() - 73.2).abs() < 2.0,
            "{echo}"
        );
        assert!((echo["snr_db"].as_f64().unwrap() - 49.5).abs() < 1.5, "{echo}");
        assert_eq!(keys(&record["pulse"]).len(), 9);
        assert!((record["pulse"]["centre_frequency_mhz"].as_f64().unwrap() - 5.0).abs() < 0.1);
        assert_eq!(record["separation"]["verdict"], "resolved-classically");
        assert_eq!(
            keys(&record["separation"]),
            [
                "amplitude_ratio",
                "first_arrival_ns",
                "log_odds",
                "reason",
                "spacing_ns",
                "standard_uncertainty_ns",
                "verdict"
            ]
        );
        assert_eq!(record["budget"][0]["term"], "timing");
        assert_eq!(record["dominating_term"], "timing");
    }
}

#[test]
fn averaging_narrows_the_reading() {
    let bench = Bench::new();
    bench.write_shots("a.npy", &Train::CLEAN.shots(16, 2));
    let single = bench.run(&["read", "a.npy", "--setup", "setup.toml", "--format", "json"]);
    let run = bench.run(&[
        "read",
        "a.npy",
        "--setup",
        "setup.toml",
        "--format",
        "json",
        "--average",
    ]);
    assert_eq!(run.status, 0, "{}", run.errors);
    let records = run.json();
    assert_eq!(records.len(), 1);
    assert!(records[0]["shot"].is_null());
    let u = |record: &Value| record["standard_uncertainty_mm"].as_f64().unwrap();
    let gain = u(&single.json()[0]) / u(&records[0]);
    // The square root of 16, within what a noise estimate from one record scatters.
    assert!((3.2..4.8).contains(&gain), "{gain}");
    assert!((records[0]["thickness_mm"].as_f64().unwrap() - 10.0).abs() < 5.0 * u(&records[0]));
}

#[test]
fn all_kinds_of_file_give_the_same_reading() {
    let bench = Bench::new();
    let shot = Train::CLEAN.shot(3);
    for name in ["a.npy", "a.csv", "a.wav"] {
        bench.write_shots(name, std::slice::from_ref(&shot));
    }
    let codes: Vec<String> = shot.iter().map(|code| (i32::from(*code) + 2048).to_string()).collect();
    bench.write("offset.csv", codes.join("\n"));
    bench.write(
        "offset.toml",
        setup("back-wall-to-back-wall", 0.0, 1.0).replace("\"signed\"", "\"offset-binary\""),
    );
    let mut records = bench
        .run(&[
            "read",
            "a.npy",
            "a.csv",
            "a.wav",
            "--setup",
            "setup.toml",
            "--format",
            "json",
        ])
        .json();
    records.extend(
        bench
            .run(&["read", "offset.csv", "--setup", "offset.toml", "--format", "json"])
            .json(),
    );
    assert_eq!(records.len(), 4);
    for record in &mut records {
        record["file"] = Value::Null;
    }
    assert!(records[0]["thickness_mm"].is_number());
    for record in &records[1..] {
        assert_eq!(record, &records[0]);
    }
}

#[test]
fn floats_read_as_codes_do() {
    let bench = Bench::new();
    let shot = Train::CLEAN.shot(4);
    bench.write_shots("codes.npy", std::slice::from_ref(&shot));
    let floats: Vec<f32> = shot.iter().map(|code| f32::from(*code) / 2048.0).collect();
    bench.write("floats.npy", support::npy_of_floats(&floats));
    let volts: Vec<f32> = floats.iter().map(|value| value * 5.0).collect();
    bench.write("volts.npy", support::npy_of_floats(&volts));
    bench.write(
        "volts.toml",
        setup("back-wall-to-back-wall", 0.0, 1.0).replace("bits = 12", "full_scale = 5.0"),
    );
    let codes = bench
        .run(&["read", "codes.npy", "--setup", "setup.toml", "--format", "json"])
        .json();
    let floats = bench
        .run(&["read", "floats.npy", "--setup", "setup.toml", "--format", "json"])
        .json();
    let volts = bench
        .run(&["read", "volts.npy", "--setup", "volts.toml", "--format", "json"])
        .json();
    let read = |records: &[Value]| records[0]["thickness_mm"].as_f64().unwrap();
    assert!((read(&codes) - read(&floats)).abs() < 1e-5);
    assert!((read(&codes) - read(&volts)).abs() < 1e-5);
    let percent = |records: &[Value]| records[0]["echoes"][0]["amplitude_percent"].as_f64().unwrap();
    assert!((percent(&codes) - percent(&volts)).abs() < 0.01);
}

#[test]
fn without_a_setup_there_are_echoes_and_pulse_but_no_thickness() {
    let bench = Bench::new();
    bench.write_shots("a.npy", &[Train::CLEAN.shot(5)]);
    bench.write_shots("a.csv", &[Train::CLEAN.shot(5)]);
    let run = bench.run(&["read", "a.csv", "--format", "json", "--bits", "12"]);
    assert_eq!((run.status, run.errors.as_str()), (2, ""));
    let record = &run.json()[0];
    for key in KEYS {
        assert!(record.get(key).is_some(), "{key}");
    }
    assert!(record["thickness_mm"].is_null() && record["span"].is_null());
    assert_eq!(record["no_reading"]["reason"], "no-set-up");
    assert!(record["echoes"].as_array().unwrap().len() >= 4, "{record}");
    assert!((record["echoes"][0]["arrival_ns"].as_f64().unwrap() - 20e3 / 5.92).abs() < 20.0);
    assert_eq!(record["echoes"][0]["role"], "other");
    assert!((record["pulse"]["centre_frequency_mhz"].as_f64().unwrap() - 5.0).abs() < 0.2);
    assert!(record["pulse"]["spatial_pulse_length_mm"].is_null());

    let assumed = bench.run(&["read", "a.npy", "--format", "json"]);
    assert_eq!(assumed.status, 2);
    assert!(
        assumed
            .errors
            .starts_with("note: a.npy: states no sample rate, 50 MHz assumed"),
        "{}",
        assumed.errors
    );
    let doubled = bench.run(&[
        "read",
        "a.npy",
        "--format",
        "json",
        "--sample-rate",
        "100",
        "--bits",
        "12",
    ]);
    assert_eq!(doubled.errors, "");
    let frequency = |run: &support::Run| run.json()[0]["pulse"]["centre_frequency_mhz"].as_f64().unwrap();
    assert!((frequency(&doubled) / frequency(&assumed) - 2.0).abs() < 0.01);
    let text = bench.run(&["read", "a.csv"]);
    assert!(
        text.out.contains("no reading: no-set-up") && text.out.contains("pulse: 5.0"),
        "{}",
        text.out
    );
}

#[test]
fn the_exit_status_tells_the_worst() {
    let bench = Bench::new();
    bench.write_shots("good.npy", &[Train::CLEAN.shot(6)]);
    bench.write_shots("dead.npy", &[vec![3; 1500]]);
    let run = bench.run(&[
        "read",
        "good.npy",
        "dead.npy",
        "--setup",
        "setup.toml",
        "--format",
        "json",
    ]);
    assert_eq!(run.status, 2);
    assert_eq!(run.json()[1]["no_reading"]["reason"], "dead-receiver");
    assert!(run.json()[0]["no_reading"].is_null());
    let run = bench.run(&[
        "read",
        "dead.npy",
        "no.npy",
        "good.npy",
        "--setup",
        "setup.toml",
        "--format",
        "json",
    ]);
    assert!(
        run.error().starts_with("no.npy: there is no such file"),
        "{}",
        run.errors
    );
    assert_eq!(run.json().len(), 2, "the other files are still measured");
    let text = bench.run(&["read", "good.npy", "--setup", "setup.toml"]);
    assert_eq!(text.status, 0);
    assert!(text.out.starts_with("good.npy, shot 0: "), "{}", text.out);
    assert!(
        text.out.contains("back-wall 1") && text.out.contains("timing"),
        "{}",
        text.out
    );
}

#[test]
fn help_teaches() {
    let bench = Bench::new();
    for (arguments, words) in [
        (&["--help"][..], &["simulate", "read", "calibrate", "Exit status"][..]),
        (
            &["read", "--help"],
            &[
                "halfpulse read",
                "offset-binary",
                "sample_rate_mhz",
                "wrong_cycle_probability",
                "few-echoes",
                "no-set-up",
                "coupling",
            ],
        ),
        (
            &["calibrate", "--help"],
            &["5.000mm=thin.npy", "zero-and-velocity", "checksum"],
        ),
    ] {
        let run = bench.run(arguments);
        assert_eq!(run.status, 0);
        for word in words {
            assert!(run.out.contains(word), "{word}: {}", run.out);
        }
    }
    assert!(bench.run(&["--version"]).out.starts_with("halfpulse 0."));
    for (arguments, word) in [
        (&["measure"][..], "measure"),
        (&["read"], "FILE"),
        (&["read", "a.npy", "--format", "xml"], "xml"),
        (&["read", "a.npy", "--bits", "99"], "99"),
        (
            &["read", "a.npy", "--setup", "setup.toml", "--sample-rate", "50"],
            "cannot be used with",
        ),
        (&["calibrate", "--setup", "setup.toml", "-o", "x.toml"], "--block"),
    ] {
        let run = bench.run(arguments);
        assert!(run.error().contains(word), "{}", run.errors);
    }
}

/// Two echoes 0.4 pulse durations apart: the classical verdict cannot tell them, the model does when asked.
#[test]
fn an_echo_that_is_two_is_told_when_asked() {
    let bench = Bench::new();
    // 10 mm of steel, every back wall with a second echo of half its height 200 ns behind (10 samples of 27).
    let shots: Vec<Vec<i16>> = (0..2)
        .map(|seed| {
            let one = Train::CLEAN.shot(10 + seed);
            let late = Train::CLEAN.shot(20 + seed);
            let mut both = one.clone();
            for (sample, second) in both.iter_mut().skip(10).zip(&late) {
                *sample = (f64::from(*sample) + 0.5 * f64::from(*second)).round() as i16;
            }
            both
        })
        .collect();
    bench.write_shots("a.npy", &shots);
    let arguments = ["read", "a.npy", "--setup", "setup.toml", "--format", "json"];
    let before = bench.run(&arguments).json();
    let after = bench.run(&[&arguments[..], &["--separate"]].concat()).json();
    assert_eq!(after.len(), 2);
    for (before, after) in before.iter().zip(&after) {
        assert!(before["separation"]["log_odds"].is_null(), "{before}");
        let separation = &after["separation"];
        assert_eq!(separation["verdict"], "resolved-by-model", "{after}");
        assert!(separation["reason"].is_null());
        let spacing = separation["spacing_ns"].as_f64().unwrap();
        let u = separation["standard_uncertainty_ns"].as_f64().unwrap();
        assert!((spacing - 200.0).abs() < 5.0 * u + 1.0, "{separation}");
        assert!(
            (separation["amplitude_ratio"].as_f64().unwrap() - 0.5).abs() < 0.1,
            "{separation}"
        );
        assert!(separation["log_odds"].as_f64().unwrap() > 10.0);
        assert_eq!(before["thickness_mm"], after["thickness_mm"], "the reading stays");
    }
    let text = bench.run(&["read", "a.npy", "--setup", "setup.toml", "--separate"]).out;
    assert!(
        text.contains("resolved-by-model; more than a million to one for two"),
        "{text}"
    );
}

/// 0.4 µs of coating above 10 mm of steel: the first back wall comes that much later than the period says.
#[test]
fn a_coating_is_read_with_and_without_its_velocity() {
    let bench = Bench::new();
    let train = Train {
        zero_us: 0.4,
        ..Train::CLEAN
    };
    bench.write_shots("a.npy", &[train.shot(3)]);
    let plain = setup("back-wall-to-back-wall", 0.0, 1.0);
    for (table, thickness, uncertainty) in [
        (
            "[coating]\nvelocity_m_s = 2500\nvelocity_standard_uncertainty_m_s = 50\n",
            Some(0.5),
            0.01,
        ),
        // Not stated: 5 %.
        ("[coating]\nvelocity_m_s = 2500\n", Some(0.5), 0.025),
        ("[coating]\n", None, 0.0),
    ] {
        bench.write("coated.toml", format!("{plain}{table}"));
        let run = bench.run(&["read", "a.npy", "--setup", "coated.toml", "--format", "json"]);
        let record = &run.json()[0];
        assert!(
            (record["thickness_mm"].as_f64().unwrap() - 10.0).abs() < 0.005,
            "{record}"
        );
        let trip = record["coating_round_trip_ns"].as_f64().unwrap();
        let u = record["coating_round_trip_standard_uncertainty_ns"].as_f64().unwrap();
        assert!((trip - 400.0).abs() < 4.0 * u && u < 5.0, "{record}");
        assert_eq!(record["coating_mm"].as_f64().is_some(), thickness.is_some(), "{record}");
        let text = bench.run(&["read", "a.npy", "--setup", "coated.toml"]).out;
        if let Some(thickness) = thickness {
            assert!(
                (record["coating_mm"].as_f64().unwrap() - thickness).abs() < 0.01,
                "{record}"
            );
            let stated = record["coating_standard_uncertainty_mm"].as_f64().unwrap();
            assert!((stated / uncertainty - 1.0).abs() < 0.1, "{record}");
            assert!(text.contains("  coating 0.") && text.contains(" mm +- 0.0"), "{text}");
        } else {
            assert!(
                text.contains(" ns down and up; state its velocity for a thickness"),
                "{text}"
            );
        }
    }
}

/// 1500 samples at 50 MS/s end before the window does: between back walls the second of 44 mm is the last that fits, by hand
/// (30 - 0.27) µs · 5.92 mm/µs / 4; the smallest is 0.62 pulses of 535 ns.
#[test]
fn the_walls_that_can_be_read_are_told() {
    let bench = Bench::new();
    bench.write_shots("a.npy", &Train::CLEAN.shots(1, 1));
    let arguments = ["read", "a.npy", "--setup", "setup.toml", "--format", "json"];
    let record = &bench.run(&arguments).json()[0];
    let (smallest, largest) = (
        record["smallest_wall_mm"].as_f64().unwrap(),
        record["largest_wall_mm"].as_f64().unwrap(),
    );
    assert!(
        (largest - 44.0).abs() < 0.1 && (smallest - 0.982).abs() < 0.02,
        "{record}"
    );
    let text = bench.run(&["read", "a.npy", "--setup", "setup.toml"]).out;
    assert!(
        text.contains("set-up and record read walls from 0.98 to 44.0 mm"),
        "{text}"
    );
    let unknown = &bench.run(&["read", "a.npy", "--format", "json"]).json()[0];
    assert!(unknown["largest_wall_mm"].is_null());
    // A window that leaves no room.
    let late =
        setup("back-wall-to-back-wall", 0.0, 1.0).replace("from_us = 0.5\nto_us = 60.0", "from_us = 0.5\nto_us = 0.7");
    bench.write("late.toml", late);
    let text = bench.run(&["read", "a.npy", "--setup", "late.toml"]).out;
    assert!(text.contains("read no wall") && text.contains("no reading"), "{text}");
}

#[test]
fn what_contradicts_itself_in_the_new_tables_is_said() {
    let bench = Bench::new();
    bench.write_shots("a.npy", &Train::CLEAN.shots(1, 1));
    let plain = setup("back-wall-to-back-wall", 0.0, 1.0);
    for (table, words) in [
        ("[coating]\nvelocity_m_s = -1\n", "[coating] velocity_m_s: "),
        ("[coating]\nvelocity_standard_uncertainty_m_s = 5\n", "is not stated"),
        (
            "[coating]\nvelocity_m_s = 2500\nvelocity_standard_uncertainty_m_s = -5\n",
            "velocity_standard_uncertainty_m_s",
        ),
        ("[part]\nouter_radius_mm = 0\n", "outer_radius_mm"),
        ("[part]\ninner_radius_mm = nan\n", "inner_radius_mm"),
        (
            "[part]\nouter_radius_mm = 50\ninner_radius_mm = 50\n",
            "beside outer_radius_mm",
        ),
    ] {
        bench.write("wrong.toml", format!("{plain}{table}"));
        let run = bench.run(&["read", "a.npy", "--setup", "wrong.toml"]);
        assert!(run.error().contains(words), "{table}: {}", run.errors);
    }
    // A pipe of 20 mm under a probe whose element nobody states: doubted, with advice.
    bench.write("pipe.toml", format!("{plain}[part]\nouter_radius_mm = 20\n"));
    let text = bench.run(&["read", "a.npy", "--setup", "pipe.toml"]).out;
    assert!(text.contains("doubt curved-surface: take a smaller probe"), "{text}");
}
