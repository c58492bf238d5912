//! A pulser and receiver at the other end of the link: requests go over the line, samples arrive in a
//! memory that both ends see, as behind a converter's DMA.

use crate::link::{Done, Fire, FrontEndFault, LinkError, Message, SharedPort, crc_of_codes};
use crate::report::Fault;
use embedded_hal::delay::DelayNs;
use embedded_io::{Read, ReadReady, Write};
use halfpulse::record::receiver::{Fired, PulseReceiver, Shot};
use halfpulse::{AdcFormat, Decibels, Hertz, SampleClock, Seconds};

/// How often a wait looks for an answer, in microseconds.
const LOOK_EVERY_US: u32 = 20;

/// Where the other end puts the samples.
pub trait SampleMemory {
    /// Copies the newest samples to `codes`; what is beyond the memory's end stays as it is. They may
    /// be anything: the check sum in the answer decides.
    fn copy(&mut self, codes: &mut [i16]);
}

/// Why a shot came to nothing.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum RemoteFault {
    /// No answer in time.
    NoAnswer,
    /// The answer came, the samples did not, or are damaged.
    SamplesMissing,
    /// The other end did not fire.
    NotFired(FrontEndFault),
    /// The answer speaks of another number of samples, or of a converter that cannot be.
    WrongAnswer,
    /// The line does not work.
    Line(LinkError),
}

impl From<RemoteFault> for Fault {
    fn from(fault: RemoteFault) -> Self {
        match fault {
            RemoteFault::NoAnswer => Self::NoAnswer,
            RemoteFault::SamplesMissing => Self::SamplesMissing,
            RemoteFault::NotFired(fault) => Self::NotFired(fault),
            RemoteFault::WrongAnswer => Self::WrongCount,
            RemoteFault::Line(_) => Self::Line,
        }
    }
}

/// The front end at the other end of the link.
#[derive(Debug)]
pub struct RemoteReceiver<'p, L, M, D> {
    port: SharedPort<'p, L>,
    memory: M,
    delay: D,
    patience_us: u32,
    sequence: u16,
}

impl<'p, L, M, D> RemoteReceiver<'p, L, M, D> {
    /// A front end that is given `patience_us` microseconds to answer each request.
    pub const fn new(port: SharedPort<'p, L>, memory: M, delay: D, patience_us: u32) -> Self {
        Self {
            port,
            memory,
            delay,
            patience_us,
            sequence: 0,
        }
    }
}

impl<L, M, D> RemoteReceiver<'_, L, M, D>
where
    L: Read + ReadReady + Write,
    M: SampleMemory,
    D: DelayNs,
{
    /// Waits for the answer to request `sequence`; drops and counts everything else.
    fn answer(&mut self, sequence: u16) -> Result<Done, RemoteFault> {
        for _ in 0..=self.patience_us / LOOK_EVERY_US {
            match self.port.poll().map_err(RemoteFault::Line)? {
                Some(Message::Done(done)) if done.sequence == sequence => return Ok(done),
                Some(Message::NotFired(not)) if not.sequence == sequence => {
                    return Err(RemoteFault::NotFired(not.fault));
                }
                Some(_) => self.port.count_unexpected(),
                None => self.delay.delay_us(LOOK_EVERY_US),
            }
        }
        Err(RemoteFault::NoAnswer)
    }
}

impl<L, M, D> PulseReceiver for RemoteReceiver<'_, L, M, D>
where
    L: Read + ReadReady + Write,
    M: SampleMemory,
    D: DelayNs,
{
    type Error = RemoteFault;

    fn fire(&mut self, shot: &Shot, codes: &mut [i16]) -> Result<Fired, RemoteFault> {
        let samples = u16::try_from(codes.len()).map_err(|_| RemoteFault::NotFired(FrontEndFault::TooManySamples))?;
        self.sequence = self.sequence.wrapping_add(1);
        let request = Message::Fire(Fire {
            sequence: self.sequence,
            gain: shot.gain.get(),
            delay: shot.delay.get(),
            samples,
        });
        self.port.send(&request).map_err(RemoteFault::Line)?;
        let done = self.answer(self.sequence)?;
        if done.samples != samples || !(2..=16).contains(&done.bits) {
            return Err(RemoteFault::WrongAnswer);
        }
        self.memory.copy(codes);
        if crc_of_codes(codes) != done.crc {
            return Err(RemoteFault::SamplesMissing);
        }
        Ok(Fired {
            gain: Decibels::new(done.gain),
            samples: usize::from(done.samples),
            format: AdcFormat::signed(done.bits),
            clock: SampleClock {
                rate: Hertz::new(done.rate),
                first_sample: Seconds::new(done.first_sample),
            },
        })
    }
}
