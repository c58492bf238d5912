//! Memory shared with the emulator.

use crate::link::SampleStore;
use std::fs::File;
use std::os::unix::fs::FileExt;
use std::path::Path;

/// A file that the emulator maps into the board's memory.
#[derive(Debug)]
pub struct MappedFile(File);

impl MappedFile {
    /// Makes the file, full of zeros.
    ///
    /// # Errors
    /// The operating system's; also if there is such a file already: two runs must not share one.
    pub fn create(path: &Path, bytes: u64) -> std::io::Result<Self> {
        let file = File::options().read(true).write(true).create_new(true).open(path)?;
        file.set_len(bytes)?;
        Ok(Self(file))
    }
}

impl SampleStore for MappedFile {
    fn store(&mut self, codes: &[i16]) -> std::io::Result<()> {
        let bytes: Vec<u8> = codes.iter().flat_map(|code| code.to_le_bytes()).collect();
        self.0.write_all_at(&bytes, 0)
    }
}
