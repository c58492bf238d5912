//! What is wrong with a file or an argument: the place, the fault and the remedy, in one line.

use std::fmt;
use std::path::{Path, PathBuf};

/// A fault in something that was given: a file, a line of it, an argument.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct InputError {
    file: Option<PathBuf>,
    line: Option<u64>,
    what: String,
    remedy: String,
}

impl InputError {
    /// A fault of a whole file.
    pub fn in_file(file: &Path, what: impl Into<String>, remedy: impl Into<String>) -> Self {
        Self {
            file: Some(file.to_path_buf()),
            line: None,
            what: what.into(),
            remedy: remedy.into(),
        }
    }

    /// A fault of one line, counted from 1.
    pub fn in_line(file: &Path, line: u64, what: impl Into<String>, remedy: impl Into<String>) -> Self {
        Self {
            line: Some(line),
            ..Self::in_file(file, what, remedy)
        }
    }

    /// A fault of an argument of the command.
    pub fn in_argument(what: impl Into<String>, remedy: impl Into<String>) -> Self {
        Self {
            file: None,
            line: None,
            what: what.into(),
            remedy: remedy.into(),
        }
    }

    /// A file that cannot be opened or read.
    pub fn unreadable(file: &Path, error: &std::io::Error) -> Self {
        let (what, remedy) = match error.kind() {
            std::io::ErrorKind::NotFound => (
                "there is no such file".to_string(),
                "check its name and folder".to_string(),
            ),
            std::io::ErrorKind::PermissionDenied => {
                ("may not be read".to_string(), "change its permissions".to_string())
            }
            std::io::ErrorKind::InvalidData => (
                "is not text in UTF-8".to_string(),
                "give a text file, or convert it".to_string(),
            ),
            std::io::ErrorKind::IsADirectory => ("is a folder".to_string(), "name a file in it".to_string()),
            _ => (
                format!("cannot be read ({error})"),
                "check the file and its disk".to_string(),
            ),
        };
        Self::in_file(file, what, remedy)
    }

    /// What is known about a file before it is opened: there, an ordinary file, not larger than `most_bytes`.
    ///
    /// # Errors
    /// It is not so. (Devices and pipes may never end.)
    pub fn check_file(file: &Path, most_bytes: u64) -> Result<(), Self> {
        let about = std::fs::metadata(file).map_err(|error| Self::unreadable(file, &error))?;
        if about.is_dir() {
            return Err(Self::in_file(file, "is a folder", "name a file in it"));
        }
        if !about.is_file() {
            return Err(Self::in_file(file, "is no ordinary file", "copy its content to a file"));
        }
        if about.len() > most_bytes {
            return Err(Self::in_file(
                file,
                format!("is larger than {most_bytes} bytes"),
                "check that it is the right file, or split it",
            ));
        }
        Ok(())
    }

    /// A file that cannot be written.
    pub fn unwritable(file: &Path, error: &std::io::Error) -> Self {
        let remedy = match error.kind() {
            std::io::ErrorKind::NotFound => "make its folder first, or choose another name",
            std::io::ErrorKind::PermissionDenied => "choose a folder that you may write to",
            _ => "check the folder and the space on its disk",
        };
        Self::in_file(file, format!("cannot be written ({error})"), remedy)
    }

    /// The file, if it is one's fault.
    #[must_use]
    pub fn file(&self) -> Option<&Path> {
        self.file.as_deref()
    }

    /// What is wrong.
    #[must_use]
    pub fn what(&self) -> &str {
        &self.what
    }

    /// What to do about it.
    #[must_use]
    pub fn remedy(&self) -> &str {
        &self.remedy
    }

    /// The line, from 1, if it is known.
    #[must_use]
    pub const fn line(&self) -> Option<u64> {
        self.line
    }
}

/// A file name or a message must not break the one line: control characters become spaces.
fn one_line(text: &str) -> String {
    text.chars().map(|c| if c.is_control() { ' ' } else { c }).collect()
}

impl fmt::Display for InputError {
    /// `FILE:LINE: what; remedy`, always one line.
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        if let Some(file) = &self.file {
            write!(f, "{}", one_line(&file.display().to_string()))?;
            if let Some(line) = self.line {
                write!(f, ":{line}")?;
            }
            f.write_str(": ")?;
        }
        write!(f, "{}; {}", one_line(&self.what), one_line(&self.remedy))
    }
}

impl std::error::Error for InputError {}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn prints_place_fault_and_remedy_in_one_line() {
        let error = InputError::in_line(Path::new("a\nb.toml"), 3, "broken\nin two", "mend it");
        assert_eq!(error.to_string(), "a b.toml:3: broken in two; mend it");
        let error = InputError::in_argument("no block", "give one");
        assert_eq!(error.to_string(), "no block; give one");
    }
}
