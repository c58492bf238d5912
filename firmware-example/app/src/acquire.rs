//! Shots to one record: the gain is stepped until the echoes fit the converter, then shots are averaged.

use crate::link::GainChoice;
use crate::report::Fault;
use embedded_hal::delay::DelayNs;
use halfpulse::record::average::{MOST_SHOTS, next_gain};
use halfpulse::record::receiver::{Fired, PulseReceiver, Shot};
use halfpulse::{Averager, Decibels, Record, Seconds, Window};

/// Most shots that look for the gain. From the lowest to the highest step [`next_gain`] needs five.
pub const MOST_GAIN_SHOTS: u8 = 8;

/// How the front end is used.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct FrontEndPlan<'s> {
    /// Gains that the receiver has, in any order.
    pub gain_steps: &'s [Decibels],
    /// Where the automatic gain begins.
    pub first_gain: Decibels,
    /// Pause after each shot in microseconds: the reverberation in the part has to die away.
    pub pause_us: u32,
    /// How often a shot that failed is tried again.
    pub retries: u8,
}

/// What is asked of one acquisition.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Request {
    /// Shots to average, 1 to [`MOST_SHOTS`].
    pub shots: u16,
    /// Samples of each shot.
    pub samples: usize,
    /// The gain.
    pub gain: GainChoice,
    /// Where the echoes are that shall fit the converter.
    pub window: Window,
}

/// Shots that were fired, and failed, while acquiring.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Default)]
pub struct ShotCounts {
    /// Shots that gave a record.
    pub fired: u32,
    /// Shots that ended in an error.
    pub failed: u32,
}

/// A record, and the gain that was in force.
#[derive(Clone, Copy, Debug)]
pub struct Acquired<'c> {
    /// The record.
    pub record: Record<'c>,
    /// The gain of its shots.
    pub gain: Decibels,
}

/// A pulser and receiver in use.
#[derive(Debug)]
pub struct FrontEnd<'s, R, D> {
    /// The pulser and receiver.
    pub receiver: R,
    /// For the pauses between shots.
    pub delay: D,
    /// How it is used.
    pub plan: FrontEndPlan<'s>,
    /// Shots so far.
    pub counts: ShotCounts,
}

impl<R, D> FrontEnd<'_, R, D>
where
    R: PulseReceiver,
    R::Error: Into<Fault>,
    D: DelayNs,
{
    /// Takes one record into `codes`. `sums` need as many places as there are samples; for a single
    /// shot none.
    ///
    /// # Errors
    /// The front end's fault after all retries, or a request that makes no sense. There is no record then.
    pub fn acquire<'c>(
        &mut self,
        request: &Request,
        codes: &'c mut [i16],
        sums: &mut [i32],
    ) -> Result<Acquired<'c>, Fault> {
        let codes = codes.get_mut(..request.samples).ok_or(Fault::Request)?;
        let averaging = request.shots > 1;
        let enough = !averaging || sums.len() >= request.samples;
        if codes.is_empty() || request.shots == 0 || request.shots > MOST_SHOTS || !enough {
            return Err(Fault::Request);
        }
        let mut fired = match request.gain {
            GainChoice::Fixed(gain) if !gain.is_finite() => return Err(Fault::Request),
            GainChoice::Fixed(gain) => self.shot(Decibels::new(gain), codes)?,
            GainChoice::Automatic => self.step_gain(request.window, codes)?,
        };
        // Sums hide a bit that never changes: one such shot is all that the gauge needs to refuse it.
        let hides = stuck_or_dead(&record(codes, &fired), request.window);
        if averaging && !hides {
            // The shot that settled the gain is the first of the average.
            let mut average = Averager::new(sums);
            let gain = fired.gain;
            loop {
                average.add(&record(codes, &fired)).map_err(|_| Fault::ShotsDiffer)?;
                if average.shots() >= request.shots {
                    break;
                }
                fired = self.shot(gain, codes)?;
                if fired.gain != gain {
                    return Err(Fault::ShotsDiffer);
                }
            }
            let gained = average.finish(codes).map_err(|_| Fault::ShotsDiffer)?;
            return Ok(Acquired { record: gained, gain });
        }
        Ok(Acquired {
            record: record(codes, &fired),
            gain: fired.gain,
        })
    }

    /// Fires until the gain comes to rest; the last shot stays in `codes`.
    fn step_gain(&mut self, window: Window, codes: &mut [i16]) -> Result<Fired, Fault> {
        let mut gain = self.plan.first_gain;
        let mut fired = self.shot(gain, codes)?;
        for _ in 1..MOST_GAIN_SHOTS {
            let record = record(codes, &fired);
            // A window beside the record is a refusal later on, with its words.
            let Ok(range) = record.window(window) else { break };
            let next = next_gain(&record.health(range), record.format(), fired.gain, self.plan.gain_steps);
            if next == fired.gain || next == gain {
                break;
            }
            gain = next;
            fired = self.shot(gain, codes)?;
        }
        Ok(fired)
    }

    /// One shot, tried again if it fails.
    fn shot(&mut self, gain: Decibels, codes: &mut [i16]) -> Result<Fired, Fault> {
        let shot = Shot {
            gain,
            delay: Seconds::ZERO,
        };
        let mut attempt = 0;
        loop {
            let outcome = self.receiver.fire(&shot, codes).map_err(Into::into);
            self.delay.delay_us(self.plan.pause_us);
            let fault = match outcome {
                Ok(fired) if fired.samples == codes.len() => {
                    self.counts.fired = self.counts.fired.saturating_add(1);
                    return Ok(fired);
                }
                Ok(_) => Fault::WrongCount,
                Err(fault) => fault,
            };
            self.counts.failed = self.counts.failed.saturating_add(1);
            if attempt >= self.plan.retries {
                return Err(fault);
            }
            attempt += 1;
        }
    }
}

fn stuck_or_dead(record: &Record<'_>, window: Window) -> bool {
    record.window(window).is_ok_and(|range| {
        let health = record.health(range);
        health.is_dead() || health.stuck_bits() != 0
    })
}

fn record<'c>(codes: &'c [i16], fired: &Fired) -> Record<'c> {
    Record::new(codes, fired.format, fired.clock)
}

#[cfg(test)]
#[path = "acquire_tests.rs"]
mod tests;
