//! What was digitised: codes, what a code stands for, and when they were taken.

pub mod average;
pub mod movement;
pub mod receiver;
pub mod rounds;

use crate::math;
use crate::outcome::NoReading;
use crate::setup::Window;
use crate::units::{Hertz, SamplePosition, Seconds};

/// What a code of the record stands for.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct AdcFormat {
    /// The converter's bits, 2 to 16.
    pub bits: u8,
    /// Codes of the record per step of the converter (1 for a single shot; more after averaging,
    /// whose sums are shifted to fill 16 bits). What is not a positive number up to 32768 counts as 1.
    pub codes_per_step: f32,
    /// Shots that were averaged into the record.
    pub shots: u16,
}

impl AdcFormat {
    /// One shot of signed, right-justified codes: full scale is 2^(bits-1).
    #[must_use]
    pub const fn signed(bits: u8) -> Self {
        Self {
            bits,
            codes_per_step: 1.0,
            shots: 1,
        }
    }

    /// Codes from zero to full scale.
    #[must_use]
    pub fn full_scale(&self) -> f32 {
        let shift = if self.bits >= 2 && self.bits <= 16 {
            self.bits - 1
        } else {
            15
        };
        (1u32 << shift) as f32 * self.step()
    }

    /// Codes per step, or 1 if that is impossible.
    fn step(&self) -> f32 {
        if self.codes_per_step > 0.0 && self.codes_per_step <= 32_768.0 {
            self.codes_per_step
        } else {
            1.0
        }
    }

    /// The highest code that is not clipped lies below this one.
    #[must_use]
    pub fn upper_rail(&self) -> i16 {
        let rail = math::round_to_i32(self.full_scale() - self.step());
        i16::try_from(rail).unwrap_or(i16::MAX)
    }

    /// The lowest code that is not clipped lies above this one.
    #[must_use]
    pub fn lower_rail(&self) -> i16 {
        let rail = math::round_to_i32(-self.full_scale());
        i16::try_from(rail).unwrap_or(i16::MIN)
    }

    /// Standard uncertainty of rounding to one step, in codes: step / sqrt(12). The noise of a record
    /// is never taken to be below it.
    ///
    /// `noise` is the noise found in the record, in codes. In an average of n shots the rounding errors average too, if each
    /// shot's noise is at least 0.4 steps, which dithers them: the n-th part's root of them is left, and the rounding of the average
    /// to its own codes. Below that, rounding is the same in every shot and nothing is gained. But a quiet stretch that
    /// lies between two codes scatters by half a step however little noise there is. So that it is not taken for dithered, by
    /// an estimate that scatters itself, 0.72 steps must be seen: 0.66 of noise and those of rounding. From 0.4 to 0.66
    /// the uncertainty of an average is therefore overstated, up to fivefold in 64 shots.
    #[must_use]
    pub fn rounding_noise(&self, noise: f32) -> f32 {
        const ROUNDING: f32 = 0.288_675_13;
        let whole = self.step() * ROUNDING;
        let root = math::sqrt(f32::from(self.shots.max(1)));
        if noise * root >= 0.72 * self.step() {
            math::larger(whole / root, ROUNDING)
        } else {
            whole
        }
    }
}

/// When the samples were taken. All times are after the transmission trigger.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct SampleClock {
    /// Samples per second.
    pub rate: Hertz,
    /// When the record's first sample was taken.
    pub first_sample: Seconds,
}

impl SampleClock {
    /// A clock whose first sample is taken at the trigger.
    #[must_use]
    pub const fn new(rate: Hertz) -> Self {
        Self {
            rate,
            first_sample: Seconds::ZERO,
        }
    }

    /// The time of a place in the record.
    #[must_use]
    pub fn time_of(&self, position: SamplePosition) -> Seconds {
        self.first_sample + self.rate.period() * position.as_samples()
    }

    /// The place of a time, in samples from the record's first; may lie outside the record.
    #[must_use]
    pub fn samples_at(&self, time: Seconds) -> f32 {
        (time - self.first_sample).get() * self.rate.get()
    }
}

/// One record: codes with their format and clock.
#[derive(Clone, Copy, Debug)]
pub struct Record<'r> {
    codes: &'r [i16],
    format: AdcFormat,
    clock: SampleClock,
}

impl<'r> Record<'r> {
    /// Puts codes, format and clock together. Nothing is checked here: [`Record::health`] and the
    /// gauge do that, so that a broken record is a refusal and not a set-up error.
    #[must_use]
    pub const fn new(codes: &'r [i16], format: AdcFormat, clock: SampleClock) -> Self {
        Self { codes, format, clock }
    }

    /// The codes.
    #[must_use]
    pub const fn codes(&self) -> &'r [i16] {
        self.codes
    }

    /// What a code stands for.
    #[must_use]
    pub const fn format(&self) -> AdcFormat {
        self.format
    }

    /// When the samples were taken.
    #[must_use]
    pub const fn clock(&self) -> SampleClock {
        self.clock
    }

    /// The samples inside `window`, cut to the record.
    ///
    /// # Errors
    /// [`NoReading::WindowOutsideRecord`] if they have nothing in common.
    pub fn window(&self, window: Window) -> Result<SampleRange, NoReading> {
        let length = u32::try_from(self.codes.len()).unwrap_or(u32::MAX);
        // A place a hair beyond a whole sample, from rounding, shall not lose that sample.
        let from = math::saturating_i32(math::floor(self.clock.samples_at(window.from) + 0.999));
        let to = math::saturating_i32(math::floor(self.clock.samples_at(window.to) + 0.001));
        let start = u32::try_from(from).unwrap_or(0);
        let end = u32::try_from(to.saturating_add(1)).unwrap_or(0);
        let end = if end < length { end } else { length };
        if start < end {
            Ok(SampleRange { start, end })
        } else {
            Err(NoReading::WindowOutsideRecord)
        }
    }

    /// One integer pass over a range of samples: extremes, clipped samples, bits that never change.
    #[must_use]
    pub fn health(&self, range: SampleRange) -> RecordHealth {
        let codes = self.codes.get(range.start as usize..range.end as usize).unwrap_or(&[]);
        let (upper, lower) = (self.format.upper_rail(), self.format.lower_rail());
        let mut health = RecordHealth {
            samples: 0,
            clipped: 0,
            lowest: i16::MAX,
            highest: i16::MIN,
            constant_bits: 0,
        };
        let (mut all, mut any) = (u16::MAX, 0u16);
        for &code in codes {
            if code < health.lowest {
                health.lowest = code;
            }
            if code > health.highest {
                health.highest = code;
            }
            all &= code as u16;
            any |= code as u16;
        }
        health.samples = codes.len() as u32;
        // Most records have none: only then are they counted.
        if health.highest >= upper || health.lowest <= lower {
            for &code in codes {
                health.clipped += u32::from(code >= upper) + u32::from(code <= lower);
            }
        }
        if health.samples > 0 {
            health.constant_bits = all | !any;
        }
        health
    }
}

/// A half-open range of a record's samples.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Default)]
pub struct SampleRange {
    /// The first sample.
    pub start: u32,
    /// One past the last.
    pub end: u32,
}

impl SampleRange {
    /// How many samples.
    #[must_use]
    pub const fn length(self) -> u32 {
        self.end.saturating_sub(self.start)
    }
}

/// What one look at the codes tells about the hardware.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Default)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct RecordHealth {
    /// Samples looked at.
    pub samples: u32,
    /// Samples at the converter's limits.
    pub clipped: u32,
    /// The lowest code; above `highest` if no sample was looked at.
    pub lowest: i16,
    /// The highest code.
    pub highest: i16,
    /// Bits that have the same value in every code.
    pub constant_bits: u16,
}

impl RecordHealth {
    /// Every code is the same (or there is none).
    #[must_use]
    pub const fn is_dead(&self) -> bool {
        self.lowest >= self.highest
    }

    /// Bits that a working converter would have toggled: constant although bits above and below them
    /// toggle, in at least 64 samples that span eight codes or more. 0 if all is well. Lowest bits
    /// that are constant together only make the step coarser (left-justified codes do that).
    #[must_use]
    pub const fn stuck_bits(&self) -> u16 {
        let spread = self.highest as i32 - self.lowest as i32;
        if self.samples < 64 || spread < 8 {
            return 0;
        }
        let toggling = !self.constant_bits;
        let highest = 15 - toggling.leading_zeros();
        let below_highest = ((1u32 << highest) - 1) as u16;
        let above_lowest = !(((1u32 << toggling.trailing_zeros()) - 1) as u16);
        self.constant_bits & below_highest & above_lowest
    }

    /// Share of clipped samples in thousandths.
    #[must_use]
    pub const fn clipped_per_mille(&self) -> u16 {
        let samples = if self.samples == 0 { 1 } else { self.samples as u64 };
        (self.clipped as u64 * 1000 / samples) as u16
    }
}
