//! Learning the reference pulse from many shots of one echo.
//!
//! **In**: shots of one place on a block, and in each the echo's arrival by whatever pulse is at hand. **Out**: a pulse
//! with its own noise ([`PulseQuality`]), ready for [`crate::Gauge::learn_pulse_of_quality`].
//!
//! 1. [`PulseLearner::add`] moves each shot by the fraction of a sample that brings the echo to the same place and
//!    sums: what jitters between shots does not smear the pulse. That the pulse at hand is only modelled does not
//!    matter, it is off by the same in every shot.
//! 2. [`PulseLearner::finish`] takes the mean, cuts where the envelope stays below -46 dB, or within the noise, for a
//!    cycle, and tapers half a cycle at either end.
//! 3. [`unexplained`] tells by how much an echo of another shot differs from the learned pulse.
//!
//! The pulse's noise is that of one shot over the root of the number of shots. From [`ENOUGH_SHOTS`] on, a reading from
//! one shot of the same signal loses less than half a per cent to it.
//!
//! The echo must stand alone, and below about 12 dB the alignment follows the noise: a mean of that is the pulse at hand,
//! drawn by noise.

use crate::echo::correlation::energy;
use crate::echo::envelope::{squared_at, stride};
use crate::echo::pulse::{PulseQuality, ReferencePulse};
use crate::echo::{Echo, interpolate, under};
use crate::math;
use crate::record::Record;
use crate::setup::PULSE_CAPACITY;
use core::fmt;

/// From this many shots on, the pulse's own noise is small against that of a shot (1 / sqrt(128) is -21 dB).
pub const ENOUGH_SHOTS: u16 = 128;
/// Most shots of one pulse.
pub const MOST_SHOTS: u16 = 4096;

/// Where a learned pulse may end: -46 dB below its envelope's peak.
const END_LEVEL: f32 = 0.005;
/// Or where it may not be told from noise: the envelope of noise exceeds 3.5 standard deviations once in 460
/// samples (Rayleigh's distribution, exp(-3.5²/2)).
const NOISE_LEVEL: f32 = 3.5;
/// Noise that dithers the converter well enough for averages to gain resolution, over its rounding noise: 0.4 steps, with the
/// rounding that is measured with them sqrt(0.4² + 1/12), over 1 / sqrt(12).
const DITHERS: f32 = 1.708_8;

/// The coherent sum of shots, each moved so that its echo lies at the same place.
#[derive(Debug)]
pub struct PulseLearner<'b> {
    sums: &'b mut [f32],
    before: usize,
    shots: u16,
    variances: f32,
    floor: f32,
}

/// A pulse that was learned.
#[derive(Clone, Copy, Debug)]
pub struct LearnedPulse<'b> {
    /// Its samples at the shots' rate, envelope peak 1.
    pub samples: &'b [f32],
    /// Its own noise; its mismatch is not measured yet, and 0; what it was learned on, the caller knows.
    pub quality: PulseQuality,
    /// How many shots are in it.
    pub shots: u16,
}

impl<'b> PulseLearner<'b> {
    /// Begins with a window of `sums.len()` samples, `before` of them before the echo's place. The window must hold the
    /// whole pulse and nothing of its neighbours: half of the way to them is right.
    #[must_use]
    pub fn new(sums: &'b mut [f32], before: usize) -> Self {
        sums.fill(0.0);
        Self {
            sums,
            before,
            shots: 0,
            variances: 0.0,
            floor: 0.0,
        }
    }

    /// Adds the echo of one more shot.
    ///
    /// # Errors
    /// A clipped echo, a window that stands out of the record, too many shots; nothing is added then.
    pub fn add(&mut self, record: &Record<'_>, echo: &Echo) -> Result<(), LearningError> {
        if echo.clipped {
            return Err(LearningError::Clipped);
        }
        if self.shots >= MOST_SHOTS {
            return Err(LearningError::TooManyShots);
        }
        let first = (echo.position.index as usize).checked_sub(self.before);
        let first = first.ok_or(LearningError::OutsideRecord)?;
        let end = first.saturating_add(self.sums.len());
        // The next sample belongs to the last place between two.
        if end >= record.codes().len() {
            return Err(LearningError::OutsideRecord);
        }
        for (place, sum) in self.sums.iter_mut().enumerate() {
            *sum += interpolate::at_codes(record.codes(), first + place, echo.position.fraction);
        }
        let noise = echo.amplitude / echo.snr.as_amplitude_ratio();
        let rounding = record.format().rounding_noise(noise);
        self.variances += noise * noise;
        if noise < DITHERS * rounding {
            // Rounding that is the same in every shot.
            self.floor = math::larger(self.floor, rounding);
        }
        self.shots += 1;
        Ok(())
    }

    /// How many shots were added.
    #[must_use]
    pub const fn shots(&self) -> u16 {
        self.shots
    }

    /// The mean, cut and tapered.
    ///
    /// # Errors
    /// No shot; nothing but zeros; no room for the pulse between its neighbours; a pulse longer than
    /// [`PULSE_CAPACITY`].
    pub fn finish(self, samples_per_cycle: f32) -> Result<LearnedPulse<'b>, LearningError> {
        let Self {
            sums,
            before,
            shots,
            variances,
            floor,
        } = self;
        if shots == 0 {
            return Err(LearningError::NoShot);
        }
        let count = f32::from(shots);
        // A constant offset of the converter would end up in the envelope.
        let offset = sums.iter().fold(0.0, |all, sum| all + sum) / (sums.len().max(1) as f32);
        for sum in sums.iter_mut() {
            *sum = (*sum - offset) / count;
        }
        let noise = math::larger(math::sqrt(variances / count / count), floor);

        let cycle = usize::try_from(math::saturating_i32(samples_per_cycle)).unwrap_or(1) + 1;
        let stride = stride(samples_per_cycle);
        let envelope = |index: usize| math::sqrt(squared_at(sums, index, stride));
        let near = before.saturating_sub(cycle)..(before + cycle + 1).min(sums.len());
        let peak = near.fold(0.0, |highest, index| math::larger(highest, envelope(index)));
        if !(peak > 0.0 && peak.is_finite()) {
            return Err(LearningError::NoPulse);
        }
        let level = math::larger(END_LEVEL * peak, NOISE_LEVEL * noise);
        // The last loud sample on a side: beyond it the envelope stays below the level for a cycle.
        let reach = |places: &mut dyn Iterator<Item = usize>| {
            let mut last_loud = 0;
            for (distance, place) in places.enumerate() {
                if envelope(place) >= level {
                    last_loud = distance;
                } else if distance - last_loud > cycle {
                    break;
                }
            }
            last_loud
        };
        let after = reach(&mut (before..sums.len()));
        let ahead = reach(&mut (0..=before.min(sums.len().saturating_sub(1))).rev());
        let taper = (cycle / 2).max(2);
        let start = before.saturating_sub(ahead + taper);
        let end = (before + after + taper + 1).min(sums.len());
        if ahead + after < cycle || end - start < 2 * cycle + 1 {
            return Err(LearningError::NoRoom);
        }
        if end - start > PULSE_CAPACITY {
            return Err(LearningError::TooLong);
        }
        let samples = sums.get_mut(start..end).ok_or(LearningError::NoRoom)?;
        let length = samples.len();
        for (i, sample) in samples.iter_mut().enumerate() {
            *sample /= peak;
            let edge = i.min(length - 1 - i);
            if edge < taper {
                // Raised cosine: no step at either end of the taper.
                let turn = core::f32::consts::PI * (edge as f32 + 0.5) / taper as f32;
                *sample *= 0.5 - 0.5 * math::cos(turn);
            }
        }
        Ok(LearnedPulse {
            samples,
            quality: PulseQuality {
                noise: noise / peak,
                mismatch: 0.0,
                learned_on: None,
            },
            shots,
        })
    }
}

/// The energy of an echo that the fitted pulse leaves unexplained, less what the noise of record and pulse explains, over
/// the fitted energy. By chance it is negative as often as positive where the pulse fits: the mean of several shots, and
/// of that the root ([`mismatch`]), is the pulse's mismatch. `None` if the echo stands out of the record.
///
/// `noise` is the record's, root mean square per sample in codes. The echo must be isolated and of a shot that is not in
/// the pulse.
#[must_use]
pub fn unexplained(record: &Record<'_>, pulse: &ReferencePulse<'_>, noise: f32, echo: &Echo) -> Option<f32> {
    let codes = under(record, pulse, echo.position)?;
    let explained = echo.amplitude * echo.amplitude * pulse.facts.energy;
    let of_pulse = echo.amplitude * pulse.facts.noise;
    // Delay, amplitude and mean were fitted.
    let freedom = codes.len() as f32 - 3.0;
    let by_noise = (noise * noise + of_pulse * of_pulse) * freedom;
    (explained > 0.0).then(|| (energy(codes) - explained - by_noise) / explained)
}

/// The mismatch that a mean of [`unexplained`] energies stands for: its root, 0 where chance left it negative.
#[must_use]
pub fn mismatch(mean_unexplained: f32) -> f32 {
    math::clamp(math::sqrt(mean_unexplained), 0.0, 1.0)
}

/// Why a pulse cannot be learned.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum LearningError {
    /// Samples under the echo are clipped.
    Clipped,
    /// More than [`MOST_SHOTS`].
    TooManyShots,
    /// The window round the echo stands out of the record.
    OutsideRecord,
    /// No shot was added.
    NoShot,
    /// Nothing but zeros.
    NoPulse,
    /// The pulse does not fit between its neighbours.
    NoRoom,
    /// The pulse is longer than [`PULSE_CAPACITY`].
    TooLong,
}

impl LearningError {
    /// What is wrong and what to do, in one sentence.
    #[must_use]
    pub const fn sentence(&self) -> &'static str {
        match self {
            Self::Clipped => "its echo is clipped: lower the gain and record the block again",
            Self::TooManyShots => "more shots than one pulse takes: use fewer",
            Self::OutsideRecord => "its echo has no room at the record's end: record for longer",
            Self::NoShot => "no shot shows the echo: record the block again",
            Self::NoPulse => "holds no pulse: record the block again",
            Self::NoRoom => {
                "its first back wall has no room for a reference pulse: take a thicker block, or record for longer"
            }
            Self::TooLong => "its pulse is longer than the gauge can hold: lower the sample rate, or raise the signal",
        }
    }
}

impl fmt::Display for LearningError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(self.sentence())
    }
}

impl core::error::Error for LearningError {}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::echo::Surroundings;
    use crate::echo::pulse::learn;
    use crate::echo::{EchoRole, Polarity};
    use crate::record::{AdcFormat, SampleClock};
    use crate::units::{Decibels, Hertz, SamplePosition, Seconds};
    use std::vec::Vec;

    const SPC: f32 = 10.0;
    const LENGTH: usize = 400;

    /// A skewed pulse: rise 5, decay 8 samples, phase 0.4.
    fn sample(t: f32) -> f32 {
        let width = if t < 0.0 { 5.0 } else { 8.0 };
        math::exp(-t * t / (2.0 * width * width)) * math::cos(core::f32::consts::TAU * t / SPC + 0.4)
    }

    /// Noise from a congruence: twelve uniform numbers less six, variance 1.
    fn normal(state: &mut u32) -> f32 {
        let mut sum = -6.0;
        for _ in 0..12 {
            *state = state.wrapping_mul(1_664_525).wrapping_add(1_013_904_223);
            sum += (*state >> 8) as f32 / (1u32 << 24) as f32;
        }
        sum
    }

    fn shot(place: f32, amplitude: f32, noise: f32, state: &mut u32) -> [i16; LENGTH] {
        let mut codes = [0; LENGTH];
        for (i, code) in codes.iter_mut().enumerate() {
            let value = amplitude * sample(i as f32 - place) + noise * normal(state) + 30.0;
            *code = math::round_to_i32(value) as i16;
        }
        codes
    }

    fn echo(place: f32, amplitude: f32, noise: f32) -> Echo {
        Echo {
            position: SamplePosition::new(0, place),
            arrival: Seconds::ZERO,
            standard_uncertainty: Seconds::ZERO,
            amplitude,
            polarity: Polarity::Positive,
            snr: Decibels::from_amplitude_ratio(amplitude / noise),
            mismatch: 0.0,
            group_lag: Seconds::ZERO,
            clipped: false,
            information: 1.0,
            role: EchoRole::Other,
        }
    }

    fn record(codes: &[i16]) -> Record<'_> {
        Record::new(codes, AdcFormat::signed(16), SampleClock::new(Hertz::from_mhz(50.0)))
    }

    /// Learns from shots whose trigger jitters by up to a cycle.
    fn learned(shots: u16, noise: f32, sums: &mut [f32]) -> LearnedPulse<'_> {
        let mut state = 7;
        let mut learner = PulseLearner::new(sums, 60);
        for number in 0..shots {
            let place = 200.0 + math::sin(f32::from(number) * 1.7) * 5.0;
            let codes = shot(place, 10_000.0, noise, &mut state);
            learner.add(&record(&codes), &echo(place, 10_000.0, noise)).unwrap();
        }
        learner.finish(SPC).unwrap()
    }

    #[test]
    fn jittering_shots_give_the_pulse_back() {
        let mut sums = [0.0; 140];
        let learned = learned(64, 20.0, &mut sums);
        // The window began 60 samples before the echo's place; the pulse is told by its highest sample.
        let highest = learned
            .samples
            .iter()
            .enumerate()
            .fold((0, 0.0), |best, (i, s)| if *s > best.1 { (i, *s) } else { best });
        let truth: Vec<f32> = (0..140).map(|i| sample(i as f32 - 60.0)).collect();
        let middle = truth
            .iter()
            .enumerate()
            .fold((0, 0.0), |best, (i, s)| if *s > best.1 { (i, *s) } else { best });
        let scale = middle.1 / highest.1;
        for (i, s) in learned
            .samples
            .iter()
            .enumerate()
            .skip(5)
            .take(learned.samples.len() - 10)
        {
            let there = truth[i + middle.0 - highest.0];
            assert!((s * scale - there).abs() < 0.004, "{i}: {s} {there}");
        }
        assert!((40..80).contains(&learned.samples.len()), "{}", learned.samples.len());
    }

    #[test]
    fn law_the_pulses_noise_falls_with_the_root_of_the_shots() {
        for (shots, noise) in [(1u16, 0.02), (4, 0.01), (16, 0.005), (128, 0.001_767_77f32)] {
            let mut sums = [0.0; 140];
            let learned = learned(shots, 200.0, &mut sums);
            // The window's envelope peak lies between samples, and noise is on it.
            let found = learned.quality.noise;
            assert!((found / noise - 1.0).abs() < 0.06, "{shots} shots: {found} {noise}");
            assert_eq!(learned.shots, shots);
        }
        // Rounding that no noise dithers is the same in every shot: 1/sqrt(12) of 10000 codes at least.
        let mut sums = [0.0; 140];
        let still = learned(64, 0.1, &mut sums).quality.noise;
        assert!(still > 2.8e-5, "{still}");
    }

    /// How far the echo of another pulse differs, and that noise alone counts as nothing.
    #[test]
    fn val_mismatch() {
        let mut sums = [0.0; 140];
        let pulse = learned(128, 100.0, &mut sums);
        let mut buffer = [0.0; PULSE_CAPACITY];
        let facts = learn(pulse.samples, SPC, &mut buffer)
            .unwrap()
            .with_quality(pulse.quality);
        let reference = ReferencePulse::new(&buffer, facts);
        let (mut own, mut other) = (0.0, 0.0);
        let mut state = 99;
        for number in 0..40u16 {
            let place = 200.0 + math::sin(f32::from(number)) * 3.0;
            // A disturbance in quadrature, 5 % of the pulse: the root of the unexplained energy is 5 % (by definition).
            for (share, sum) in [(0.0, &mut own), (0.05, &mut other)] {
                let mut codes = shot(place, 10_000.0, 100.0, &mut state);
                for (i, code) in codes.iter_mut().enumerate() {
                    let t = i as f32 - place;
                    let width = if t < 0.0 { 5.0 } else { 8.0 };
                    let envelope = math::exp(-t * t / (2.0 * width * width));
                    // Turned by a quarter on one half and back on the other: no delay explains it.
                    let turned = math::sin(core::f32::consts::TAU * t / SPC + 0.4) * if t < 1.9 { 1.0 } else { -1.0 };
                    *code += math::round_to_i32(10_000.0 * share * envelope * turned) as i16;
                }
                let search = crate::echo::arrival::Search {
                    around: place as u32,
                    reach: 7.0,
                    sign: crate::echo::correlation::Sign::Positive,
                    samples_per_cycle: SPC,
                };
                let estimator = crate::echo::arrival::Estimator::LeastSquares;
                let found = crate::echo::arrival::estimate(estimator, &codes, &search, &reference, &mut [0.0; 256]);
                let surroundings = Surroundings {
                    record: record(&codes),
                    pulse: reference,
                    noise: 100.0,
                    timing_noise: crate::echo::noise::TimingNoise::steady(100.0),
                    samples_per_cycle: SPC,
                };
                let echo = crate::echo::echo_at(&surroundings, found.unwrap()).unwrap();
                *sum += unexplained(&surroundings.record, &reference, 100.0, &echo).unwrap() / 40.0;
            }
        }
        assert!(mismatch(own) < 0.008, "{own}");
        assert!((mismatch(other) - 0.05).abs() < 0.008, "{}", mismatch(other));
        assert_eq!(mismatch(-0.1), 0.0);
    }

    #[test]
    fn what_cannot_be_learned_is_refused() {
        let mut sums = [0.0; 140];
        let mut state = 1;
        let codes = shot(200.0, 10_000.0, 1.0, &mut state);
        let mut learner = PulseLearner::new(&mut sums, 60);
        let at = |place| echo(place, 10_000.0, 1.0);
        assert_eq!(
            learner.add(&record(&codes), &at(59.0)),
            Err(LearningError::OutsideRecord)
        );
        assert_eq!(
            learner.add(&record(&codes), &at(320.0)),
            Err(LearningError::OutsideRecord)
        );
        let clipped = Echo {
            clipped: true,
            ..at(200.0)
        };
        assert_eq!(learner.add(&record(&codes), &clipped), Err(LearningError::Clipped));
        assert_eq!(learner.shots(), 0);
        assert_eq!(learner.finish(SPC).unwrap_err(), LearningError::NoShot);
        let mut learner = PulseLearner::new(&mut sums, 60);
        learner.add(&record(&[0; LENGTH]), &at(200.0)).unwrap();
        assert_eq!(learner.finish(SPC).unwrap_err(), LearningError::NoPulse);
        // Neighbours that leave a window of a cycle.
        let mut small = [0.0; 11];
        let mut learner = PulseLearner::new(&mut small, 5);
        learner.add(&record(&codes), &at(200.0)).unwrap();
        assert_eq!(learner.finish(SPC).unwrap_err(), LearningError::NoRoom);
    }
}
