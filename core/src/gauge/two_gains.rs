//! A loud interface and a weak back wall: two records of one place, taken at two gains, read as one.
//!
//! A gain that shows a weak back wall clips the interface echo of a delay line, which then has no arrival to count from. One
//! more record at a gain that keeps it whole has it: [`Gauge::measure_two_gains`] takes the interface from there and all else from
//! the loud record.

use super::Gauge;
use super::interpretation::start_of_wall;
use crate::echo::{Echo, EchoRole};
use crate::gauge::Reading;
use crate::math;
use crate::outcome::NoReading;
use crate::record::average::median;
use crate::record::{Record, SampleRange};
use crate::setup::ProbeKind;
use crate::units::{Decibels, Seconds};
use core::fmt;

/// Largest distance of the two gains, in decibels.
const MOST_DECIBELS: f32 = 80.0;
/// The codes may contradict the stated distance of the gains by so much: gain steps are off by less.
const CONTRADICTION_DECIBELS: f32 = 3.0;
/// So many samples, well above the noise and whole in both records, tell the distance of the gains.
const TELLING_SAMPLES: u32 = 8;
/// Median deviations, of one code at least, from which a sample of the quiet record stands above its noise.
const TELLING_HEIGHT: f32 = 8.0;
/// Relative standard uncertainty up to which the codes' ratio tells: a third of what contradicts.
const SURE_SLOPE: f32 = 0.1;
/// An echo of less than so many times what a Gaussian pulse's skirt has there is taken for a part of the interface echo.
const SKIRT_MARGIN: f32 = 3.0;

/// Two records of one place. Averages are welcome.
#[derive(Clone, Copy, Debug)]
pub struct TwoGains<'r> {
    quiet: Record<'r>,
    loud: Record<'r>,
    step: Decibels,
    delay: Seconds,
}

impl<'r> TwoGains<'r> {
    /// `quiet` has the interface echo whole, `loud` the back walls high enough; `step` is by how much the gain of `loud` is the
    /// higher, above 0 and at most 80 dB. Its error hardly matters: no arrival hangs on it.
    ///
    /// # Errors
    /// A step that is none; another clock or length; codes that contradict the step by more than 3 dB, as far as they tell.
    pub fn new(quiet: Record<'r>, loud: Record<'r>, step: Decibels) -> Result<Self, TwoGainsError> {
        if !(step.get() > 0.0 && step.get() <= MOST_DECIBELS) {
            return Err(TwoGainsError::Step);
        }
        if quiet.clock() != loud.clock() || quiet.codes().len() != loud.codes().len() {
            return Err(TwoGainsError::RecordsDiffer);
        }
        if let Some(seen) = seen_step(&quiet, &loud)
            && (seen.get() - step.get()).abs() > CONTRADICTION_DECIBELS
        {
            return Err(TwoGainsError::Contradicted { seen });
        }
        Ok(Self {
            quiet,
            loud,
            step,
            delay: Seconds::ZERO,
        })
    }

    /// The same for an amplifier whose delay may differ between the two gains by so much (standard uncertainty): 0 unless
    /// stated.
    #[must_use]
    pub const fn with_delay_uncertainty(mut self, delay: Seconds) -> Self {
        self.delay = delay;
        self
    }
}

/// The distance of the gains as the codes show it: the regression of loud on quiet codes over samples that stand high above the
/// noise of the quiet record and are whole in both. `None` if there are too few.
fn seen_step(quiet: &Record<'_>, loud: &Record<'_>) -> Option<Decibels> {
    let (a, b) = (quiet.format(), loud.format());
    // Half of the samples, where there is no echo, lie within 0.67 standard deviations.
    let usual = median(quiet.codes().iter().map(|&code| i32::from(code).abs())) as f32;
    let least = TELLING_HEIGHT * math::larger(usual, 1.0);
    let (mut telling, mut x1, mut y1, mut xx, mut xy, mut yy) = (0u32, 0.0, 0.0, 0.0, 0.0, 0.0);
    for (&x, &y) in quiet.codes().iter().zip(loud.codes()) {
        let whole = x < a.upper_rail() && x > a.lower_rail() && y < b.upper_rail() && y > b.lower_rail();
        let (x, y) = (f32::from(x), f32::from(y));
        if whole && x.abs() > least {
            telling += 1;
            x1 += x;
            y1 += y;
            xx += x * x;
            xy += x * y;
            yy += y * y;
        }
    }
    let count = telling as f32;
    let (along, across) = (count * xx - x1 * x1, count * xy - x1 * y1);
    let slope = across / along;
    // Variance of the slope over its square, from what the line leaves over.
    let left = ((count * yy - y1 * y1) * along / (across * across) - 1.0) / (count - 2.0);
    let sure = telling >= TELLING_SAMPLES && slope > 0.0 && left < SURE_SLOPE * SURE_SLOPE;
    sure.then(|| Decibels::from_amplitude_ratio(slope * (a.full_scale() / b.full_scale())))
}

/// Interface echo, and a coating's far side.
type Front = heapless::Vec<Echo, 2>;

impl Gauge<'_> {
    /// Reads a wall behind a delay line from two records of one place: the interface echo (and a coating's far side) from the quiet one,
    /// the back walls from the loud one, in which the interface echo may be clipped as much as it will. What the
    /// interface's skirt covers in the loud record is not read. Without a delay line nothing counts from an
    /// interface: the loud record is read as it is.
    ///
    /// The uncertainty holds the noise of either record where it counts, the trigger's jitter of both, which two shots do not have
    /// in common, and what [`TwoGains::with_delay_uncertainty`] states. Probe and part must not move between the two: nothing
    /// here notices it. [`Gauge::findings`] are those of the loud record, with the interface echo of the quiet one.
    ///
    /// # Errors
    /// As [`Gauge::measure`]; a quiet record that is clipped at the interface raises [`crate::outcome::Doubt::ClippedEcho`] if
    /// too little of it is whole.
    #[inline(never)]
    pub fn measure_two_gains(&mut self, pair: &TwoGains<'_>) -> Result<Reading, NoReading> {
        if self.setup.probe.kind != ProbeKind::DelayLine {
            return self.measure(&pair.loud);
        }
        let (front, quiet_noise) = self.front(&pair.quiet)?;
        let record = &pair.loud;
        self.findings = super::Findings::default();
        let range = self.sound_range(record)?;
        let place = front.last().map_or(0.0, |echo| echo.position.as_samples());
        let behind = self.behind(place, range);
        self.not_clipped(record.health(behind))?;
        let (scan, mut noise) = self.scan(record, range);
        self.measure_echoes(record, range, &scan, &mut noise);
        self.take_front(&front, pair, noise.per_sample / quiet_noise);
        let mut taken = Front::new();
        for echo in self.findings.echoes.iter().take(front.len()) {
            let _ = taken.push(*echo);
        }
        let train = self.find_train(record, range, &scan, &mut noise);
        // The loud record tells nothing of the quiet one's echoes.
        let before = |echo: &&mut Echo| matches!(echo.role, EchoRole::Interface | EchoRole::Coating);
        for (echo, taken) in self.findings.echoes.iter_mut().filter(before).zip(taken) {
            *echo = Echo {
                role: echo.role,
                ..taken
            };
        }
        let outcome = train.and_then(|train| self.wall(record, &noise, &train));
        self.describe(record, &noise);
        self.noise = noise;
        outcome
    }

    /// What comes back before the wall, from the quiet record, and that record's noise.
    fn front(&mut self, record: &Record<'_>) -> Result<(Front, f32), NoReading> {
        self.findings = super::Findings::default();
        let range = self.usable_range(record)?;
        let (scan, mut noise) = self.scan(record, range);
        self.measure_echoes(record, range, &scan, &mut noise);
        if self.findings.echoes.is_empty() {
            return Err(self.nothing_found(record, range));
        }
        start_of_wall(&self.setup, record, &mut self.findings.echoes)?;
        let mut front = Front::new();
        for echo in &self.findings.echoes {
            if matches!(echo.role, EchoRole::Interface | EchoRole::Coating) {
                // One of each at most.
                let _ = front.push(*echo);
            }
        }
        if front.is_empty() {
            return Err(NoReading::NoInterfaceEcho);
        }
        Ok((front, noise.per_sample))
    }

    /// The part of a range that lies a pulse's duration behind a place.
    fn behind(&self, place: f32, range: SampleRange) -> SampleRange {
        let from = math::saturating_i32(place + self.facts.envelope_duration)
            .max(0)
            .unsigned_abs();
        SampleRange {
            start: from.clamp(range.start, range.end),
            end: range.end,
        }
    }

    /// Puts the quiet record's echoes in the place of what the loud one has there and before. They keep their ratio to the
    /// noise, by which they are judged: `noises` is the loud record's over the quiet one's.
    fn take_front(&mut self, front: &Front, pair: &TwoGains<'_>, noises: f32) {
        let spread = self.facts.envelope_duration / 4.292;
        let louder =
            pair.step.as_amplitude_ratio() * (pair.loud.format().full_scale() / pair.quiet.format().full_scale());
        let last = front.last().map_or(0.0, |echo| echo.position.as_samples());
        let echoes = &mut self.findings.echoes;
        echoes.retain(|echo| {
            let covered = front.iter().any(|interface| {
                let distance = echo.position.samples_after(interface.position) / spread;
                echo.amplitude < SKIRT_MARGIN * louder * interface.amplitude * math::exp(-0.5 * distance * distance)
            });
            echo.position.as_samples() > last + spread && !covered
        });
        let one = self.setup.trigger_jitter.get();
        let shots = |record: &Record<'_>| f32::from(record.format().shots.max(1));
        let jitter = one * one * (1.0 / shots(&pair.quiet) + 1.0 / shots(&pair.loud));
        for (number, interface) in front.iter().enumerate() {
            if echoes.is_full() {
                let _ = echoes.pop();
            }
            let u = interface.standard_uncertainty.get();
            let delay = pair.delay.get();
            let taken = Echo {
                amplitude: interface.amplitude * noises,
                standard_uncertainty: Seconds::new(math::sqrt(u * u + delay * delay + jitter)),
                role: EchoRole::Other,
                ..*interface
            };
            let _ = echoes.insert(number.min(echoes.len()), taken);
        }
    }
}

/// Why two records are not two gains of one place.
#[derive(Clone, Copy, Debug, PartialEq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum TwoGainsError {
    /// The distance of the gains is not above 0 and up to 80 dB.
    Step,
    /// The two records differ in sample rate, time of the first sample or length.
    RecordsDiffer,
    /// The codes show another distance of the gains than stated.
    Contradicted {
        /// What they show.
        seen: Decibels,
    },
}

impl TwoGainsError {
    /// What is wrong and what to do, in one sentence.
    #[must_use]
    pub const fn sentence(&self) -> &'static str {
        match self {
            Self::Step => {
                "the loud record's gain must be higher than the quiet one's, by up to 80 dB: swap them, or state it"
            }
            Self::RecordsDiffer => {
                "the two records differ in clock or length: take both with the same sample rate, trigger and window"
            }
            Self::Contradicted { .. } => {
                "the records' codes contradict the stated gains: correct the step, or take both of one place"
            }
        }
    }
}

impl fmt::Display for TwoGainsError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(self.sentence())?;
        if let Self::Contradicted { seen } = self {
            write!(f, " (the codes show {} dB)", math::round_to_i32(seen.get()))?;
        }
        Ok(())
    }
}

impl core::error::Error for TwoGainsError {}
