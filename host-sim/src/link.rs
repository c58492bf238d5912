//! The host's end of the link: lines for the shared code to run on, and a conversation with a gauge.
//!
//! Frames and messages are [`halfpulse_app::link`]'s, the same code as on the board.

#[cfg(unix)]
mod socket;

use crate::faults::Behaviour;
use embedded_io::{ErrorType, Read, ReadReady, Write};
use halfpulse::echo::pulse::PulseQuality;
use halfpulse::record::receiver::{Fired, PulseReceiver, Shot};
use halfpulse::{Decibels, Seconds};
use halfpulse_app::link::{
    Counts, Done, Fire, FrontEndFault, Hello, LinkError, LinkReport, Message, NotFired, PART_SAMPLES, PROTOCOL,
    PULSE_INCOMPLETE, Port, PulsePart, Status, Take, TakePulse, crc_of_codes, crc_of_samples,
};
use std::cell::RefCell;
use std::collections::VecDeque;
use std::fmt;
use std::rc::Rc;
use std::time::{Duration, Instant};

#[cfg(unix)]
pub use socket::SocketLine;

/// Bytes under way in one direction.
type Bytes = Rc<RefCell<VecDeque<u8>>>;

/// One end of a line that stays inside this program.
#[derive(Clone, Debug)]
pub struct MemoryLine {
    incoming: Bytes,
    outgoing: Bytes,
}

impl MemoryLine {
    /// Both ends of a new line.
    #[must_use]
    pub fn pair() -> (Self, Self) {
        let (one, other) = (Bytes::default(), Bytes::default());
        let first = Self {
            incoming: one.clone(),
            outgoing: other.clone(),
        };
        let second = Self {
            incoming: other,
            outgoing: one,
        };
        (first, second)
    }
}

impl ErrorType for MemoryLine {
    type Error = std::convert::Infallible;
}

impl ReadReady for MemoryLine {
    fn read_ready(&mut self) -> Result<bool, Self::Error> {
        Ok(!self.incoming.borrow().is_empty())
    }
}

impl Read for MemoryLine {
    fn read(&mut self, bytes: &mut [u8]) -> Result<usize, Self::Error> {
        Ok(take_front(&mut self.incoming.borrow_mut(), bytes))
    }
}

impl Write for MemoryLine {
    fn write(&mut self, bytes: &[u8]) -> Result<usize, Self::Error> {
        self.outgoing.borrow_mut().extend(bytes);
        Ok(bytes.len())
    }

    fn flush(&mut self) -> Result<(), Self::Error> {
        Ok(())
    }
}

fn take_front(from: &mut VecDeque<u8>, bytes: &mut [u8]) -> usize {
    let mut taken = 0;
    for (place, byte) in bytes.iter_mut().zip(std::iter::from_fn(|| from.pop_front())) {
        *place = byte;
        taken += 1;
    }
    taken
}

/// Where the host puts samples for the gauge to find.
pub trait SampleStore {
    /// Puts the newest samples to the memory's front.
    ///
    /// # Errors
    /// The memory cannot be written or is too small.
    fn store(&mut self, codes: &[i16]) -> std::io::Result<()>;
}

/// One shot that the conversation's front end fired.
#[derive(Clone, Debug)]
pub struct FiredShot {
    /// What was done.
    pub fired: Fired,
    /// The codes.
    pub codes: Vec<i16>,
}

/// Why a conversation's request came to nothing.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum ConversationError {
    /// The link does not work.
    Link(LinkError),
    /// The gauge did not answer in time.
    Silent,
    /// The gauge speaks another version of the protocol.
    OtherProtocol(u8),
    /// The gauge refused the set-up; the number is [`Message::SetUpTaken`]'s.
    SetUpRefused(u8),
    /// The gauge refused the pulse; the number is [`Message::PulseTaken`]'s.
    PulseRefused(u8),
}

impl fmt::Display for ConversationError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::Link(LinkError::Line) => f.write_str("the line to the gauge is closed; is it running?"),
            Self::Link(_) => f.write_str("the message does not fit the link; this is a fault of the program"),
            Self::Silent => f.write_str("the gauge does not answer; check the line and its supply"),
            Self::OtherProtocol(version) => write!(
                f,
                "the gauge speaks version {version} of the link, this program version {PROTOCOL}; bring both to the same release"
            ),
            Self::SetUpRefused(1) => {
                f.write_str("the gauge does not know this probe or span; bring both to the same release")
            }
            Self::SetUpRefused(2) => {
                f.write_str("the gauge refuses a value of the set-up; check it with halfpulse read")
            }
            Self::SetUpRefused(3) => f.write_str("the probe's pulse is too long for the gauge; lower the sample rate"),
            Self::PulseRefused(2) => {
                f.write_str("the gauge refuses what is stated of the pulse; check it with halfpulse read")
            }
            Self::PulseRefused(PULSE_INCOMPLETE) => {
                f.write_str("the gauge did not get the whole pulse; check the line and send it again")
            }
            Self::PulseRefused(_) => {
                f.write_str("the gauge cannot hold this pulse, or finds no echo in it; learn it again on a block")
            }
            Self::SetUpRefused(_) => {
                f.write_str("the gauge has too little memory for this set-up; lower the sample rate")
            }
        }
    }
}

impl std::error::Error for ConversationError {}

impl From<LinkError> for ConversationError {
    fn from(error: LinkError) -> Self {
        Self::Link(error)
    }
}

/// A conversation with a gauge: asks for readings, and is the gauge's front end meanwhile.
#[derive(Debug)]
pub struct Conversation<L, R, M> {
    port: Port<L>,
    front_end: R,
    memory: M,
    /// How the front end misbehaves.
    pub behaviour: Behaviour,
    held: Option<Message>,
    answers: VecDeque<Message>,
    shots: Vec<FiredShot>,
}

impl<L, R, M> Conversation<L, R, M>
where
    L: Read + ReadReady + Write,
    R: PulseReceiver,
    R::Error: Into<FrontEndFault>,
    M: SampleStore,
{
    /// A conversation over a line, with a front end that behaves.
    pub fn new(line: L, front_end: R, memory: M) -> Self {
        Self {
            port: Port::new(line),
            front_end,
            memory,
            behaviour: Behaviour::Sound,
            held: None,
            answers: VecDeque::new(),
            shots: Vec::new(),
        }
    }

    /// The front end, to look at it or to replace it.
    pub const fn front_end(&mut self) -> &mut R {
        &mut self.front_end
    }

    /// The line.
    pub const fn line(&mut self) -> &mut L {
        self.port.line()
    }

    /// What came in so far.
    pub const fn counts(&self) -> Counts {
        self.port.counts()
    }

    /// The shots that were fired since this was last called.
    pub fn take_shots(&mut self) -> Vec<FiredShot> {
        std::mem::take(&mut self.shots)
    }

    /// Sends a message without waiting for an answer.
    ///
    /// # Errors
    /// The link's.
    pub fn send(&mut self, message: &Message) -> Result<(), LinkError> {
        self.port.send(message)
    }

    /// The next message that is not for the front end. Never waits.
    ///
    /// # Errors
    /// The link's.
    pub fn next_answer(&mut self) -> Result<Option<Message>, LinkError> {
        self.pump()?;
        Ok(self.answers.pop_front())
    }

    /// Takes what has come in: fires shots that are asked for, keeps the rest. Never waits.
    ///
    /// # Errors
    /// The link's.
    pub fn pump(&mut self) -> Result<(), LinkError> {
        while let Some(message) = self.port.poll()? {
            match message {
                Message::Fire(fire) => self.fire(&fire)?,
                other => self.answers.push_back(other),
            }
        }
        Ok(())
    }

    fn fire(&mut self, fire: &Fire) -> Result<(), LinkError> {
        if self.behaviour == Behaviour::Dead {
            return Ok(());
        }
        let shot = Shot {
            gain: Decibels::new(fire.gain),
            delay: Seconds::new(fire.delay),
        };
        let mut codes = vec![0; usize::from(fire.samples)];
        let fired = self.front_end.fire(&shot, &mut codes);
        let answer = match fired {
            Ok(fired) => {
                codes.truncate(fired.samples);
                let withheld = self.behaviour == Behaviour::NoSamples;
                let stored = withheld || self.memory.store(&codes).is_ok();
                let done = self.done(fire, &fired, &codes);
                self.shots.push(FiredShot { fired, codes });
                if stored {
                    Message::Done(done)
                } else {
                    not_fired(fire, FrontEndFault::TooManySamples)
                }
            }
            Err(error) => not_fired(fire, error.into()),
        };
        match self.behaviour {
            // The answer goes out when the next request has come: too late for its own.
            Behaviour::Late => match self.held.replace(answer) {
                Some(late) => self.port.send(&late),
                None => Ok(()),
            },
            Behaviour::Doubled => {
                self.port.send(&answer)?;
                self.port.send(&answer)
            }
            _ => {
                if let Some(late) = self.held.take() {
                    self.port.send(&late)?;
                }
                self.port.send(&answer)
            }
        }
    }

    fn done(&self, fire: &Fire, fired: &Fired, codes: &[i16]) -> Done {
        let crc = crc_of_codes(codes);
        Done {
            sequence: fire.sequence,
            gain: fired.gain.get(),
            samples: u16::try_from(codes.len()).unwrap_or(u16::MAX),
            bits: fired.format.bits,
            rate: fired.clock.rate.get(),
            first_sample: fired.clock.first_sample.get(),
            crc: if self.behaviour == Behaviour::NoSamples {
                !crc
            } else {
                crc
            },
        }
    }

    /// Waits for an answer that `wanted` recognises; drops others.
    ///
    /// # Errors
    /// [`ConversationError::Silent`] after `patience`, or the link's.
    pub fn await_answer<T>(
        &mut self,
        patience: Duration,
        mut wanted: impl FnMut(Message) -> Option<T>,
    ) -> Result<T, ConversationError> {
        let start = Instant::now();
        loop {
            match self.next_answer()? {
                Some(message) => {
                    if let Some(answer) = wanted(message) {
                        return Ok(answer);
                    }
                }
                None if start.elapsed() > patience => return Err(ConversationError::Silent),
                None => std::thread::sleep(Duration::from_micros(20)),
            }
        }
    }

    /// Introduces this end, again and again until the gauge answers: it may be starting.
    ///
    /// # Errors
    /// No answer within `patience`, or another version.
    pub fn introduce(&mut self, patience: Duration) -> Result<Hello, ConversationError> {
        let start = Instant::now();
        let hello = Message::Hello(Hello {
            protocol: PROTOCOL,
            samples: u16::MAX,
        });
        loop {
            self.port.send(&hello)?;
            let answer = self.await_answer(Duration::from_millis(300), |message| match message {
                Message::Hello(hello) => Some(hello),
                _ => None,
            });
            match answer {
                Ok(hello) if hello.protocol == PROTOCOL => return Ok(hello),
                Ok(hello) => return Err(ConversationError::OtherProtocol(hello.protocol)),
                Err(ConversationError::Silent) if start.elapsed() < patience => {}
                Err(error) => return Err(error),
            }
        }
    }

    /// Puts a set-up in force.
    ///
    /// # Errors
    /// The gauge refuses it, or does not answer.
    pub fn set_up(&mut self, setup: &halfpulse::GaugeSetup, patience: Duration) -> Result<(), ConversationError> {
        self.port.send(&Message::SetUp(halfpulse_app::link::SetUp::of(setup)))?;
        let answer = self.await_answer(patience, |message| match message {
            Message::SetUpTaken(answer) => Some(answer),
            _ => None,
        })?;
        if answer == 0 {
            Ok(())
        } else {
            Err(ConversationError::SetUpRefused(answer))
        }
    }

    /// Puts a learned pulse in force, part by part; without samples the data sheet's.
    ///
    /// # Errors
    /// The gauge refuses it, or does not answer.
    pub fn teach_pulse(
        &mut self,
        samples: &[f32],
        quality: PulseQuality,
        patience: Duration,
    ) -> Result<(), ConversationError> {
        let number = |count: usize| u16::try_from(count).map_err(|_| ConversationError::PulseRefused(3));
        let mut sent = 0;
        for part in samples.chunks(PART_SAMPLES) {
            self.port.send(&Message::PulsePart(PulsePart {
                first: number(sent)?,
                samples: part.iter().copied().collect(),
            }))?;
            sent += part.len();
            let held = self.await_answer(patience, |message| match message {
                Message::PulseHeld(held) => Some(held),
                _ => None,
            })?;
            if usize::from(held) != sent {
                // Too long for the gauge, or somebody else's part came between.
                return Err(ConversationError::PulseRefused(3));
            }
        }
        self.port.send(&Message::TakePulse(TakePulse {
            samples: number(samples.len())?,
            noise: quality.noise,
            mismatch: quality.mismatch,
            learned_on: quality.learned_on.map(halfpulse::Metres::get),
            crc: crc_of_samples(samples),
        }))?;
        let answer = self.await_answer(patience, |message| match message {
            Message::PulseTaken(answer) => Some(answer),
            _ => None,
        })?;
        if answer == 0 {
            Ok(())
        } else {
            Err(ConversationError::PulseRefused(answer))
        }
    }

    /// Asks for one reading and waits for its report.
    ///
    /// # Errors
    /// The gauge does not answer.
    pub fn take(&mut self, take: &Take, patience: Duration) -> Result<LinkReport, ConversationError> {
        self.port.send(&Message::Take(*take))?;
        self.await_answer(patience, |message| match message {
            Message::Report(report) if report.number == take.number => Some(report),
            _ => None,
        })
    }

    /// Asks for the gauge's counters.
    ///
    /// # Errors
    /// The gauge does not answer.
    pub fn query(&mut self, patience: Duration) -> Result<Status, ConversationError> {
        self.port.send(&Message::Query)?;
        self.await_answer(patience, |message| match message {
            Message::Status(status) => Some(status),
            _ => None,
        })
    }
}

fn not_fired(fire: &Fire, fault: FrontEndFault) -> Message {
    Message::NotFired(NotFired {
        sequence: fire.sequence,
        fault,
    })
}

/// A line whose other end lives in the same thread: it gets to work whenever nothing is there to be read.
#[derive(Clone, Debug)]
pub struct PromptingLine<L, F> {
    /// The line.
    pub line: L,
    prompt: F,
}

impl<L, F: FnMut()> PromptingLine<L, F> {
    /// `prompt` lets the other end work.
    pub const fn new(line: L, prompt: F) -> Self {
        Self { line, prompt }
    }
}

impl<L: ErrorType, F> ErrorType for PromptingLine<L, F> {
    type Error = L::Error;
}

impl<L: ReadReady, F: FnMut()> ReadReady for PromptingLine<L, F> {
    fn read_ready(&mut self) -> Result<bool, Self::Error> {
        if !self.line.read_ready()? {
            (self.prompt)();
        }
        self.line.read_ready()
    }
}

impl<L: Read, F> Read for PromptingLine<L, F> {
    fn read(&mut self, bytes: &mut [u8]) -> Result<usize, Self::Error> {
        self.line.read(bytes)
    }
}

impl<L: Write, F> Write for PromptingLine<L, F> {
    fn write(&mut self, bytes: &[u8]) -> Result<usize, Self::Error> {
        self.line.write(bytes)
    }

    fn flush(&mut self) -> Result<(), Self::Error> {
        self.line.flush()
    }
}

/// A delay that takes no time: where the other end works whenever it is waited for, nothing need pass.
#[derive(Clone, Copy, Debug, Default)]
pub struct NoDelay;

impl embedded_hal::delay::DelayNs for NoDelay {
    fn delay_ns(&mut self, _: u32) {}
}
