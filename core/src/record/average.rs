//! Records to a better record: coherent averaging, interleaving of delayed shots, the next gain step.
//!
//! All of it works sample by sample and knows nothing of echoes. Probe and part must not move between shots
//! (`super::movement` and [`crate::echo::shots`] notice it), and shots must be further apart than the reverberation lasts. Averaging gains the square root of the number of shots
//! only while the noise is at least 0.4 steps of the converter: below that the rounding errors repeat themselves.

use crate::math;
use crate::record::movement::{Movement, Pair, rails};
use crate::record::{AdcFormat, Record, RecordHealth, SampleClock};
use crate::units::{Decibels, Hertz, Seconds};
use core::fmt;

/// Most shots that one average takes: 256 sums of 16-bit codes need 24 bits.
pub const MOST_SHOTS: u16 = 256;

/// Most delayed shots that one dense record takes.
pub const MOST_PHASES: u8 = 64;

/// A sum that no shots can reach: the sample was clipped at the upper limit.
const CLIPPED_HIGH: i32 = i32::MAX;
/// The same for the lower limit.
const CLIPPED_LOW: i32 = i32::MIN;

/// What every shot must have in common with the first.
#[derive(Clone, Copy, Debug)]
struct Shape {
    length: usize,
    format: AdcFormat,
    clock: SampleClock,
}

impl Shape {
    fn of(record: &Record<'_>) -> Self {
        Self {
            length: record.codes().len(),
            format: record.format(),
            clock: record.clock(),
        }
    }

    /// The same length and converter format as `record`?
    fn check(&self, record: &Record<'_>) -> Result<(), AverageError> {
        if record.codes().len() != self.length {
            return Err(AverageError::LengthChanged {
                expected: samples(self.length),
                got: samples(record.codes().len()),
            });
        }
        if record.format() != self.format {
            return Err(AverageError::FormatChanged);
        }
        Ok(())
    }
}

/// Coherent averaging in sums that the caller owns, one for each sample.
#[derive(Debug)]
pub struct Averager<'s> {
    sums: &'s mut [i32],
    shape: Option<Shape>,
    shots: u16,
}

impl<'s> Averager<'s> {
    /// An average of nothing yet. The sums need not be cleared.
    #[must_use]
    pub const fn new(sums: &'s mut [i32]) -> Self {
        Self {
            sums,
            shape: None,
            shots: 0,
        }
    }

    /// Forgets all shots.
    pub const fn clear(&mut self) {
        self.shape = None;
        self.shots = 0;
    }

    /// Shots so far.
    #[must_use]
    pub const fn shots(&self) -> u16 {
        self.shots
    }

    /// Adds one record. A sample that is clipped here stays marked, whatever later shots say.
    ///
    /// # Errors
    /// The record differs from the first in length, format or clock, is empty, has no room, or is one too many
    /// ([`MOST_SHOTS`]). The sums are then as before.
    pub fn add(&mut self, record: &Record<'_>) -> Result<(), AverageError> {
        if self.shots >= MOST_SHOTS {
            return Err(AverageError::TooManyShots);
        }
        let codes = record.codes();
        if let Some(shape) = self.shape {
            shape.check(record)?;
            if record.clock() != shape.clock {
                return Err(AverageError::ClockChanged);
            }
        } else {
            if codes.is_empty() {
                return Err(AverageError::Nothing);
            }
            room(codes.len(), self.sums.len())?;
            self.sums.fill(0);
            self.shape = Some(Shape::of(record));
        }
        let (upper, lower) = (record.format().upper_rail(), record.format().lower_rail());
        for (sum, &code) in self.sums.iter_mut().zip(codes) {
            if *sum == CLIPPED_HIGH || *sum == CLIPPED_LOW {
                continue;
            }
            *sum = if code >= upper {
                CLIPPED_HIGH
            } else if code <= lower {
                CLIPPED_LOW
            } else {
                sum.saturating_add(i32::from(code))
            };
        }
        self.shots = self.shots.saturating_add(1);
        Ok(())
    }

    /// Writes the average. The sums stay, so that shots can be added and the average be taken again.
    ///
    /// As long as the sums fit 16 bits they are the codes, exactly; beyond that they are scaled to fill 16 bits and
    /// rounded. [`AdcFormat::codes_per_step`] of the result says which. A sample that was clipped in any shot stands at
    /// the rail of the new format, and no other does.
    ///
    /// # Errors
    /// No shot yet, or no room.
    pub fn finish<'c>(&self, codes: &'c mut [i16]) -> Result<Record<'c>, AverageError> {
        let Some(shape) = self.shape else {
            return Err(AverageError::Nothing);
        };
        let available = codes.len();
        let Some(codes) = codes.get_mut(..shape.length) else {
            return Err(AverageError::TooLittleRoom {
                needed: samples(shape.length),
                got: samples(available),
            });
        };
        let shots = f32::from(self.shots);
        let full_scale = shots * shape.format.full_scale();
        let fraction = if full_scale > LARGEST_CODE {
            math::saturating_i32(ONE / full_scale * LARGEST_CODE)
        } else {
            ONE as i32
        };
        let format = AdcFormat {
            codes_per_step: shape.format.codes_per_step * shots * (fraction as f32 / ONE),
            shots: shape.format.shots.saturating_mul(self.shots),
            ..shape.format
        };
        let rails = Rails::of(format);
        for (code, &sum) in codes.iter_mut().zip(self.sums.iter()) {
            *code = match sum {
                CLIPPED_HIGH => rails.upper,
                CLIPPED_LOW => rails.lower,
                _ => {
                    let scaled = i64::from(sum) * i64::from(fraction) + (ONE as i64 / 2);
                    rails.inside(scaled >> ONE_BITS)
                }
            };
        }
        Ok(Record::new(codes, format, shape.clock))
    }
}

/// Full scale of 16 bits.
const LARGEST_CODE: f32 = 32_768.0;
/// Bits behind the point of the scaling fraction: exact in an `f32`.
const ONE_BITS: u32 = 24;
/// One in that fixed point.
const ONE: f32 = (1u32 << ONE_BITS) as f32;

/// The codes that mean "clipped".
#[derive(Clone, Copy)]
struct Rails {
    upper: i16,
    lower: i16,
}

impl Rails {
    fn of(format: AdcFormat) -> Self {
        Self {
            upper: format.upper_rail(),
            lower: format.lower_rail(),
        }
    }

    /// A code that does not mean "clipped".
    fn inside(self, code: i64) -> i16 {
        let (highest, lowest) = (self.upper.saturating_sub(1), self.lower.saturating_add(1));
        if code > i64::from(highest) {
            highest
        } else if code < i64::from(lowest) {
            lowest
        } else {
            code as i16
        }
    }
}

/// Equivalent-time sampling: shots whose pulser fired later and later against the sample clock become one dense record.
///
/// Each phase's offset is taken off, to the nearest code, because a converter's drift between phases would look like
/// a signal at its own sample rate. The offset is the mean of the codes near their median, so that echoes do not count:
/// where the probe's frequency is a multiple of the base rate, a phase meets every echo at the same place of its cycle,
/// and a mean of all codes would take a part of the echoes for offset and spread it over the whole record. Where
/// echoes or a transmission pulse fill more than about half of the record that still happens: choose another
/// base rate then. What the delays' errors do is not corrected: a fixed pattern of 1 ns moves arrivals
/// by a constant 0.05 to 0.7 ns, which a zero learned the same way contains. The analogue bandwidth must cover the pulse,
/// and each phase may itself be an average.
///
/// Probe and part must keep still, or the dense record is of no wall at all: fire the first delays again at the end
/// ([`Interleaver::again`]); [`Interleaver::finish`] refuses a record of which that was not asked, or denied.
#[derive(Debug)]
pub struct Interleaver<'c> {
    codes: &'c mut [i16],
    clock: SampleClock,
    base_rate: Hertz,
    phases: u8,
    present: u64,
    shape: Option<Shape>,
    jitter: Seconds,
    movement: Option<Movement>,
}

impl<'c> Interleaver<'c> {
    /// A dense record of `phases` shots (1 to [`MOST_PHASES`]); `undelayed` is the clock of a shot without delay.
    ///
    /// # Errors
    /// [`AverageError::Phases`], or a clock whose rate is not a positive number.
    pub fn new(codes: &'c mut [i16], undelayed: SampleClock, phases: u8) -> Result<Self, AverageError> {
        if phases == 0 || phases > MOST_PHASES {
            return Err(AverageError::Phases);
        }
        if !(undelayed.rate.is_finite() && undelayed.rate > Hertz::ZERO && undelayed.first_sample.is_finite()) {
            return Err(AverageError::ClockChanged);
        }
        Ok(Self {
            codes,
            clock: SampleClock {
                rate: undelayed.rate * f32::from(phases),
                first_sample: undelayed.first_sample - shot_delay(undelayed.rate, phases, phases - 1),
            },
            base_rate: undelayed.rate,
            phases,
            present: 0,
            shape: None,
            jitter: Seconds::ZERO,
            movement: None,
        })
    }

    /// The same for a trigger that jitters so much (root mean square from shot to shot), which is no movement.
    #[must_use]
    pub const fn with_trigger_jitter(mut self, jitter: Seconds) -> Self {
        self.jitter = jitter;
        self
    }

    /// The clock of the dense record: it begins with the shot that fired last.
    #[must_use]
    pub const fn clock(&self) -> SampleClock {
        self.clock
    }

    /// Puts one shot where its clock says that it belongs. The order of the shots does not matter.
    ///
    /// # Errors
    /// A clock that is more than a tenth of a dense sample off its place, a phase that is there already, another length or
    /// format, no room. Nothing is changed then.
    pub fn add(&mut self, record: &Record<'_>) -> Result<(), AverageError> {
        let codes = record.codes();
        let phase = self.phase(&record.clock())?;
        let bit = 1u64 << (phase & 63);
        if self.present & bit != 0 {
            return Err(AverageError::PhaseTwice { phase });
        }
        if let Some(shape) = self.shape {
            shape.check(record)?;
        } else {
            if codes.is_empty() {
                return Err(AverageError::Nothing);
            }
            room(codes.len().saturating_mul(usize::from(self.phases)), self.codes.len())?;
            self.shape = Some(Shape::of(record));
        }
        let offset = offset(codes);
        let rails = Rails::of(record.format());
        let dense = self.codes.iter_mut().skip(usize::from(phase));
        for (slot, &code) in dense.step_by(usize::from(self.phases).max(1)).zip(codes) {
            *slot = if code >= rails.upper {
                rails.upper
            } else if code <= rails.lower {
                rails.lower
            } else {
                rails.inside(i64::from(code) - offset)
            };
        }
        self.present |= bit;
        Ok(())
    }

    /// Where a shot of this clock belongs.
    fn phase(&self, clock: &SampleClock) -> Result<u8, AverageError> {
        let rate_error = (clock.rate / self.base_rate - 1.0).abs();
        let place = self.clock.samples_at(clock.first_sample);
        let nearest = math::round_to_i32(place);
        // Written so that "not a number" is refused.
        let fits = rate_error < 1e-6 && (place - nearest as f32).abs() < 0.1;
        let phase = u8::try_from(nearest).unwrap_or(u8::MAX);
        if fits && phase < self.phases {
            Ok(phase)
        } else {
            Err(AverageError::ClockChanged)
        }
    }

    /// Compares a further shot of any delay with the one that is there, once all are: fire the first delay again at the end. What one
    /// delay tells of a movement is about the square root of the phases less certain than what a whole second round
    /// would: repeat more of them where that matters. All comparisons count together, for [`Interleaver::finish`]
    /// and in what is returned. The dense record stays as it is.
    ///
    /// # Errors
    /// [`AverageError::PhasesMissing`]; a shot that does not fit, as for [`Interleaver::add`]; [`AverageError::Nothing`] if
    /// too few samples are whole to tell (fewer than 16 of the shot's).
    pub fn again(&mut self, record: &Record<'_>) -> Result<Movement, AverageError> {
        let shape = self.whole()?;
        let length = shape.length.saturating_mul(usize::from(self.phases));
        let dense = Record::new(self.codes.get(..length).unwrap_or(&[]), shape.format, self.clock);
        shape.check(record)?;
        let phase = self.phase(&record.clock())?;
        let pair = Pair {
            dense: &dense,
            step: usize::from(self.phases),
            first: usize::from(phase),
            second: record,
            offset: offset(record.codes()) as i32,
            rails: rails(record),
        };
        let found = pair.compare().ok_or(AverageError::Nothing)?;
        let found = self.movement.map_or(found, |before| before.with(found));
        self.movement = Some(found);
        Ok(found)
    }

    /// The dense record, if the shots that were fired again say that nothing has moved while it was taken.
    ///
    /// # Errors
    /// [`AverageError::PhasesMissing`] or no shot at all; [`AverageError::NotRepeated`] if no shot was fired again
    /// (a single phase needs none); [`AverageError::Moved`].
    pub fn finish(self) -> Result<Record<'c>, AverageError> {
        self.whole()?;
        match self.movement {
            None if self.phases > 1 => Err(AverageError::NotRepeated),
            Some(movement) if movement.has_moved(self.jitter) => Err(AverageError::Moved {
                picoseconds: math::saturating_i32(movement.later_by.get() * 1e12),
            }),
            _ => self.finish_unwatched(),
        }
    }

    /// The dense record of a place that cannot move (a probe that is glued on, a fixture): nothing notices it if it does.
    ///
    /// # Errors
    /// [`AverageError::PhasesMissing`] or no shot at all.
    pub fn finish_unwatched(self) -> Result<Record<'c>, AverageError> {
        let shape = self.whole()?;
        let length = shape.length.saturating_mul(usize::from(self.phases));
        let codes = self.codes.get(..length).unwrap_or(&[]);
        Ok(Record::new(codes, shape.format, self.clock))
    }

    /// What all shots have in common, once all are there.
    fn whole(&self) -> Result<Shape, AverageError> {
        let Some(shape) = self.shape else {
            return Err(AverageError::Nothing);
        };
        let there = self.present.count_ones() as u8;
        if there < self.phases {
            return Err(AverageError::PhasesMissing {
                missing: self.phases - there,
            });
        }
        Ok(shape)
    }
}

/// By how much the pulser must fire later in shot `number` (from 0) of `phases`: number / (phases x rate).
#[must_use]
pub fn shot_delay(rate: Hertz, phases: u8, number: u8) -> Seconds {
    Seconds::new(f32::from(number) / (f32::from(phases) * rate.get()))
}

/// Codes this many times the median deviation off the median are signal: white noise gets there once in 144 samples.
const SIGNAL_DEVIATIONS: i32 = 4;
/// Rounding alone can make that deviation 0.
const LEAST_REACH: i32 = 2;

/// What a converter gives without a signal: the mean of the codes near their median, rounded to the nearest; 0 of none.
fn offset(codes: &[i16]) -> i64 {
    let values = codes.iter().map(|&code| i32::from(code));
    let middle = median(values.clone());
    let deviation = median(values.clone().map(|value| (value - middle).abs()));
    let reach = deviation.saturating_mul(SIGNAL_DEVIATIONS);
    let reach = if reach < LEAST_REACH { LEAST_REACH } else { reach };
    let (sum, count) = values
        .filter(|value| (value - middle).abs() <= reach)
        .fold((0i64, 0i64), |(sum, count), value| (sum + i64::from(value), count + 1));
    (2 * sum + count).checked_div_euclid(2 * count).unwrap_or(0)
}

/// The least value that at least half of the values do not exceed: by halving the range of codes and their differences, 17
/// times through the values, because there is no memory to sort them in.
pub(crate) fn median(values: impl Iterator<Item = i32> + Clone) -> i32 {
    let (mut low, mut high) = (i32::from(i16::MIN), i32::from(u16::MAX));
    while low < high {
        let middle = low + ((high - low) >> 1);
        let (mut below, mut above) = (0u32, 0u32);
        for value in values.clone() {
            if value <= middle {
                below = below.saturating_add(1);
            } else {
                above = above.saturating_add(1);
            }
        }
        if below >= above {
            high = middle;
        } else {
            low = middle + 1;
        }
    }
    low
}

/// Refuses memory that is too short.
fn room(needed: usize, got: usize) -> Result<(), AverageError> {
    if got < needed {
        return Err(AverageError::TooLittleRoom {
            needed: samples(needed),
            got: samples(got),
        });
    }
    Ok(())
}

fn samples(length: usize) -> u32 {
    u32::try_from(length).unwrap_or(u32::MAX)
}

/// Peaks between these shares of full scale need no other gain.
const GOOD_PEAK: core::ops::RangeInclusive<f32> = 0.6..=0.8;

/// The gain for the next shot, so that the highest sample of the window comes to 60 to 80 % of full scale.
///
/// `health` is that of the last shot's window (beyond the transmission pulse, which is meant to be clipped), `now` the gain
/// it was taken with, `steps` what the receiver can do, in any order. From a peak that is not clipped the answer is the
/// largest step that keeps it at 80 % or below, at most 20 dB up in one go, because a peak of few codes is hardly known.
/// From a clipped one, whose height nobody knows, it is at least 12 dB down. Called shot by shot it comes to rest
/// within a few shots. It cannot tell an echo from noise: bound the steps by what the receiver's noise allows.
///
/// Without samples or steps the gain stays.
#[must_use]
pub fn next_gain(health: &RecordHealth, format: AdcFormat, now: Decibels, steps: &[Decibels]) -> Decibels {
    if health.samples == 0 {
        return now;
    }
    let limit = if health.clipped > 0 {
        now.get() - 12.0
    } else {
        let peak = i32::from(health.highest).abs().max(i32::from(health.lowest).abs());
        let share = peak as f32 / format.full_scale();
        // A step that was chosen to end at the limit may pass it by the rounding of a code: without some
        // slack the gain would swing between two steps for ever.
        if share >= *GOOD_PEAK.start() && share <= GOOD_PEAK.end() + 0.005 {
            return now;
        }
        let change = Decibels::from_amplitude_ratio(GOOD_PEAK.end() / math::larger(share, 1e-6)).get();
        now.get() + math::smaller(change, 20.0)
    };
    // A step that is meant to be the limit shall not be lost by rounding.
    let limit = limit + 1e-3;
    let mut best: Option<f32> = None;
    let mut lowest: Option<f32> = None;
    for step in steps.iter().filter(|step| step.is_finite()).map(|step| step.get()) {
        if step <= limit && best.is_none_or(|best| step > best) {
            best = Some(step);
        }
        if lowest.is_none_or(|lowest| step < lowest) {
            lowest = Some(step);
        }
    }
    best.or(lowest).map_or(now, Decibels::new)
}

/// Why records do not become one.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum AverageError {
    /// There is no shot, or it is empty.
    Nothing,
    /// The caller's memory is too short.
    TooLittleRoom {
        /// Places needed.
        needed: u32,
        /// Places there.
        got: u32,
    },
    /// A shot has another length than the first.
    LengthChanged {
        /// Samples in the first.
        expected: u32,
        /// Samples in this one.
        got: u32,
    },
    /// A shot has another format than the first.
    FormatChanged,
    /// A shot's sample rate or first sample is not where it must be.
    ClockChanged,
    /// More than [`MOST_SHOTS`] shots.
    TooManyShots,
    /// The number of phases is not between 1 and [`MOST_PHASES`].
    Phases,
    /// Two shots have the same delay.
    PhaseTwice {
        /// The phase that was there already.
        phase: u8,
    },
    /// Some delays were not shot.
    PhasesMissing {
        /// How many.
        missing: u8,
    },
    /// No delay was shot again, so that nobody knows whether anything has moved.
    NotRepeated,
    /// Probe or part have moved while the delays were shot.
    Moved {
        /// By how much later the echoes came when a delay was shot again; of no meaning beyond a quarter of a cycle.
        picoseconds: i32,
    },
}

impl AverageError {
    /// What is wrong and what to do, in one sentence.
    #[must_use]
    pub const fn sentence(&self) -> &'static str {
        match self {
            Self::Nothing => "there is no shot with samples in it: fire first",
            Self::TooLittleRoom { .. } => "the memory for the result is too short: lend more, or shorten the record",
            Self::LengthChanged { .. } => {
                "a shot has another length than the first: average shots of one place and set-up"
            }
            Self::FormatChanged => {
                "a shot has another converter format than the first: average shots of one gain and converter"
            }
            Self::ClockChanged => {
                "a shot's samples were not taken when they should have been: keep sample rate and trigger, and give the true time of the first sample"
            }
            Self::TooManyShots => "an average takes at most 256 shots: finish it and begin another",
            Self::Phases => "the number of delayed shots must be 1 to 64",
            Self::PhaseTwice { .. } => "two shots have the same delay: fire each delay once, or average them first",
            Self::PhasesMissing { .. } => "some delays are missing: fire each of them once",
            Self::NotRepeated => "no delay was fired again, so that a movement would not be noticed: repeat the first",
            Self::Moved { .. } => {
                "probe or part moved while the delays were fired: hold them still, fire faster, or state the trigger's jitter"
            }
        }
    }
}

impl fmt::Display for AverageError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(self.sentence())?;
        match self {
            Self::TooLittleRoom { needed, got } => write!(f, " (needed {needed} samples, got {got})"),
            Self::LengthChanged { expected, got } => write!(f, " (expected {expected} samples, got {got})"),
            Self::PhaseTwice { phase } => write!(f, " (phase {phase})"),
            Self::PhasesMissing { missing } => write!(f, " ({missing} missing)"),
            Self::Moved { picoseconds } => write!(f, " (echoes {picoseconds} ps later)"),
            _ => Ok(()),
        }
    }
}

impl core::error::Error for AverageError {}

#[cfg(test)]
#[path = "average_tests.rs"]
mod tests;
