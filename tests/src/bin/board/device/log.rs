//! The gauge's log: frames that only the image's symbols make readable.

use defmt_decoder::{DecodeError, Table};
use std::fs;
use std::path::Path;

/// Decodes the log, and checks that it tells of as many readings.
pub fn read(image: &Path, bytes: &[u8], readings: u32) -> Result<String, String> {
    let lines = decode(image, bytes)?;
    let begins = |what: &str| lines.iter().filter(|line| line.contains(what)).count();
    let told = begins("reading ");
    let enough = told >= readings as usize && begins("gauge ready") == 1 && begins("good-bye") == 1;
    let sample = |what: &str| {
        lines
            .iter()
            .find(|line| line.contains(what))
            .cloned()
            .unwrap_or_default()
    };
    let text = format!(
        "{} bytes, {} lines, {told} of them readings, refusals and faults\n{}\n{}\n{}",
        bytes.len(),
        lines.len(),
        sample(" nm +- "),
        sample(": none, "),
        sample(": fault, ")
    );
    if enough {
        Ok(text.trim_end().to_owned())
    } else {
        Err(text)
    }
}

fn decode(image: &Path, bytes: &[u8]) -> Result<Vec<String>, String> {
    let elf = fs::read(image).map_err(|error| format!("{}: {error}", image.display()))?;
    let table = Table::parse(&elf)
        .map_err(|error| format!("{}: {error}", image.display()))?
        .ok_or_else(|| format!("{}: holds no log strings", image.display()))?;
    let mut decoder = table.new_stream_decoder();
    decoder.received(bytes);
    let mut lines = Vec::new();
    loop {
        match decoder.decode() {
            Ok(frame) => lines.push(frame.display(false).to_string()),
            Err(DecodeError::UnexpectedEof) => return Ok(lines),
            Err(DecodeError::Malformed) => {
                return Err(format!("a frame of the log cannot be read after {} lines", lines.len()));
            }
        }
    }
}
