//! Two rounds of shots of one place read as one: noise without echoes, and no echo that only one round has.

use super::steps::surroundings;
use super::{Gauge, Reading};
use crate::echo::correlation::{correlate_into, energy, slope};
use crate::echo::noise::{Noise, reached};
use crate::echo::pulse::ReferencePulse;
use crate::echo::rest::rest_of_rounds;
use crate::echo::scan::Scan;
use crate::echo::{Echo, EchoRole, Surroundings, interpolate};
use crate::math;
use crate::outcome::NoReading;
use crate::record::Record;
use crate::record::rounds::TwoRounds;
use crate::setup::Span;
use crate::units::Metres;
use crate::wall::{thickness, way};

/// An echo whose rounds differ by this share of it, or more, is not the same in both: a wall that moves by a
/// twenty-fifth of a cycle, or half as high again the second time.
const UNLIKE: f32 = 0.25;
/// Standard deviations of noise that are no chance any more: once in 25 000 echoes.
const UNLIKE_DEVIATIONS: f32 = 4.5;
/// Nothing is read after an echo was left out that is as high as this share of the highest one that is left.
const AS_HIGH: f32 = 0.5;
/// Standard uncertainties that a movement must exceed (1 in 16 000), because several echoes are asked.
const BEYOND_CHANCE: f32 = 4.0;
/// Lags that interpolation between two of them needs.
const LAGS: usize = 2 * interpolate::REACH + 4;

/// What the difference of two rounds holds of an echo.
#[derive(Clone, Copy, Debug)]
struct Change {
    /// Amplitude of the pulse in the difference over that in the mean.
    height: f32,
    /// By how much later than in the mean the echo came in the second round, in samples.
    later: f32,
}

impl Change {
    /// Both together, as a share of the echo.
    fn share(self, pulse: &ReferencePulse<'_>) -> f32 {
        let turned = self.later * pulse.facts.angular_frequency;
        math::sqrt(self.height * self.height + turned * turned)
    }
}

/// Root of the difference's energy under an echo, beyond what noise explains, over that of the echo: what is neither
/// higher nor later counts too, as where an echo has moved by a whole cycle.
fn energy_share(difference: &Record<'_>, around: &Surroundings<'_>, echo: &Echo) -> f32 {
    let pulse = &around.pulse;
    let start = math::saturating_i32(echo.position.as_samples() - pulse.facts.origin);
    let start = usize::try_from(start).unwrap_or(0);
    let codes = difference.codes().get(start..).unwrap_or(&[]);
    let codes = codes.get(..pulse.samples.len()).unwrap_or(codes);
    let count = codes.len() as f32;
    let by_noise = around.noise * around.noise * (count + 5.0 * math::sqrt(2.0 * count));
    let beyond = math::larger(energy(codes) - by_noise, 0.0);
    math::sqrt(beyond / (echo.amplitude * echo.amplitude * pulse.facts.energy))
}

/// How an echo of the mean has changed: the correlation of the difference with the pulse at its place, and its slope
/// (a shift by h leaves -h s' of the pulse s).
fn change(difference: &Record<'_>, pulse: &ReferencePulse<'_>, echo: &Echo) -> Change {
    let reach = interpolate::REACH as i32 + 1;
    let start = echo.position.as_samples() - pulse.facts.origin;
    let whole = math::floor(start);
    let mut lags = [0.0; LAGS];
    correlate_into(
        difference.codes(),
        math::saturating_i32(whole) - reach,
        pulse,
        &mut lags,
    );
    let place = reach as f32 + (start - whole);
    let amplitude = echo.signed_amplitude();
    Change {
        height: interpolate::at(&lags, place) / (amplitude * pulse.facts.energy),
        later: slope(&lags, place) / (amplitude * pulse.facts.derivative_energy),
    }
}

/// Echoes that were left out.
struct Unlike {
    echoes: u8,
    /// What is left may be what was weak enough to pass.
    any_as_high: bool,
}

impl Gauge<'_> {
    /// Measures the mean of two rounds of shots of one place, and uses what their difference tells:
    ///
    /// * noise free of echoes, also where they fill the record (`val_two_rounds` prints its error). Grain is not in it: where
    ///   quiet stretches of the mean show more, that counts. So a train so dense that the scan finds no peaks in it is still
    ///   taken for noise;
    /// * an echo of which the rounds differ by a quarter or more, and by more than noise explains, is left out, as if it
    ///   were not there: interference that comes at another time each time gives no reading. If it was half as high as what is left,
    ///   or more, nothing is read;
    /// * a wall whose reading has moved from round to round by more than chance and its expanded uncertainty is refused.
    ///   The limit is for a steady drift: its ends are as far off the mean as the two rounds are from each other.
    ///
    /// [`Gauge::findings`] are those of the mean without the echoes that were left out.
    ///
    /// # Errors
    /// As [`Gauge::measure`]; [`NoReading::Unsteady`] for a wall that moves, and instead of any other refusal after echoes were
    /// left out.
    #[inline(never)]
    pub fn measure_two_rounds(&mut self, rounds: &TwoRounds<'_>) -> Result<Reading, NoReading> {
        let (record, difference) = (rounds.mean(), rounds.difference());
        self.findings = super::Findings::default();
        let range = self.usable_range(&record)?;
        let (_, apart) = self.scan(&difference, range);
        let (mut scan, mut noise) = self.scan(&record, range);
        noise = joined(&noise, &apart);
        scan.noise = noise.per_sample;
        self.under_echoes(rounds, &scan, &mut noise);
        self.measure_echoes(&record, range, &scan, &mut noise);
        let unlike = self.leave_out_unlike(&record, &difference, &noise);
        let train = if unlike.any_as_high {
            Err(NoReading::NoEcho {
                noise: noise.per_sample,
            })
        } else {
            self.find_train(&record, range, &scan, &mut noise)
        };
        let unlike = unlike.echoes;
        let outcome = match train.and_then(|train| self.wall(&record, &noise, &train)) {
            Ok(reading) => {
                let moved = self.moved(&record, &difference, &noise, reading.thickness);
                if moved > reading.expanded() {
                    Err(NoReading::Unsteady { echoes: 0, moved })
                } else {
                    Ok(reading)
                }
            }
            Err(_) if unlike > 0 => Err(NoReading::Unsteady {
                echoes: unlike,
                moved: Metres::ZERO,
            }),
            Err(why) => Err(why),
        };
        self.describe(&record, &noise);
        self.noise = noise;
        outcome
    }

    /// Noise below the converter's step, of which the codes at rest say too much or too little.
    #[inline(never)]
    fn under_echoes(&self, rounds: &TwoRounds<'_>, scan: &Scan, noise: &mut Noise) {
        let pulse = ReferencePulse::new(self.workspace.pulse, self.facts);
        let candidates = scan.candidates.iter().copied();
        let echoes = reached(candidates, &pulse, scan, &self.detector, self.workspace.skirt);
        if let Some(rest) = rest_of_rounds(rounds, scan.filled, &echoes, noise.per_sample) {
            noise.per_sample = rest.under_echo(noise.per_sample);
            rest.timing(&mut noise.timing);
        }
    }

    /// Takes the echoes off the list that the rounds do not have in common.
    #[inline(never)]
    fn leave_out_unlike(&mut self, record: &Record<'_>, difference: &Record<'_>, noise: &Noise) -> Unlike {
        let around = surroundings(&self.setup, self.workspace.pulse, self.facts, record, noise);
        let (mut echoes, mut highest) = (0, 0.0);
        // What the trigger's jitter turns.
        let jitter = self.jitter_of_rounds(record) * around.pulse.facts.angular_frequency;
        let usual = math::larger(UNLIKE, BEYOND_CHANCE * jitter);
        self.findings.echoes.retain(|echo| {
            let chance = UNLIKE_DEVIATIONS * around.amplitude_noise() / echo.amplitude;
            let share = change(difference, &around.pulse, echo).share(&around.pulse);
            let alike = share < math::larger(usual, chance) && energy_share(difference, &around, echo) < usual;
            if !alike {
                echoes += 1;
                highest = math::larger(highest, echo.amplitude);
            }
            alike
        });
        let kept = self.findings.echoes.iter();
        let kept = kept.fold(0.0, |most, echo| math::larger(most, echo.amplitude));
        Unlike {
            echoes,
            any_as_high: echoes > 0 && highest > AS_HIGH * kept,
        }
    }

    /// What the trigger's jitter does to half the difference of the rounds, in samples (k = 1): as much as to their mean.
    fn jitter_of_rounds(&self, record: &Record<'_>) -> f32 {
        let shots = f32::from(record.format().shots.max(1));
        self.setup.trigger_jitter.get() * record.clock().rate.get() / math::sqrt(shots)
    }

    /// How far the reading moved from round to round, what chance and the trigger's jitter do taken off.
    #[inline(never)]
    fn moved(&self, record: &Record<'_>, difference: &Record<'_>, noise: &Noise, wall: Metres) -> Metres {
        let around = surroundings(&self.setup, self.workspace.pulse, self.facts, record, noise);
        let span = thickness::wall_span(&self.setup);
        let rate = record.clock().rate;
        let later = |echo: &Echo| {
            let u = (echo.standard_uncertainty * rate.get()).get();
            (change(difference, &around.pulse, echo).later, u * u)
        };
        let is = |role: EchoRole| move |echo: &&Echo| echo.role == role;
        let echoes = &self.findings.echoes;
        let (from, variance, first) = match span {
            Span::TransmissionPulseToBackWall => {
                let jitter = self.jitter_of_rounds(record);
                (0.0, jitter * jitter, 0)
            }
            Span::InterfaceToBackWall => {
                let (later, variance) = echoes.iter().find(is(EchoRole::Interface)).map_or((0.0, 0.0), later);
                (later, variance, 0)
            }
            Span::BackWallToBackWall => {
                let first = self.findings.train.map_or(1, |train| train.first_multiple);
                let (later, variance) = echoes
                    .iter()
                    .find(is(EchoRole::BackWall(first)))
                    .map_or((0.0, 0.0), later);
                (later, variance, first)
            }
        };
        let mut largest = 0.0;
        for echo in echoes {
            let EchoRole::BackWall(number) = echo.role else {
                continue;
            };
            // Between back walls each of them counts, elsewhere the first.
            if number <= first || (span != Span::BackWallToBackWall && number > 1) {
                continue;
            }
            let (to, own) = later(echo);
            let beyond = (to - from).abs() - BEYOND_CHANCE * math::sqrt(variance + own);
            largest = math::larger(largest, beyond / f32::from(number - first));
        }
        // From the one round to the other is twice the way from the mean.
        self.setup.velocity() * (rate.period() * largest) * way::gain(&self.setup, wall)
    }
}

/// The noise of the mean as far as its quiet stretches show it, and of the difference.
fn joined(mean: &Noise, difference: &Noise) -> Noise {
    if !mean.sure && difference.sure {
        return *difference;
    }
    Noise {
        per_sample: math::larger(mean.per_sample, difference.per_sample),
        timing: mean.timing.at_least(&difference.timing),
        sure: mean.sure,
    }
}
