//! Records as mono WAV files: the sample rate in their header is that of the converter.

use super::{Numbers, Raw, StatedRate, check_bytes, check_size};
use crate::input_error::InputError;
use std::path::Path;

fn from_hound(path: &Path, error: &hound::Error) -> InputError {
    match error {
        hound::Error::IoError(io) if io.kind() == std::io::ErrorKind::UnexpectedEof => {
            InputError::in_file(path, "is truncated", "copy or record it again")
        }
        // hound reports a data chunk that ends early in this way.
        hound::Error::IoError(io) if io.kind() == std::io::ErrorKind::Other => {
            InputError::in_file(path, format!("is truncated ({io})"), "copy or record it again")
        }
        hound::Error::IoError(io) => InputError::unreadable(path, io),
        other => InputError::in_file(
            path,
            format!("is not a WAV file that can be read ({other})"),
            "save it as mono, 16 bits or 32-bit float",
        ),
    }
}

pub(super) fn read_shots(path: &Path) -> Result<Raw, InputError> {
    check_bytes(path)?;
    if std::fs::metadata(path).is_ok_and(|about| about.len() == 0) {
        return Err(InputError::in_file(path, "is empty", "record or copy it again"));
    }
    let mut reader = hound::WavReader::open(path).map_err(|error| from_hound(path, &error))?;
    let spec = reader.spec();
    if spec.channels != 1 {
        return Err(InputError::in_file(
            path,
            format!("has {} channels", spec.channels),
            "save one channel (mono)",
        ));
    }
    if spec.sample_rate == 0 {
        return Err(InputError::in_file(
            path,
            "states a sample rate of 0",
            "save it with the converter's sample rate",
        ));
    }
    let samples = reader.duration() as usize;
    check_size(path, 1, samples)?;
    let numbers = match spec.sample_format {
        hound::SampleFormat::Int => reader.samples::<i32>().collect::<Result<_, _>>().map(Numbers::Integers),
        hound::SampleFormat::Float => {
            let floats: Result<Vec<f32>, _> = reader.samples::<f32>().collect();
            floats.map(|values| Numbers::Floats(values.into_iter().map(f64::from).collect()))
        }
    }
    .map_err(|error| from_hound(path, &error))?;
    Ok(Raw {
        shots: 1,
        samples,
        numbers,
        sample_rate: Some(StatedRate {
            hertz: f64::from(spec.sample_rate),
            tolerance: 2e-5,
        }),
        first_sample_s: None,
        lines: None,
    })
}

pub(super) fn write_shot(path: &Path, shots: &[Vec<i16>], sample_rate_hertz: f64) -> Result<(), InputError> {
    let [shot] = shots else {
        return Err(InputError::in_file(
            path,
            format!("a WAV file holds one shot, not {}", shots.len()),
            "write .npy or .csv, or a single shot",
        ));
    };
    let whole = sample_rate_hertz.round();
    // The header also holds bytes per second, so half the range of a rate is the limit.
    if !(whole > 0.0 && whole <= f64::from(u32::MAX / 2)) {
        return Err(InputError::in_file(
            path,
            format!("a WAV file cannot state {sample_rate_hertz} samples a second"),
            "write .npy or .csv",
        ));
    }
    let spec = hound::WavSpec {
        channels: 1,
        sample_rate: whole as u32,
        bits_per_sample: 16,
        sample_format: hound::SampleFormat::Int,
    };
    let written = || -> hound::Result<()> {
        let mut writer = hound::WavWriter::create(path, spec)?;
        for &code in shot {
            writer.write_sample(code)?;
        }
        writer.finalize()
    };
    written().map_err(|error| match error {
        hound::Error::IoError(io) => InputError::unwritable(path, &io),
        other => InputError::in_file(path, format!("cannot be written ({other})"), "write .npy or .csv"),
    })
}
