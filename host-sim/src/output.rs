//! Files that are written: whole or not at all, and by one process at a time.

use crate::input_error::InputError;
use std::fs::{File, OpenOptions, TryLockError};
use std::io::{BufWriter, ErrorKind, Write};
use std::path::{Path, PathBuf};

/// Whether a file could be locked.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Lock {
    /// No other process that asks gets the file before this one lets it go, or ends.
    Held,
    /// The file's disk knows no locks, as some network disks do not.
    Unknown,
}

/// Locks a file for this process, until the file is closed.
///
/// # Errors
/// Another process holds it.
pub fn lock(path: &Path, file: &File) -> Result<Lock, InputError> {
    match file.try_lock() {
        Ok(()) => Ok(Lock::Held),
        Err(TryLockError::WouldBlock) => Err(InputError::in_file(
            path,
            "is being written by another process",
            "wait until that ends, or choose another output",
        )),
        Err(TryLockError::Error(error)) if error.kind() == ErrorKind::Unsupported => Ok(Lock::Unknown),
        Err(TryLockError::Error(error)) => Err(InputError::in_file(
            path,
            format!("cannot be locked ({error})"),
            "choose an output on another disk",
        )),
    }
}

/// A file under another name, `NAME.part`, until it is whole: what bears the name is never a part.
#[derive(Debug)]
pub struct Unfinished {
    /// What errors name.
    named: PathBuf,
    target: PathBuf,
    /// `None`: a device, which has to be written as it is.
    part: Option<PathBuf>,
    file: BufWriter<File>,
}

impl Unfinished {
    /// Begins a file; one of the same name is replaced once the new one is whole.
    ///
    /// # Errors
    /// It cannot be written, or another process writes it.
    pub fn begin(named: &Path) -> Result<Self, InputError> {
        let unwritable = |error: std::io::Error| InputError::unwritable(named, &error);
        // The name of another file stays one: what it stands for is written.
        let target = match std::fs::symlink_metadata(named) {
            Ok(about) if about.is_symlink() => std::fs::canonicalize(named).unwrap_or_else(|_| named.to_path_buf()),
            _ => named.to_path_buf(),
        };
        let about = std::fs::metadata(&target);
        if about.as_ref().is_ok_and(std::fs::Metadata::is_dir) {
            return Err(InputError::in_file(named, "is a folder", "name a file in it"));
        }
        if about.is_ok_and(|about| !about.is_file()) {
            let file = OpenOptions::new().write(true).open(&target).map_err(unwritable)?;
            return Ok(Self {
                named: named.to_path_buf(),
                target,
                part: None,
                file: BufWriter::new(file),
            });
        }
        let mut name = target.file_name().unwrap_or_default().to_os_string();
        name.push(".part");
        let part = target.with_file_name(name);
        let file = OpenOptions::new()
            .write(true)
            .create(true)
            .truncate(false)
            .open(&part)
            .map_err(unwritable)?;
        lock(&part, &file)?;
        // What a killed process has left is of no use.
        file.set_len(0).map_err(unwritable)?;
        Ok(Self {
            named: named.to_path_buf(),
            target,
            part: Some(part),
            file: BufWriter::with_capacity(1 << 16, file),
        })
    }

    /// Appends.
    ///
    /// # Errors
    /// It cannot be written.
    pub fn put(&mut self, bytes: &[u8]) -> Result<(), InputError> {
        let result = self.file.write_all(bytes);
        result.map_err(|error| InputError::unwritable(&self.named, &error))
    }

    /// Gives the file its name, once all of it is on the disk.
    ///
    /// # Errors
    /// It cannot be written.
    pub fn finish(mut self) -> Result<(), InputError> {
        let result = self.file.flush().and_then(|()| match &self.part {
            None => Ok(()),
            Some(part) => {
                self.file.get_ref().sync_all()?;
                std::fs::rename(part, &self.target)
            }
        });
        if result.is_ok() {
            self.part = None;
        }
        result.map_err(|error| InputError::unwritable(&self.named, &error))
    }
}

impl Write for Unfinished {
    fn write(&mut self, bytes: &[u8]) -> std::io::Result<usize> {
        self.file.write(bytes)
    }

    fn flush(&mut self) -> std::io::Result<()> {
        self.file.flush()
    }
}

impl Drop for Unfinished {
    fn drop(&mut self) {
        if let Some(part) = &self.part {
            // Half a file is of no use; if even this fails, its name tells what it is.
            let _ = std::fs::remove_file(part);
        }
        // Closing would do, were it not for a process that is being started just now and still holds a copy.
        let _ = self.file.get_ref().unlock();
    }
}

/// Writes a whole file.
///
/// # Errors
/// It cannot be written, or another process writes it; a file of that name is as it was then.
pub fn write(path: &Path, bytes: &[u8]) -> Result<(), InputError> {
    let mut file = Unfinished::begin(path)?;
    file.put(bytes)?;
    file.finish()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_file_has_its_name_only_when_it_is_whole() {
        let folder = tempfile::tempdir().unwrap();
        let path = folder.path().join("a.csv");
        std::fs::write(&path, "old").unwrap();
        let mut file = Unfinished::begin(&path).unwrap();
        file.put(b"new, ").unwrap();
        assert_eq!(std::fs::read_to_string(&path).unwrap(), "old");
        let error = Unfinished::begin(&path).unwrap_err().to_string();
        assert!(
            error.contains("a.csv.part: is being written by another process"),
            "{error}"
        );
        file.put(b"all of it").unwrap();
        file.finish().unwrap();
        assert_eq!(std::fs::read_to_string(&path).unwrap(), "new, all of it");
        // What is given up leaves nothing, and what a kill has left is in nobody's way.
        drop(Unfinished::begin(&path).unwrap());
        std::fs::write(folder.path().join("a.csv.part"), "left behind by a killed process").unwrap();
        write(&path, b"x").unwrap();
        assert_eq!(std::fs::read_to_string(&path).unwrap(), "x");
        assert_eq!(std::fs::read_dir(folder.path()).unwrap().count(), 1);
    }

    #[cfg(target_os = "linux")]
    #[test]
    fn a_full_disk_and_a_folder_are_errors() {
        let error = write(Path::new("/dev/full"), b"x").unwrap_err().to_string();
        assert!(error.contains("/dev/full: cannot be written (No space left"), "{error}");
        assert!(std::fs::metadata("/dev/full").is_ok_and(|about| !about.is_file()));
        let folder = tempfile::tempdir().unwrap();
        assert!(write(folder.path(), b"x").unwrap_err().to_string().contains("folder"));
    }
}
