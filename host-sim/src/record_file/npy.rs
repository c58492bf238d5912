//! The `.npy` format (NumPy's own description: `numpy.lib.format`), as far as records need it.
//!
//! Versions 1 to 3; 1-D, or 2-D in C order; little-endian int16, int32, float32 and float64.

use super::{Numbers, Raw, check_bytes, check_size};
use crate::input_error::InputError;
use std::path::Path;

const MAGIC: &[u8; 6] = b"\x93NUMPY";

enum Element {
    I16,
    I32,
    F32,
    F64,
}

impl Element {
    const fn bytes(&self) -> usize {
        match self {
            Self::I16 => 2,
            Self::I32 | Self::F32 => 4,
            Self::F64 => 8,
        }
    }
}

struct Header {
    element: Element,
    shape: Vec<usize>,
}

pub(super) fn read_shots(path: &Path) -> Result<Raw, InputError> {
    let (header, data) = read_array(path)?;
    let (shots, samples) = match header.shape[..] {
        [samples] => (1, samples),
        [shots, samples] => (shots, samples),
        _ => {
            return Err(InputError::in_file(
                path,
                format!("the array has {} dimensions", header.shape.len()),
                "save one shot as 1-D, or several as 2-D with one shot a row",
            ));
        }
    };
    check_size(path, shots, samples)?;
    let bytes = exact_bytes(path, &header, &data, shots * samples)?;
    let numbers = match header.element {
        Element::I16 => Numbers::Integers(elements(bytes, |b| i32::from(i16::from_le_bytes(b)))),
        Element::I32 => Numbers::Integers(elements(bytes, i32::from_le_bytes)),
        Element::F32 => Numbers::Floats(elements(bytes, |b| f64::from(f32::from_le_bytes(b)))),
        Element::F64 => Numbers::Floats(elements(bytes, f64::from_le_bytes)),
    };
    Ok(Raw {
        shots,
        samples,
        numbers,
        sample_rate: None,
        first_sample_s: None,
        lines: None,
    })
}

/// Reads a 1-D array of floats: a reference pulse.
///
/// # Errors
/// Anything that is wrong with the file; another shape; integers; a value that is not finite.
pub fn read_pulse(path: &Path) -> Result<Vec<f32>, InputError> {
    let (header, data) = read_array(path)?;
    let [samples] = header.shape[..] else {
        return Err(InputError::in_file(
            path,
            "a reference pulse is a 1-D array",
            "save the pulse's samples in one dimension",
        ));
    };
    check_size(path, 1, samples)?;
    let bytes = exact_bytes(path, &header, &data, samples)?;
    let pulse: Vec<f32> = match header.element {
        Element::F32 => elements(bytes, f32::from_le_bytes),
        Element::F64 => elements(bytes, |b| f64::from_le_bytes(b) as f32),
        Element::I16 | Element::I32 => {
            return Err(InputError::in_file(
                path,
                "a reference pulse is an array of floats, this one holds integers",
                "save it as float32 with a peak of 1",
            ));
        }
    };
    if let Some(sample) = pulse.iter().position(|value| !value.is_finite()) {
        return Err(InputError::in_file(
            path,
            format!("sample {sample} of the reference pulse is not a finite number"),
            "learn the pulse again on a block",
        ));
    }
    Ok(pulse)
}

/// Writes a 1-D array of float32: a reference pulse.
///
/// # Errors
/// A file that cannot be written.
pub fn write_pulse(path: &Path, pulse: &[f32]) -> Result<(), InputError> {
    let mut bytes = header_bytes("<f4", &format!("({},)", pulse.len()));
    bytes.extend(pulse.iter().flat_map(|value| value.to_le_bytes()));
    std::fs::write(path, bytes).map_err(|error| InputError::unwritable(path, &error))
}

pub(super) fn write_shots(path: &Path, shots: &[Vec<i16>]) -> Result<(), InputError> {
    let samples = shots.first().map_or(0, Vec::len);
    let shape = if shots.len() == 1 {
        format!("({samples},)")
    } else {
        format!("({}, {samples})", shots.len())
    };
    let mut bytes = header_bytes("<i2", &shape);
    bytes.extend(shots.iter().flatten().flat_map(|code| code.to_le_bytes()));
    std::fs::write(path, bytes).map_err(|error| InputError::unwritable(path, &error))
}

fn header_bytes(descr: &str, shape: &str) -> Vec<u8> {
    let mut text = format!("{{'descr': '{descr}', 'fortran_order': False, 'shape': {shape}, }}");
    // The format wants the data to start at a multiple of 64 bytes, and a line end before it.
    while !(MAGIC.len() + 4 + text.len() + 1).is_multiple_of(64) {
        text.push(' ');
    }
    text.push('\n');
    let length = u16::try_from(text.len()).unwrap_or(u16::MAX);
    let mut bytes = MAGIC.to_vec();
    bytes.extend([1, 0]);
    bytes.extend(length.to_le_bytes());
    bytes.extend(text.as_bytes());
    bytes
}

fn elements<const N: usize, T>(bytes: &[u8], convert: impl Fn([u8; N]) -> T) -> Vec<T> {
    bytes
        .chunks_exact(N)
        .filter_map(|chunk| chunk.try_into().ok().map(&convert))
        .collect()
}

/// The array's data, which must be there to the byte.
fn exact_bytes<'d>(path: &Path, header: &Header, data: &'d [u8], count: usize) -> Result<&'d [u8], InputError> {
    let expected = count * header.element.bytes();
    if data.len() < expected {
        return Err(InputError::in_file(
            path,
            format!("is truncated: {} of {expected} bytes of samples", data.len()),
            "copy or record it again",
        ));
    }
    if data.len() > expected {
        return Err(InputError::in_file(
            path,
            format!("holds {} bytes more than its header announces", data.len() - expected),
            "save one array a file",
        ));
    }
    Ok(data)
}

/// Header and data of a file.
fn read_array(path: &Path) -> Result<(Header, Vec<u8>), InputError> {
    check_bytes(path)?;
    let mut file = std::fs::read(path).map_err(|error| InputError::unreadable(path, &error))?;
    if file.is_empty() {
        return Err(InputError::in_file(path, "is empty", "record or copy it again"));
    }
    let truncated = || InputError::in_file(path, "is truncated within its header", "copy or record it again");
    let not_npy = || InputError::in_file(path, "is not an .npy file", "save it with numpy.save, or rename it");
    let magic = file.get(..MAGIC.len()).unwrap_or(&file);
    if !MAGIC.starts_with(magic) {
        return Err(not_npy());
    }
    let version = *file.get(6).ok_or_else(truncated)?;
    let (length, start) = match version {
        1 => match file.get(8..10) {
            Some(&[a, b]) => (usize::from(u16::from_le_bytes([a, b])), 10),
            _ => return Err(truncated()),
        },
        2 | 3 => match file.get(8..12) {
            Some(&[a, b, c, d]) => (u32::from_le_bytes([a, b, c, d]) as usize, 12),
            _ => return Err(truncated()),
        },
        _ => {
            return Err(InputError::in_file(
                path,
                format!("is of version {version} of the .npy format"),
                "save it with numpy.save, which writes version 1",
            ));
        }
    };
    let text = file
        .get(start..)
        .and_then(|rest| rest.get(..length))
        .ok_or_else(truncated)?;
    let text = std::str::from_utf8(text).map_err(|_| not_npy())?;
    let header = parse_header(path, text)?;
    file.drain(..start + length);
    Ok((header, file))
}

/// The value that follows `'key':` in the header's dictionary.
fn after_key<'t>(text: &'t str, key: &str) -> Option<&'t str> {
    let quoted = [format!("'{key}'"), format!("\"{key}\"")];
    let (at, length) = quoted
        .iter()
        .find_map(|q| text.find(q.as_str()).map(|at| (at, q.len())))?;
    text.get(at + length..)?
        .trim_start()
        .strip_prefix(':')
        .map(str::trim_start)
}

fn parse_header(path: &Path, text: &str) -> Result<Header, InputError> {
    let broken = || {
        InputError::in_file(
            path,
            "has a header that cannot be read",
            "save it again with numpy.save",
        )
    };
    let descr = after_key(text, "descr").ok_or_else(broken)?;
    let quote = descr.chars().next().filter(|c| matches!(c, '\'' | '"'));
    let name = match quote {
        Some(quote) => descr
            .get(1..)
            .and_then(|rest| rest.split(quote).next())
            .ok_or_else(broken)?,
        None => "a structured type",
    };
    let element = match name {
        "<i2" => Element::I16,
        "<i4" => Element::I32,
        "<f4" => Element::F32,
        "<f8" => Element::F64,
        _ => {
            let what = if name.starts_with('>') {
                format!("holds big-endian numbers ({name})")
            } else {
                format!("holds numbers of type {name}")
            };
            return Err(InputError::in_file(
                path,
                what,
                "convert to int16, int32, float32 or float64, little-endian: a.astype('<i2')",
            ));
        }
    };
    let shape = after_key(text, "shape")
        .and_then(|rest| rest.strip_prefix('('))
        .ok_or_else(broken)?;
    let (shape, _) = shape.split_once(')').ok_or_else(broken)?;
    let shape: Vec<usize> = shape
        .split(',')
        .map(str::trim)
        .filter(|part| !part.is_empty())
        .map(str::parse)
        .collect::<Result<_, _>>()
        .map_err(|_| broken())?;
    let fortran = after_key(text, "fortran_order").ok_or_else(broken)?;
    if fortran.starts_with("True") {
        // Order means nothing in one dimension.
        if shape.len() > 1 {
            return Err(InputError::in_file(
                path,
                "is stored column by column (Fortran order)",
                "save it as numpy.ascontiguousarray(a)",
            ));
        }
    } else if !fortran.starts_with("False") {
        return Err(broken());
    }
    Ok(Header { element, shape })
}
