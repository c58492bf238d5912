//! The caller's scratch memory, as typed slices.
//!
//! The core allocates nothing. Firmware keeps one [`Scratch`] in a static, where the linker counts
//! it; the gauge checks its sizes once when it is made, and after that cannot run out.

use crate::setup::PULSE_CAPACITY;

/// Lags of one correlation window: enough for three quarters of a cycle each way at 200 samples a
/// cycle, and the interpolation kernel beyond.
pub const CORRELATION_CAPACITY: usize = 512;

/// Most echoes that one record yields.
pub const ECHO_CAPACITY: usize = 16;

/// Lags kept for each echo while a train is fitted.
pub const TRAIN_LAGS: usize = 26;

/// Scratch memory for records of up to `SAMPLES` samples: 2 bytes a sample and about 6 KiB.
#[derive(Debug)]
pub struct Scratch<const SAMPLES: usize> {
    envelope: [u16; SAMPLES],
    pulse: [f32; PULSE_CAPACITY],
    skirt: [u16; PULSE_CAPACITY],
    correlation: [f32; CORRELATION_CAPACITY],
    train: [f32; ECHO_CAPACITY * TRAIN_LAGS],
}

impl<const SAMPLES: usize> Scratch<SAMPLES> {
    /// Scratch memory before its first use.
    pub const ZERO: Self = Self {
        envelope: [0; SAMPLES],
        pulse: [0.0; PULSE_CAPACITY],
        skirt: [0; PULSE_CAPACITY],
        correlation: [0.0; CORRELATION_CAPACITY],
        train: [0.0; ECHO_CAPACITY * TRAIN_LAGS],
    };

    /// Lends the memory to a gauge.
    pub fn workspace(&mut self) -> Workspace<'_> {
        Workspace {
            envelope: &mut self.envelope,
            pulse: &mut self.pulse,
            skirt: &mut self.skirt,
            correlation: &mut self.correlation,
            train: &mut self.train,
        }
    }
}

/// What a gauge works in. Made by [`Scratch::workspace`], or by hand from any memory of the right
/// lengths (a host that reads records of unknown length does that).
#[derive(Debug)]
pub struct Workspace<'w> {
    /// The scanned envelope, one entry a sample: as long as the longest record.
    pub envelope: &'w mut [u16],
    /// The reference pulse's samples.
    pub pulse: &'w mut [f32; PULSE_CAPACITY],
    /// How far the detector's answer to one echo reaches to either side of it.
    pub skirt: &'w mut [u16; PULSE_CAPACITY],
    /// Correlation of one echo's surroundings with the reference pulse.
    pub correlation: &'w mut [f32; CORRELATION_CAPACITY],
    /// The short correlation windows of all echoes of a train.
    pub train: &'w mut [f32; ECHO_CAPACITY * TRAIN_LAGS],
}
