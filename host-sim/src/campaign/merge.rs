//! The shards of a campaign as one file, the same to the byte as if one machine had run all of it.

use super::file::Campaign;
use super::results::{self, Reader, difference, without_shard};
use super::row::Row;
use super::runner::Shard;
use crate::input_error::InputError;
use crate::output::Unfinished;
use std::path::{Path, PathBuf};

/// Merges whole shards, named in any order, into a file; every row goes to `sink` in the order of the runs.
///
/// # Errors
/// Files of different campaigns or versions, a shard that is missing, there twice or not complete, an output
/// that exists.
pub fn merge(inputs: &[PathBuf], output: &Path, sink: &mut dyn FnMut(&Row)) -> Result<Campaign, InputError> {
    let mut readers: Vec<(PathBuf, Reader)> = Vec::with_capacity(inputs.len());
    for path in inputs {
        let reader = Reader::open(path)?;
        if let Some((first_path, first)) = readers.first() {
            let common = without_shard(first.header());
            if let Some(what) = difference(&without_shard(reader.header()), &common) {
                let remedy = format!("merge it with its own shards, not with {}", first_path.display());
                return Err(InputError::in_file(path, what, remedy));
            }
        }
        readers.push((path.clone(), reader));
    }
    readers.sort_by_key(|(_, reader)| reader.shard().index);
    let Some((first_path, first)) = readers.first() else {
        return Err(InputError::in_argument(
            "no file to merge",
            "name all shards of a campaign",
        ));
    };
    let count = first.shard().count;
    for (number, (path, reader)) in readers.iter().enumerate() {
        let shard = reader.shard();
        if shard.count != count {
            let what = format!("is shard {shard}, {} is shard {}", first_path.display(), first.shard());
            return Err(InputError::in_file(path, what, "merge shards of one division"));
        }
        if number > 0
            && readers
                .get(number - 1)
                .is_some_and(|(_, before)| before.shard() == shard)
        {
            return Err(InputError::in_file(
                path,
                format!("shard {shard} is there twice"),
                "name each shard once",
            ));
        }
    }
    if readers.len() as u64 != count {
        let there = |index: u64| readers.iter().any(|(_, reader)| reader.shard().index == index);
        let missing: Vec<String> = (0..count)
            .filter(|index| !there(*index))
            .take(8)
            .map(|index| Shard { index, count }.to_string())
            .collect();
        let what = format!("{} of {count} shards: missing {}", readers.len(), missing.join(", "));
        return Err(InputError::in_argument(what, "run these too, then merge all"));
    }
    let campaign = first.campaign()?;
    let header = results::header(&campaign, Shard::WHOLE);
    if without_shard(&header) != without_shard(first.header()) {
        let what = "its header does not fit the campaign in it";
        return Err(InputError::in_file(
            first_path,
            what,
            "merge with the version of halfpulse that has written it",
        ));
    }
    write(&campaign, readers, &header, output, sink)?;
    Ok(campaign)
}

/// Into a file of another name first: what bears the output's name is whole.
fn write(
    campaign: &Campaign,
    mut readers: Vec<(PathBuf, Reader)>,
    header: &str,
    output: &Path,
    sink: &mut dyn FnMut(&Row),
) -> Result<(), InputError> {
    let there = || {
        if output.exists() {
            let remedy = "choose another name, or delete it";
            return Err(InputError::in_file(output, "is there already", remedy));
        }
        Ok(())
    };
    there()?;
    let mut file = Unfinished::begin(output)?;
    // Another merge may have ended since.
    there()?;
    file.put(header.as_bytes())?;
    let total = campaign.total();
    let count = readers.len() as u64;
    for run in 0..total {
        let Some((path, reader)) = readers.get_mut((run % count) as usize) else {
            break;
        };
        match reader.next_row()? {
            Some((mut line, row)) => {
                sink(&row);
                line.push('\n');
                file.put(line.as_bytes())?;
            }
            None => return Err(incomplete(path, reader)),
        }
    }
    for (path, reader) in &mut readers {
        if reader.next_row()?.is_some() || !reader.extent().is_some_and(|extent| extent.complete) {
            return Err(incomplete(path, reader));
        }
    }
    file.put(results::closing(total).as_bytes())?;
    file.finish()
}

fn incomplete(path: &Path, reader: &Reader) -> InputError {
    let rows = reader.extent().map_or(0, |extent| extent.rows);
    InputError::in_file(
        path,
        format!("is not complete: {rows} rows and no closing line"),
        format!("run shard {} again: it goes on where it stopped", reader.shard()),
    )
}
