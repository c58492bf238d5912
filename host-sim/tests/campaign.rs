//! Campaigns: neither threads nor shards nor a kill change a digit, and no part of a file is taken for a whole
//! one; whatever is wrong with a campaign gets one line.

mod support;

use halfpulse_sim::campaign::results::Reader;
use halfpulse_sim::campaign::runner::{self, Shard};
use halfpulse_sim::campaign::writer::Writer;
use halfpulse_sim::campaign::{Campaign, Summary};
use halfpulse_sim::export;
use std::path::Path;
use support::Bench;
use support::small::{SMALL, bench, done, failed};

#[test]
fn threads_and_shards_change_no_digit() {
    let bench = bench();
    let mut tables = Vec::new();
    for threads in ["1", "2", "8"] {
        let name = format!("{threads}.csv");
        tables.push(done(
            &bench,
            &["campaign", "small.toml", "--threads", threads, "-o", &name],
        ));
        assert_eq!(bench.read(&name), bench.read("1.csv"), "{threads} threads");
    }
    assert!(tables.iter().all(|table| *table == tables[0]), "{tables:?}");
    assert_eq!(done(&bench, &["campaign", "1.csv"]), tables[0], "summed up again");
    for shard in 1..=5 {
        let (shard, name) = (format!("{shard}/5"), format!("part{shard}.csv"));
        done(&bench, &["campaign", "small.toml", "--shard", &shard, "-o", &name]);
    }
    let orders = [
        ["part1.csv", "part2.csv", "part3.csv", "part4.csv", "part5.csv"],
        ["part4.csv", "part1.csv", "part5.csv", "part3.csv", "part2.csv"],
    ];
    for (number, order) in orders.iter().enumerate() {
        let name = format!("all{number}.csv");
        let mut arguments = vec!["merge"];
        arguments.extend(order);
        arguments.extend(["-o", &name]);
        assert_eq!(done(&bench, &arguments), tables[0]);
        assert_eq!(bench.read(&name), bench.read("1.csv"), "shards in any order");
    }
}

/// A process may be killed at any byte: the same command makes the same file, without losing or repeating a run.
#[test]
fn a_killed_campaign_goes_on_from_any_byte() {
    let bench = bench();
    done(&bench, &["campaign", "small.toml", "-o", "whole.csv"]);
    let whole = bench.read("whole.csv");
    let campaign = Campaign::read(&bench.path("small.toml")).unwrap();
    let path = bench.path("cut.csv");
    let header = whole.len() - whole.split_inclusive('\n').rev().take(13).map(str::len).sum::<usize>();
    let last_lines = whole.len() - whole.split_inclusive('\n').rev().take(4).map(str::len).sum::<usize>();
    let cuts = (0..header)
        .step_by(97)
        .chain([header - 1, header])
        .chain(last_lines..=whole.len());
    for cut in cuts {
        std::fs::write(&path, &whole[..cut]).unwrap();
        // Nothing takes it for a whole file.
        let mut count = 0;
        if let Ok(mut reader) = Reader::open(&path) {
            while let Ok(Some(_)) = reader.next_row() {
                count += 1;
            }
            let complete = reader.extent().is_some_and(|extent| extent.complete);
            assert_eq!(complete, cut == whole.len(), "cut at {cut}");
        }
        let (mut summary, mut kept) = (Summary::new(&campaign), 0);
        let mut writer = Writer::open(&path, &campaign, Shard::WHOLE, &mut |row| {
            summary.add(&row);
            kept += 1;
            Ok(())
        })
        .unwrap();
        assert_eq!((kept, writer.rows()), (count, count), "cut at {cut}");
        runner::run(&campaign, Shard::WHOLE, writer.rows(), 2, &mut |row| {
            summary.add(&row);
            writer.append(&row)
        })
        .unwrap();
        writer.complete().unwrap();
        drop(writer);
        assert_eq!(std::fs::read_to_string(&path).unwrap(), whole, "cut at {cut}");
        assert_eq!(summary.all.runs, 12);
    }
    // A finished campaign is only summed up.
    assert_eq!(
        done(&bench, &["campaign", "small.toml", "-o", "whole.csv"]),
        done(&bench, &["campaign", "whole.csv"])
    );
}

/// Damage that no kill can do is not mended in silence.
#[test]
fn only_what_belongs_together_is_merged() {
    let bench = bench();
    bench.write(
        "other.toml",
        SMALL.replace("thickness_mm = 8.0 }\nnoise", "thickness_mm = 8.5 }\nnoise"),
    );
    for (name, campaign, extra) in [
        ("a1.csv", "small.toml", ["--shard", "1/2"]),
        ("a2.csv", "small.toml", ["--shard", "2/2"]),
        ("a3.csv", "small.toml", ["--shard", "1/3"]),
        ("seed.csv", "small.toml", ["--seed", "6"]),
        ("other.csv", "other.toml", ["--shard", "2/2"]),
    ] {
        done(&bench, &["campaign", campaign, extra[0], extra[1], "-o", name]);
    }
    bench.write("there.csv", "precious");
    for (inputs, output, words) in [
        (&["a1.csv", "other.csv"][..], "x.csv", ["other.csv", "another campaign"]),
        (&["a1.csv", "seed.csv"], "x.csv", ["seed.csv", "seed 6"]),
        (&["a1.csv"], "x.csv", ["missing 2/2", "run these too"]),
        (&["a1.csv", "a1.csv"], "x.csv", ["a1.csv", "there twice"]),
        (&["a1.csv", "a3.csv"], "x.csv", ["a3.csv", "shard 1/3"]),
        (&["a1.csv", "a2.csv"], "there.csv", ["there.csv", "is there already"]),
        (
            &["a1.csv", "small.toml"],
            "x.csv",
            ["small.toml", "no file of campaign results"],
        ),
        (&["a1.csv", "a2.csv"], "no/such/x.csv", ["x.csv", "folder"]),
    ] {
        let mut arguments = vec!["merge"];
        arguments.extend(inputs);
        arguments.extend(["-o", output]);
        let error = failed(&bench, &arguments);
        assert!(words.iter().all(|word| error.contains(word)), "{inputs:?}: {error}");
        assert!(!bench.path("x.csv").exists());
    }
    // Results of another campaign are not gone on with.
    let error = failed(&bench, &["campaign", "other.toml", "-o", "a1.csv"]);
    assert!(
        error.contains("a1.csv") && error.contains("another campaign"),
        "{error}"
    );
    assert_eq!(bench.read("there.csv"), "precious");
}

#[test]
fn any_run_replays_alone() {
    let bench = bench();
    done(&bench, &["campaign", "small.toml", "-o", "all.csv"]);
    let rows: Vec<String> = bench
        .read("all.csv")
        .lines()
        .filter(|line| !line.starts_with('#'))
        .map(String::from)
        .collect();
    for run in [11usize, 4, 0] {
        let number = run.to_string();
        done(
            &bench,
            &["campaign", "small.toml", "--replay", &number, "-o", "run.npy"],
        );
        let json: serde_json::Value = serde_json::from_str(&bench.read("run.json")).unwrap();
        assert_eq!(json["row"], rows[run + 1]);
        let record = std::fs::read(bench.path("run.npy")).unwrap();
        done(
            &bench,
            &["campaign", "small.toml", "--replay", &number, "-o", "again.npy"],
        );
        assert_eq!(std::fs::read(bench.path("again.npy")).unwrap(), record);
        // What was written is all that `read` needs to come to the same thickness.
        let read = done(
            &bench,
            &["read", "run.npy", "--setup", "run.setup.toml", "--format", "json"],
        );
        let read: serde_json::Value = serde_json::from_str(&read).unwrap();
        assert_eq!(read["thickness_mm"], json["reading"]["thickness_mm"]);
        assert!(
            rows[run + 1].contains(&format!(",reading,{},", json["reading"]["thickness_mm"])),
            "{}",
            rows[run + 1]
        );
        if run < 8 {
            // Without a shift of its own a run is the first shot of its scene with the seed in its truth.
            let seed = json["truth"]["seed"].to_string();
            done(
                &bench,
                &["simulate", "run.scene.toml", "--seed", &seed, "-o", "same.npy"],
            );
            assert_eq!(std::fs::read(bench.path("same.npy")).unwrap(), record);
        }
    }
    let error = failed(&bench, &["campaign", "small.toml", "--replay", "12"]);
    assert!(error.contains("give 0 to 11"), "{error}");
}

const CALIBRATE: &str = r#"[calibrate]
blocks = [
  { thickness_mm = 4.0, standard_uncertainty_mm = 0.003 },
  { thickness_mm = 12.0, standard_uncertainty_mm = 0.003, "scene.noise.snr_db" = { uniform = [35.0, 40.0] } },
]
shots = 4
"#;

/// Each run calibrates in its own world: without it the drawn velocity and zero make the readings wrong, with it
/// they are right.
#[test]
fn a_run_calibrates_on_blocks_of_its_own_world() {
    let bench = bench();
    let world = SMALL.replace(
        "[draw]",
        "[draw]\n\"scene.wall.velocity_m_s\" = { uniform = [5600.0, 6200.0] }\n\"scene.probe.zero_offset_ns\" = { uniform = [-90.0, 90.0] }",
    );
    let world = world.replace(
        "zero = { offset_ns = 0.0, standard_uncertainty_ns = 1.0 }",
        "zero = { offset_ns = 0.0, standard_uncertainty_ns = 100.0 }",
    );
    bench.write("plain.toml", &world);
    bench.write("calibrated.toml", format!("{world}{CALIBRATE}"));
    let summary = |name: &str| {
        let campaign = Campaign::read(&bench.path(name)).unwrap();
        let mut summary = Summary::new(&campaign);
        runner::run(&campaign, Shard::WHOLE, 0, 2, &mut |row| {
            summary.add(&row);
            Ok(())
        })
        .unwrap();
        summary.all
    };
    let (plain, calibrated) = (summary("plain.toml"), summary("calibrated.toml"));
    assert!(plain.inside <= 3, "{plain:?}");
    let right = calibrated.inside + calibrated.doubted_inside;
    assert!(right >= 11 && calibrated.all_gross() == 0, "{calibrated:?}");
    // What a replay writes is the calibrated set-up with its pulse: `read` comes to the same.
    for name in ["1.csv", "2.csv"] {
        done(
            &bench,
            &["campaign", "calibrated.toml", "--threads", &name[..1], "-o", name],
        );
    }
    assert_eq!(bench.read("1.csv"), bench.read("2.csv"));
    done(
        &bench,
        &["campaign", "calibrated.toml", "--replay", "7", "-o", "run.npy"],
    );
    let json: serde_json::Value = serde_json::from_str(&bench.read("run.json")).unwrap();
    let read = done(
        &bench,
        &["read", "run.npy", "--setup", "run.setup.toml", "--format", "json"],
    );
    let read: serde_json::Value = serde_json::from_str(&read).unwrap();
    assert!(read["thickness_mm"].is_number());
    assert_eq!(read["thickness_mm"], json["reading"]["thickness_mm"]);
    let setup = bench.read("run.setup.toml");
    assert!(
        setup.contains("blocks_mm") && !setup.contains("velocity_m_s = 5920\n"),
        "{setup}"
    );
}

/// A calibration that fails is a result of its run; a campaign that cannot calibrate is an error.
#[test]
fn calibrations_that_fail_are_counted() {
    let bench = bench();
    let noisy = CALIBRATE.replace("uniform = [35.0, 40.0]", "uniform = [-30.0, -20.0]");
    bench.write("noisy.toml", format!("{SMALL}{noisy}"));
    let table = done(&bench, &["campaign", "noisy.toml"]);
    assert!(table.contains("refused: not-calibrated 12"), "{table}");
    let said = done(&bench, &["campaign", "noisy.toml", "--replay", "3"]);
    assert!(said.contains("block 2: no back wall near the time of 12 mm"), "{said}");
    let first = 1 + SMALL.lines().count();
    for (from, to, line, words) in [
        ("shots = 4", "shots = 0", first + 5, ["shots", "write shots = 16"]),
        (
            "shots = 4",
            "learn = \"all\"",
            first + 5,
            ["learn", "zero-and-velocity"],
        ),
        (
            "shots = 4",
            "learn = \"zero\"",
            first,
            ["2 blocks where one", "another learn"],
        ),
        (
            "thickness_mm = 4.0",
            "thickness_mm = -4.0",
            first + 1,
            ["block 1: -4 mm", "from 0.05"],
        ),
        (
            "thickness_mm = 12.0, ",
            "",
            first + 1,
            ["block 2", "thickness_mm = 5.0"],
        ),
        (
            "scene.noise.snr_db",
            "setup.record.bits",
            first + 3,
            ["no field of a block", "scene."],
        ),
        (
            "scene.noise.snr_db",
            "scene.noise.snr",
            first + 3,
            ["unknown", "snr_db?"],
        ),
        (
            "shots = 4",
            "shots = 4\n[pulse]\nlearned = 8",
            first + 6,
            ["pulse", "remove one"],
        ),
    ] {
        let text = format!("{SMALL}{}", CALIBRATE.replacen(from, to, 1));
        bench.write("wrong.toml", &text);
        let error = failed(&bench, &["campaign", "wrong.toml"]);
        assert!(
            error.contains(&format!("wrong.toml:{line}: ")) && words.iter().all(|word| error.contains(word)),
            "{to}: {error}"
        );
    }
}

/// One more draw leaves those that are there as they were.
#[test]
fn draws_do_not_disturb_each_other() {
    let bench = bench();
    bench.write(
        "more.toml",
        format!("{SMALL}\"scene.noise.snr_db\" = {{ uniform = [29.0, 31.0] }}\n"),
    );
    let shown = |name: &str| {
        let campaign = Campaign::read(&bench.path(name)).unwrap();
        let column = campaign
            .columns()
            .iter()
            .position(|name| name == "setup.zero.offset_ns")
            .unwrap();
        (0..12)
            .map(|run| campaign.resolve(run).unwrap().shown[column].clone())
            .collect::<Vec<_>>()
    };
    assert_eq!(shown("small.toml"), shown("more.toml"));
}

#[test]
fn what_is_wrong_with_a_campaign_is_one_line_with_its_place() {
    let bench = bench();
    let at = |words: &str| 1 + SMALL.lines().position(|line| line.contains(words)).unwrap();
    let (draw, grid) = (at("setup.zero.offset_ns"), at("\"fixed\""));
    let mut surprises = Vec::new();
    for (from, to, line, words) in [
        (
            "\"setup.zero.offset_ns\"",
            "\"setup.zero.ofset_ns\"",
            draw,
            ["offset_ns?", "ofset_ns"],
        ),
        (
            "\"setup.zero.offset_ns\"",
            "\"scene.wall.thicknes_mm\"",
            draw,
            ["thickness_mm?", "unknown"],
        ),
        (
            "\"setup.zero.offset_ns\"",
            "\"scene.wal.thickness_mm\"",
            draw,
            ["wall?", "unknown"],
        ),
        (
            "\"setup.zero.offset_ns\"",
            "\"shot.time_shft_ns\"",
            draw,
            ["time_shift_ns?", "unknown"],
        ),
        (
            "\"setup.zero.offset_ns\"",
            "\"scene.wall.material.x\"",
            draw,
            ["no table", "scene.wall.material.x"],
        ),
        (
            "\"setup.zero.offset_ns\"",
            "\"wall.thickness_mm\"",
            draw,
            ["is no field", "scene."],
        ),
        (
            "normal = [0.0, 1.0]",
            "normal = [0.0, -1.0]",
            draw,
            ["standard deviation", "-1"],
        ),
        (
            "normal = [0.0, 1.0], within = [-3.0, 3.0]",
            "log_uniform = [0.0, 1.0]",
            draw,
            ["log_uniform", "above 0"],
        ),
        ("runs = 4", "runs = 0", 4, ["runs = 0", "at least 1"]),
        (
            "runs = 4",
            "runs = 1000000000000",
            4,
            ["1000000000000", "at most 333333333"],
        ),
        ("runs = 4", "runs = -3", 4, ["runs", "whole number"]),
        ("runs = 4", "runs = 4.5", 4, ["runs", "whole number"]),
        ("runs = 4", "run = 4", 4, ["unknown key run", "runs?"]),
        ("version = 1", "version = 2", 1, ["version", "write version = 1"]),
        ("seed = 5", "seed = ", 3, ["quoted", "TOML"]),
        (
            "\"scene.wall.thickness_mm\" = 8.0 }",
            "\"scene.wall.thickness_mm\" = -8.0 }",
            grid,
            ["-8", "give 0.001"],
        ),
        ("samples = 1024", "samples = 1e9", 6, ["samples", "invalid type"]),
        ("samples = 1024", "samples = 1000000000", 6, ["samples", "give 16 to"]),
        (
            "carbon steel",
            "carbonsteel",
            8,
            ["did you mean carbon steel", "material"],
        ),
        ("span = \"back-wall", "span = \"bakc-wall", 15, ["span", "write one of"]),
    ] {
        let text = SMALL.replacen(from, to, 1);
        assert_ne!(text, SMALL, "{from}");
        bench.write("wrong.toml", &text);
        let error = failed(&bench, &["campaign", "wrong.toml", "-o", "wrong.csv"]);
        let place = error.contains(&format!("wrong.toml:{line}: "));
        if !(place && words.iter().all(|word| error.contains(word))) {
            surprises.push(format!("{to}: {error} (line {line}, {words:?})"));
        }
        assert!(!bench.path("wrong.csv").exists(), "{to}: an output was begun");
    }
    assert!(surprises.is_empty(), "{}", surprises.join("\n"));
    let twice = format!("{SMALL}\"shot.time_shift_ns\" = 3.0\n");
    bench.write("twice.toml", twice);
    let error = failed(&bench, &["campaign", "twice.toml"]);
    assert!(error.contains("set twice"), "{error}");
    for (arguments, word) in [
        (&["campaign", "none.toml"][..], "no such file"),
        (&["campaign", "."], "folder"),
        (&["campaign", "small.toml", "--shard", "3/2"], "no shard"),
        (&["campaign", "small.toml", "--threads", "0"], "threads"),
        (&["campaign", "small.toml", "--runs", "0"], "at least 1"),
        (&["campaign", "small.toml", "-o", "no/such/folder.csv"], "folder"),
        (&["campaign", "small.toml", "-o", "."], "no ordinary file"),
        (&["campaign"], "required"),
    ] {
        let error = failed(&bench, arguments);
        assert!(error.contains(word), "{arguments:?}: {error}");
    }
}

/// What lies beyond a range is only met by a run that draws it: the error names the run.
#[test]
fn a_run_that_cannot_be_made_is_named() {
    let bench = bench();
    let text = SMALL
        .replace("log_uniform = [4.0, 12.0]", "uniform = [-30.0, 30.0]")
        .replace("\"scene.wall.thickness_mm\" = 8.0", "\"scene.noise.snr_db\" = 30.0");
    bench.write("wrong.toml", &text);
    // The first run of the cell is sound, about half of the others are not.
    let error = failed(&bench, &["campaign", "wrong.toml", "--runs", "40"]);
    let line = 1 + text.lines().position(|line| line.contains("thin")).unwrap();
    let place = format!("wrong.toml:{line}: run ");
    assert!(error.contains("thickness_mm") && error.contains(&place), "{error}");
}

/// A limit on the size of files stands in for a full disk: what is written up to there is kept, and the same command
/// goes on once there is room.
#[test]
fn summaries_and_figures_are_written() {
    let bench = bench();
    let text = SMALL.replace(
        "[draw]",
        "\"scene.noise.snr_db\" = { from = 20.0, to = 40.0, steps = 3 }\n[draw]",
    );
    bench.write("grid.toml", text);
    let table = done(
        &bench,
        &["campaign", "grid.toml", "--summary", "sum.csv", "--figures", "figures"],
    );
    assert!(
        table.contains("9 cells of 4 runs") && table.contains("moving"),
        "{table}"
    );
    let summary = bench.read("sum.csv");
    let lines: Vec<&str> = summary.lines().collect();
    assert_eq!(lines.len(), 12);
    assert!(lines[1].contains("made by halfpulse") && lines[1].contains("fnv1a64:"));
    let columns: Vec<&str> = lines[2].split(',').collect();
    assert!(lines[2].starts_with("cell,walls,scene.noise.snr_db,runs,"));
    assert!(lines[3].starts_with("0,fixed,20.0,4,"), "{}", lines[3]);
    assert!(lines[6].contains("\"drawn, \"\"thin\"\"\""), "{}", lines[6]);
    // The same as JSON, and the quantiles in order.
    done(&bench, &["campaign", "grid.toml", "--summary", "sum.json"]);
    let json: serde_json::Value = serde_json::from_str(&bench.read("sum.json")).unwrap();
    assert_eq!(json["all"]["runs"], 36);
    for (line, cell) in lines[3..].iter().zip(json["cells"].as_array().unwrap()) {
        if line.contains('"') {
            continue; // a label with commas
        }
        let fields: Vec<&str> = line.split(',').collect();
        let field = |name: &str| fields[columns.iter().position(|column| *column == name).unwrap()];
        assert_eq!(fields.len(), columns.len());
        assert_eq!(cell["axes"]["walls"], field("walls"));
        assert_eq!(cell["inside"]["count"].to_string(), field("inside"));
        let errors: Vec<f64> = ["error_low_um", "error_median_um", "error_high_um"]
            .iter()
            .map(|name| field(name).parse().unwrap())
            .collect();
        assert!(errors.is_sorted(), "{errors:?}");
        for (error, name) in errors.iter().zip(["2.5 %", "median", "97.5 %"]) {
            let same = cell["error_um"][name].as_f64().unwrap();
            assert!((same - error).abs() < 1e-5, "{name}");
        }
        let worst: f64 = field("error_worst_um").parse().unwrap();
        assert!(worst.abs() >= errors[0].abs().max(errors[2].abs()));
    }
    for name in ["errors.svg", "rates.svg"] {
        let figure = std::fs::read_to_string(bench.path("figures").join(name)).unwrap();
        assert!(
            figure.starts_with("<svg") && figure.trim_end().ends_with("</svg>"),
            "{name}"
        );
        assert!(figure.contains("moving"), "{name} has no legend");
    }
    // A narrow terminal has no room for the quantiles.
    let campaign = Campaign::read(&bench.path("grid.toml")).unwrap();
    let summary = Summary::new(&campaign);
    assert!(export::table_within(&summary, 1000).contains("97.5 %"));
    assert!(!export::table_within(&summary, 80).contains("97.5 %"));
    let empty = export::table(&Summary::new(&campaign));
    assert!(empty.contains("snr_db"), "{empty}");
}

/// The example of the help is a campaign.
#[test]
fn the_example_can_be_run() {
    let bench = Bench::new();
    let scenes = Path::new(env!("CARGO_MANIFEST_DIR")).join("scenes");
    std::fs::copy(scenes.join("clean_train.toml"), bench.path("scene.toml")).unwrap();
    bench.write("setup.toml", halfpulse_sim::setup_file::keys::EXAMPLE);
    bench.write("walls.toml", halfpulse_sim::campaign::file::EXAMPLE);
    let table = done(&bench, &["campaign", "walls.toml", "--runs", "1"]);
    assert!(table.contains("30 cells of 1 runs"), "{table}");
}
