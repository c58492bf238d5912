//! Records as columns of text.

use super::{MOST_SAMPLES, MOST_SAMPLES_IN_FILE, MOST_SHOTS, Numbers, Raw, StatedRate, check_bytes};
use crate::input_error::InputError;
use std::fmt::Write as _;
use std::path::Path;

/// Columns of a file while it is read.
struct Columns {
    times: Vec<f64>,
    values: Vec<Vec<f64>>,
    lines: Vec<u64>,
    all_whole: bool,
}

pub(super) fn read_shots(path: &Path) -> Result<Raw, InputError> {
    check_bytes(path)?;
    let text = std::fs::read_to_string(path).map_err(|error| InputError::unreadable(path, &error))?;
    let text = text.strip_prefix('\u{feff}').unwrap_or(&text);
    let mut columns = Columns {
        times: Vec::new(),
        values: Vec::new(),
        lines: Vec::new(),
        all_whole: true,
    };
    let mut width = None;
    let mut timed = false;
    // Cells of numbers need none of the quoting that would let a line end inside a cell; so every line
    // is a row, and an error names the line that an editor shows.
    for (line, row) in (1u64..).zip(text.lines()) {
        if row.trim().is_empty() {
            continue;
        }
        let cells = row.split(',').count();
        let Some(expected) = width else {
            width = Some(cells);
            timed = row
                .split(',')
                .next()
                .is_some_and(|cell| bare(cell).eq_ignore_ascii_case("time_s"));
            let shots = cells - usize::from(timed);
            if shots == 0 || shots > MOST_SHOTS {
                return Err(InputError::in_line(
                    path,
                    line,
                    format!("{shots} columns of values"),
                    format!("write time_s,value or one column a shot, at most {MOST_SHOTS}"),
                ));
            }
            columns.values = vec![Vec::new(); shots];
            if !timed {
                add_row(path, line, row, false, &mut columns)?;
            }
            continue;
        };
        if cells != expected {
            return Err(InputError::in_line(
                path,
                line,
                format!("{cells} columns where the lines above have {expected}"),
                "write the same number of columns in every line",
            ));
        }
        add_row(path, line, row, timed, &mut columns)?;
    }
    if width.is_none() {
        return Err(InputError::in_file(path, "is empty", "record or copy it again"));
    }
    let (sample_rate, first_sample_s) = if timed { clock(path, &columns)? } else { (None, None) };
    let values = columns.values.iter().flatten();
    let numbers = if columns.all_whole {
        Numbers::Integers(values.map(|value| *value as i32).collect())
    } else {
        Numbers::Floats(values.copied().collect())
    };
    Ok(Raw {
        shots: columns.values.len(),
        samples: columns.lines.len(),
        numbers,
        sample_rate,
        first_sample_s,
        lines: Some(columns.lines),
    })
}

/// A cell without the spaces and quotes round it.
fn bare(cell: &str) -> &str {
    cell.trim().trim_matches('"')
}

fn add_row(path: &Path, line: u64, row: &str, timed: bool, columns: &mut Columns) -> Result<(), InputError> {
    let cells = columns.values.len();
    if columns.lines.len() >= MOST_SAMPLES || (columns.lines.len() + 1).saturating_mul(cells) > MOST_SAMPLES_IN_FILE {
        return Err(InputError::in_line(
            path,
            line,
            "the record is longer than a record can be",
            format!("split it: at most {MOST_SAMPLES} samples a shot, {MOST_SAMPLES_IN_FILE} in all"),
        ));
    }
    let mut cells = row.split(',').map(bare);
    if timed {
        columns.times.push(number(path, line, cells.next().unwrap_or(""))?);
    }
    for (column, cell) in columns.values.iter_mut().zip(cells) {
        let value = number(path, line, cell)?;
        columns.all_whole &= cell.parse::<i32>().is_ok();
        column.push(value);
    }
    columns.lines.push(line);
    Ok(())
}

fn number(path: &Path, line: u64, cell: &str) -> Result<f64, InputError> {
    cell.parse().map_err(|_| {
        let shown: String = cell.chars().take(40).collect();
        let what = if cell.is_empty() {
            "an empty cell".to_string()
        } else {
            format!("'{shown}' is not a number")
        };
        let remedy = if columns_by_semicolon(cell) {
            "put commas between columns and a point into numbers"
        } else if line == 1 {
            "remove the text, or start the header with time_s"
        } else {
            "write one number a cell, with a point and not a comma"
        };
        InputError::in_line(path, line, what, remedy)
    })
}

fn columns_by_semicolon(cell: &str) -> bool {
    cell.contains(';') || cell.contains('\t')
}

/// Sample rate and first time from the column of times, which must be evenly spaced.
fn clock(path: &Path, columns: &Columns) -> Result<(Option<StatedRate>, Option<f64>), InputError> {
    let times = &columns.times;
    if let Some(at) = times.iter().position(|time| !time.is_finite()) {
        return Err(InputError::in_line(
            path,
            columns.lines.get(at).copied().unwrap_or(0),
            "the time is not a finite number",
            "write seconds after the transmission trigger",
        ));
    }
    let (Some(&first), Some(&last)) = (times.first(), times.last()) else {
        return Ok((None, None));
    };
    if times.len() < 2 {
        return Ok((None, Some(first)));
    }
    let steps = (times.len() - 1) as f64;
    let step = (last - first) / steps;
    if step.is_nan() || step <= 0.0 {
        return Err(InputError::in_line(
            path,
            columns.lines.last().copied().unwrap_or(0),
            "the times do not increase",
            "write the samples in the order of their times",
        ));
    }
    let mut worst = 0.0f64;
    let mut before = first - step;
    for (at, &time) in times.iter().enumerate() {
        let off = ((time - first) / step - at as f64).abs();
        // A missing sample shows as a wide step; the bounds leave room for rounded times.
        let wide = ((time - before) / step - 1.0).abs() > 0.4;
        before = time;
        if wide || off > 0.2 {
            return Err(InputError::in_line(
                path,
                columns.lines.get(at).copied().unwrap_or(0),
                format!("the times are not evenly spaced at {time:e} s"),
                "write all samples, and times with enough digits",
            ));
        }
        worst = worst.max(off);
    }
    Ok((
        Some(StatedRate {
            hertz: 1.0 / step,
            tolerance: (2.0 * worst / steps).max(2e-5),
        }),
        Some(first),
    ))
}

pub(super) fn write_shots(
    path: &Path,
    shots: &[Vec<i16>],
    sample_rate_hertz: f64,
    first_sample_s: f64,
) -> Result<(), InputError> {
    let mut text = String::from("time_s");
    if shots.len() == 1 {
        text.push_str(",value");
    } else {
        for shot in 0..shots.len() {
            let _ = write!(text, ",shot_{shot}");
        }
    }
    text.push('\n');
    let samples = shots.first().map_or(0, Vec::len);
    for sample in 0..samples {
        // Femtoseconds are beyond any clock; more digits would only show the rounding of binary numbers.
        let time = ((first_sample_s + sample as f64 / sample_rate_hertz) * 1e15).round() / 1e15;
        let _ = write!(text, "{time:e}");
        for shot in shots {
            let _ = write!(text, ",{}", shot.get(sample).copied().unwrap_or(0));
        }
        text.push('\n');
    }
    std::fs::write(path, text).map_err(|error| InputError::unwritable(path, &error))
}
