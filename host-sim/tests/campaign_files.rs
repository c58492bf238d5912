//! What can happen to a campaign's files: damage, a full disk, a second process, a stranger's rows, a sink that stops.

mod support;

use halfpulse_sim::campaign::Campaign;
use halfpulse_sim::campaign::runner::{self, Shard};
use halfpulse_sim::campaign::writer::Writer;
use halfpulse_sim::input_error::InputError;
use halfpulse_sim::output::Lock;
use support::small::{SMALL, bench, done, failed};

#[cfg(unix)]
#[test]
fn a_full_disk_is_an_error_and_the_campaign_goes_on() {
    let bench = bench();
    let larger = SMALL.replace("runs = 4", "runs = 12");
    bench.write("small.toml", &larger);
    done(&bench, &["campaign", "small.toml", "-o", "whole.csv"]);
    let command = env!("CARGO_BIN_EXE_halfpulse");
    // Blocks of 512 bytes: room for the header and some rows. Without the trap a signal would end the process.
    let blocks = 1 + bench.read("whole.csv").len() / 512 - 3;
    let script = format!("trap '' XFSZ; ulimit -f {blocks}; exec {command} campaign small.toml -o cut.csv");
    let shell = std::process::Command::new("sh")
        .args(["-c", &script])
        .current_dir(bench.path(""))
        .output()
        .unwrap();
    let error = String::from_utf8(shell.stderr).unwrap();
    assert_eq!(shell.status.code(), Some(1), "{error}");
    assert!(
        error.contains("cut.csv: cannot be written") && error.contains("goes on where it stopped"),
        "{error}"
    );
    assert_eq!(error.lines().count(), 1, "{error}");
    done(&bench, &["campaign", "small.toml", "-o", "cut.csv"]);
    assert_eq!(bench.read("cut.csv"), bench.read("whole.csv"));
}

/// Two processes never mix their rows; a process that was killed leaves nothing locked.
#[cfg(unix)]
#[test]
fn only_one_process_writes_a_file_of_results() {
    let bench = bench();
    let mut first = std::process::Command::new(env!("CARGO_BIN_EXE_halfpulse"))
        .args(["campaign", "small.toml", "--runs", "100000000", "-o", "all.csv"])
        .args(["--quiet", "--threads", "1"])
        .current_dir(bench.path(""))
        .spawn()
        .unwrap();
    // The header is there once the file is locked.
    let begun = || std::fs::metadata(bench.path("all.csv")).is_ok_and(|about| about.len() > 0);
    let begin = std::time::Instant::now();
    while !begun() && begin.elapsed().as_secs() < 60 {
        std::thread::sleep(std::time::Duration::from_millis(5));
    }
    for arguments in [
        &["campaign", "small.toml", "--runs", "100000000", "-o", "all.csv"][..],
        // Not even what is not its own is touched, or called damaged.
        &["campaign", "small.toml", "-o", "all.csv"],
        &["campaign", "small.toml", "--shard", "1/2", "-o", "all.csv"],
    ] {
        let error = failed(&bench, arguments);
        assert!(
            error.contains("all.csv: is being written by another process; wait until that ends"),
            "{error}"
        );
    }
    first.kill().unwrap();
    first.wait().unwrap();
    let campaign = Campaign::read_changed(&bench.path("small.toml"), Some(100_000_000), None).unwrap();
    let mut rows = 0;
    let writer = Writer::open(&bench.path("all.csv"), &campaign, Shard::WHOLE, &mut |_| {
        rows += 1;
        Ok(())
    });
    let writer = writer.unwrap_or_else(|error| panic!("{error}"));
    assert_eq!((writer.rows(), writer.is_complete()), (rows, false));
    assert_eq!(writer.lock(), Lock::Held);
}

/// Where a disk knows no locks, or a process does not ask for one, rows of two processes are noticed.
#[test]
fn a_stranger_in_the_file_is_noticed() {
    let bench = bench();
    let path = bench.path("all.csv");
    let campaign = Campaign::read(&bench.path("small.toml")).unwrap();
    let mut writer = Writer::open(&path, &campaign, Shard::WHOLE, &mut |_| Ok(())).unwrap();
    std::fs::write(&path, format!("{}0,0,8,\n", bench.read("all.csv"))).unwrap();
    let error = writer.flush().unwrap_err().to_string();
    assert!(
        error.contains("all.csv: another process has written to it") && error.contains("delete it"),
        "{error}"
    );
}

/// Summaries and merged results on a full disk: an error, and nothing that looks whole.
#[cfg(unix)]
#[test]
fn a_full_disk_leaves_no_half_of_a_merge_or_summary() {
    let bench = bench();
    done(&bench, &["campaign", "small.toml", "-o", "whole.csv"]);
    bench.write("sum.csv", "the last one");
    let command = env!("CARGO_BIN_EXE_halfpulse");
    for (arguments, output) in [
        ("merge whole.csv -o all.csv", "all.csv"),
        ("campaign whole.csv --summary sum.csv", "sum.csv"),
    ] {
        let script = format!("trap '' XFSZ; ulimit -f 1; exec {command} {arguments}");
        let shell = std::process::Command::new("sh")
            .args(["-c", &script])
            .current_dir(bench.path(""))
            .output()
            .unwrap();
        let error = String::from_utf8(shell.stderr).unwrap();
        assert_eq!(shell.status.code(), Some(1), "{arguments}: {error}");
        assert!(error.contains(&format!("{output}: cannot be written (")), "{error}");
        assert!(!bench.path(&format!("{output}.part")).exists());
    }
    assert!(!bench.path("all.csv").exists());
    assert_eq!(bench.read("sum.csv"), "the last one");
}

/// Memory: a row that has been handed over is gone. What remains are the threads' channels.
#[test]
fn a_sink_that_stops_ends_all_threads() {
    let bench = bench();
    let campaign = Campaign::read_changed(&bench.path("small.toml"), Some(100_000_000), None).unwrap();
    let mut rows = 0;
    let result = runner::run(&campaign, Shard::WHOLE, 0, 4, &mut |_| {
        rows += 1;
        if rows == 20 {
            return Err(InputError::in_argument("enough", "stop"));
        }
        Ok(())
    });
    assert_eq!((rows, result.unwrap_err().to_string().as_str()), (20, "enough; stop"));
}

#[test]
fn damaged_results_are_refused() {
    let bench = bench();
    done(&bench, &["campaign", "small.toml", "-o", "whole.csv"]);
    let whole = bench.read("whole.csv");
    let lines: Vec<&str> = whole.split_inclusive('\n').collect();
    let first_row = lines.len() - 13;
    let without = |number: usize| {
        let mut lines = lines.clone();
        lines.remove(number);
        lines.concat()
    };
    for (what, text, word) in [
        ("a row is missing", without(first_row + 3), "is not the row of run 3"),
        (
            "rows follow",
            format!("{whole}{}", lines[first_row]),
            "follows the closing line",
        ),
        (
            "a row is no row",
            whole.replace("\n5,", "\n5;"),
            "is not the row of run 5",
        ),
        (
            "closed too early",
            [&lines[..first_row + 2], &lines[lines.len() - 1..]].concat().concat(),
            "closing line",
        ),
        (
            "another file",
            "a,b\n1,2\n".to_string(),
            "is no file of campaign results",
        ),
    ] {
        bench.write("damaged.csv", &text);
        for arguments in [
            &["campaign", "small.toml", "-o", "damaged.csv"][..],
            &["campaign", "damaged.csv"],
            &["merge", "damaged.csv", "-o", "all.csv"],
        ] {
            let error = failed(&bench, arguments);
            assert!(error.contains("damaged.csv") && error.contains(word), "{what}: {error}");
            assert_eq!(bench.read("damaged.csv"), text, "{what}: the file was changed");
        }
    }
    bench.write("cut.csv", &whole[..whole.len() - 30]);
    for arguments in [&["campaign", "cut.csv"][..], &["merge", "cut.csv", "-o", "all.csv"]] {
        let error = failed(&bench, arguments);
        assert!(
            error.contains("cut.csv") && error.contains("is not complete"),
            "{error}"
        );
    }
    assert!(!bench.path("all.csv").exists() && !bench.path("all.csv.part").exists());
}
