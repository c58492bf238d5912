//! The file of a campaign's results: a provenance header, a line per run, a closing line.
//!
//! ```text
//! # halfpulse campaign results, version 1
//! # made by halfpulse 0.1.0
//! # campaign steel walls
//! # seed 7; 12 cells of 500 runs
//! # shard 1/1
//! #| version = 1
//! #| ..                              the whole campaign, scene and set-up included
//! # checksum fnv1a64:0123456789abcdef
//! run,cell,truth_mm,outcome,..
//! 0,0,3,reading,..
//! # complete: 6000 rows
//! ```
//!
//! Rows are only ever appended, in the order of their runs. A process that is killed leaves a file without its
//! closing line, which nothing here takes for a whole one: the same command goes on after the last whole row
//! ([`super::writer`]).

use super::file::Campaign;
use super::row::{COLUMNS, Row, quoted};
use super::runner::Shard;
use crate::input_error::InputError;
use std::fs::File;
use std::io::{BufRead, BufReader, Read};
use std::path::{Path, PathBuf};

/// First line of every file of results.
pub const MAGIC: &str = "# halfpulse campaign results, version 1";
const SHARD: &str = "# shard ";
const CAMPAIGN: &str = "#| ";
const COMPLETE: &str = "# complete: ";
/// Longest header: that of a campaign file and what it names.
const MOST_HEADER: usize = 1 << 23;

/// The header of a campaign's results, ending with the line of the columns.
#[must_use]
pub fn header(campaign: &Campaign, shard: Shard) -> String {
    let mut text = format!(
        "{MAGIC}\n# made by halfpulse {}\n# campaign {}\n# seed {}; {} cells of {} runs\n{SHARD}{shard}\n",
        env!("CARGO_PKG_VERSION"),
        campaign.name,
        campaign.seed,
        campaign.cells(),
        campaign.runs,
    );
    for line in campaign.canonical().lines() {
        text.push_str(CAMPAIGN);
        text.push_str(line);
        text.push('\n');
    }
    text.push_str(&format!("# checksum {}\n{COLUMNS}", campaign.checksum()));
    for column in campaign.columns() {
        text.push(',');
        text.push_str(&quoted(&column));
    }
    text.push('\n');
    text
}

/// The last line of so many rows.
#[must_use]
pub fn closing(rows: u64) -> String {
    format!("{COMPLETE}{rows} rows\n")
}

/// What a file of results holds beyond its header.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Extent {
    /// Whole rows.
    pub rows: u64,
    /// Is the closing line there?
    pub complete: bool,
    /// Bytes up to the last whole line.
    pub(super) bytes: u64,
}

impl Extent {
    /// An empty file.
    pub const NOTHING: Self = Self {
        rows: 0,
        complete: false,
        bytes: 0,
    };
}

/// Lines of a file, of which the last may lack its end.
struct Lines {
    path: PathBuf,
    file: BufReader<File>,
    /// Number of the line read last, from 1.
    number: u64,
    bytes: u64,
}

impl Lines {
    fn open(path: &Path) -> Result<Self, InputError> {
        InputError::check_file(path, u64::MAX)?;
        let file = File::open(path).map_err(|error| InputError::unreadable(path, &error))?;
        Ok(Self::of(path, file))
    }

    fn of(path: &Path, file: File) -> Self {
        Self {
            path: path.to_path_buf(),
            file: BufReader::new(file),
            number: 0,
            bytes: 0,
        }
    }

    /// The next line without its end; `None` at the end of the file, or where a line has no end.
    fn next(&mut self) -> Result<Option<String>, InputError> {
        let mut bytes = Vec::new();
        let mut limited = (&mut self.file).take(1 << 20);
        let read = limited.read_until(b'\n', &mut bytes);
        read.map_err(|error| InputError::unreadable(&self.path, &error))?;
        if bytes.pop() != Some(b'\n') {
            return Ok(None);
        }
        self.number += 1;
        self.bytes += bytes.len() as u64 + 1;
        String::from_utf8(bytes)
            .map(Some)
            .map_err(|_| self.fault("is not text", "bring back a sound copy"))
    }

    fn fault(&self, what: impl Into<String>, remedy: impl Into<String>) -> InputError {
        InputError::in_line(&self.path, self.number.max(1), what, remedy)
    }
}

/// A file of results that is read from its start to its end.
pub struct Reader {
    lines: Lines,
    header: String,
    shard: Shard,
    row: u64,
    done: Option<Extent>,
}

impl Reader {
    /// Opens a file and reads its header.
    ///
    /// # Errors
    /// Not a file of results, or only the beginning of one's header.
    pub fn open(path: &Path) -> Result<Self, InputError> {
        Self::of(path, Lines::open(path)?)
    }

    /// The same of a file that is open, from where it stands.
    ///
    /// # Errors
    /// As [`Reader::open`].
    pub fn of_file(path: &Path, file: File) -> Result<Self, InputError> {
        Self::of(path, Lines::of(path, file))
    }

    fn of(path: &Path, mut lines: Lines) -> Result<Self, InputError> {
        let mut header = String::new();
        let mut shard = None;
        loop {
            let Some(line) = lines.next()? else {
                let what = if header.is_empty() && lines.bytes == 0 {
                    "is no file of campaign results"
                } else {
                    "ends within its header"
                };
                return Err(InputError::in_file(
                    path,
                    what,
                    "run the campaign again with this output",
                ));
            };
            if lines.number == 1 && line != MAGIC {
                let what = "is no file of campaign results";
                return Err(InputError::in_file(
                    path,
                    what,
                    "name a file that halfpulse campaign -o has written",
                ));
            }
            if let Some(text) = line.strip_prefix(SHARD) {
                shard = Some(Shard::parse(text).map_err(|error| lines.fault(error, "bring back a sound copy"))?);
            }
            header.push_str(&line);
            header.push('\n');
            if header.len() > MOST_HEADER {
                return Err(lines.fault("the header has no end", "bring back a sound copy"));
            }
            if !line.starts_with('#') {
                break;
            }
        }
        let shard = shard.ok_or_else(|| lines.fault("the header names no shard", "bring back a sound copy"))?;
        Ok(Self {
            lines,
            header,
            shard,
            row: 0,
            done: None,
        })
    }

    /// The header.
    #[must_use]
    pub fn header(&self) -> &str {
        &self.header
    }

    /// Which share of the runs it holds.
    #[must_use]
    pub const fn shard(&self) -> Shard {
        self.shard
    }

    /// The campaign that stands in the header.
    ///
    /// # Errors
    /// It cannot be read.
    pub fn campaign(&self) -> Result<Campaign, InputError> {
        let text: Vec<&str> = self
            .header
            .lines()
            .filter_map(|line| line.strip_prefix(CAMPAIGN))
            .collect();
        Campaign::of_results(&self.lines.path, &text.join("\n"))
    }

    /// The next row with its line; `None` at the end.
    ///
    /// # Errors
    /// A line that is no row, or not the next one.
    pub fn next_row(&mut self) -> Result<Option<(String, Row)>, InputError> {
        if self.done.is_some() {
            return Ok(None);
        }
        let before = self.lines.bytes;
        let Some(line) = self.lines.next()? else {
            self.done = Some(Extent {
                rows: self.row,
                complete: false,
                bytes: before,
            });
            return Ok(None);
        };
        if line.starts_with('#') {
            if format!("{line}\n") != closing(self.row) {
                let what = format!("the closing line does not fit {} rows", self.row);
                return Err(self
                    .lines
                    .fault(what, "bring back a sound copy, or delete the file and run again"));
            }
            let complete = Extent {
                rows: self.row,
                complete: true,
                bytes: self.lines.bytes,
            };
            if self.lines.next()?.is_some() {
                return Err(self.lines.fault("something follows the closing line", "remove it"));
            }
            self.done = Some(complete);
            return Ok(None);
        }
        let expected = self.shard.run(self.row);
        match Row::parse(&line) {
            Some(row) if row.run == expected => {
                self.row += 1;
                Ok(Some((line, row)))
            }
            _ => Err(self.lines.fault(
                format!("is not the row of run {expected}"),
                "delete this line and all after it, then run the same command again",
            )),
        }
    }

    /// What the file holds, once all its rows have been read.
    #[must_use]
    pub const fn extent(&self) -> Option<Extent> {
        self.done
    }
}

/// In what two headers differ, shard included; `None` if in nothing.
#[must_use]
pub fn difference(found: &str, wanted: &str) -> Option<String> {
    let plain = |line: &str| line.trim_start_matches(['#', '|', ' ']).to_string();
    let mut lines = wanted.lines();
    for found in found.lines() {
        match lines.next() {
            Some(wanted) if wanted == found => {}
            Some(wanted) => {
                return Some(format!(
                    "belongs to another campaign: \"{}\" instead of \"{}\"",
                    plain(found),
                    plain(wanted)
                ));
            }
            None => return Some("belongs to another campaign".to_string()),
        }
    }
    lines.next().map(|_| "belongs to another campaign".to_string())
}

/// A header without its shard: what all shards of a campaign have in common.
#[must_use]
pub fn without_shard(header: &str) -> String {
    let lines = header.lines().filter(|line| !line.starts_with(SHARD));
    lines.flat_map(|line| [line, "\n"]).collect()
}
