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
    /// It delivers the record of the shot before (zeros in the first).
    Late,
    /// Its gain is so many decibels off, and it does not say so. Beyond full scale it is clipped.
    GainUnknown(f32),
    /// So many samples, anywhere, have spikes of this height in thousandths of full scale, of either sign.
    Spikes(u32, u16),
    /// So many samples, anywhere, read 0.
    Missing(u32),
    /// A block of so many samples, anywhere, holds what the block before it holds.
    Repeated(usize),
}

/// A receiver that does one thing wrong in some shots, and is what it wraps in all others. What goes
/// wrong at random depends on the seed and the number of the shot alone.
#[derive(Clone, Debug)]
pub struct FaultyReceiver<R> {
    inner: R,
    /// What it does wrong; `None` switches it off.
    pub fault: Option<ReceiverFault>,
    /// How many shots from now on are wrong; counts down.
    pub shots: u32,
    /// With which probability each of these shots is wrong, 0 to 1.
    pub probability: f64,
    /// How many shots were wrong so far.
    pub injected: u32,
    seed: u64,
    fired: u64,
    last: Vec<i16>,
}

impl<R> FaultyReceiver<R> {
    /// Wraps a receiver; nothing is wrong yet.
    pub const fn new(inner: R) -> Self {
        Self::seeded(inner, 0)
    }

    /// The same with a seed of its own.
    pub const fn seeded(inner: R, seed: u64) -> Self {
        Self {
            inner,
            fault: None,
            shots: 0,
            probability: 1.0,
            injected: 0,
            seed,
            fired: 0,
            last: Vec::new(),
        }
    }

    /// Does this wrong in the next `shots` shots.
    pub const fn plan(&mut self, fault: ReceiverFault, shots: u32) {
        self.fault = Some(fault);
        self.shots = shots;
        self.probability = 1.0;
    }

    /// Does this wrong in each shot from now on with this probability.
    pub const fn plan_at_random(&mut self, fault: ReceiverFault, probability: f64) {
        self.plan(fault, u32::MAX);
        self.probability = probability;
    }

    /// Nothing is wrong from now on.
    pub const fn mend(&mut self) {
        self.fault = None;
        self.shots = 0;
    }
}

impl<R> PulseReceiver for FaultyReceiver<R>
where
    R: PulseReceiver,
    R::Error: Into<Fault>,
{
    type Error = Fault;

    fn fire(&mut self, shot: &Shot, codes: &mut [i16]) -> Result<Fired, Fault> {
        let mut random = Random::new(self.seed, Purpose::Faults, self.fired);
        self.fired += 1;
        let hit = random.uniform() < self.probability && self.shots > 0;
        self.shots = self.shots.saturating_sub(1);
        let fault = self.fault.filter(|_| hit);
        self.injected += u32::from(fault.is_some());
        if let Some(ReceiverFault::Fails(fault)) = fault {
            codes.fill(i16::MAX);
            return Err(fault);
        }
        let mut fired = self.inner.fire(shot, codes).map_err(Into::into)?;
        let before = std::mem::replace(&mut self.last, codes.to_vec());
        if let Some(fault) = fault {
            fault.strike(&mut fired, codes, &before, &mut random);
        }
        Ok(fired)
    }
}

impl ReceiverFault {
    /// Damages one shot. `before` are the codes of the shot before.
    fn strike(self, fired: &mut Fired, codes: &mut [i16], before: &[i16], random: &mut Random) {
        let (highest, lowest) = (fired.format.upper_rail(), fired.format.lower_rail());
        let full_scale = f64::from(fired.format.full_scale());
        let length = codes.len();
        let mut place = |room: usize| (random.uniform() * room as f64) as usize;
        match self {
            // Answered before there is a record.
            Self::Fails(_) => {}
            Self::Short(missing) => fired.samples = fired.samples.saturating_sub(missing),
            Self::GainOff(change) => fired.gain = fired.gain + Decibels::new(change),
            Self::DeadConverter => codes.fill(0),
            Self::StuckBit(bit) => codes.iter_mut().for_each(|code| *code |= 1 << bit.min(14)),
            Self::ClockOff(factor) => fired.clock.rate = Hertz::new(fired.clock.rate.get() * factor),
            Self::Late => {
                let before = before.iter().copied().chain(std::iter::repeat(0));
                codes.iter_mut().zip(before).for_each(|(code, old)| *code = old);
            }
            Self::GainUnknown(change) => {
                let factor = libm::pow(10.0, f64::from(change) / 20.0);
                for code in codes {
                    let louder = (f64::from(*code) * factor).round();
                    *code = louder.clamp(f64::from(lowest), f64::from(highest)) as i16;
                }
            }
            Self::Spikes(count, thousandths) => {
                let height = 1e-3 * f64::from(thousandths) * full_scale;
                for number in 0..count {
                    if let Some(code) = codes.get_mut(place(length)) {
                        let spike = if number % 2 == 0 { height } else { -height };
                        let value = (f64::from(*code) + spike).round();
                        *code = value.clamp(f64::from(lowest), f64::from(highest)) as i16;
                    }
                }
            }
            Self::Missing(count) => {
                for _ in 0..count {
                    if let Some(code) = codes.get_mut(place(length)) {
                        *code = 0;
                    }
                }
            }
            Self::Repeated(block) => {
                if block > 0 && 2 * block <= length {
                    let at = block + place(length - 2 * block + 1);
                    codes.copy_within(at - block..at, at);
                }
            }
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::device::SimulatedReceiver;
    use crate::scene::Scene;
    use halfpulse::Seconds;

    /// Judges how many codes differ from the sound ones, the codes, and the sound ones.
    type Expected = fn(usize, &[i16], &[i16]) -> bool;

    const SHOT: Shot = Shot {
        gain: Decibels::new(-6.0),
        delay: Seconds::ZERO,
    };

    fn receiver(seed: u64) -> FaultyReceiver<SimulatedReceiver> {
        let scene = Scene::contact(5.0, 60.0, "carbon steel", 10.0);
        FaultyReceiver::seeded(SimulatedReceiver::new(scene, 1), seed)
    }

    fn take(receiver: &mut FaultyReceiver<SimulatedReceiver>) -> (Result<Fired, Fault>, Vec<i16>) {
        let mut codes = vec![0; 1024];
        (receiver.fire(&SHOT, &mut codes), codes)
    }

    /// Each fault does what it says, and is gone when it is switched off.
    #[test]
    fn each_fault_strikes_and_is_mended() {
        let mut faulty = receiver(1);
        let (sound, plain) = take(&mut faulty);
        let apart = |codes: &[i16]| codes.iter().zip(&plain).filter(|(a, b)| a != b).count();
        let cases: [(ReceiverFault, Expected); 5] = [
            (ReceiverFault::GainUnknown(40.0), |_, codes, _| {
                codes.contains(&2047) && codes.contains(&-2048)
            }),
            (ReceiverFault::GainUnknown(-6.0206), |_, codes, plain| {
                codes
                    .iter()
                    .zip(plain)
                    .all(|(a, b)| (2 * i32::from(*a) - i32::from(*b)).abs() <= 2)
            }),
            (ReceiverFault::Spikes(5, 400), |apart, _, _| (3..=5).contains(&apart)),
            (ReceiverFault::Missing(1_000_000), |_, codes, _| {
                codes.iter().all(|code| *code == 0)
            }),
            (ReceiverFault::Repeated(4096), |apart, _, _| apart == 0),
        ];
        for (number, (fault, expected)) in (1..).zip(cases) {
            faulty.plan(fault, 1);
            let (fired, codes) = take(&mut faulty);
            assert_eq!(fired, sound, "{fault:?} is not told");
            assert!(expected(apart(&codes), &codes, &plain), "{fault:?}: {}", apart(&codes));
            assert_eq!(faulty.injected, number);
            assert_eq!(apart(&take(&mut faulty).1), 0, "{fault:?} has gone");
        }
        // 300 samples hold an echo: a block of them cannot but move some of it.
        faulty.plan(ReceiverFault::Repeated(300), 1);
        assert!(apart(&take(&mut faulty).1) > 0);
        faulty.plan(ReceiverFault::Late, u32::MAX);
        assert_eq!(apart(&take(&mut faulty).1), 0);
        let mut first = receiver(1);
        first.plan(ReceiverFault::Late, 1);
        assert!(take(&mut first).1.iter().all(|code| *code == 0));
        faulty.plan(ReceiverFault::Fails(Fault::NoAnswer), u32::MAX);
        assert_eq!(take(&mut faulty).0, Err(Fault::NoAnswer));
        faulty.mend();
        assert_eq!(take(&mut faulty).0, sound);
    }

    #[test]
    fn random_faults_are_seeded_and_counted() {
        let series = |seed| {
            let mut faulty = receiver(seed);
            faulty.plan_at_random(ReceiverFault::Spikes(3, 500), 0.25);
            let all: Vec<Vec<i16>> = (0..200).map(|_| take(&mut faulty).1).collect();
            (all, faulty.injected)
        };
        let (one, count) = series(1);
        assert_eq!(one, series(1).0);
        assert_ne!(one, series(2).0);
        assert!((35..=65).contains(&count), "{count}");
    }
}
