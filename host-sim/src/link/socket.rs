//! A line over a Unix socket, which is what the emulator's serial port is connected to.

use super::take_front;
use embedded_io::{ErrorKind, ErrorType, Read, ReadReady, Write};
use std::collections::VecDeque;
use std::io::{Read as _, Write as _};
use std::os::unix::net::UnixStream;
use std::time::{Duration, Instant};

/// A line over a socket, such as the emulator's serial port.
#[derive(Debug)]
pub struct SocketLine {
    socket: UnixStream,
    read: VecDeque<u8>,
    closed: bool,
}

impl SocketLine {
    /// Takes a connected socket.
    ///
    /// # Errors
    /// The operating system's, when it is told not to wait.
    pub fn new(socket: UnixStream) -> std::io::Result<Self> {
        socket.set_nonblocking(true)?;
        Ok(Self {
            socket,
            read: VecDeque::new(),
            closed: false,
        })
    }
}

impl ErrorType for SocketLine {
    type Error = ErrorKind;
}

impl ReadReady for SocketLine {
    fn read_ready(&mut self) -> Result<bool, ErrorKind> {
        if self.read.is_empty() && !self.closed {
            let mut bytes = [0; 4096];
            match self.socket.read(&mut bytes) {
                Ok(0) => self.closed = true,
                Ok(count) => self.read.extend(&bytes[..count]),
                Err(error) if would_wait(&error) => {}
                Err(_) => return Err(ErrorKind::BrokenPipe),
            }
        }
        if self.read.is_empty() && self.closed {
            return Err(ErrorKind::BrokenPipe);
        }
        Ok(!self.read.is_empty())
    }
}

impl Read for SocketLine {
    fn read(&mut self, bytes: &mut [u8]) -> Result<usize, ErrorKind> {
        Ok(take_front(&mut self.read, bytes))
    }
}

impl Write for SocketLine {
    fn write(&mut self, bytes: &[u8]) -> Result<usize, ErrorKind> {
        // The other end takes its time; a second is far beyond it.
        let start = Instant::now();
        loop {
            match self.socket.write(bytes) {
                Ok(count) => return Ok(count),
                Err(error) if would_wait(&error) && start.elapsed() < Duration::from_secs(1) => {
                    std::thread::sleep(Duration::from_micros(50));
                }
                Err(_) => return Err(ErrorKind::BrokenPipe),
            }
        }
    }

    fn flush(&mut self) -> Result<(), ErrorKind> {
        Ok(())
    }
}

fn would_wait(error: &std::io::Error) -> bool {
    matches!(
        error.kind(),
        std::io::ErrorKind::WouldBlock | std::io::ErrorKind::Interrupted
    )
}
