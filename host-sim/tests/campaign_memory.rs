//! The memory of a campaign does not depend on its length: counted, not timed. A binary of its own, because an
//! allocator that counts is the whole binary's.

use halfpulse_sim::campaign::results::Reader;
use halfpulse_sim::campaign::row::{Row, RowReading};
use halfpulse_sim::campaign::runner::{self, Shard};
use halfpulse_sim::campaign::writer::Writer;
use halfpulse_sim::campaign::{Campaign, Summary, merge};
use std::alloc::{GlobalAlloc, Layout, System};
use std::path::Path;
use std::sync::atomic::{AtomicUsize, Ordering};
use tempfile::TempDir;

struct Counting;

static LIVE: AtomicUsize = AtomicUsize::new(0);
static PEAK: AtomicUsize = AtomicUsize::new(0);

fn grown(bytes: usize) {
    let live = LIVE.fetch_add(bytes, Ordering::Relaxed) + bytes;
    PEAK.fetch_max(live, Ordering::Relaxed);
}

// SAFETY: all work is the system's allocator's; the counts touch nothing of it.
unsafe impl GlobalAlloc for Counting {
    unsafe fn alloc(&self, layout: Layout) -> *mut u8 {
        grown(layout.size());
        // SAFETY: the caller's promises are handed on.
        unsafe { System.alloc(layout) }
    }

    unsafe fn dealloc(&self, pointer: *mut u8, layout: Layout) {
        LIVE.fetch_sub(layout.size(), Ordering::Relaxed);
        // SAFETY: the caller's promises are handed on.
        unsafe { System.dealloc(pointer, layout) }
    }
}

#[global_allocator]
static ALLOCATOR: Counting = Counting;

/// The most bytes that were in use at once, beyond those at the start.
fn peak(work: impl FnOnce()) -> usize {
    let before = LIVE.load(Ordering::Relaxed);
    PEAK.store(before, Ordering::Relaxed);
    work();
    PEAK.load(Ordering::Relaxed) - before
}

/// Two cells of records that are quickly made.
const TINY: &str = r#"version = 1
name = "tiny"
runs = 1
[scene]
record = { sample_rate_mhz = 20.0, samples = 256 }
probe = { kind = "contact", centre_frequency_mhz = 2.0, relative_bandwidth_percent = 80.0 }
wall = { material = "carbon steel", velocity_m_s = 5920.0, thickness_mm = 12.0 }
[setup]
record = { sample_rate_mhz = 20.0, bits = 12 }
probe = { kind = "contact", centre_frequency_mhz = 2.0, relative_bandwidth_percent = 80.0 }
material = { velocity_m_s = 5920.0, velocity_standard_uncertainty_m_s = 6.0 }
measure = { span = "back-wall-to-back-wall", from_us = 1.0 }
[grid]
"scene.noise.snr_db" = [20.0, 35.0]
[draw]
"shot.wall_change_um" = { uniform = [-100.0, 100.0] }
"#;

/// What may differ: rows in the threads' channels, and the cells' buckets. A row alone has some 300 bytes.
const ALLOWED: usize = 96 << 10;

fn campaign(folder: &TempDir, runs: u64) -> Campaign {
    let path = folder.path().join("tiny.toml");
    std::fs::write(&path, TINY).unwrap();
    Campaign::read_changed(&path, Some(runs), None).unwrap()
}

/// A row that looks like a run's; errors spread over decades.
fn row(campaign: &Campaign, run: u64) -> Row {
    let share = ((run * 7919) % 10_007) as f32 / 10_007.0;
    let sign = if run.is_multiple_of(2) { 1.0 } else { -1.0 };
    let thickness_mm = 12.0 + sign * 10f32.powf(4.0 * share - 5.0);
    Row {
        run,
        cell: run / campaign.runs,
        truth_mm: Some(12.0),
        quarter_mm: 0.74,
        bound_mm: Some(0.001),
        outcome: Ok(RowReading {
            thickness_mm,
            standard_uncertainty_mm: 0.01,
            coverage_factor: 2.0,
            doubts: Vec::new(),
            dominating: "timing".to_string(),
        }),
        shown: vec!["20.0".to_string(), "12.345678901234".to_string()],
    }
}

fn write(path: &Path, campaign: &Campaign, shard: Shard) {
    let mut writer = Writer::open(path, campaign, shard, &mut |_| Ok(())).unwrap();
    for number in 0..shard.rows(campaign.total()) {
        writer.append(&row(campaign, shard.run(number))).unwrap();
    }
    writer.complete().unwrap();
}

/// One test, because the counts are of all threads.
#[test]
fn memory_does_not_grow_with_the_runs() {
    let folder = TempDir::new().unwrap();
    let mut peaks = Vec::new();
    for runs in [150, 3000] {
        let campaign = campaign(&folder, runs);
        let path = folder.path().join(format!("{runs}.csv"));
        let running = peak(|| {
            let mut summary = Summary::new(&campaign);
            let mut writer = Writer::open(&path, &campaign, Shard::WHOLE, &mut |_| Ok(())).unwrap();
            runner::run(&campaign, Shard::WHOLE, 0, 2, &mut |row| {
                summary.add(&row);
                writer.append(&row)
            })
            .unwrap();
            writer.complete().unwrap();
            assert_eq!(summary.all.runs, 2 * runs);
        });
        peaks.push(("running", 2 * runs, running));
    }
    for runs in [5_000, 100_000] {
        let campaign = campaign(&folder, runs);
        let shards: Vec<_> = [0, 1]
            .map(|index| {
                let path = folder.path().join(format!("{runs}-{index}.csv"));
                write(&path, &campaign, Shard { index, count: 2 });
                path
            })
            .into();
        let all = folder.path().join(format!("{runs}-all.csv"));
        let merging = peak(|| {
            let mut summary = Summary::new(&campaign);
            merge::merge(&shards, &all, &mut |row| summary.add(row)).unwrap();
            assert_eq!(summary.all.runs, 2 * runs);
        });
        peaks.push(("merging", 2 * runs, merging));
        let summing = peak(|| {
            let mut reader = Reader::open(&all).unwrap();
            let mut summary = Summary::new(&reader.campaign().unwrap());
            while let Some((_, row)) = reader.next_row().unwrap() {
                summary.add(&row);
            }
            assert_eq!(summary.all.runs, 2 * runs);
        });
        peaks.push(("summing up", 2 * runs, summing));
        let going_on = peak(|| {
            let mut summary = Summary::new(&campaign);
            let writer = Writer::open(&all, &campaign, Shard::WHOLE, &mut |row| {
                summary.add(&row);
                Ok(())
            });
            assert!(writer.unwrap().is_complete());
        });
        peaks.push(("going on", 2 * runs, going_on));
    }
    for (what, runs, bytes) in &peaks {
        println!("{what}, {runs} runs: at most {} kB in use", bytes / 1000);
    }
    for (what, runs, bytes) in &peaks {
        let short = peaks.iter().find(|(name, ..)| name == what).unwrap();
        assert!(
            *bytes < short.2 + ALLOWED,
            "{what}: {bytes} bytes for {runs} runs, {} for {}",
            short.2,
            short.1
        );
    }
}
