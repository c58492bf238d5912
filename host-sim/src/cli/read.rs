//! `halfpulse read`: recorded shots to readings.

use super::{Outcome, json, print_error, text, words, written};
use crate::band;
use crate::input_error::InputError;
use crate::measuring::{self, HeapScratch, Measured, Refusal, Shot};
use crate::record_file::{self, CodeKind, Coding, RecordFile};
use crate::setup_file::{SetupFile, keys};
use crate::uncoupled::StoredRecord;
use halfpulse::{
    EchoRole, Findings, Gauge, GaugeSetup, Hertz, Limits, Material, MetresPerSecond, Probe, SampleClock, Seconds, Span,
    Window, Zero,
};
use std::io::Write;
use std::path::{Path, PathBuf};

/// The sample rate of records that nobody states one for.
const ASSUMED_RATE_MHZ: f64 = 50.0;
/// The bits of codes that nobody states them for: whatever the file can hold.
const ASSUMED_BITS: u8 = 16;

/// Arguments of `read`.
#[derive(Debug, clap::Args)]
#[command(after_help = EXAMPLES, after_long_help = long_help())]
pub struct Arguments {
    /// Records: .npy, .csv or .wav
    #[arg(required = true, value_name = "FILE")]
    files: Vec<PathBuf>,
    /// The set-up (TOML); without it only echoes and pulse are shown
    #[arg(long, value_name = "SETUP.toml")]
    setup: Option<PathBuf>,
    /// For people, or one JSON object a record for programs
    #[arg(long, value_enum, default_value_t = Format::Text)]
    format: Format,
    /// The shots of each file are of one place: measure their average
    #[arg(long)]
    average: bool,
    /// Ask whether an echo hides a second one, closer than half the spatial pulse length: with a learned pulse in the
    /// set-up from 0.15 of the pulse duration on, with the data sheet's from 0.25
    #[arg(long)]
    separate: bool,
    /// Samples per microsecond of files that do not state it; only without a set-up
    #[arg(long, value_name = "MHZ", conflicts_with = "setup")]
    sample_rate: Option<f64>,
    /// Bits of the converter, if the files hold codes; only without a set-up, default 16
    #[arg(long, conflicts_with = "setup", value_parser = clap::value_parser!(u8).range(2..=16))]
    bits: Option<u8>,
}

/// How results are printed.
#[derive(Clone, Copy, Debug, PartialEq, Eq, clap::ValueEnum)]
pub enum Format {
    /// For people.
    Text,
    /// For programs.
    Json,
}

const EXAMPLES: &str = "\
Examples:
  halfpulse read pipe.csv                           echoes and pulse, no thickness
  halfpulse read pipe.csv --setup probe.toml        thickness with its uncertainty
  halfpulse read shots.npy --setup probe.toml --average --format json
  halfpulse read pipe.csv --setup probe.toml --separate         is an echo two?

Files:
  .npy   1-D: one shot; 2-D: one shot a row; int16, int32: codes; float32, float64: +-1 is full scale
  .csv   one column of codes a shot; or a header time_s,value with seconds after the trigger
  .wav   mono, one shot; its sample rate is the converter's
`halfpulse read --help` describes the set-up file, the JSON keys and all words.
Exit status: 0 a reading for every record, 2 some record refused, 1 an error.";

fn long_help() -> String {
    format!(
        "{EXAMPLES}\n\n{}\nAn example:\n{}\n{}\n{}",
        keys::help(),
        keys::EXAMPLE,
        json::KEYS,
        words::help()
    )
}

/// Runs the command. A file that is wrong is reported, and the others are still measured.
///
/// # Errors
/// What is wrong with the set-up.
pub fn run(arguments: &Arguments, out: &mut dyn Write) -> Result<Outcome, InputError> {
    let source = match &arguments.setup {
        Some(path) => {
            let setup = SetupFile::read(path)?;
            // A pulse that does not fit is the set-up's fault, not that of every file.
            setup.gauge(HeapScratch::new(0).workspace())?;
            Source::Known(Box::new(setup))
        }
        None => Source::Unknown(unknown_record(arguments)?),
    };
    let limits = match &source {
        Source::Known(setup) => setup.limits()?,
        Source::Unknown(_) => None,
    };
    let (mut refused, mut failed) = (false, false);
    for path in &arguments.files {
        let result = read_file(path, &source, arguments, &mut |measured| {
            refused |= measured.outcome.is_err();
            print(out, arguments.format, measured, limits.as_ref())
        });
        match result {
            Ok(()) => {}
            Err(Stop::File(error)) => {
                failed = true;
                print_error(&error);
            }
            Err(Stop::Output(error)) => {
                written(Err(error))?;
                break;
            }
        }
    }
    written(out.flush())?;
    Ok(match (failed, refused) {
        (true, _) => Outcome::Failed,
        (false, true) => Outcome::Refused,
        (false, false) => Outcome::Done,
    })
}

/// Where velocity, zero and pulse come from.
enum Source {
    Known(Box<SetupFile>),
    Unknown(UnknownRecord),
}

/// What is assumed about records without a set-up.
struct UnknownRecord {
    rate_mhz: Option<f64>,
    bits: Option<u8>,
}

/// Why a file's records do not come to an end.
enum Stop {
    File(InputError),
    Output(std::io::Error),
}

impl From<InputError> for Stop {
    fn from(error: InputError) -> Self {
        Self::File(error)
    }
}

fn unknown_record(arguments: &Arguments) -> Result<UnknownRecord, InputError> {
    if let Some(rate) = arguments.sample_rate
        && !(rate.is_finite() && rate > 0.0 && rate <= 1e6)
    {
        return Err(InputError::in_argument(
            format!("--sample-rate {rate} is no sample rate"),
            "give samples per microsecond, like 50",
        ));
    }
    Ok(UnknownRecord {
        rate_mhz: arguments.sample_rate,
        bits: arguments.bits,
    })
}

fn print(out: &mut dyn Write, format: Format, measured: &Measured, limits: Option<&Limits>) -> std::io::Result<()> {
    match format {
        Format::Text => writeln!(out, "{}", text::block(measured, limits)),
        Format::Json => writeln!(out, "{}", json::line(measured, limits)),
    }
}

fn read_file(
    path: &Path,
    source: &Source,
    arguments: &Arguments,
    sink: &mut dyn FnMut(&Measured) -> std::io::Result<()>,
) -> Result<(), Stop> {
    let name = path.display().to_string();
    match source {
        Source::Known(setup) => {
            let file = record_file::read(path, &setup.coding())?;
            let clock = measuring::clock(path, &file, setup)?;
            let mut scratch = HeapScratch::new(file.shots.first().map_or(0, Vec::len));
            let mut gauge = setup.gauge(scratch.workspace())?;
            let stored = StoredRecord::of(setup)?;
            for mut shot in measuring::shots(path, file, arguments.average)? {
                let mut measured = match &stored {
                    Some(stored) => stored.measure(&mut gauge, &name, &mut shot, clock),
                    None => measuring::measure(&mut gauge, &name, &shot, clock),
                };
                if arguments.separate {
                    measuring::separate(&mut gauge, &shot, clock, &mut measured);
                }
                sink(&measured).map_err(Stop::Output)?;
            }
        }
        Source::Unknown(unknown) => {
            let coding = Coding {
                bits: unknown.bits.or(Some(ASSUMED_BITS)),
                codes: CodeKind::Signed,
                full_scale: None,
            };
            let file = record_file::read(path, &coding)?;
            let clock = unknown_clock(path, &file, unknown.rate_mhz)?;
            tell_assumptions(path, &file, unknown);
            for shot in measuring::shots(path, file, arguments.average)? {
                let measured = look_at(&name, &shot, clock, arguments.separate);
                sink(&measured).map_err(Stop::Output)?;
            }
        }
    }
    Ok(())
}

/// The clock of a file without a set-up: its own, the one that was typed, or an assumed one.
fn unknown_clock(path: &Path, file: &RecordFile, typed_mhz: Option<f64>) -> Result<SampleClock, InputError> {
    let hertz = match (file.sample_rate, typed_mhz) {
        (Some(stated), Some(typed)) if !stated.agrees_with(typed * 1e6) => {
            return Err(InputError::in_file(
                path,
                format!("was sampled at {} MHz, not {typed} MHz", stated.hertz * 1e-6),
                "leave --sample-rate out, or correct it",
            ));
        }
        (Some(stated), _) => stated.hertz,
        (None, Some(typed)) => typed * 1e6,
        (None, None) => ASSUMED_RATE_MHZ * 1e6,
    };
    Ok(SampleClock {
        rate: Hertz::new(hertz as f32),
        first_sample: Seconds::new(file.first_sample_s.unwrap_or(0.0) as f32),
    })
}

/// What was assumed because nobody said it, on stderr: it is no error, but every time, or every amplitude,
/// rests on it.
fn tell_assumptions(path: &Path, file: &RecordFile, unknown: &UnknownRecord) {
    let note = |what: String| {
        let _ = writeln!(std::io::stderr(), "note: {}: {what}", path.display());
    };
    if file.sample_rate.is_none() && unknown.rate_mhz.is_none() {
        note(format!(
            "states no sample rate, {ASSUMED_RATE_MHZ} MHz assumed; give --sample-rate"
        ));
    }
    if file.holds_codes && unknown.bits.is_none() {
        note(format!("{ASSUMED_BITS} bits assumed for full scale; give --bits"));
    }
}

/// Echoes and pulse of a record that nobody has told anything about.
fn look_at(name: &str, shot: &Shot, clock: SampleClock, separate: bool) -> Measured {
    let mut measured = Measured {
        file: name.to_string(),
        shot: shot.number,
        span: None,
        outcome: Err(Refusal::no_setup()),
        findings: Findings::default(),
        full_scale: shot.format.full_scale(),
        wall_limits: None,
    };
    let Some(setup) = assumed_setup(&shot.codes, clock) else {
        return measured;
    };
    let mut scratch = HeapScratch::new(shot.codes.len());
    if let Ok(mut gauge) = Gauge::new(setup, scratch.workspace()) {
        measured.findings = measuring::measure(&mut gauge, name, shot, clock).findings;
        if separate {
            measuring::separate(&mut gauge, shot, clock, &mut measured);
        }
        // Which echo is which rests on a set-up; so do not claim it.
        for echo in &mut measured.findings.echoes {
            echo.role = EchoRole::Other;
        }
    }
    measured
}

/// A set-up that suits the record's strongest burst. Its velocity is never shown.
fn assumed_setup(codes: &[i16], clock: SampleClock) -> Option<GaugeSetup> {
    let band = band::estimate(codes, clock.first_sample == Seconds::ZERO)?;
    let rate = clock.rate.get();
    let start = clock.first_sample + clock.rate.period() * band.first_quiet_sample as f32;
    let end = clock.first_sample + clock.rate.period() * codes.len() as f32;
    // A band that touches half the sample rate is narrowed: the detector needs no better.
    let centre = band.centre as f32;
    let bandwidth = (band.relative_bandwidth as f32)
        .clamp(0.1, 2.0)
        .min(2.0 * (0.499 / centre - 1.0));
    GaugeSetup::try_new(
        clock.rate,
        Probe::contact(Hertz::new(centre * rate), bandwidth),
        Material::new(MetresPerSecond::new(5920.0), MetresPerSecond::new(592.0)),
        Zero::new(Seconds::ZERO, Seconds::new(1.0)),
        Span::BackWallToBackWall,
        Window { from: start, to: end },
    )
    .ok()
}
