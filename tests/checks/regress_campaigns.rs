//! The committed campaigns of tests/campaigns, small versions of them, against their committed tables: whatever
//! changes what the gauge reads, doubts or refuses shows as a difference of numbers.
//!
//! `HALFPULSE_WRITE_SNAPSHOTS=1 cargo test -p halfpulse-tests regress_campaigns` writes the tables anew;
//! tests/campaigns/README.md says how to run the large versions.

use halfpulse_sim::campaign::{Campaign, Shard, Summary, runner};
use halfpulse_sim::export;
use std::path::{Path, PathBuf};

fn campaigns() -> Vec<PathBuf> {
    let folder = Path::new(env!("CARGO_MANIFEST_DIR")).join("campaigns");
    let mut files: Vec<PathBuf> = std::fs::read_dir(folder)
        .expect("tests/campaigns is there")
        .map(|entry| entry.expect("an entry of the folder").path())
        .filter(|path| path.extension().is_some_and(|extension| extension == "toml"))
        .collect();
    files.sort();
    files
}

#[test]
fn regress_campaigns() {
    let write = std::env::var_os("HALFPULSE_WRITE_SNAPSHOTS").is_some();
    let files = campaigns();
    assert!(!files.is_empty(), "no campaign in tests/campaigns");
    let mut changed = Vec::new();
    for path in &files {
        let campaign = Campaign::read(path).unwrap_or_else(|error| panic!("{error}"));
        let mut summary = Summary::new(&campaign);
        let threads = std::thread::available_parallelism().map_or(1, std::num::NonZero::get);
        let begin = std::time::Instant::now();
        runner::run(&campaign, Shard::WHOLE, 0, threads, &mut |row| {
            summary.add(&row);
            Ok(())
        })
        .unwrap_or_else(|error| panic!("{error}"));
        let table = export::table(&summary);
        println!("{}: {:.1} s\n{table}", path.display(), begin.elapsed().as_secs_f64());
        let snapshot = path.with_extension("txt");
        if write {
            std::fs::write(&snapshot, &table).expect("the snapshot can be written");
        } else if std::fs::read_to_string(&snapshot).is_ok_and(|text| text == table) {
            continue;
        } else {
            changed.push(snapshot.display().to_string());
        }
    }
    assert!(
        changed.is_empty() || write,
        "the tables of {} are others now (printed above): if that is meant, run again with HALFPULSE_WRITE_SNAPSHOTS=1 and look at the difference",
        changed.join(", ")
    );
}
