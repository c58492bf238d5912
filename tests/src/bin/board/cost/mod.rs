//! `cargo board cost`: what each stage of a reading costs, counted exactly, with an estimate of cycles.
//!
//! Instructions are counted twice, by the board's timer under the emulator's instruction clock and by a
//! plugin of the emulator; the plugin also tells how often each instruction ran, from which cycles are
//! estimated. The table is committed as `tests/board_costs.txt`, so that a change shows as a difference. Counted in the same
//! run: the textbook's way through a record (`firmware-example/textbook`), which a typical reading has to undercut.

mod cycles;
mod textbook;

use crate::toolchain::{CORTEX_M4F, Toolchain, root, target_folder};
use crate::{Checks, Trouble, emulator};
use cycles::Counts;
use halfpulse::gauge::stage::Stage;
use halfpulse_mps2::canned::RECORDS;
use halfpulse_tests::readme;
use std::fmt::Write as _;
use std::fs;
use std::path::{Path, PathBuf};
use std::process::{Command, Stdio};
use textbook::Textbook;

/// By how much the sum of the stages may differ from the whole reading.
const SUM_TOLERANCE: f64 = 0.03;
/// By how much a reading may become more costly than the committed table says.
const GROWTH: f64 = 0.10;
/// Instructions of the counting itself.
const COUNTING: u64 = 40;

/// One region of the image's run.
#[derive(Clone, Debug, PartialEq)]
struct Region {
    record: String,
    what: String,
    instructions: u64,
}

/// A stage, or the whole, of one record.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
struct Cost {
    instructions: u64,
    cycles: u64,
}

impl Cost {
    /// Exact where the plugin counts; the timer is good to some ten.
    fn add(&mut self, region: &Region, counts: Option<&Counts>, number: usize) {
        self.instructions += counts.map_or(region.instructions, |counts| counts.instructions(number));
        self.cycles += counts.map_or(0, |counts| counts.cycles(number));
    }
}

/// One line of the table.
#[derive(Clone, Debug, PartialEq)]
struct Row {
    record: String,
    stages: [Cost; Stage::ALL.len()],
    whole: Cost,
}

impl Row {
    fn sum(&self) -> Cost {
        self.stages.iter().fold(Cost::default(), |sum, stage| Cost {
            instructions: sum.instructions + stage.instructions,
            cycles: sum.cycles + stage.cycles,
        })
    }
}

pub fn run(checks: &mut Checks, write: bool) -> Result<(), Trouble> {
    let toolchain = Toolchain::find(CORTEX_M4F)?;
    let image = toolchain.build_anyhow("stages")?;
    let (printout, counts) = execute(&image)?;
    let regions = parse(&printout).map_err(Trouble::Failed)?;
    if let Some(counts) = &counts {
        checks.check("timer_and_plugin_count_the_same", agree(&regions, counts));
    } else {
        say!("note: this emulator does not load the counting plugin, which is made for QEMU 7.2: no cycles");
    }
    let rows = rows(&regions, counts.as_ref()).map_err(Trouble::Failed)?;
    let textbook = Textbook::of(&regions, counts.as_ref()).map_err(Trouble::Failed)?;
    let table = table(&rows, &textbook, &toolchain.to_string());
    say!("{table}");
    checks.check("stages_sum_to_the_whole", sums(&rows));
    let typical = rows.first().map_or(Cost::default(), |row| row.whole);
    checks.check("typical_reading_below_the_textbook", textbook.against(typical));
    if typical.cycles > 0 {
        readme::figure_of_this_compiler(
            "a typical reading (10 mm of steel), estimated cycles / the textbook's way through the record, counted in the same run",
            &format!("{} / {}", typical.cycles, textbook.whole().cycles),
            "cargo board cost",
        );
    }
    let file = root().join("tests/board_costs.txt");
    if write {
        fs::write(&file, &table).map_err(|error| Trouble::Failed(format!("{}: {error}", file.display())))?;
        say!("{} written", file.display());
    }
    checks.check(
        "no_more_than_the_committed_table",
        compare(&file, &rows, compiler(&toolchain.to_string())),
    );
    Ok(())
}

/// Runs the image with the plugin if the emulator takes it, else without.
fn execute(image: &Path) -> Result<(String, Option<Counts>), Trouble> {
    let plugin = plugin().map_err(Trouble::Failed)?;
    let out = plugin.with_file_name(format!("counts-{}.txt", std::process::id()));
    let argument = format!("{},out={}", plugin.display(), out.display());
    let with_plugin = emulator::run_with(image, &["-plugin", &argument]);
    let counted = fs::read_to_string(&out);
    let _ = fs::remove_file(&out);
    match (with_plugin, counted) {
        (Ok(printout), Ok(text)) => Ok((printout, Some(Counts::parse(&text).map_err(Trouble::Failed)?))),
        _ => Ok((emulator::run(image)?, None)),
    }
}

/// Compiles the plugin, and returns its file.
fn plugin() -> Result<PathBuf, String> {
    let source = root().join("tests/src/bin/board/cost/counter.rs");
    let library = target_folder().join("libcounter.so");
    let compiler = std::env::var_os("RUSTC").unwrap_or_else(|| "rustc".into());
    let output = Command::new(compiler)
        .args([
            "--edition",
            "2024",
            "--crate-type",
            "cdylib",
            "-O",
            "-C",
            "panic=abort",
            "-o",
        ])
        .arg(&library)
        .arg(&source)
        .stdin(Stdio::null())
        .output()
        .map_err(|error| format!("rustc does not start: {error}"))?;
    if output.status.success() {
        Ok(library)
    } else {
        Err(String::from_utf8_lossy(&output.stderr).into_owned())
    }
}

/// Reads the board's `stage` lines; each belongs to the record named before it.
fn parse(printout: &str) -> Result<Vec<Region>, String> {
    let mut record = "";
    let mut regions = Vec::new();
    for line in printout.lines() {
        record = line.strip_prefix("record ").unwrap_or(record);
        let Some(rest) = line.strip_prefix("stage ") else {
            continue;
        };
        let instructions = rest
            .split(' ')
            .find_map(|word| word.strip_prefix("instructions="))
            .and_then(|digits| u64::from_str_radix(digits, 16).ok())
            .ok_or_else(|| format!("no instructions in the board's line `{line}`"))?;
        regions.push(Region {
            record: record.to_owned(),
            what: rest.split(' ').next().unwrap_or_default().to_owned(),
            instructions,
        });
    }
    if printout.lines().any(|line| line.starts_with("end ")) {
        Ok(regions)
    } else {
        Err(format!("the board's printout has no end:\n{printout}"))
    }
}

fn agree(regions: &[Region], counts: &Counts) -> Result<String, String> {
    if counts.regions() != regions.len() {
        return Err(format!(
            "{} regions by the timer, {} by the plugin",
            regions.len(),
            counts.regions()
        ));
    }
    let mut worst = 0;
    for (number, region) in regions.iter().enumerate() {
        let apart = counts.instructions(number).abs_diff(region.instructions);
        worst = worst.max(apart);
        if apart > COUNTING {
            return Err(format!(
                "{} of {}: {} by the timer, {} by the plugin",
                region.what,
                region.record,
                region.instructions,
                counts.instructions(number)
            ));
        }
    }
    Ok(format!("{} regions, at most {worst} instructions apart", regions.len()))
}

/// Sums the regions of each record by stage.
fn rows(regions: &[Region], counts: Option<&Counts>) -> Result<Vec<Row>, String> {
    let mut rows: Vec<Row> = Vec::new();
    for (number, region) in regions.iter().enumerate() {
        if region.record == textbook::RECORD {
            continue;
        }
        if rows.last().is_none_or(|row| row.record != region.record) {
            rows.push(Row {
                record: region.record.clone(),
                stages: [Cost::default(); Stage::ALL.len()],
                whole: Cost::default(),
            });
        }
        let row = rows.last_mut().ok_or("no record")?;
        let place = Stage::ALL.iter().position(|stage| stage.word() == region.what);
        let cost = match place.and_then(|place| row.stages.get_mut(place)) {
            Some(stage) => stage,
            None if region.what == "measure" => &mut row.whole,
            None => return Err(format!("the board speaks of a stage `{}`", region.what)),
        };
        cost.add(region, counts, number);
    }
    if rows.len() == RECORDS.len() && rows.iter().all(|row| row.whole.instructions > 0) {
        Ok(rows)
    } else {
        Err(format!("{} records of {} were measured", rows.len(), RECORDS.len()))
    }
}

fn table(rows: &[Row], textbook: &Textbook, toolchain: &str) -> String {
    let mut text = String::from(
        "What a reading costs on a Cortex-M4F, by stage; records of 4096 samples. Written by `cargo board cost --write`.\n\
         Instructions are exact; cycles are estimated without wait states. A stage that ran twice counts twice.\n",
    );
    let _ = writeln!(text, "{}\n", compiler(toolchain));
    for (what, of) in [
        ("instructions", (|cost: &Cost| cost.instructions) as fn(&Cost) -> u64),
        ("cycles", |cost| cost.cycles),
    ] {
        let _ = write!(text, "{what:<20}");
        for stage in Stage::ALL.map(Stage::word).iter().chain(&["sum", "measure"]) {
            let _ = write!(text, "{stage:>10}");
        }
        let _ = writeln!(text);
        for row in rows {
            let _ = write!(text, "{:<20}", row.record);
            for cost in row.stages.iter().chain(&[row.sum(), row.whole]) {
                let _ = write!(text, "{:>10}", of(cost));
            }
            let _ = writeln!(text);
        }
        let _ = writeln!(text);
    }
    text + &textbook.table()
}

/// Only the compiler: where its core library comes from is this machine's affair.
fn compiler(toolchain: &str) -> &str {
    toolchain.split(',').next().unwrap_or_default()
}

fn sums(rows: &[Row]) -> Result<String, String> {
    let (mut worst, mut text) = (0.0f64, String::new());
    for row in rows {
        let (sum, whole) = (row.sum().instructions as f64, row.whole.instructions as f64);
        let off = sum / whole - 1.0;
        worst = worst.max(off.abs());
        let _ = writeln!(text, "{}: {:+.2} %", row.record, 100.0 * off);
    }
    if worst <= SUM_TOLERANCE { Ok(text) } else { Err(text) }
}

/// The whole readings against the committed table. Another compiler makes other code: then only told.
fn compare(file: &Path, rows: &[Row], compiler: &str) -> Result<String, String> {
    let text = fs::read_to_string(file).map_err(|error| format!("{}: {error}", file.display()))?;
    let mut told = String::new();
    let same_compiler = text.lines().any(|line| line == compiler);
    if !same_compiler {
        let _ = writeln!(told, "the committed table is another compiler's, this is {compiler}");
    }
    let mut grown = false;
    for row in rows {
        let committed = committed(&text, &row.record)
            .ok_or_else(|| format!("{} says nothing of {}", file.display(), row.record))?;
        let change = row.whole.instructions as f64 / committed as f64 - 1.0;
        grown |= change > GROWTH;
        if row.whole.instructions != committed {
            let _ = writeln!(
                told,
                "{}: {committed} -> {} instructions ({:+.1} %)",
                row.record,
                row.whole.instructions,
                100.0 * change
            );
        }
    }
    if told.is_empty() {
        return Ok("the same to the last instruction".to_owned());
    }
    told += "`cargo board cost --write` writes the table anew";
    if grown && same_compiler { Err(told) } else { Ok(told) }
}

/// Instructions of the whole reading of a record: the last number of its first line.
fn committed(table: &str, record: &str) -> Option<u64> {
    let line = table
        .lines()
        .find(|line| line.split_whitespace().next() == Some(record))?;
    line.split_whitespace().last()?.parse().ok()
}

#[cfg(test)]
mod tests {
    use super::*;

    fn row(whole: u64) -> Row {
        Row {
            record: "a".to_owned(),
            stages: [Cost {
                instructions: 100,
                cycles: 150,
            }; Stage::ALL.len()],
            whole: Cost {
                instructions: whole,
                cycles: 900,
            },
        }
    }

    #[test]
    fn a_sum_that_does_not_match_and_a_reading_that_grew_are_noticed() {
        assert!(sums(&[row(600)]).is_ok() && sums(&[row(610)]).is_ok());
        assert!(sums(&[row(700)]).is_err() && sums(&[row(500)]).is_err());
        let folder = std::env::temp_dir().join(format!("halfpulse-cost-{}", std::process::id()));
        fs::create_dir_all(&folder).unwrap();
        let file = folder.join("costs.txt");
        fs::write(&file, table(&[row(600)], &Textbook::default(), "rustc 1, somewhere")).unwrap();
        let compare = |whole: u64, compiler: &str| compare(&file, &[row(whole)], compiler);
        assert!(compare(600, "rustc 1").unwrap().contains("the same"));
        assert!(compare(650, "rustc 1").unwrap().contains("600 -> 650"));
        assert!(compare(700, "rustc 1").is_err());
        assert!(compare(700, "rustc 2").unwrap().contains("another compiler's"));
        fs::remove_dir_all(&folder).unwrap();
    }

    #[test]
    fn the_committed_table_speaks_of_every_record() {
        let text = fs::read_to_string(root().join("tests/board_costs.txt")).unwrap();
        for record in &RECORDS {
            assert!(
                committed(&text, record.name).is_some_and(|count| count > 1000),
                "{}",
                record.name
            );
        }
    }
}
