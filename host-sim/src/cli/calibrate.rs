//! `halfpulse calibrate`: blocks of known thickness to reference pulse, zero and velocity.

mod check;

use super::read::Format;
use super::{Outcome, written};
use crate::calibrating::block::BlockRecord;
use crate::calibrating::{self, Calibrated, Learn};
use crate::input_error::InputError;
use crate::measuring;
use crate::record_file::{self, npy};
use crate::setup_file::{SetupFile, span_word};
use crate::uncoupled::StoredRecord;
use halfpulse::Seconds;
use halfpulse::echo::learning::ENOUGH_SHOTS;
use std::io::Write;
use std::path::{Path, PathBuf};
use std::time::{SystemTime, UNIX_EPOCH};

/// Standard uncertainty of a block whose own is not stated.
const BLOCK_UNCERTAINTY_MM: f64 = 0.005;
/// Thinnest and thickest block in millimetres that is taken for one.
const BLOCKS_MM: std::ops::RangeInclusive<f64> = 0.05..=10_000.0;

/// Arguments of `calibrate`.
#[derive(Debug, clap::Args)]
#[command(after_help = EXAMPLES)]
pub struct Arguments {
    /// The set-up to start from (TOML): probe, material, span, window
    #[arg(long, value_name = "IN.toml")]
    setup: PathBuf,
    /// A block and its record; +- is its standard uncertainty (k = 1), 0.005 mm if not stated
    #[arg(
        long = "block",
        value_name = "5.000mm+-0.002mm=FILE",
        required = true,
        allow_hyphen_values = true
    )]
    blocks: Vec<String>,
    /// What to learn besides the pulse; one block: zero, two: zero-and-velocity
    #[arg(long, value_enum)]
    learn: Option<Learn>,
    /// The new set-up; its reference pulse is written beside it
    #[arg(short, long, value_name = "OUT.toml", required_unless_present = "check")]
    output: Option<PathBuf>,
    /// Shots of the probe in air, at the gain in use: the transmission pulse's tail that will be taken off in the dead zone
    #[arg(long, value_name = "FILE", conflicts_with = "check", requires = "uncoupled_from")]
    uncoupled: Option<PathBuf>,
    /// Where echoes are looked for then, in microseconds: some 0.3 us behind the last clipped sample
    #[arg(long, value_name = "US", requires = "uncoupled")]
    uncoupled_from: Option<f64>,
    /// Learn nothing: read the blocks with the set-up as it is, and say whether it still reads them right
    #[arg(long, conflicts_with_all = ["output", "learn", "date"])]
    check: bool,
    /// How a check is printed
    #[arg(long, value_enum, default_value_t = Format::Text, requires = "check")]
    format: Format,
    /// Temperature of the blocks in degrees Celsius, to be noted in the set-up; needed if its velocity follows temperature
    #[arg(long, value_name = "C", allow_negative_numbers = true)]
    temperature: Option<f64>,
    /// Day to be noted in the set-up, as 2026-01-31; today (UTC) if not stated
    #[arg(long, value_name = "DATE")]
    date: Option<String>,
}

const EXAMPLES: &str = "\
Examples:
  halfpulse calibrate --setup probe.toml --block 5.000mm=thin.npy -o ready.toml
  halfpulse calibrate --setup probe.toml --block 5.000mm=thin.npy --block 25.000mm+-0.002mm=thick.npy -o ready.toml
  halfpulse calibrate --setup probe.toml --block 10.00mm=part.npy --learn velocity -o ready.toml
  halfpulse calibrate --check --setup ready.toml --block 10.000mm+-0.002mm=block.npy

All shots of a file are of one place; they are averaged. What is learned, by span:
  transmission-pulse-to-back-wall   first back wall = zero + 2 d / velocity
  interface-to-back-wall            first back wall - interface = zero (normally 0) + 2 d / velocity
  back-wall-to-back-wall            period = 2 d / velocity; zero from the first back wall
Two blocks determine zero and velocity together, and how their errors hang together. What the blocks
cannot determine is refused.
  * The block is not the part. A velocity is that of the blocks: a part of another heat or rolling direction has
    its own. Say by how much it may differ in [material] part_velocity_standard_uncertainty_m_s.
  * Zero and velocity of two blocks are effective ones: the couplant film moves the blocks' echoes too, and so does the
    beam unless the element is known. Learn
    with the probe and the span in use, on blocks that bracket the parts: beyond them the uncertainty grows.
  * The reference pulse is the mean of all shots, each moved to the same place. Record 128 shots or more: its own
    noise is that of a shot over their root. Its noise, and by how much other shots differ from it (mismatch),
    are noted in the set-up.
  * Where all back walls of the blocks have the pulse's sign, the new set-up says back_wall_sign = \"as-pulse\":
    half cycles are then told apart under another couplant film too. Write \"unknown\" into the old set-up where
    something stiffer than the part may stand behind it, where the part may be softer than the probe's face, or where the
    probe's leads may be swapped: a sign that no longer holds is doubted or refused, but not read.
  * --uncoupled stores what the transmission pulse leaves in the dead zone: shots in air (64 or more), same gain, probe
    and cable. read takes it off between --uncoupled-from and from_us only; what differs counts as noise, and another
    gain or probe is refused (other-transmission-pulse). Coupling must not change the ringing.
  * A zero belongs to the pulse it was learned with: the new set-up names the pulse's file and its checksum.
  * --check reads blocks with the set-up as it is: within or outside, by how much, and what to do. Check before
    and after a series, on a block that the calibration did not use. Exit status: 0 all within, 2 some not,
    1 an error. JSON, one object a block: file, block_mm, block_standard_uncertainty_mm, thickness_mm,
    difference_mm, expanded_uncertainty_mm (of the difference), ratio (their quotient), state (within, outside,
    undecided), doubts, no_reading.";

/// Runs the command.
///
/// # Errors
/// What is wrong with set-up, blocks, records or output.
pub fn run(arguments: &Arguments, out: &mut dyn Write) -> Result<Outcome, InputError> {
    let setup = SetupFile::read(&arguments.setup)?;
    let blocks: Vec<BlockRecord> = arguments
        .blocks
        .iter()
        .map(|text| read_block(text, &setup))
        .collect::<Result<_, _>>()?;
    if arguments.temperature.is_some_and(|t| !(-273.15..=3000.0).contains(&t)) {
        return Err(InputError::in_argument(
            "--temperature is no temperature of a block",
            "give degrees Celsius",
        ));
    }
    let Some(output) = arguments.output.as_deref().filter(|_| !arguments.check) else {
        return check::run(&setup, &blocks, arguments.temperature, arguments.format, out);
    };
    let learn = arguments.learn.unwrap_or(match blocks.len() {
        1 => Learn::Zero,
        _ => Learn::ZeroAndVelocity,
    });
    let date = match &arguments.date {
        Some(date) => checked_date(date)?,
        None => today(),
    };
    let pulse_path = pulse_path(output)?;
    let pulse_name = pulse_path.file_name().map(|name| name.to_string_lossy().into_owned());
    let pulse_name = pulse_name.unwrap_or_default();
    let mut learned = calibrating::calibrate_at(&setup, &blocks, learn, &pulse_name, arguments.temperature)?;
    if let Some(calibration) = &mut learned.keys.calibration {
        calibration.date = Some(date);
    }
    if let (Some(file), Some(from_us)) = (&arguments.uncoupled, arguments.uncoupled_from) {
        let measure = &mut learned.keys.measure;
        measure.uncoupled_record = Some(keep_uncoupled(file, from_us, &setup, &blocks, output)?);
        measure.uncoupled_from_us = Some(from_us);
    }
    npy::write_pulse(&pulse_path, &learned.pulse)?;
    learned.keys.write(output)?;
    // What was written must be usable: read it as `read` will.
    SetupFile::read(output)?.reference_pulse()?;
    let report = report(&learned, &blocks, learn, output, &pulse_path);
    written(out.write_all(report.as_bytes()).and_then(|()| out.flush()))?;
    Ok(Outcome::Done)
}

/// Copies the record of the uncoupled probe beside the new set-up, if it belongs to the blocks' shots; the copy's name.
fn keep_uncoupled(
    file: &Path,
    from_us: f64,
    setup: &SetupFile,
    blocks: &[BlockRecord],
    output: &Path,
) -> Result<String, InputError> {
    let to_us = setup.keys.measure.from_us;
    if from_us.is_nan() || from_us >= to_us {
        return Err(InputError::in_argument(
            format!("--uncoupled-from {from_us} does not lie before from_us = {to_us}"),
            "give a time inside the dead zone",
        ));
    }
    let stored = StoredRecord::read(file, from_us, setup)?;
    for block in blocks {
        stored
            .fits(&block.average, &block.clock, Seconds::from_us(to_us as f32))
            .map_err(|why| {
                let sentence = why.to_string();
                let (what, remedy) = sentence.split_once(": ").unwrap_or((&sentence, "record it anew"));
                InputError::in_file(
                    file,
                    format!("does not go with {}: {what}", block.path.display()),
                    remedy,
                )
            })?;
    }
    let ending = file.extension().and_then(|ending| ending.to_str()).unwrap_or("npy");
    let kept = output.with_file_name(format!("{}-uncoupled.{ending}", stem(output)?));
    std::fs::copy(file, &kept).map_err(|error| InputError::unwritable(&kept, &error))?;
    Ok(kept
        .file_name()
        .map(|name| name.to_string_lossy().into_owned())
        .unwrap_or_default())
}

/// Reads `5.000mm+-0.002mm=FILE` and the file.
fn read_block(text: &str, setup: &SetupFile) -> Result<BlockRecord, InputError> {
    let (thickness_mm, uncertainty_mm, path) = parse_block(text)?;
    let file = record_file::read(&path, &setup.coding())?;
    let clock = measuring::clock(&path, &file, setup, 1)?;
    BlockRecord::new(&path, (thickness_mm, uncertainty_mm), file, clock)
}

fn parse_block(text: &str) -> Result<(f64, f64, PathBuf), InputError> {
    let fault = |what: String| InputError::in_argument(what, "write it like 5.000mm=FILE or 25.000mm+-0.002mm=FILE");
    let Some((size, path)) = text.split_once('=') else {
        return Err(fault(format!("--block {text} names no file")));
    };
    if path.is_empty() {
        return Err(fault(format!("--block {text} names no file")));
    }
    let millimetres = |part: &str| {
        let number = part
            .trim()
            .strip_suffix("mm")
            .ok_or_else(|| fault(format!("'{part}' in --block has no mm")))?;
        number
            .trim()
            .parse::<f64>()
            .ok()
            .filter(|number| number.is_finite())
            .ok_or_else(|| fault(format!("'{part}' in --block is no length")))
    };
    let (thickness, uncertainty) = match size.split_once("+-").or_else(|| size.split_once('\u{b1}')) {
        Some((thickness, uncertainty)) => (millimetres(thickness)?, millimetres(uncertainty)?),
        None => (millimetres(size)?, BLOCK_UNCERTAINTY_MM),
    };
    if !BLOCKS_MM.contains(&thickness) {
        return Err(InputError::in_argument(
            format!("a block of {thickness} mm is no block"),
            format!("give a thickness from {} to {} mm", BLOCKS_MM.start(), BLOCKS_MM.end()),
        ));
    }
    if !(0.0..thickness).contains(&uncertainty) {
        return Err(InputError::in_argument(
            format!("{uncertainty} mm is no uncertainty of a block of {thickness} mm"),
            "give its standard uncertainty (k = 1), from 0 to well below the thickness",
        ));
    }
    Ok((thickness, uncertainty, PathBuf::from(path)))
}

/// `OUT-pulse.npy` beside `OUT.toml`.
fn pulse_path(output: &Path) -> Result<PathBuf, InputError> {
    Ok(output.with_file_name(format!("{}-pulse.npy", stem(output)?)))
}

fn stem(output: &Path) -> Result<&str, InputError> {
    output
        .file_stem()
        .and_then(|stem| stem.to_str())
        .ok_or_else(|| InputError::in_file(output, "is no name for a set-up", "give a name like ready.toml"))
}

fn checked_date(date: &str) -> Result<String, InputError> {
    let shape = date.len() == 10
        && date
            .char_indices()
            .all(|(i, c)| if i == 4 || i == 7 { c == '-' } else { c.is_ascii_digit() });
    if shape {
        Ok(date.to_string())
    } else {
        Err(InputError::in_argument(
            format!("--date {date} is no date"),
            "write it like 2026-01-31",
        ))
    }
}

/// Today in UTC.
fn today() -> String {
    let seconds = SystemTime::now()
        .duration_since(UNIX_EPOCH)
        .map_or(0, |since| since.as_secs());
    date_of_day(seconds / 86_400)
}

/// The Gregorian date of a day counted from 1970-01-01.
fn date_of_day(day: u64) -> String {
    let leap = |year: u64| year.is_multiple_of(4) && (!year.is_multiple_of(100) || year.is_multiple_of(400));
    let (mut year, mut left) = (1970, day);
    while left >= 365 + u64::from(leap(year)) {
        left -= 365 + u64::from(leap(year));
        year += 1;
    }
    let february = 28 + u64::from(leap(year));
    let mut month = 1;
    for length in [31, february, 31, 30, 31, 30, 31, 31, 30, 31, 30, 31] {
        if left < length {
            break;
        }
        left -= length;
        month += 1;
    }
    format!("{year:04}-{month:02}-{:02}", left + 1)
}

fn report(learned: &Calibrated, blocks: &[BlockRecord], learn: Learn, output: &Path, pulse: &Path) -> String {
    let mut text = String::new();
    for (block, times) in blocks.iter().zip(&learned.times) {
        text.push_str(&format!(
            "{} mm ({}, {} shots): first back wall {}, SNR {}\n",
            block.thickness_mm,
            block.path.display(),
            block.shots.len(),
            times.back_wall.arrival,
            times.back_wall.snr,
        ));
    }
    text.push_str(&format!("span: {}\n", span_word(learned.keys.measure.span)));
    let (zero, material) = (&learned.zero, &learned.material);
    if learned.keys.zero.standard_uncertainty_ns.is_some() {
        text.push_str(&format!(
            "zero: {:.3} ns, standard uncertainty {:.3} ns\n",
            zero.offset.as_ns(),
            zero.standard_uncertainty.as_ns()
        ));
    }
    if learn != Learn::Zero {
        text.push_str(&format!(
            "velocity: {:.2} m/s, standard uncertainty {:.2} m/s\n",
            material.velocity.get(),
            material.velocity_standard_uncertainty.get()
        ));
    }
    if let Some(correlation) = learned
        .keys
        .calibration
        .as_ref()
        .and_then(|c| c.velocity_zero_correlation)
    {
        text.push_str(&format!("correlation of velocity and zero: {correlation:.3}\n"));
    }
    text.push_str(&format!(
        "reference pulse: {} samples from {} shots on {} mm, its own noise {:.3} %, mismatch {:.2} %, {}\nset-up: {}\n",
        learned.pulse.len(),
        learned.pulse_shots,
        blocks.get(learned.pulse_from).map_or(0.0, |block| block.thickness_mm),
        100.0 * learned.quality.noise,
        100.0 * learned.quality.mismatch,
        pulse.display(),
        output.display()
    ));
    if learned.pulse_shots < usize::from(ENOUGH_SHOTS) {
        text.push_str(&format!(
            "note: a pulse of {ENOUGH_SHOTS} shots or more has less noise of its own\n"
        ));
    }
    let material = &learned.keys.material;
    if material.part_velocity_standard_uncertainty_m_s.is_none() {
        text.push_str(
            "note: the block is not the part: state in [material] part_velocity_standard_uncertainty_m_s by how much \
             the part's velocity may differ, or 0\n",
        );
    }
    text
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn blocks_are_read_with_and_without_uncertainty() {
        assert_eq!(
            parse_block("5.000mm=a.npy").unwrap(),
            (5.0, 0.005, PathBuf::from("a.npy"))
        );
        assert_eq!(
            parse_block("25mm+-0.002mm=b=c.npy").unwrap(),
            (25.0, 0.002, PathBuf::from("b=c.npy"))
        );
        assert_eq!(parse_block("25 mm \u{b1} 0 mm=b.npy").unwrap().1, 0.0);
        for (text, word) in [
            ("5mm", "names no file"),
            ("5mm=", "names no file"),
            ("5=a", "has no mm"),
            ("xmm=a", "is no length"),
            ("nanmm=a", "is no length"),
            ("-5mm=a", "is no block"),
            ("0mm=a", "is no block"),
            ("1e9mm=a", "is no block"),
            ("5mm+-9mm=a", "is no uncertainty"),
            ("5mm+--1mm=a", "is no uncertainty"),
        ] {
            let error = parse_block(text).unwrap_err().to_string();
            assert!(error.contains(word) && error.contains("; "), "{text}: {error}");
        }
    }

    /// Days from `date -d 2000-02-29 +%s` and the like, over 86400.
    #[test]
    fn val_dates() {
        for (day, date) in [
            (0, "1970-01-01"),
            (11_016, "2000-02-29"),
            (11_017, "2000-03-01"),
            (20_453, "2025-12-31"),
            (20_454, "2026-01-01"),
            (47_541, "2100-03-01"),
        ] {
            assert_eq!(date_of_day(day), date);
        }
        assert!(checked_date(&today()).is_ok());
        assert!(checked_date("31.1.2026").is_err());
    }
}
