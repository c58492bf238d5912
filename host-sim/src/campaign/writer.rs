//! Writes a campaign's results, or goes on with those of a process that has ended.
//!
//! One process at a time: the file is locked while it is open. The system lifts the lock when the process
//! ends, however it ends, so that a kill leaves nothing locked.

use super::file::Campaign;
use super::results::{Extent, Reader, closing, difference, header};
use super::row::Row;
use super::runner::Shard;
use crate::input_error::InputError;
use crate::output::{self, Lock};
use std::fs::{File, OpenOptions};
use std::io::{ErrorKind, Read, Seek, SeekFrom, Write};
use std::path::{Path, PathBuf};

/// Rows are handed over to the system in pieces of about this size.
const PIECE: usize = 1 << 16;

/// A file of results that grows.
#[derive(Debug)]
pub struct Writer {
    path: PathBuf,
    file: File,
    lock: Lock,
    /// What the system does not have yet.
    pending: Vec<u8>,
    /// Bytes that the system has.
    length: u64,
    /// Rows that have been appended.
    rows: u64,
    complete: bool,
}

impl Writer {
    /// Starts a file, or goes on with one of the same campaign and shard; `sink` gets the rows that are
    /// there.
    ///
    /// # Errors
    /// A file that another process writes, results of another campaign, a damaged file, or one that cannot be
    /// written.
    pub fn open(
        path: &Path,
        campaign: &Campaign,
        shard: Shard,
        sink: &mut dyn FnMut(Row) -> Result<(), InputError>,
    ) -> Result<Self, InputError> {
        let header = header(campaign, shard);
        let unwritable = |error: std::io::Error| InputError::unwritable(path, &error);
        if std::fs::metadata(path).is_ok_and(|about| !about.is_file()) {
            return Err(InputError::in_file(
                path,
                "is no ordinary file",
                "choose another name for the results",
            ));
        }
        let mut file = OpenOptions::new()
            .read(true)
            .write(true)
            .create(true)
            .truncate(false)
            .open(path)
            .map_err(unwritable)?;
        let lock = output::lock(path, &file)?;
        let kept = if begins(path, &mut file, &header)? {
            Extent::NOTHING
        } else {
            file.seek(SeekFrom::Start(0)).map_err(unwritable)?;
            let reader = Reader::of_file(path, file.try_clone().map_err(unwritable)?)?;
            kept(path, reader, &header, shard.rows(campaign.total()), sink)?
        };
        file.set_len(kept.bytes).map_err(unwritable)?;
        file.seek(SeekFrom::End(0)).map_err(unwritable)?;
        let mut writer = Self {
            path: path.to_path_buf(),
            file,
            lock,
            pending: Vec::with_capacity(PIECE + PIECE / 8),
            length: kept.bytes,
            rows: kept.rows,
            complete: kept.complete,
        };
        if kept.bytes == 0 {
            writer.put(&header)?;
            writer.flush()?;
        }
        Ok(writer)
    }

    /// Rows that have been appended, those of an earlier process included.
    #[must_use]
    pub const fn rows(&self) -> u64 {
        self.rows
    }

    /// Is there nothing left to do?
    #[must_use]
    pub const fn is_complete(&self) -> bool {
        self.complete
    }

    /// Whether the file's disk knows locks.
    #[must_use]
    pub const fn lock(&self) -> Lock {
        self.lock
    }

    /// Appends a row.
    ///
    /// # Errors
    /// It cannot be written.
    pub fn append(&mut self, row: &Row) -> Result<(), InputError> {
        let mut line = row.line();
        line.push('\n');
        self.rows += 1;
        self.put(&line)
    }

    /// Hands over to the system what has been appended.
    ///
    /// # Errors
    /// It cannot be written, or another process has written to the file.
    pub fn flush(&mut self) -> Result<(), InputError> {
        // Where locks are unknown this is what keeps rows of two processes from being taken for those of one.
        let found = self.file.metadata().map_err(|error| self.unwritable(&error))?.len();
        if found != self.length {
            return Err(InputError::in_file(
                &self.path,
                format!(
                    "another process has written to it: {found} bytes instead of {}",
                    self.length
                ),
                "delete it and run again, with an output of its own for each process",
            ));
        }
        let mut done = 0;
        let result = loop {
            match self.file.write(self.pending.get(done..).unwrap_or_default()) {
                Ok(0) if done == self.pending.len() => break Ok(()),
                Ok(0) => break Err(std::io::Error::from(ErrorKind::WriteZero)),
                Ok(written) => done += written,
                Err(error) if error.kind() == ErrorKind::Interrupted => {}
                Err(error) => break Err(error),
            }
        };
        self.length += done as u64;
        self.pending.drain(..done);
        result.map_err(|error| self.unwritable(&error))
    }

    /// Appends the closing line and waits until all is on the disk.
    ///
    /// # Errors
    /// It cannot be written.
    pub fn complete(&mut self) -> Result<(), InputError> {
        if !self.complete {
            self.put(&closing(self.rows))?;
            self.flush()?;
            self.complete = true;
        }
        let result = self.file.sync_all();
        result.map_err(|error| self.unwritable(&error))
    }

    fn put(&mut self, text: &str) -> Result<(), InputError> {
        self.pending.extend_from_slice(text.as_bytes());
        if self.pending.len() >= PIECE {
            return self.flush();
        }
        Ok(())
    }

    fn unwritable(&self, error: &std::io::Error) -> InputError {
        InputError::in_file(
            &self.path,
            format!("cannot be written ({error})"),
            "make room on its disk, then run the same command again: it goes on where it stopped",
        )
    }
}

impl Drop for Writer {
    fn drop(&mut self) {
        // Closing would do, were it not for a process that is being started just now and still holds a copy.
        let _ = self.file.unlock();
    }
}

/// What can be kept of a file that is there; its rows go to `sink`.
fn kept(
    path: &Path,
    mut reader: Reader,
    header: &str,
    wanted: u64,
    sink: &mut dyn FnMut(Row) -> Result<(), InputError>,
) -> Result<Extent, InputError> {
    let other = |what: String| InputError::in_file(path, what, "choose another output, or delete this file");
    if let Some(what) = difference(reader.header(), header) {
        return Err(other(what));
    }
    while let Some((_, row)) = reader.next_row()? {
        sink(row)?;
    }
    let kept = reader.extent().unwrap_or(Extent::NOTHING);
    if kept.rows > wanted || (kept.complete && kept.rows != wanted) {
        return Err(other(format!("holds {} rows, the campaign has {wanted}", kept.rows)));
    }
    Ok(kept)
}

/// Is a file nothing but the beginning of this header? A process was killed very early then.
fn begins(path: &Path, file: &mut File, header: &str) -> Result<bool, InputError> {
    let mut start = Vec::new();
    file.take(header.len() as u64)
        .read_to_end(&mut start)
        .map_err(|error| InputError::unreadable(path, &error))?;
    Ok(start.len() < header.len() && header.as_bytes().starts_with(&start))
}
