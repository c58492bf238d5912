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

/// A pulser and receiver: what a board brings, and all that it brings.
///
/// # Contract
/// * **One call, one shot.** It fires once and fills `codes` from the front; the buffer's length is how
///   many samples are wanted. What lies behind [`Fired::samples`] is not touched. A receiver that cannot
///   take as many returns an error rather than fewer, unless its record simply is shorter: then
///   [`Fired::samples`] says so, and whoever asked decides.
/// * **Time of sample 0.** [`Fired::clock`] says when sample 0 was taken, counted from the *transmission
///   trigger*: the instant at which the pulser is told to fire, at the pulser's input. Delays of the
///   pulser, the cable, the probe and the receiver come after it and belong to the zero, which a block
///   teaches. A constant error here is learned with the zero too; what must not be is a change: a
///   converter that runs free is up to one sample late against the trigger, and unless that lag is
///   measured and added to `first_sample`, each shot is wrong by up to a period (20 ns at 50 MS/s, 59 um
///   of steel). Spans between two echoes of one record do not suffer from it, averages do.
/// * **Delay.** With [`Shot::delay`] the pulser fires later against the sample clock, and so
///   `first_sample` is *earlier* after the trigger by as much. A receiver without such a delay returns an
///   error for any delay but zero.
/// * **Gain.** [`Fired::gain`] is the gain that was in force while the samples were taken, as well as it
///   is known, not the one that was asked for; nearest step, if there are steps. It has settled before
///   the trigger. Two shots with the same asked gain have the same gain in force.
/// * **Codes** are signed and right-justified as [`AdcFormat`] says; a converter of offset-binary codes
///   is converted by the receiver. An overdriven sample stands at the format's rail, not somewhere below
///   it: that is how clipping is recognised.
/// * **The call ends.** A receiver that waits for hardware bounds each wait (a few times the longest
///   record is plenty) and returns its error then.
/// * **An error** says that there is no record: nothing of `codes` may be used. It is the board's own
///   fault, neither a refusal nor a doubt, and nothing about the part follows from it. The next call may
///   succeed without anything being reset from outside; whatever a late shot still delivers must not
///   reach it.
///
/// Three implementations come with the project: the simulator (`SimulatedReceiver` of host-sim), a front end
/// at the other end of a serial line (`RemoteReceiver` of firmware-example/app, which the emulated board
/// uses), and a wrapper that fails on purpose (`FaultyReceiver` of host-sim). The application's
/// `FrontEnd::acquire` is their user.
///
/// Pauses between shots (reverberation has to die away) are the caller's affair.
///
/// # Example
/// A board whose converter writes into memory by itself:
///
/// ```
/// use halfpulse::record::receiver::{Fired, PulseReceiver, Shot};
/// use halfpulse::{AdcFormat, Decibels, Hertz, SampleClock, Seconds};
///
/// # struct Registers { done: bool, samples: Vec<u16> }
/// # impl Registers {
/// #     fn set_gain_half_decibels(&mut self, _: u8) {}
/// #     fn trigger(&mut self) { self.done = true; }
/// #     fn finished(&self) -> bool { self.done }
/// # }
/// struct Board { registers: Registers }
///
/// #[derive(Debug, PartialEq)]
/// enum BoardFault { NoDelay, ConverterDoesNotFinish }
///
/// impl PulseReceiver for Board {
///     type Error = BoardFault;
///
///     fn fire(&mut self, shot: &Shot, codes: &mut [i16]) -> Result<Fired, BoardFault> {
///         if shot.delay != Seconds::ZERO {
///             return Err(BoardFault::NoDelay);
///         }
///         // Steps of half a decibel from 0 to 80 dB.
///         let step = (shot.gain.get() * 2.0 + 0.5).clamp(0.0, 160.0) as u8;
///         self.registers.set_gain_half_decibels(step);
///         self.registers.trigger();
///         let mut looks = 0;
///         while !self.registers.finished() {
///             looks += 1;
///             if looks > 100_000 {
///                 return Err(BoardFault::ConverterDoesNotFinish);
///             }
///         }
///         let mut samples = 0;
///         for (code, &raw) in codes.iter_mut().zip(&self.registers.samples) {
///             *code = raw as i16 - 2048; // offset-binary, 12 bits
///             samples += 1;
///         }
///         Ok(Fired {
///             gain: Decibels::new(f32::from(step) / 2.0),
///             samples,
///             format: AdcFormat::signed(12),
///             // The trigger is made from the converter's clock: sample 0 is taken 40 ns after it, always.
///             clock: SampleClock { rate: Hertz::from_mhz(50.0), first_sample: Seconds::from_ns(40.0) },
///         })
///     }
/// }
/// # let mut board = Board { registers: Registers { done: false, samples: vec![2048; 8] } };
/// # let mut codes = [1; 8];
/// # let shot = Shot { gain: Decibels::new(20.2), delay: Seconds::ZERO };
/// # let fired = board.fire(&shot, &mut codes).unwrap();
/// # assert_eq!((fired.gain.get(), codes), (20.0, [0; 8]));
/// ```
pub trait PulseReceiver {
    /// The board's own faults.
    type Error;

    /// Fires one shot.
    ///
    /// # Errors
    /// The board's own fault; nothing of `codes` is valid then.
    fn fire(&mut self, shot: &Shot, codes: &mut [i16]) -> Result<Fired, Self::Error>;
}
