//! The committed campaigns of tests/campaigns, small versions of them, against their committed tables: whatever
//! changes what the gauge reads, doubts or refuses shows as a difference of numbers.
//!
//! `HALFPULSE_WRITE_SNAPSHOTS=1 cargo test -p halfpulse-tests regress_campaigns` writes the tables anew. With
//! `HALFPULSE_TIMES=10` each cell has ten times as many runs, and nothing is compared or written.
//! tests/campaigns/README.md tells more.

use halfpulse_sim::campaign::summary::{Sides, Tally, percent};
use halfpulse_sim::campaign::{Campaign, Shard, Summary, runner};
use halfpulse_sim::export;
use halfpulse_tests::page::Figures;
use halfpulse_tests::readme;
use std::path::{Path, PathBuf};

/// Where the sum over all walls stands.
const SUM: &str = "undoubted_gross.txt";

fn folder() -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("campaigns")
}

fn campaigns() -> Vec<PathBuf> {
    let mut files: Vec<PathBuf> = std::fs::read_dir(folder())
        .expect("tests/campaigns is there")
        .map(|entry| entry.expect("an entry of the folder").path())
        .filter(|path| path.extension().is_some_and(|extension| extension == "toml"))
        .collect();
    files.sort();
    files
}

/// One line of the sum: how many runs, how many of each kind.
#[derive(Clone, Default)]
struct Line {
    runs: u64,
    too_thick: u64,
    too_thin: u64,
    of_no_wall: u64,
    gross: u64,
    doubted: u64,
    refused: u64,
}

impl Line {
    fn add(&mut self, tally: &Tally) {
        self.runs += tally.runs;
        self.too_thick += tally.gross.over;
        self.too_thin += tally.gross.under;
        self.of_no_wall += tally.undoubted_phantom;
        self.gross += tally.all_gross();
        self.doubted += tally.doubted;
        self.refused += tally.all_refused();
    }

    fn add_line(&mut self, other: &Self) {
        self.runs += other.runs;
        self.too_thick += other.too_thick;
        self.too_thin += other.too_thin;
        self.of_no_wall += other.of_no_wall;
        self.gross += other.gross;
        self.doubted += other.doubted;
        self.refused += other.refused;
    }

    const fn undoubted(&self) -> u64 {
        self.too_thick + self.too_thin + self.of_no_wall
    }

    fn text(&self, name: &str) -> String {
        let sides = format!("{}+{}+{}", self.too_thick, self.too_thin, self.of_no_wall);
        let share = |count| percent(count, self.runs);
        format!(
            "{name:<78}{:>6}  {sides:>7}  {:<20}{:<22}{:<22}{}\n",
            self.runs,
            share(self.undoubted()),
            share(self.gross),
            share(self.doubted),
            share(self.refused)
        )
    }
}

/// The sum over the populations that finding and choosing the echo is judged by: walls of each kind, and records
/// without any.
#[derive(Default)]
struct Sum {
    text: String,
    walls: Line,
    no_walls: Line,
}

impl Sum {
    /// Takes a campaign in if it is one of them.
    fn add(&mut self, stem: &str, summary: &Summary) {
        let name = summary.title.split(':').next().unwrap_or_default();
        if stem == "no_echo" {
            self.no_walls.add(&summary.all);
        } else if stem.starts_with("walls_") {
            self.walls.add(&summary.all);
            for (labels, tally) in summary.labels.iter().zip(&summary.cells) {
                let mut line = Line::default();
                line.add(tally);
                self.text
                    .push_str(&line.text(&format!("{name}; {}", labels.join("; "))));
            }
        }
    }

    fn table(&self) -> String {
        let mut both = self.walls.clone();
        both.add_line(&self.no_walls);
        format!(
            "Grossly wrong (beyond U plus a quarter wavelength, or of no wall) without a doubt, as too thick + too thin + \
             where there is no wall,\nand in per cent with 95 % limits; then all grossly wrong, all doubted, all refused, in \
             per cent. The aim: 1 undoubted in 2000.\n\n{:<78}{:>6}  {:>7}  {:<20}{:<22}{:<22}{}\n{}{}{}{}",
            "",
            "runs",
            "",
            "undoubted gross %",
            "gross %",
            "doubted %",
            "refused %",
            self.text,
            self.walls.text("all walls"),
            self.no_walls.text("records without an echo"),
            both.text("all")
        )
    }
}

/// One campaign: how often the readings without a doubt hold what they state (too thick + too thin where not), how far off the worst is;
/// how many of all readings were grossly wrong, how many doubted, how many refused.
fn coverage_line(summary: &Summary) -> String {
    let all = &summary.all;
    let name = summary.title.split(':').next().unwrap_or_default();
    let sides = |sides: Sides| format!("{}+{}", sides.over, sides.under);
    format!(
        "{name:<56}{:>6}  {:<22}{:>10}{:>10}  {:<20}{:<20}{:<20}{:.2}",
        all.runs,
        percent(all.inside, all.inside + all.outside.both()),
        sides(all.outside),
        sides(all.beyond_twice),
        percent(all.all_gross(), all.runs),
        percent(all.doubted, all.runs),
        percent(all.all_refused(), all.runs),
        all.worst
    )
}

/// Compares a table with the committed one, or writes it; whether it is another one.
fn differs(snapshot: &Path, table: &str, write: bool) -> bool {
    if write {
        std::fs::write(snapshot, table).expect("the snapshot can be written");
        return false;
    }
    std::fs::read_to_string(snapshot).ok().as_deref() != Some(table)
}

#[test]
fn regress_campaigns() {
    let write = std::env::var_os("HALFPULSE_WRITE_SNAPSHOTS").is_some();
    let times = std::env::var("HALFPULSE_TIMES").map_or(1, |text| {
        text.parse::<u64>()
            .ok()
            .filter(|times| (1..=100_000).contains(times))
            .expect("HALFPULSE_TIMES is a whole number from 1 to 100000")
    });
    let files = campaigns();
    assert!(!files.is_empty(), "no campaign in tests/campaigns");
    let (mut changed, mut sum, mut coverage) = (Vec::new(), Sum::default(), Vec::new());
    let mut compare = |snapshot: PathBuf, table: &str| {
        if times == 1 && differs(&snapshot, table, write) {
            changed.push(snapshot.display().to_string());
        }
    };
    for path in &files {
        let mut campaign = Campaign::read(path).unwrap_or_else(|error| panic!("{error}"));
        if times > 1 {
            let runs = campaign.runs.saturating_mul(times);
            campaign = Campaign::read_changed(path, Some(runs), None).unwrap_or_else(|error| panic!("{error}"));
        }
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
        compare(path.with_extension("txt"), &table);
        let stem = path.file_stem().and_then(|stem| stem.to_str()).unwrap_or_default();
        sum.add(stem, &summary);
        if stem != "no_echo" && stem != "no_echo_bursts" {
            coverage.push(coverage_line(&summary));
        }
    }
    let table = sum.table();
    compare(folder().join(SUM), &table);
    assert!(
        changed.is_empty(),
        "the tables of {} are others now (printed above): if that is meant, run again with HALFPULSE_WRITE_SNAPSHOTS=1 and look at the difference",
        changed.join(", ")
    );
    if times == 1 {
        let mut figures = Figures::of("regress_campaigns");
        table.lines().for_each(|line| figures.line(line));
        figures.check();
        let mut figures = Figures::of("regress_campaigns_coverage");
        figures.line(&format!(
            "{:<56}{:>6}  {:<22}{:>10}{:>10}  {:<20}{:<20}{:<20}{}",
            "", "runs", "inside U %", "> U", "> 2 U", "gross %", "doubted %", "refused %", "worst over U"
        ));
        coverage.iter().for_each(|line| figures.line(line));
        figures.check();
        let walls = &sum.walls;
        assert!(walls.runs >= 6000, "one in 2000 needs at least 6000 walls");
        readme::figure(
            "walls of each kind over its range, grain and mode conversion included: grossly wrong without a doubt",
            &format!("{} of {}", walls.undoubted(), walls.runs),
            "regress_campaigns",
        );
        readme::figure(
            "records without any echo: read without a doubt / with one / refused",
            &format!(
                "{} / {} / {} of {}",
                sum.no_walls.of_no_wall, sum.no_walls.doubted, sum.no_walls.refused, sum.no_walls.runs
            ),
            "regress_campaigns",
        );
    }
}
