//! Recorded shots from and to files: `.npy`, `.csv`, `.wav`.
//!
//! | file | shots | numbers | tells of itself |
//! |---|---|---|---|
//! | `.npy` | 1-D: one; 2-D (C order): one a row | little-endian int16, int32, float32, float64 | nothing |
//! | `.csv` | without header: one a column; with the header `time_s,value` (or `time_s` and more columns): one a value column | all whole: codes; else floats | with `time_s`: sample rate and time of the first sample |
//! | `.wav` | one, mono | integers: codes; float: floats | sample rate |
//!
//! Codes are right-justified; signed ones go from -2^(bits-1) to 2^(bits-1)-1, offset-binary ones from
//! 0 to 2^bits-1. Floats go from minus to plus full scale (1 unless stated) and are quantised to 16
//! bits. A record that was normalised to a peak of exactly 1 touches full scale and looks clipped:
//! state a full scale a little above its largest value.

mod csv;
pub mod npy;
mod wav;

use crate::input_error::InputError;
use halfpulse::AdcFormat;
use std::path::Path;

/// Most samples of one shot.
pub const MOST_SAMPLES: usize = 1 << 22;
/// Most samples of one file.
pub const MOST_SAMPLES_IN_FILE: usize = 1 << 25;
/// Most shots of one file: what coherent averaging can count.
pub const MOST_SHOTS: usize = u16::MAX as usize;

/// How a code stands for a voltage.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Default)]
pub enum CodeKind {
    /// Two's complement: 0 is no signal.
    #[default]
    Signed,
    /// 2^(bits-1) is no signal.
    OffsetBinary,
}

/// What must be known besides the file to make codes of its numbers.
#[derive(Clone, Copy, Debug, PartialEq, Default)]
pub struct Coding {
    /// The converter's bits, 2 to 16; only files with floats do without.
    pub bits: Option<u8>,
    /// How codes stand for voltages.
    pub codes: CodeKind,
    /// What a float file calls full scale; 1 if not stated.
    pub full_scale: Option<f64>,
}

/// A sample rate as a file states it.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct StatedRate {
    /// Samples per second.
    pub hertz: f64,
    /// How far it may differ from another statement of the same rate, relative: the rounding of the
    /// file's times, never below 2e-5 (20 ppm, the tolerance of an ordinary quartz; common practice).
    pub tolerance: f64,
}

impl StatedRate {
    /// Does `hertz` say the same?
    #[must_use]
    pub fn agrees_with(&self, hertz: f64) -> bool {
        (hertz - self.hertz).abs() <= self.tolerance * self.hertz
    }
}

/// The shots of one file as codes, and what the file says about its clock.
#[derive(Clone, Debug, PartialEq)]
pub struct RecordFile {
    /// The shots, all of the same length.
    pub shots: Vec<Vec<i16>>,
    /// What a code stands for.
    pub format: AdcFormat,
    /// The file holds codes, and not floats that were quantised here.
    pub holds_codes: bool,
    /// The sample rate, if the file states it.
    pub sample_rate: Option<StatedRate>,
    /// Time of the first sample after the transmission trigger in seconds, if the file states it.
    pub first_sample_s: Option<f64>,
}

impl RecordFile {
    /// Shots that come from no file.
    #[must_use]
    pub const fn from_codes(shots: Vec<Vec<i16>>, format: AdcFormat) -> Self {
        Self {
            shots,
            format,
            holds_codes: true,
            sample_rate: None,
            first_sample_s: None,
        }
    }
}

/// Numbers as they stand in a file, shot after shot.
enum Numbers {
    Integers(Vec<i32>),
    Floats(Vec<f64>),
}

/// A file before its numbers become codes.
struct Raw {
    shots: usize,
    samples: usize,
    numbers: Numbers,
    sample_rate: Option<StatedRate>,
    first_sample_s: Option<f64>,
    /// The line of each sample, where the file has lines.
    lines: Option<Vec<u64>>,
}

enum Kind {
    Npy,
    Csv,
    Wav,
}

fn kind_of(path: &Path) -> Result<Kind, InputError> {
    let ending = path.extension().and_then(|e| e.to_str()).unwrap_or("");
    match ending.to_ascii_lowercase().as_str() {
        "npy" => Ok(Kind::Npy),
        "csv" => Ok(Kind::Csv),
        "wav" => Ok(Kind::Wav),
        _ => Err(InputError::in_file(
            path,
            "the name's ending does not say what kind of record this is",
            "use a .npy, .csv or .wav file",
        )),
    }
}

/// Reads a file's shots.
///
/// # Errors
/// Anything that is wrong with the file, with place and remedy: see the module's table.
pub fn read(path: &Path, coding: &Coding) -> Result<RecordFile, InputError> {
    let raw = match kind_of(path)? {
        Kind::Npy => npy::read_shots(path)?,
        Kind::Csv => csv::read_shots(path)?,
        Kind::Wav => wav::read_shots(path)?,
    };
    to_codes(path, &raw, coding)
}

/// Writes shots as signed codes; the name's ending chooses the kind of file.
///
/// `.npy`: int16, 1-D for one shot, else 2-D. `.csv`: `time_s` and one column a shot. `.wav`: one shot,
/// 16 bits, the sample rate in whole hertz.
///
/// # Errors
/// A file that cannot be written, or shots that this kind of file cannot hold.
pub fn write(path: &Path, shots: &[Vec<i16>], sample_rate_hertz: f64, first_sample_s: f64) -> Result<(), InputError> {
    let samples = shots.first().map_or(0, Vec::len);
    if samples == 0 || shots.iter().any(|shot| shot.len() != samples) {
        return Err(InputError::in_file(
            path,
            "there are no samples to write, or the shots differ in length",
            "write shots of one length",
        ));
    }
    match kind_of(path)? {
        Kind::Npy => npy::write_shots(path, shots),
        Kind::Csv => csv::write_shots(path, shots, sample_rate_hertz, first_sample_s),
        Kind::Wav => wav::write_shot(path, shots, sample_rate_hertz),
    }
}

/// Refuses sizes that no record of an A-scan has, before memory is spent on them.
fn check_size(path: &Path, shots: usize, samples: usize) -> Result<(), InputError> {
    if shots == 0 || samples == 0 {
        return Err(InputError::in_file(
            path,
            "holds no sample",
            "record again, or give another file",
        ));
    }
    if shots > MOST_SHOTS || samples > MOST_SAMPLES || shots.saturating_mul(samples) > MOST_SAMPLES_IN_FILE {
        return Err(InputError::in_file(
            path,
            format!("{shots} shots of {samples} samples are more than a record can be"),
            format!(
                "split the file: at most {MOST_SHOTS} shots, {MOST_SAMPLES} samples a shot, {MOST_SAMPLES_IN_FILE} in all \
                 (one shot a row; is the array turned?)"
            ),
        ));
    }
    Ok(())
}

/// Refuses files that no table of allowed samples can fill.
fn check_bytes(path: &Path) -> Result<(), InputError> {
    const MOST_BYTES: u64 = 1 << 30;
    InputError::check_file(path, MOST_BYTES)
}

/// The place of one number, for an error about it.
fn fault_at(path: &Path, raw: &Raw, index: usize, what: &str, remedy: &str) -> InputError {
    let (shot, sample) = (index / raw.samples, index % raw.samples);
    match raw.lines.as_ref().and_then(|lines| lines.get(sample)) {
        Some(&line) => InputError::in_line(path, line, what, remedy),
        None => InputError::in_file(path, format!("shot {shot}, sample {sample}: {what}"), remedy),
    }
}

fn to_codes(path: &Path, raw: &Raw, coding: &Coding) -> Result<RecordFile, InputError> {
    check_size(path, raw.shots, raw.samples)?;
    let (codes, bits) = match &raw.numbers {
        Numbers::Integers(values) => integers_to_codes(path, raw, values, coding)?,
        Numbers::Floats(values) => (floats_to_codes(path, raw, values, coding)?, 16),
    };
    Ok(RecordFile {
        shots: codes.chunks_exact(raw.samples).map(<[i16]>::to_vec).collect(),
        format: AdcFormat::signed(bits),
        holds_codes: matches!(raw.numbers, Numbers::Integers(_)),
        sample_rate: raw.sample_rate,
        first_sample_s: raw.first_sample_s,
    })
}

fn integers_to_codes(path: &Path, raw: &Raw, values: &[i32], coding: &Coding) -> Result<(Vec<i16>, u8), InputError> {
    let Some(bits) = coding.bits.filter(|bits| (2..=16).contains(bits)) else {
        return Err(InputError::in_file(
            path,
            "holds codes, but nothing says how many bits the converter has",
            "state bits (2 to 16) in the set-up's [record]",
        ));
    };
    let half = 1i64 << (bits - 1);
    let (lowest, highest, origin) = match coding.codes {
        CodeKind::Signed => (-half, half - 1, 0),
        CodeKind::OffsetBinary => (0, 2 * half - 1, half),
    };
    let mut codes = Vec::with_capacity(values.len());
    for (index, &value) in values.iter().enumerate() {
        let value = i64::from(value);
        match i16::try_from(value - origin) {
            Ok(code) if (lowest..=highest).contains(&value) => codes.push(code),
            _ => {
                let kind = match coding.codes {
                    CodeKind::Signed => "signed",
                    CodeKind::OffsetBinary => "offset-binary",
                };
                return Err(fault_at(
                    path,
                    raw,
                    index,
                    &format!("{value} is outside the range of {bits} {kind} bits, {lowest} to {highest}"),
                    "correct bits or codes in the set-up's [record]; codes must be right-justified",
                ));
            }
        }
    }
    Ok((codes, bits))
}

fn floats_to_codes(path: &Path, raw: &Raw, values: &[f64], coding: &Coding) -> Result<Vec<i16>, InputError> {
    let full_scale = coding.full_scale.unwrap_or(1.0);
    let mut codes = Vec::with_capacity(values.len());
    for (index, &value) in values.iter().enumerate() {
        if !value.is_finite() {
            return Err(fault_at(
                path,
                raw,
                index,
                &format!("{value} is not a number that can be measured"),
                "remove or repair this sample",
            ));
        }
        let scaled = value / full_scale;
        // Half a step of headroom in the comparison, so that rounding of the stored value is no fault.
        if scaled.abs() > 1.0 + 0.5 / 32768.0 {
            return Err(fault_at(
                path,
                raw,
                index,
                &format!("{value} is beyond full scale, {full_scale}"),
                "state full_scale in the set-up's [record]",
            ));
        }
        // The highest code stands one step below full scale.
        codes.push((scaled * 32768.0).round().clamp(-32768.0, 32767.0) as i16);
    }
    Ok(codes)
}

#[cfg(test)]
mod tests;
