//! How the gauge on this board is set up before anybody tells it otherwise; the host uses the same to
//! compare.

use halfpulse::{Decibels, GaugeSetup};
use halfpulse_app::acquire::FrontEndPlan;

/// Longest record, in samples.
pub const CAPACITY: usize = 4096;

/// How long the front end may take for an answer, in microseconds.
pub const PATIENCE_US: u32 = 2_000_000;

/// The set-up in force at the start: a 5 MHz contact probe on steel.
pub const FIRST_SETUP: GaugeSetup = crate::canned::CONTACT;

/// From -20 dB to 60 dB by 2 dB.
const GAIN_STEPS: [Decibels; 41] = {
    let mut steps = [Decibels::ZERO; 41];
    let mut place = 0;
    while place < steps.len() {
        steps[place] = Decibels::new(2.0 * place as f32 - 20.0);
        place += 1;
    }
    steps
};

/// How the front end is used.
pub const PLAN: FrontEndPlan<'static> = FrontEndPlan {
    gain_steps: &GAIN_STEPS,
    first_gain: Decibels::new(10.0),
    // The simulator's parts do not reverberate into the next shot.
    pause_us: 20,
    retries: 1,
};
