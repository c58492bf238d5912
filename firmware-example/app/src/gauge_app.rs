//! The application: does what the link asks for, one message at a time.

use crate::acquire::{self, FrontEnd};
use crate::link::{
    Hello, LinkError, Message, PROTOCOL, PULSE_INCOMPLETE, PulsePart, SetUp, SharedPort, Status, Take, TakePulse,
    UNKNOWN_CHOICE, crc_of_samples, pulse_error_code, setup_error_code,
};
use crate::report::{Fault, Report, ReportSink, Shortfall};
use embedded_hal::delay::DelayNs;
use embedded_io::{Read, ReadReady, Write};
use halfpulse::echo::pulse::PulseQuality;
use halfpulse::record::receiver::PulseReceiver;
use halfpulse::{Decibels, Gauge, Metres};

/// What one call of [`App::step`] did.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Step {
    /// There was no message.
    Idle,
    /// A message was answered.
    Served,
    /// A message was dropped: nobody had introduced itself, or it is not for a gauge.
    Dropped,
    /// The other end says good-bye.
    Finished,
    /// The line does not work; the next step may find it working again.
    LineFault,
}

/// What a message asks for.
#[derive(Clone, Copy, Debug)]
enum Request {
    Hello(u8),
    /// A set-up was tried; this is the answer.
    SetUp(u8),
    /// Samples of a pulse came; so many are held now.
    PulsePart(u16),
    /// A pulse was tried; this is the answer.
    Pulse(u8),
    Take(Take),
    Query,
    Bye,
    Nothing,
}

/// Makes and sends a message in a frame of its own.
#[inline(never)]
fn send<L: Read + ReadReady + Write>(
    port: &SharedPort<'_, L>,
    make: impl FnOnce() -> Message,
) -> Result<(), LinkError> {
    port.send(&make())
}

/// Sends a report; its copy for the link lives no longer than that.
#[inline(never)]
fn send_report<L: Read + ReadReady + Write>(port: &SharedPort<'_, L>, report: &Report<'_>) -> Result<(), LinkError> {
    port.send(&Message::Report(report.to_link()))
}

/// Memory for one record.
#[derive(Debug)]
pub struct RecordMemory<'m> {
    /// The record's codes: 2 bytes a sample.
    pub codes: &'m mut [i16],
    /// Averaging's sums: 4 bytes a sample.
    pub sums: &'m mut [i32],
}

/// The gauge as an application.
#[derive(Debug)]
pub struct App<'p, 'm, 's, R, D, L, S> {
    port: SharedPort<'p, L>,
    front_end: FrontEnd<'s, R, D>,
    gauge: &'m mut Gauge<'m>,
    memory: RecordMemory<'m>,
    sink: S,
    introduced: bool,
    held: u16,
    reports: u32,
    stack_used: fn() -> u32,
}

impl<'p, 'm, 's, R, D, L, S> App<'p, 'm, 's, R, D, L, S>
where
    R: PulseReceiver,
    R::Error: Into<Fault>,
    D: DelayNs,
    L: Read + ReadReady + Write,
    S: ReportSink,
{
    /// An application that waits for the other end's introduction. `stack_used` tells the most bytes of
    /// stack that were in use (0 where nobody knows). The gauge is borrowed, because a copy of it on the
    /// way into the application would cost its size in stack.
    pub const fn new(
        port: SharedPort<'p, L>,
        front_end: FrontEnd<'s, R, D>,
        gauge: &'m mut Gauge<'m>,
        memory: RecordMemory<'m>,
        sink: S,
        stack_used: fn() -> u32,
    ) -> Self {
        Self {
            port,
            front_end,
            gauge,
            memory,
            sink,
            introduced: false,
            held: 0,
            reports: 0,
            stack_used,
        }
    }

    /// Answers one message, if there is one. Ends in bounded time whatever the other end does.
    pub fn step(&mut self) -> Step {
        // Messages are large, and a measurement needs the stack: each is gone before the next thing begins.
        match self.next_request() {
            Ok(Some(request)) => self.serve(&request).unwrap_or(Step::LineFault),
            Ok(None) => Step::Idle,
            Err(_) => Step::LineFault,
        }
    }

    #[inline(never)]
    fn next_request(&mut self) -> Result<Option<Request>, LinkError> {
        Ok(self.port.poll()?.map(|message| match message {
            Message::Hello(hello) => Request::Hello(hello.protocol),
            Message::SetUp(setup) if self.introduced => Request::SetUp(self.change_setup(&setup)),
            Message::PulsePart(part) if self.introduced => Request::PulsePart(self.hold(&part)),
            Message::TakePulse(pulse) if self.introduced => Request::Pulse(self.take_pulse(&pulse)),
            Message::Take(take) if self.introduced => Request::Take(take),
            Message::Query if self.introduced => Request::Query,
            Message::Bye if self.introduced => Request::Bye,
            _ => Request::Nothing,
        }))
    }

    fn serve(&mut self, request: &Request) -> Result<Step, LinkError> {
        match request {
            Request::Hello(protocol) => {
                // Whoever speaks another version learns ours, and is not listened to.
                self.introduced = *protocol == PROTOCOL;
                let samples = u16::try_from(self.memory.codes.len()).unwrap_or(u16::MAX);
                let answer = Hello {
                    protocol: PROTOCOL,
                    samples,
                };
                send(&self.port, || Message::Hello(answer))?;
            }
            Request::SetUp(answer) => send(&self.port, || Message::SetUpTaken(*answer))?,
            Request::PulsePart(held) => send(&self.port, || Message::PulseHeld(*held))?,
            Request::Pulse(answer) => send(&self.port, || Message::PulseTaken(*answer))?,
            Request::Take(take) => {
                let port = self.port;
                send_report(&port, &self.take(take))?;
                self.reports = self.reports.saturating_add(1);
            }
            Request::Query => send(&self.port, || Message::Status(self.status()))?,
            Request::Bye => return Ok(Step::Finished),
            Request::Nothing => {
                self.port.count_unexpected();
                return Ok(Step::Dropped);
            }
        }
        Ok(Step::Served)
    }

    fn change_setup(&mut self, setup: &SetUp) -> u8 {
        match setup.setup().map(|setup| self.gauge.change_setup(setup)) {
            Some(Ok(())) => 0,
            Some(Err(error)) => setup_error_code(&error),
            None => UNKNOWN_CHOICE,
        }
    }

    /// Puts samples of a pulse behind those that are held, in the gauge's scratch memory. A part that does not continue them,
    /// or that does not fit, is not taken.
    fn hold(&mut self, part: &PulsePart) -> u16 {
        if part.first == 0 {
            self.held = 0;
        }
        let (from, count) = (usize::from(self.held), part.samples.len());
        if part.first == self.held
            && let Some(places) = self.gauge.scratch().get_mut(from..from.saturating_add(count))
        {
            for (place, sample) in places.iter_mut().zip(&part.samples) {
                *place = *sample;
            }
            self.held = u16::try_from(from + count).unwrap_or(self.held);
        }
        self.held
    }

    /// Measures with the pulse that is held from now on, or with the data sheet's.
    #[inline(never)]
    fn take_pulse(&mut self, pulse: &TakePulse) -> u8 {
        let held = core::mem::take(&mut self.held);
        if pulse.samples != 0 && pulse.samples != held {
            return PULSE_INCOMPLETE;
        }
        let length = usize::from(pulse.samples);
        let sum = self.gauge.scratch().get(..length).map(crc_of_samples);
        if sum != Some(pulse.crc) {
            return PULSE_INCOMPLETE;
        }
        let quality = PulseQuality {
            noise: pulse.noise,
            mismatch: pulse.mismatch,
            learned_on: pulse.learned_on.map(Metres::new),
        };
        let taken = match length {
            0 => self.gauge.forget_pulse(),
            _ => self.gauge.learn_pulse_from_scratch(length, quality),
        };
        match taken {
            Ok(()) => 0,
            Err(error) => pulse_error_code(&error),
        }
    }

    /// Acquires, measures, and tells the sink.
    #[inline(never)]
    pub fn take(&mut self, take: &Take) -> Report<'_> {
        // Measuring overwrites the scratch memory, and what is held of a pulse.
        self.held = 0;
        let request = acquire::Request {
            shots: take.shots,
            samples: usize::from(take.samples),
            gain: take.gain,
            window: self.gauge.setup().window,
        };
        let acquired = self.front_end.acquire(&request, self.memory.codes, self.memory.sums);
        let report = match acquired {
            Ok(acquired) => {
                let outcome = self.gauge.measure(&acquired.record).map_err(Shortfall::NoReading);
                Report {
                    number: take.number,
                    shots: acquired.record.format().shots,
                    gain: acquired.gain,
                    outcome,
                    findings: Some(self.gauge.findings()),
                }
            }
            Err(fault) => Report {
                number: take.number,
                shots: 0,
                gain: Decibels::new(0.0),
                outcome: Err(Shortfall::Fault(fault)),
                findings: None,
            },
        };
        self.sink.report(&report);
        report
    }

    /// The counters since the start.
    pub fn status(&self) -> Status {
        let counts = self.port.counts();
        Status {
            received: counts.received,
            broken: counts.broken,
            oversized: counts.oversized,
            unknown: counts.unknown,
            unexpected: counts.unexpected,
            shots: self.front_end.counts.fired,
            failed_shots: self.front_end.counts.failed,
            reports: self.reports,
            stack: (self.stack_used)(),
        }
    }

    /// The pulser and receiver in use.
    pub const fn front_end(&mut self) -> &mut FrontEnd<'s, R, D> {
        &mut self.front_end
    }

    /// Where reports go.
    pub const fn sink(&mut self) -> &mut S {
        &mut self.sink
    }
}
