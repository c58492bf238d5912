//! `halfpulse campaign` and `halfpulse merge`: many runs, and what came of them.

use crate::campaign::measure::Measurer;
use crate::campaign::resolve::document;
use crate::campaign::results::Reader;
use crate::campaign::row::Row;
use crate::campaign::writer::Writer;
use crate::campaign::{Campaign, Shard, Summary, file, merge, runner};
use crate::cli::{Outcome, json, text, written};
use crate::input_error::InputError;
use crate::output::{self, Lock};
use crate::record_file::{self, npy};
use crate::{export, plot};
use console::Term;
use indicatif::{ProgressBar, ProgressDrawTarget, ProgressStyle};
use std::io::Write;
use std::path::{Path, PathBuf};
use std::time::{Duration, Instant};

/// How often rows go to the disk: what a killed process loses and makes again.
const FLUSH: Duration = Duration::from_secs(2);

/// Arguments of `campaign`.
#[derive(Debug, clap::Args)]
#[command(after_help = EXAMPLES, after_long_help = long_help())]
pub struct Arguments {
    /// The campaign (TOML), or a file of its results (.csv) to be summed up again
    #[arg(value_name = "CAMPAIGN.toml")]
    campaign: PathBuf,
    /// Where every run's result goes (.csv); a file that is not complete is gone on with
    #[arg(short, long, value_name = "RESULTS.csv")]
    output: Option<PathBuf>,
    /// Only a share of the runs: 3/64 is the third of 64
    #[arg(long, value_name = "I/N", value_parser = Shard::parse)]
    shard: Option<Shard>,
    /// Runs of each cell instead of the file's
    #[arg(long)]
    runs: Option<u64>,
    /// Seed instead of the file's
    #[arg(long)]
    seed: Option<u64>,
    /// Threads; one for each core if left out
    #[arg(long, value_parser = clap::value_parser!(u16).range(1..=1024))]
    threads: Option<u16>,
    /// Only this run: what it measures and what came of it; with -o RUN.npy its files
    #[arg(long, value_name = "RUN", conflicts_with_all = ["shard", "summary", "figures"])]
    replay: Option<u64>,
    /// Where the cells' figures go (.csv or .json)
    #[arg(long, value_name = "SUMMARY")]
    summary: Option<PathBuf>,
    /// Folder for the figures (.svg; .png too if halfpulse was built with --features png)
    #[arg(long, value_name = "FOLDER")]
    figures: Option<PathBuf>,
    /// Where the results go as Parquet too, once they are whole (needs -o or results that are there, and a halfpulse
    /// built with --features parquet)
    #[arg(long, value_name = "RESULTS.parquet", conflicts_with = "replay")]
    parquet: Option<PathBuf>,
    /// No progress bar
    #[arg(long)]
    quiet: bool,
}

/// Arguments of `merge`.
#[derive(Debug, clap::Args)]
#[command(after_help = "\
Example:
  halfpulse merge walls-1.csv walls-2.csv walls-3.csv -o walls.csv

The shards may be named in any order; the result is the same to the byte as if one machine had run all.
Refused: shards of other campaigns or versions, missing ones, ones that are not complete.")]
pub struct MergeArguments {
    /// Results of all shards of one campaign
    #[arg(required = true, value_name = "SHARD.csv")]
    shards: Vec<PathBuf>,
    /// Where all results go; must not exist
    #[arg(short, long, value_name = "ALL.csv")]
    output: PathBuf,
}

const EXAMPLES: &str = "\
Examples:
  halfpulse campaign walls.toml                              the table of all cells
  halfpulse campaign walls.toml -o walls.csv                 every run's result too; goes on after a kill
  halfpulse campaign walls.toml --shard 3/64 -o walls-3.csv  a share of the runs; then halfpulse merge
  halfpulse campaign walls.csv --figures figures             sums up and draws results that are there
  halfpulse campaign walls.toml --replay 1234 -o run.npy     one run: record, truth, set-up and reading

Neither threads nor shards change a digit: run i depends on the campaign and on i alone.
`halfpulse campaign --help` describes the campaign file.";

fn long_help() -> String {
    format!(
        "{EXAMPLES}\n\n{}\nAn example:\n{}\nThe table:\n{}",
        file::help(),
        file::EXAMPLE,
        export::LEGEND
    )
}

/// Runs `campaign`.
///
/// # Errors
/// What is wrong with the campaign, or with an output.
pub fn run(arguments: &Arguments, out: &mut dyn Write) -> Result<Outcome, InputError> {
    let path = &arguments.campaign;
    let is_results = path.extension().is_some_and(|extension| extension == "csv");
    let results = if is_results {
        Some(path)
    } else {
        arguments.output.as_ref()
    };
    if arguments.parquet.is_some() {
        check_parquet(results.is_some())?;
    }
    let summary = if is_results {
        sum_up(path, arguments)?
    } else {
        let campaign = Campaign::read_changed(path, arguments.runs, arguments.seed)?;
        if let Some(run) = arguments.replay {
            replay(&campaign, path, run, arguments.output.as_deref(), out)?;
            return Ok(Outcome::Done);
        }
        measure(&campaign, arguments)?
    };
    written(out.write_all(table(&summary).as_bytes()))?;
    #[cfg(feature = "parquet")]
    if let (Some(results), Some(path)) = (results, &arguments.parquet) {
        export::parquet::write(results, path)?;
    }
    if let Some(path) = &arguments.summary {
        let text = match path.extension() {
            Some(extension) if extension == "json" => export::json(&summary),
            _ => export::csv(&summary),
        };
        output::write(path, text.as_bytes())?;
    }
    if let Some(folder) = &arguments.figures {
        std::fs::create_dir_all(folder).map_err(|error| InputError::unwritable(folder, &error))?;
        for picture in plot::of_campaign(&summary) {
            let path = folder.join(&picture.name);
            output::write(&path.with_extension("svg"), picture.svg().as_bytes())?;
            #[cfg(feature = "png")]
            {
                let path = path.with_extension("png");
                let drawn = picture.png().map_err(|error| {
                    InputError::in_file(
                        &path,
                        format!("cannot be drawn ({error})"),
                        "take the figure of the same name in .svg",
                    )
                })?;
                output::write(&path, &drawn)?;
            }
        }
    }
    Ok(Outcome::Done)
}

/// Can Parquet be written? Better known before a campaign than after it.
fn check_parquet(has_results: bool) -> Result<(), InputError> {
    if !cfg!(feature = "parquet") {
        let what = "--parquet: this halfpulse was built without it";
        return Err(InputError::in_argument(
            what,
            "build it with cargo build --release --features parquet",
        ));
    }
    if !has_results {
        let what = "--parquet is made from results";
        return Err(InputError::in_argument(
            what,
            "give -o RESULTS.csv too, or the results instead of the campaign",
        ));
    }
    Ok(())
}

/// Runs `merge`.
///
/// # Errors
/// Shards that do not belong together or are not whole; an output that cannot be written.
pub fn run_merge(arguments: &MergeArguments, out: &mut dyn Write) -> Result<Outcome, InputError> {
    // Only the header tells of which campaign the rows are.
    let first = arguments.shards.first().map(|path| Reader::open(path)?.campaign());
    let mut summary = first.transpose()?.as_ref().map(Summary::new);
    merge::merge(&arguments.shards, &arguments.output, &mut |row| {
        if let Some(summary) = &mut summary {
            summary.add(row);
        }
    })?;
    if let Some(summary) = &summary {
        written(out.write_all(table(summary).as_bytes()))?;
    }
    Ok(Outcome::Done)
}

/// The table; without its widest columns where a terminal has no room for them.
fn table(summary: &Summary) -> String {
    let terminal = Term::stdout();
    match terminal.size_checked() {
        Some((_, columns)) if terminal.is_term() => export::table_within(summary, usize::from(columns)),
        _ => export::table(summary),
    }
}

/// A summary of results that are there.
fn sum_up(path: &Path, arguments: &Arguments) -> Result<Summary, InputError> {
    if arguments.output.is_some() || arguments.shard.is_some() || arguments.replay.is_some() || arguments.runs.is_some()
    {
        let what = "results are only summed up";
        return Err(InputError::in_file(path, what, "name the campaign's .toml to run it"));
    }
    let mut reader = Reader::open(path)?;
    let mut summary = Summary::new(&reader.campaign()?);
    while let Some((_, row)) = reader.next_row()? {
        summary.add(&row);
    }
    let extent = reader.extent();
    if !extent.is_some_and(|extent| extent.complete) {
        let rows = extent.map_or(0, |extent| extent.rows);
        let what = format!("is not complete: {rows} rows and no closing line");
        return Err(InputError::in_file(
            path,
            what,
            "run the campaign again with this output: it goes on",
        ));
    }
    if reader.shard() != Shard::WHOLE {
        summary.title.push_str(&format!(", shard {} only", reader.shard()));
    }
    Ok(summary)
}

fn measure(campaign: &Campaign, arguments: &Arguments) -> Result<Summary, InputError> {
    let shard = arguments.shard.unwrap_or(Shard::WHOLE);
    let mut summary = Summary::new(campaign);
    if shard != Shard::WHOLE {
        summary.title.push_str(&format!(", shard {shard} only"));
    }
    let rows = shard.rows(campaign.total());
    let mut writer = match &arguments.output {
        None => None,
        Some(path) => Some(Writer::open(path, campaign, shard, &mut |row| {
            summary.add(&row);
            Ok(())
        })?),
    };
    if let (Some(path), Some(Lock::Unknown)) = (&arguments.output, writer.as_ref().map(Writer::lock)) {
        // Nothing is left to do if stderr is closed.
        let _ = writeln!(
            std::io::stderr(),
            "note: the disk of {} knows no locks: let only one process write to it",
            path.display()
        );
    }
    let from = writer.as_ref().map_or(0, Writer::rows);
    let bar = progress(rows, from, arguments.quiet);
    let cores = std::thread::available_parallelism().map_or(1, std::num::NonZero::get);
    let threads = arguments.threads.map_or(cores, usize::from);
    let mut flushed = Instant::now();
    let result = runner::run(campaign, shard, from, threads, &mut |row: Row| {
        summary.add(&row);
        if let Some(writer) = &mut writer {
            writer.append(&row)?;
            if flushed.elapsed() > FLUSH {
                writer.flush()?;
                flushed = Instant::now();
            }
        }
        bar.inc(1);
        Ok(())
    });
    bar.finish_and_clear();
    if let Some(writer) = &mut writer {
        // Whatever ended the runs, those that are done are kept.
        let kept = writer.flush();
        result?;
        kept?;
        writer.complete()?;
    } else {
        result?;
    }
    Ok(summary)
}

/// On stderr, and only if that is a terminal.
fn progress(rows: u64, done: u64, quiet: bool) -> ProgressBar {
    let target = if quiet {
        ProgressDrawTarget::hidden()
    } else {
        ProgressDrawTarget::stderr_with_hz(4)
    };
    let bar = ProgressBar::with_draw_target(Some(rows), target);
    let style = ProgressStyle::with_template("{bar:30} {pos}/{len} runs, {per_sec}, {eta} left");
    if let Ok(style) = style {
        bar.set_style(style);
    }
    bar.set_position(done);
    // Rate and time left are those of this process.
    bar.reset_eta();
    bar
}

/// One run: what it measures, what came of it, and its files if they are asked for.
fn replay(
    campaign: &Campaign,
    path: &Path,
    number: u64,
    output: Option<&Path>,
    out: &mut dyn Write,
) -> Result<(), InputError> {
    if number >= campaign.total() {
        return Err(InputError::in_argument(
            format!("--replay {number}: {} has {} runs", path.display(), campaign.total()),
            format!("give 0 to {}", campaign.total() - 1),
        ));
    }
    let mut run = Measurer::new(campaign).run(number)?;
    if let Some(output) = output {
        run.measured.file = output.display().to_string();
    }
    let mut said = format!("run {number}, cell {}\n", run.row.cell);
    for (column, value) in campaign.columns().iter().zip(&run.row.shown) {
        if !value.is_empty() {
            said.push_str(&format!("  {column} = {value}\n"));
        }
    }
    match run.row.truth_mm {
        Some(truth) => said.push_str(&format!("  true wall {truth} mm\n")),
        None => said.push_str("  no echo of a wall in the record\n"),
    }
    said.push_str(&text::block(&run.measured, None));
    written(out.write_all(said.as_bytes()))?;
    let Some(output) = output else { return Ok(()) };
    let scene = run.resolved.scene()?;
    let (rate, first) = (scene.record.sample_rate_mhz * 1e6, scene.record.first_sample_us * 1e-6);
    record_file::write(output, std::slice::from_ref(&run.shot.codes), rate, first)?;
    let mut keys = run.setup.keys.clone();
    if let Some(pulse) = &run.pulse {
        let name = output.with_extension("pulse.npy");
        npy::write_pulse(&name, pulse)?;
        keys.probe.reference_pulse = name.file_name().map(|name| name.to_string_lossy().into_owned());
    }
    keys.write(&output.with_extension("setup.toml"))?;
    let put = |extension: &str, text: String| {
        let path = output.with_extension(extension);
        std::fs::write(&path, text).map_err(|error| InputError::unwritable(&path, &error))
    };
    put("scene.toml", document(&run.resolved.root, "scene"))?;
    let truth = serde_json::json!({
        "made_by": concat!("halfpulse ", env!("CARGO_PKG_VERSION")),
        "campaign": campaign.checksum(),
        "run": number,
        "scene": scene,
        "truth": run.shot.truth,
        "reading": serde_json::from_str::<serde_json::Value>(&json::line(&run.measured, None)).unwrap_or_default(),
        "row": run.row.line(),
    });
    put("json", format!("{truth:#}\n"))
}
