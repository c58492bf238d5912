//! One end of the link: sends messages, collects frames, counts what is not one.

use crate::link::frame::{FRAME_CAPACITY, FrameError, read_frame, write_frame};
use crate::link::message::Message;
use core::cell::RefCell;
use embedded_hal::delay::DelayNs;
use embedded_io::{Read, ReadReady, Write};

/// How often a wait looks for new bytes, in microseconds.
pub const LOOK_EVERY_US: u32 = 20;

/// The link does not work at all.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum LinkError {
    /// The line takes or gives no bytes.
    Line,
    /// The message is longer than any message may be.
    TooLong,
    /// Somebody else holds the port. Cannot happen between one receiver and one application.
    Busy,
}

/// What came in, counted since the start. A count stops at its largest value.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Default)]
pub struct Counts {
    /// Frames that were messages.
    pub received: u32,
    /// Frames with a wrong check sum, cut short or damaged.
    pub broken: u32,
    /// Frames longer than any message.
    pub oversized: u32,
    /// Frames with a right check sum that are no message of this protocol.
    pub unknown: u32,
    /// Messages that nobody waited for: late, doubled, out of order, or before the introduction.
    pub unexpected: u32,
}

/// One end of the link.
#[derive(Debug)]
pub struct Port<L> {
    line: L,
    frame: [u8; FRAME_CAPACITY],
    filled: usize,
    counts: Counts,
}

impl<L: Read + ReadReady + Write> Port<L> {
    /// An end on this line.
    pub const fn new(line: L) -> Self {
        Self {
            line,
            frame: [0; FRAME_CAPACITY],
            filled: 0,
            counts: Counts {
                received: 0,
                broken: 0,
                oversized: 0,
                unknown: 0,
                unexpected: 0,
            },
        }
    }

    /// What came in so far.
    pub const fn counts(&self) -> Counts {
        self.counts
    }

    /// The line, to look at it or to change it.
    pub const fn line(&mut self) -> &mut L {
        &mut self.line
    }

    /// Sends one message.
    ///
    /// # Errors
    /// [`LinkError::Line`] or [`LinkError::TooLong`].
    pub fn send(&mut self, message: &Message) -> Result<(), LinkError> {
        match write_frame(message, &mut self.line) {
            Ok(Ok(())) => Ok(()),
            Ok(Err(_)) => Err(LinkError::TooLong),
            Err(_) => Err(LinkError::Line),
        }
    }

    /// Takes the bytes that are there, up to the end of the next message; `None` if there is none yet.
    /// What is not a message is dropped and counted on the way. Never waits.
    ///
    /// # Errors
    /// [`LinkError::Line`].
    pub fn poll(&mut self) -> Result<Option<Message>, LinkError> {
        while self.line.read_ready().map_err(|_| LinkError::Line)? {
            let mut byte = [0u8];
            match self.line.read(&mut byte) {
                Ok(1) => {}
                // A line that has ended is ready for ever, and empty.
                Ok(_) => return Ok(None),
                Err(_) => return Err(LinkError::Line),
            }
            let [byte] = byte;
            if byte != 0 {
                if let Some(place) = self.frame.get_mut(self.filled) {
                    *place = byte;
                }
                // One more than fits marks the frame as too long.
                self.filled = if self.filled < FRAME_CAPACITY {
                    self.filled + 1
                } else {
                    FRAME_CAPACITY + 1
                };
                continue;
            }
            if let Some(message) = self.end_of_frame() {
                return Ok(Some(message));
            }
        }
        Ok(None)
    }

    /// Waits for a message, for `patience_us` at most.
    ///
    /// # Errors
    /// [`LinkError::Line`].
    pub fn wait<D: DelayNs>(&mut self, delay: &mut D, patience_us: u32) -> Result<Option<Message>, LinkError> {
        for _ in 0..=patience_us / LOOK_EVERY_US {
            if let Some(message) = self.poll()? {
                return Ok(Some(message));
            }
            delay.delay_us(LOOK_EVERY_US);
        }
        Ok(None)
    }

    fn end_of_frame(&mut self) -> Option<Message> {
        let filled = core::mem::replace(&mut self.filled, 0);
        let counts = &mut self.counts;
        let Some(frame) = self.frame.get_mut(..filled) else {
            counts.oversized = counts.oversized.saturating_add(1);
            return None;
        };
        // Nothing between two delimiters is no frame: each frame brings both.
        if frame.is_empty() {
            return None;
        }
        let count = match read_frame(frame) {
            Ok(message) => {
                counts.received = counts.received.saturating_add(1);
                return Some(message);
            }
            Err(FrameError::Broken) => &mut counts.broken,
            Err(FrameError::Unknown) => &mut counts.unknown,
        };
        *count = count.saturating_add(1);
        None
    }
}

/// A port for more than one: a front end at the other end of the link shares it with the application.
#[derive(Debug)]
pub struct SharedPort<'p, L>(&'p RefCell<Port<L>>);

impl<L> Clone for SharedPort<'_, L> {
    fn clone(&self) -> Self {
        *self
    }
}

impl<L> Copy for SharedPort<'_, L> {}

impl<'p, L: Read + ReadReady + Write> SharedPort<'p, L> {
    /// Shares a port.
    pub const fn new(port: &'p RefCell<Port<L>>) -> Self {
        Self(port)
    }

    /// See [`Port::send`].
    ///
    /// # Errors
    /// As there.
    pub fn send(&self, message: &Message) -> Result<(), LinkError> {
        self.0.try_borrow_mut().map_err(|_| LinkError::Busy)?.send(message)
    }

    /// See [`Port::poll`].
    ///
    /// # Errors
    /// As there.
    pub fn poll(&self) -> Result<Option<Message>, LinkError> {
        self.0.try_borrow_mut().map_err(|_| LinkError::Busy)?.poll()
    }

    /// Counts a message that came when nobody waited for it, and was dropped.
    pub fn count_unexpected(&self) {
        if let Ok(mut port) = self.0.try_borrow_mut() {
            port.counts.unexpected = port.counts.unexpected.saturating_add(1);
        }
    }

    /// See [`Port::counts`]; all zero while somebody else holds the port.
    pub fn counts(&self) -> Counts {
        self.0
            .try_borrow()
            .map_or_else(|_| Counts::default(), |port| port.counts())
    }
}
