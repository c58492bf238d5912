//! Whatever is wrong with what the command is given: one line with place and remedy, or a refusal with
//! its reason; status 1 or 2; never a panic.

mod support;

use support::{Bench, Train, npy_of_floats, setup};

/// Files that are wrong: status 1, one line that begins with the file.
#[test]
fn wrong_files_are_errors_with_file_place_and_remedy() {
    let bench = Bench::new();
    bench.write_shots("good.npy", &[Train::CLEAN.shot(1)]);
    bench.write_shots("good.wav", &[Train::CLEAN.shot(1)]);
    let npy = std::fs::read(bench.path("good.npy")).unwrap();
    let wav = std::fs::read(bench.path("good.wav")).unwrap();
    let with_header = |from: &str, to: &str| {
        let text: Vec<u8> = npy.clone();
        let at = text
            .windows(from.len())
            .position(|w| w == from.as_bytes())
            .expect("in the header");
        [&text[..at], to.as_bytes(), &text[at + from.len()..]].concat()
    };
    for (name, content, expected) in [
        ("empty.npy", vec![], "is empty"),
        ("empty.csv", vec![], "is empty"),
        ("empty.wav", vec![], "is empty"),
        ("cut.npy", npy[..npy.len() - 7].to_vec(), "is truncated"),
        ("cut.wav", wav[..wav.len() - 7].to_vec(), "is truncated"),
        ("type.npy", with_header("'<i2'", "'<c8'"), "holds numbers of type <c8"),
        ("order.npy", with_header("'<i2'", "'>i2'"), "big-endian"),
        ("shape.npy", with_header("(1500,)", "(1,9,9)"), "3 dimensions"),
        ("longer.npy", with_header("(1500,)", "(9500,)"), "is truncated"),
        (
            "nan.npy",
            npy_of_floats(&[0.0, f32::NAN]),
            "shot 0, sample 1: NaN is not a number",
        ),
        ("inf.npy", npy_of_floats(&[0.0, 0.5, f32::INFINITY]), "sample 2: inf"),
        ("loud.npy", npy_of_floats(&[0.0, 3.0]), "3 is beyond full scale"),
        (
            "text.csv",
            b"1\n2\nthree\n".to_vec(),
            "text.csv:3: 'three' is not a number",
        ),
        (
            "range.csv",
            b"1\n2048\n".to_vec(),
            "range.csv:2: 2048 is outside the range of 12 signed bits",
        ),
        (
            "rate.csv",
            b"time_s,value\n0,1\n1e-8,2\n2e-8,3\n".to_vec(),
            "was sampled at 100",
        ),
        (
            "start.csv",
            b"time_s,value\n1e-6,1\n1.02e-6,2\n1.04e-6,3\n".to_vec(),
            "starts at 1 us",
        ),
        ("record.txt", npy.clone(), "ending"),
    ] {
        bench.write(name, content);
        let run = bench.run(&["read", name, "--setup", "setup.toml"]);
        assert!(run.error().starts_with(name), "{}", run.errors);
        assert!(run.error().contains(expected), "{name}: {}", run.errors);
        assert_eq!(run.out, "");
        // The same without a set-up: an error or a refusal, never a panic.
        assert_ne!(bench.run(&["read", name]).status, 0, "{name}");
    }
    let run = bench.run(&["read", "missing.npy", "--setup", "setup.toml"]);
    assert!(
        run.error().starts_with("missing.npy: there is no such file"),
        "{}",
        run.errors
    );
    std::fs::create_dir(bench.path("folder.npy")).unwrap();
    let run = bench.run(&["read", "folder.npy", "--setup", "setup.toml"]);
    assert!(run.error().contains("is a folder"), "{}", run.errors);
}

/// Records that no reading can come of: status 2 with the reason.
#[test]
fn useless_records_are_refused_with_the_reason() {
    let bench = Bench::new();
    let clipped = Train {
        first: 200_000.0,
        decay: 0.9,
        ..Train::CLEAN
    };
    let quiet = Train {
        first: 0.0,
        ..Train::CLEAN
    };
    let one = Train {
        echoes: 1,
        ..Train::CLEAN
    };
    for (name, codes, reason) in [
        ("one-sample.npy", vec![7], "window-outside-record"),
        ("short.npy", vec![7; 40], "record-too-short"),
        ("zero.npy", vec![0; 1500], "dead-receiver"),
        ("equal.npy", vec![-17; 1500], "dead-receiver"),
        ("clipped.npy", clipped.shot(1), "clipped"),
        ("quiet.npy", quiet.shot(1), "no-echo"),
        ("one.npy", one.shot(1), "one-echo-where-two-are-needed"),
    ] {
        bench.write_shots(name, &[codes]);
        let run = bench.run(&["read", name, "--setup", "setup.toml", "--format", "json"]);
        assert_eq!(run.status, 2, "{name}: {}{}", run.out, run.errors);
        let record = &run.json()[0];
        assert_eq!(record["no_reading"]["reason"], reason, "{name}");
        let detail = record["no_reading"]["detail"].as_str().unwrap();
        assert!(detail.contains("; "), "no advice: {detail}");
        assert!(record["thickness_mm"].is_null());
        let run = bench.run(&["read", name]);
        assert_eq!(run.status, 2, "{name} without a set-up: {}", run.errors);
    }
    let outside = setup("back-wall-to-back-wall", 0.0, 1.0)
        .replace("from_us = 0.5", "from_us = 100")
        .replace("to_us = 60.0", "to_us = 200");
    bench.write("outside.toml", outside);
    bench.write_shots("good.npy", &[Train::CLEAN.shot(1)]);
    let run = bench.run(&["read", "good.npy", "--setup", "outside.toml", "--format", "json"]);
    assert_eq!(run.status, 2);
    assert_eq!(run.json()[0]["no_reading"]["reason"], "window-outside-record");
}

/// Set-ups that are wrong: status 1, one line with file, line, key and remedy.
#[test]
fn wrong_setups_are_errors_with_line_and_key() {
    let bench = Bench::new();
    bench.write_shots("good.npy", &[Train::CLEAN.shot(1)]);
    let good = setup("back-wall-to-back-wall", 0.0, 1.0);
    for (from, to, expected) in [
        (
            "sample_rate_mhz = 50",
            "sample_rate_mhz = 0",
            "bad.toml:3: [record] sample_rate_mhz",
        ),
        (
            "sample_rate_mhz = 50",
            "sample_rate_mhz = 12.9",
            "twice the probe's upper -6 dB frequency",
        ),
        (
            "percent = 60",
            "percent = 200.1",
            "bad.toml:10: [probe] relative_bandwidth_percent",
        ),
        ("from_us = 0.5", "from_us = 60", "the window must start before it ends"),
        (
            "velocity_m_s = 5920",
            "velocity_m_s = -5920",
            "bad.toml:14: [material] velocity_m_s",
        ),
        ("bits = 12", "bitz = 12", "did you mean bits?"),
        ("bits = 12", "", "how many bits"),
        ("kind =", "kin =", "did you mean kind?"),
        ("[zero]", "[zeros]", "did you mean zero?"),
        (
            "percent = 60",
            "percent = 60\nreference_pulse = \"no.npy\"",
            "no.npy: there is no such file",
        ),
        ("percent = 60", "percent = 0.5", "reference pulse is longer"),
        ("[measure]", "[measure", "bad.toml:19: "),
    ] {
        assert!(good.contains(from));
        bench.write("bad.toml", good.replacen(from, to, 1));
        let run = bench.run(&["read", "good.npy", "--setup", "bad.toml"]);
        assert!(run.error().contains(expected), "{to}: {}", run.errors);
        assert_eq!(run.out, "");
    }
    let coarse = good.replace("centre_frequency_mhz = 5.0", "centre_frequency_mhz = 14.0");
    bench.write("coarse.toml", coarse);
    assert_ne!(
        bench.run(&["read", "good.npy", "--setup", "coarse.toml"]).status,
        1,
        "a doubt, no error"
    );
    let run = bench.run(&["read", "good.npy", "--setup", "none.toml"]);
    assert!(
        run.error().starts_with("none.toml: there is no such file"),
        "{}",
        run.errors
    );
    bench.write("binary.toml", [0xff, 0x00, 0xfe]);
    assert!(
        bench
            .run(&["read", "good.npy", "--setup", "binary.toml"])
            .error()
            .contains("not text")
    );
    for rate in ["0", "-5", "NaN"] {
        let rate = format!("--sample-rate={rate}");
        assert!(
            bench
                .run(&["read", "good.npy", &rate])
                .error()
                .contains("no sample rate")
        );
    }
}

#[test]
fn wrong_calibrations_are_errors() {
    let bench = Bench::new();
    let thin = Train {
        wall_mm: 5.0,
        ..Train::CLEAN
    };
    bench.write_shots("thin.npy", &thin.shots(4, 1));
    bench.write_shots(
        "thick.npy",
        &Train {
            wall_mm: 25.0,
            samples: 3000,
            ..Train::CLEAN
        }
        .shots(4, 2),
    );
    bench.write_shots("dead.npy", &[vec![0; 1500]]);
    bench.write(
        "transmission.toml",
        setup("transmission-pulse-to-back-wall", 5.0, 100.0),
    );
    for (arguments, expected) in [
        (&["--block", "5=thin.npy"][..], "has no mm"),
        (&["--block", "0mm=thin.npy"], "is no block"),
        (&["--block", "-5mm=thin.npy"], "is no block"),
        (&["--block", "1e6mm=thin.npy"], "is no block"),
        (&["--block", "5mm=no.npy"], "no.npy: there is no such file"),
        (&["--block", "5mm=dead.npy"], "all samples are equal"),
        (
            &["--block", "9mm=thin.npy"],
            "thin.npy: its back walls are 1689.2 ns apart, 9 mm promise 3040.5 ns",
        ),
        (
            &["--block", "5mm=thin.npy", "--learn", "zero-and-velocity"],
            "cannot determine both",
        ),
        (&["--block", "5mm=thin.npy", "--block", "5mm=thin.npy"], "equally thick"),
        (&["--block", "5mm=thin.npy", "--block", "5.004mm=thin.npy"], "same time"),
        (
            &["--block", "5mm=thin.npy", "--block", "25mm+-5mm=thick.npy"],
            "further apart or known better",
        ),
        (
            &[
                "--block",
                "5mm=thin.npy",
                "--block",
                "25mm=thick.npy",
                "--learn",
                "zero",
            ],
            "2 blocks where one",
        ),
        (&["--block", "5mm=thin.npy", "--date", "yesterday"], "is no date"),
        (&["--block", "5mm=thin.npy", "--temperature", "-300"], "no temperature"),
    ] {
        let all = [
            &["calibrate", "--setup", "transmission.toml", "-o", "out.toml"][..],
            arguments,
        ]
        .concat();
        let run = bench.run(&all);
        assert!(run.error().contains(expected), "{arguments:?}: {}", run.errors);
        assert!(!bench.path("out.toml").exists(), "{arguments:?}");
    }
    let run = bench.run(&[
        "calibrate",
        "--setup",
        "transmission.toml",
        "--block",
        "5mm=thin.npy",
        "-o",
        "no/such/out.toml",
    ]);
    assert!(run.error().contains("cannot be written"), "{}", run.errors);
}

/// What only Unix has: a full disk, a device that never ends.
#[cfg(target_os = "linux")]
#[test]
fn full_disks_and_endless_files_are_errors() {
    let bench = Bench::new();
    bench.write_shots("good.npy", &[Train::CLEAN.shot(1)]);
    std::os::unix::fs::symlink("/dev/zero", bench.path("zero.npy")).unwrap();
    std::os::unix::fs::symlink("/dev/zero", bench.path("zero.toml")).unwrap();
    let run = bench.run(&["read", "zero.npy", "--setup", "setup.toml"]);
    assert!(run.error().contains("is no ordinary file"), "{}", run.errors);
    let run = bench.run(&["read", "good.npy", "--setup", "zero.toml"]);
    assert!(run.error().contains("is no ordinary file"), "{}", run.errors);
    let full = std::fs::File::options().write(true).open("/dev/full").unwrap();
    let run = bench.run_into(&["read", "good.npy", "--setup", "setup.toml"], full.into());
    assert!(run.error().contains("the output cannot be written"), "{}", run.errors);
}
