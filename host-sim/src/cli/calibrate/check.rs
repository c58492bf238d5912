//! `halfpulse calibrate --check`: does the set-up still read these blocks right?

use crate::calibrating::block::BlockRecord;
use crate::calibrating::{self, Checked};
use crate::cli::read::Format;
use crate::cli::{Outcome, written};
use crate::input_error::InputError;
use crate::setup_file::SetupFile;
use halfpulse::DriftState;
use serde::Serialize;
use std::io::Write;

/// Checks each block and prints what came of it.
///
/// # Errors
/// A set-up that cannot be used, or an output that cannot be written.
pub fn run(
    setup: &SetupFile,
    blocks: &[BlockRecord],
    temperature: Option<f64>,
    format: Format,
    out: &mut dyn Write,
) -> Result<Outcome, InputError> {
    let mut all_within = true;
    let mut outside = 0;
    for block in blocks {
        let checked = calibrating::check(setup, block, temperature)?;
        let state = checked.drift.map(|(_, state)| state);
        all_within &= state == Some(DriftState::Within);
        outside += usize::from(state == Some(DriftState::Outside));
        let line = match format {
            Format::Text => text(block, &checked),
            Format::Json => json(block, &checked) + "\n",
        };
        written(out.write_all(line.as_bytes()))?;
    }
    if format == Format::Text && outside > 1 {
        let hint = "differences that are alike speak of the zero, differences that grow with the thickness of the velocity \
                    or of the blocks' temperature\n";
        written(out.write_all(hint.as_bytes()))?;
    }
    written(out.flush())?;
    Ok(if all_within { Outcome::Done } else { Outcome::Refused })
}

fn text(block: &BlockRecord, checked: &Checked) -> String {
    let name = format!("{} mm ({})", block.thickness_mm, block.path.display());
    match (&checked.outcome, &checked.drift) {
        (Ok(reading), Some((drift, state))) => {
            let doubts = if reading.doubts.is_empty() {
                String::new()
            } else {
                format!(" (doubts: {})", reading.doubts)
            };
            format!(
                "{name}: reads {:.4} mm, {:+.4} mm off, {:+.2} of its expanded uncertainty {:.4} mm: {}{doubts}; {}\n",
                reading.thickness.as_mm(),
                drift.difference.as_mm(),
                drift.ratio(),
                drift.expanded().as_mm(),
                state.word(),
                state.advice()
            )
        }
        (Ok(_), None) => format!("{name}: undecided; {}\n", DriftState::Undecided.advice()),
        (Err(why), _) => format!("{name}: no reading: {}: {why}\n", why.word()),
    }
}

#[derive(Serialize)]
struct JsonCheck {
    file: String,
    block_mm: f64,
    block_standard_uncertainty_mm: Option<f32>,
    thickness_mm: Option<f32>,
    difference_mm: Option<f32>,
    expanded_uncertainty_mm: Option<f32>,
    ratio: Option<f32>,
    state: &'static str,
    doubts: Vec<&'static str>,
    no_reading: Option<&'static str>,
}

fn json(block: &BlockRecord, checked: &Checked) -> String {
    let finite = |value: f32| Some(value).filter(|value| value.is_finite());
    let reading = checked.outcome.as_ref().ok();
    let drift = checked.drift.as_ref().map(|(drift, _)| drift);
    let line = JsonCheck {
        file: block.path.display().to_string(),
        block_mm: block.thickness_mm,
        block_standard_uncertainty_mm: finite(block.thickness_uncertainty.as_mm()),
        thickness_mm: reading.and_then(|r| finite(r.thickness.as_mm())),
        difference_mm: drift.and_then(|d| finite(d.difference.as_mm())),
        expanded_uncertainty_mm: drift.and_then(|d| finite(d.expanded().as_mm())),
        ratio: drift.and_then(|d| finite(d.ratio())),
        state: checked.drift.map_or(DriftState::Undecided, |(_, state)| state).word(),
        doubts: reading.map_or(Vec::new(), |r| r.doubts.iter().map(|doubt| doubt.word()).collect()),
        no_reading: checked.outcome.as_ref().err().map(halfpulse::NoReading::word),
    };
    // Strings and finite numbers always serialise.
    serde_json::to_string(&line).unwrap_or_default()
}
