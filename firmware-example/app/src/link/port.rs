//! One end of the link: sends messages, collects frames, counts what is not one.

use crate::link::frame::{FRAME_CAPACITY, FrameError, read_frame, write_frame};
use crate::link::message::Message;
use core::cell::RefCell;
use embedded_io::{Read, ReadReady, Write};

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

#[cfg(test)]
mod tests {
    use super::*;
    use crate::link::Take;
    use proptest::prelude::*;
    use std::collections::VecDeque;

    /// A line that gives what was put into it, and keeps what is written.
    #[derive(Default)]
    struct Line(VecDeque<u8>);

    impl embedded_io::ErrorType for Line {
        type Error = core::convert::Infallible;
    }
    impl ReadReady for Line {
        fn read_ready(&mut self) -> Result<bool, Self::Error> {
            Ok(!self.0.is_empty())
        }
    }
    impl Read for Line {
        fn read(&mut self, bytes: &mut [u8]) -> Result<usize, Self::Error> {
            match (bytes.first_mut(), self.0.pop_front()) {
                (Some(place), Some(byte)) => {
                    *place = byte;
                    Ok(1)
                }
                _ => Ok(0),
            }
        }
    }
    impl Write for Line {
        fn write(&mut self, bytes: &[u8]) -> Result<usize, Self::Error> {
            self.0.extend(bytes);
            Ok(bytes.len())
        }
        fn flush(&mut self) -> Result<(), Self::Error> {
            Ok(())
        }
    }

    fn take(number: u32) -> Message {
        Message::Take(Take {
            number,
            shots: 3,
            samples: 4096,
            gain: crate::link::GainChoice::Fixed(-2.5),
        })
    }

    proptest! {
        /// Whatever came before, whole frames behind it are read, each of them and once.
        #[test]
        fn no_rubbish_costs_a_frame_behind_it(
            pieces in proptest::collection::vec(proptest::collection::vec(any::<u8>(), 0..400), 1..6)
        ) {
            let mut port = Port::new(Line::default());
            for (number, rubbish) in pieces.iter().enumerate() {
                port.line().0.extend(rubbish);
                port.send(&take(number as u32)).unwrap();
            }
            let mut read = std::vec::Vec::new();
            while let Some(message) = port.poll().unwrap() {
                read.push(message);
            }
            let sent: std::vec::Vec<_> = (0..pieces.len() as u32).map(take).collect();
            prop_assert_eq!(read, sent);
        }
    }

    #[test]
    fn frames_that_are_none_are_counted_by_kind() {
        let mut port = Port::new(Line::default());
        // Broken, then too long, then a right sum over a message that does not exist, then nothing at all.
        port.line().0.extend([0, 3, 1, 2, 0]);
        port.line().0.extend([7; FRAME_CAPACITY + 1]);
        port.line().0.push_back(0);
        let sum = crate::link::crc_of_bytes(&[200]).to_le_bytes();
        port.line().0.extend([6, 200]);
        port.line().0.extend(sum);
        port.line().0.extend([0, 0, 0]);
        assert_eq!(port.poll(), Ok(None));
        let counts = port.counts();
        assert_eq!(
            (counts.broken, counts.oversized, counts.unknown, counts.received),
            (1, 1, 1, 0)
        );
    }
}
