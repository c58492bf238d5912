//! `halfpulse read`: recorded shots to readings.

use super::{Outcome, json, print_error, text, words, written};
use crate::band;
use crate::input_error::InputError;
use crate::joining::{self, Joined, Joining};
use crate::measuring::{self, HeapScratch, Measured, Refusal};
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
    /// The shots of each file are of one place: measure their average, or those of N at a time
    #[arg(long, value_name = "N", num_args = 0..=1, require_equals = true, value_parser = clap::value_parser!(u16).range(1..=512))]
    average: Option<Option<u16>>,
    /// The shots of each file are N delays of a slow converter, shot n fired n / N samples later (and so on from the
    /// first): measure the dense record that they make
    #[arg(long, value_name = "N", conflicts_with = "average", value_parser = clap::value_parser!(u8).range(2..=64))]
    interleave: Option<u8>,
    /// Nothing can move between the delays: one of each is enough
    #[arg(long, requires = "interleave")]
    still: bool,
    /// Tell how much the trigger jitters, from the scatter of the strongest echo over each file's shots
    #[arg(long, requires = "setup", conflicts_with = "interleave")]
    jitter: bool,
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
  halfpulse read shots.npy --setup probe.toml --average=16 --jitter
  halfpulse read slow.npy --setup dense.toml --interleave 25    2 MS/s to 50

Several shots of one place:
  --average     The shots are averaged as two rounds, first half and second: what only one of them has is no echo, and
                a wall that moves from one to the other by more than its uncertainty is refused (unsteady). Of an odd number
                the last shot is left out. Noise below 0.4 steps of the converter does not average: add some.
  --interleave  Shot n (from 0) was fired (n mod N) / (N x sample rate) later than the first against the sample clock. The set-up
                states the rate of the dense record, the file's is N times less. One round needs a delay fired again (N + 1
                shots or more), two rounds or more are compared with each other; or say --still. `halfpulse simulate
                --rounds` makes such files from a scene with [equivalent_time].
  --jitter      j = sqrt(scatter^2 - noise^2) of an echo 30 dB or more above the noise; take 32 shots or more, with a probe that keeps
                still. State it as trigger_jitter_ns in the set-up: what counts from the trigger then carries it.

Files:
  .npy   1-D: one shot; 2-D: one shot a row, in the order in which they were fired; int16, int32: codes; float32, float64: +-1 is full scale
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
    let joining = joining(arguments);
    match source {
        Source::Known(setup) => {
            let file = record_file::read(path, &setup.coding())?;
            let clock = measuring::clock(path, &file, setup, joining.phases())?;
            let samples = file.shots.first().map_or(0, Vec::len);
            let mut scratch = HeapScratch::new(samples.saturating_mul(usize::from(joining.phases())));
            let mut gauge = setup.gauge(scratch.workspace())?;
            let (format, jitter) = (file.format, gauge.setup().trigger_jitter);
            let found = if arguments.jitter {
                let found = joining::trigger_jitter(&mut gauge, &file.shots, format, clock);
                if found.is_none() {
                    tell(
                        path,
                        "no echo of 30 dB in two shots or more: the trigger's jitter is not told",
                    );
                }
                found
            } else {
                None
            };
            let (records, clock) = joining::join(path, file.shots, format, clock, joining, jitter)?;
            let stored = StoredRecord::of(setup)?;
            for record in records {
                let mut measured = match (&stored, record.clone().into_shot(clock)) {
                    // What is taken off one record of the two rounds is not in their difference.
                    (Some(stored), Some(mut shot)) => {
                        let mut measured = stored.measure(&mut gauge, &name, &mut shot, clock);
                        if arguments.separate {
                            measuring::separate(&mut gauge, &shot, clock, &mut measured);
                        }
                        measured
                    }
                    _ => joining::measure(&mut gauge, &name, &record, clock, arguments.separate),
                };
                measured.jitter = found;
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
            let format = file.format;
            let (records, clock) = joining::join(path, file.shots, format, clock, joining, Seconds::ZERO)?;
            for record in &records {
                let measured = look_at(&name, record, clock, arguments.separate);
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

/// A note on stderr.
fn tell(path: &Path, what: &str) {
    let _ = writeln!(std::io::stderr(), "note: {}: {what}", path.display());
}

/// What becomes of each file's shots.
fn joining(arguments: &Arguments) -> Joining {
    match (arguments.interleave, arguments.average) {
        (Some(phases), _) => Joining::Interleave {
            phases,
            still: arguments.still,
        },
        (None, Some(size)) => Joining::Average(size),
        (None, None) => Joining::None,
    }
}

/// What was assumed because nobody said it, on stderr: it is no error, but every time, or every amplitude,
/// rests on it.
fn tell_assumptions(path: &Path, file: &RecordFile, unknown: &UnknownRecord) {
    let note = |what: String| tell(path, &what);
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
fn look_at(name: &str, record: &Joined, clock: SampleClock, separate: bool) -> Measured {
    let mut measured = Measured {
        file: name.to_string(),
        shot: record.number(),
        span: None,
        outcome: Err(Refusal::no_setup()),
        findings: Findings::default(),
        thin_wall: None,
        wall_limits: None,
        full_scale: record.format().full_scale(),
        jitter: None,
    };
    let codes = record.codes();
    let Some(setup) = assumed_setup(codes, clock) else {
        return measured;
    };
    let mut scratch = HeapScratch::new(codes.len());
    if let Ok(mut gauge) = Gauge::new(setup, scratch.workspace()) {
        let found = joining::measure(&mut gauge, name, record, clock, separate);
        (measured.findings, measured.full_scale) = (found.findings, found.full_scale);
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
