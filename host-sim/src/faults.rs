//! Faults on purpose: a line that damages bytes, a front end that is dead or late, a receiver that fails.

use crate::front_end::{Purpose, Random};
use embedded_io::{ErrorType, Read, ReadReady, Write};
use halfpulse::record::receiver::{Fired, PulseReceiver, Shot};
use halfpulse::{Decibels, Hertz};
use halfpulse_app::report::Fault;
use std::collections::VecDeque;

/// How a front end at the other end of the link behaves.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Default)]
pub enum Behaviour {
    /// As it should.
    #[default]
    Sound,
    /// It does not answer.
    Dead,
    /// It answers each request only when the next one has come.
    Late,
    /// It says that it fired, but the samples in the memory are not those.
    NoSamples,
    /// It answers twice.
    Doubled,
}

/// What happens to the bytes that are written to a line.
#[derive(Clone, Copy, Debug, PartialEq, Default)]
pub enum Damage {
    /// Nothing.
    #[default]
    None,
    /// Each byte is replaced by another one with this probability.
    Bytes(f64),
    /// Of each frame only so many bytes go out.
    Truncated(usize),
    /// Each frame is preceded by so many bytes that belong to none.
    Oversized(usize),
    /// The last byte before the delimiter, a part of the check sum, is another one.
    BrokenSum,
    /// A frame goes out only when the next one has been written, and after it.
    Reordered,
}

/// A line whose written bytes are damaged. It knows frames by their delimiters, and counts those it hit.
#[derive(Debug)]
pub struct FaultyLine<L> {
    line: L,
    /// What happens from the next frame on.
    pub damage: Damage,
    random: Random,
    frame: Vec<u8>,
    held: VecDeque<Vec<u8>>,
    /// Whether each frame that was written was hit.
    pub hits: Vec<bool>,
}

impl<L: Write> FaultyLine<L> {
    /// A line without damage yet; its random numbers depend on the seed.
    #[must_use]
    pub fn new(line: L, seed: u64) -> Self {
        Self {
            line,
            damage: Damage::None,
            random: Random::new(seed, Purpose::Variation, u64::MAX),
            frame: Vec::new(),
            held: VecDeque::new(),
            hits: Vec::new(),
        }
    }

    /// Sends a whole frame, damaged as it is said.
    fn send(&mut self) -> Result<(), L::Error> {
        let mut frame = std::mem::take(&mut self.frame);
        let sound = frame.clone();
        match self.damage {
            Damage::Bytes(probability) => {
                for byte in &mut frame {
                    if self.random.uniform() < probability {
                        let change = 1 + (self.random.uniform() * 255.0) as u8;
                        *byte ^= change;
                    }
                }
            }
            Damage::Truncated(length) => frame.truncate(length),
            Damage::Oversized(length) => {
                // Without a delimiter between, these bytes and the frame are one.
                frame.remove(0);
                frame = [vec![0x55; length], frame].concat();
            }
            Damage::BrokenSum => {
                let place = frame.len().saturating_sub(2);
                if let Some(byte) = frame.get_mut(place) {
                    // Never to zero, which would be a delimiter.
                    *byte = if *byte == 0x5a { 0xa5 } else { 0x5a };
                }
            }
            Damage::Reordered => {
                self.hits.push(false);
                self.held.push_front(frame);
                if self.held.len() < 2 {
                    return Ok(());
                }
                let all: Vec<u8> = self.held.drain(..).flatten().collect();
                return self.line.write_all(&all);
            }
            Damage::None => {
                // What was held back goes first.
                let late: Vec<u8> = self.held.drain(..).flatten().collect();
                self.line.write_all(&late)?;
            }
        }
        self.hits.push(frame != sound);
        self.line.write_all(&frame)
    }
}

impl<L: ErrorType> ErrorType for FaultyLine<L> {
    type Error = L::Error;
}

impl<L: Read> Read for FaultyLine<L> {
    fn read(&mut self, bytes: &mut [u8]) -> Result<usize, Self::Error> {
        self.line.read(bytes)
    }
}

impl<L: ReadReady> ReadReady for FaultyLine<L> {
    fn read_ready(&mut self) -> Result<bool, Self::Error> {
        self.line.read_ready()
    }
}

impl<L: Write> Write for FaultyLine<L> {
    fn write(&mut self, bytes: &[u8]) -> Result<usize, Self::Error> {
        for &byte in bytes {
            self.frame.push(byte);
            // The first zero opens the frame, the second closes it.
            if byte == 0 && self.frame.len() > 1 {
                self.send()?;
            }
        }
        Ok(bytes.len())
    }

    fn flush(&mut self) -> Result<(), Self::Error> {
        self.line.flush()
    }
}

/// What a receiver does wrong.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum ReceiverFault {
    /// It returns this error, with rubbish in the codes.
    Fails(Fault),
    /// It returns so many samples fewer than were asked for.
    Short(usize),
    /// Its gain is so many decibels off, and it says so.
    GainOff(f32),
    /// Its converter gives zeros.
    DeadConverter,
    /// One bit of its converter is always set.
    StuckBit(u32),
    /// Its clock runs at this multiple of the rate, and it says so.
    ClockOff(f32),
}

/// A receiver that does one thing wrong in some shots, and is what it wraps in all others.
#[derive(Clone, Debug)]
pub struct FaultyReceiver<R> {
    inner: R,
    /// What it does wrong.
    pub fault: Option<ReceiverFault>,
    /// How many shots from now on are wrong; counts down.
    pub shots: u32,
}

impl<R> FaultyReceiver<R> {
    /// Wraps a receiver; nothing is wrong yet.
    pub const fn new(inner: R) -> Self {
        Self {
            inner,
            fault: None,
            shots: 0,
        }
    }

    /// Does this wrong in the next `shots` shots.
    pub const fn plan(&mut self, fault: ReceiverFault, shots: u32) {
        self.fault = Some(fault);
        self.shots = shots;
    }
}

impl<R> PulseReceiver for FaultyReceiver<R>
where
    R: PulseReceiver,
    R::Error: Into<Fault>,
{
    type Error = Fault;

    fn fire(&mut self, shot: &Shot, codes: &mut [i16]) -> Result<Fired, Fault> {
        let fault = self.fault.filter(|_| self.shots > 0);
        self.shots = self.shots.saturating_sub(1);
        if let Some(ReceiverFault::Fails(fault)) = fault {
            codes.fill(i16::MAX);
            return Err(fault);
        }
        let mut fired = self.inner.fire(shot, codes).map_err(Into::into)?;
        match fault {
            Some(ReceiverFault::Short(missing)) => fired.samples = fired.samples.saturating_sub(missing),
            Some(ReceiverFault::GainOff(change)) => fired.gain = fired.gain + Decibels::new(change),
            Some(ReceiverFault::DeadConverter) => codes.fill(0),
            Some(ReceiverFault::StuckBit(bit)) => codes.iter_mut().for_each(|code| *code |= 1 << bit.min(14)),
            Some(ReceiverFault::ClockOff(factor)) => {
                fired.clock.rate = Hertz::new(fired.clock.rate.get() * factor);
            }
            _ => {}
        }
        Ok(fired)
    }
}
