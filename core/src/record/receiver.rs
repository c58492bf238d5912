//! The one trait a builder implements: fire the pulser, digitise what comes back.

use crate::record::{AdcFormat, SampleClock};
use crate::units::{Decibels, Seconds};

/// What is asked of one shot.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Shot {
    /// Receiver gain.
    pub gain: Decibels,
    /// How much later than usual, relative to the sample clock, the pulser shall fire. Zero except
    /// for equivalent-time sampling.
    pub delay: Seconds,
}

/// What was done in one shot.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Fired {
    /// The gain that was in force, which may differ from the one asked for.
    pub gain: Decibels,
    /// How many samples were written, from the front of the buffer.
    pub samples: usize,
    /// What the codes stand for.
    pub format: AdcFormat,
    /// When they were taken: the time of sample 0 counts from the transmission trigger.
    pub clock: SampleClock,
}

/// A pulser and receiver.
///
/// # Contract
/// * One call fires once and fills `codes` from the front; what lies behind
///   [`Fired::samples`] is not touched.
/// * [`Fired::clock`] says when sample 0 was taken after the trigger of this shot.
/// * The call ends: a receiver that waits for hardware bounds the wait and returns its error.
/// * After an error nothing of `codes` may be used, and the next call may succeed.
pub trait PulseReceiver {
    /// The board's own faults: they are not refusals and not doubts.
    type Error;

    /// Fires one shot.
    ///
    /// # Errors
    /// The board's own fault; nothing of `codes` is valid then.
    fn fire(&mut self, shot: &Shot, codes: &mut [i16]) -> Result<Fired, Self::Error>;
}
