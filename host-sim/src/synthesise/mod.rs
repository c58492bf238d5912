//! A scene becomes records with their truth.
//!
//! All echoes are added up as spectra, each with its exact delay, and transformed once; so an echo
//! between two samples is as exact as one on a sample. The same seed and shot give the same codes on
//! every machine.

mod echo_paths;
mod grain;
mod receive;
mod shapes;
mod single_echo;
pub mod truth;

use crate::fourier::{Complex, RealTransform, Rotation};
use crate::front_end::band_limits::BandLimits;
use crate::front_end::{Converter, Purpose, Random};
use crate::propagation::{Path, Stack};
use crate::scene::{Scene, SceneError};
use crate::transducer::{self, BandPulse, PulseFigures};
use echo_paths::echo_paths;
use grain::GrainNoise;
use halfpulse::{AdcFormat, Hertz, Record, SampleClock, Seconds};
pub use receive::ReceiverTruth;
use receive::Receiving;
use shapes::{Element, add_echo, add_echoes, are_changed, for_each_shape};
use single_echo::Thinner;
use std::f64::consts::TAU;
pub use truth::{EchoTruth, Truth};
use truth::{echo_truth, least_wall};

/// Echoes below this many steps of the converter are in the record but not listed in its truth.
const LEAST_STEPS: f64 = 0.05;

/// Most bins of echo spectra that are kept for walls that change from shot to shot (16 bytes each).
const MOST_KEPT_BINS: usize = 1 << 22;

/// One record with its truth.
#[derive(Clone, Debug)]
pub struct Shot {
    /// The converter's codes.
    pub codes: Vec<i16>,
    /// What a code stands for.
    pub format: AdcFormat,
    /// When the samples were taken.
    pub clock: SampleClock,
    /// What is in the record.
    pub truth: Truth,
}

impl Shot {
    /// The record as the core measures it.
    #[must_use]
    pub fn record(&self) -> Record<'_> {
        Record::new(&self.codes, self.format, self.clock)
    }
}

/// What differs in one shot from the scene.
#[derive(Clone, Copy, Debug, PartialEq, Default)]
pub struct Variation {
    /// All of it arrives this many seconds later; at most 1 us and a quarter of the record either way.
    /// A part of a sample is what a free-running clock does.
    pub time_shift: f64,
    /// The wall is this many metres thicker; may be negative, up to half the wall.
    pub wall_change: f64,
    /// The gain in force is this many decibels higher than the scene's; at most 200 either way. The
    /// transmission pulse, given over full scale, does not change.
    pub gain_change: f64,
}

/// Makes one record of a scene.
///
/// # Errors
/// The first value of the scene that cannot be used.
pub fn synthesise(scene: &Scene, seed: u64) -> Result<Shot, SceneError> {
    Ok(Synthesiser::new(scene)?.shot(seed, 0))
}

/// Makes many records of one scene: pulse, echo spectra and transform are made once.
#[derive(Clone, Debug)]
pub struct Synthesiser {
    scene: Scene,
    /// The scene with the rate and the number of samples that really are taken.
    actual: Scene,
    /// Whether anything beyond white noise and an ideal converter is in the scene.
    ideal: bool,
    receiver: Receiving,
    stack: Stack,
    paths: Vec<Path>,
    pulse: BandPulse,
    /// Factor from pressure at the probe's face to share of full scale.
    gain: f64,
    element: Element,
    /// Echoes of the wall's grains.
    grain: Option<GrainNoise>,
    /// Echo spectra by round trips through the wall, from 0 on; empty until another wall is asked for,
    /// and if they are too large to keep or a change of the wall is more than a factor per trip.
    by_trips: Vec<Vec<Complex>>,
    /// The spectrum of all echoes of the unchanged scene.
    whole: Vec<Complex>,
    /// The noise-free signal of the unchanged scene in steps of the converter.
    still: Vec<f64>,
    noise_steps: f64,
    converter: Converter,
    truth: Truth,
    transform: RealTransform,
    bins: Vec<Complex>,
    signal: Vec<f64>,
}

impl Synthesiser {
    /// Checks the scene and prepares what all its records share.
    ///
    /// # Errors
    /// The first value of the scene that cannot be used.
    pub fn new(asked: &Scene) -> Result<Self, SceneError> {
        let stack = asked.stack()?;
        let scene = &receive::actual(asked);
        let rate = scene.record.sample_rate_mhz * 1e6;
        let samples = scene.record.samples;
        let data_sheet = scene.pulse();
        let (before, after) = data_sheet.reach();
        // Twice the record, so that nothing before its start or after its end is folded into it.
        let margin = ((before + after) * rate) as usize + 64;
        let transform = RealTransform::new((2 * samples).max(samples + 4 * margin));
        let limits = BandLimits::of(&scene.receiver);
        let pulse = receive::limited(
            BandPulse::new(&data_sheet, rate, transform.length()),
            limits.as_ref(),
            data_sheet.centre_frequency(),
        );
        let length = samples as f64 / rate;
        let start = scene.record.first_sample_us * 1e-6;
        let margin = (margin as f64 / rate).max(0.5 * length);
        let until = start + length + before + 0.5 * margin;
        let paths = echo_paths(scene, &stack, until)?;
        let element = Element::of(scene);
        let changed = are_changed(&stack, element) || limits.is_some();
        let cycle = 1.0 / data_sheet.centre_frequency();
        let thinner = Thinner::new(&pulse, before + after);
        let (mut echoes, mut first_peak) = (Vec::with_capacity(paths.len()), 0.0);
        let mut whole = vec![Complex::ZERO; pulse.values().len()];
        // Beyond this an echo would be folded into the record. The first back wall is known even there.
        let audible = |path: &Path| path.arrival > start - after - 0.5 * margin && path.arrival <= until;
        for_each_shape(&pulse, &stack, &paths, element, |path, shape| {
            if audible(path) {
                add_echo(&mut whole, &pulse, path, shape, start);
            }
            let listed = (start..start + length).contains(&path.arrival);
            if !listed && path.multiple != Some(1) {
                return;
            }
            let (mut height, mut shift) = (1.0, 0.0);
            if changed {
                // Gain and noise hang on the first back wall: all its bins count.
                height = if path.multiple == Some(1) {
                    pulse
                        .with_values(shape.to_vec())
                        .envelope_maximum(0.0, 1.5 * cycle, cycle / 6.0)
                        .1
                } else {
                    thinner
                        .of(&pulse, shape)
                        .envelope_maximum(0.0, 1.5 * cycle, cycle / 6.0)
                        .1
                };
                let turned = (path.amplitude < 0.0) != (path.weight < 0.0);
                shift = thinner.correlation_shift(&pulse, shape, turned, cycle);
            }
            let peak = path.weight.abs() * height;
            if path.multiple == Some(1) {
                first_peak = peak;
            }
            if listed {
                echoes.push((*path, peak, shift));
            }
        });
        echoes.sort_by(|a, b| a.0.arrival.total_cmp(&b.0.arrival));
        let mut kept = paths;
        kept.retain(audible);
        let gain = gain(scene, first_peak)?;
        let converter = Converter::with_errors(scene.record.bits, &scene.converter, scene.receiver.specimen);
        let full_scale = converter.full_scale();
        let first_steps = first_peak * gain * full_scale;
        let noise_steps = noise_steps(scene, first_steps)?;
        let receiver = Receiving::new(scene, limits, gain * full_scale);
        let all_noise = receiver.with_thermal(noise_steps);
        let truth = Truth {
            seed: 0,
            shot: 0,
            wall_thickness_mm: scene.wall.thickness_mm * scene.wall_expansion()?,
            least_wall_mm: least_wall(scene, &stack) * 1e3,
            wall_velocity_m_s: stack.wall.velocity,
            coating_thickness_mm: stack.coating.map(|coating| coating.thickness * 1e3),
            coating_velocity_m_s: stack.coating.map(|coating| coating.velocity),
            face_ns: stack.face_time() * 1e9,
            noise_rms_codes: all_noise,
            first_back_wall_snr_db: (all_noise > 0.0 && first_steps > 0.0)
                .then(|| 20.0 * libm::log10(first_steps / all_noise)),
            pulse: PulseFigures::of(&data_sheet, rate),
            echoes: echoes
                .into_iter()
                .filter(|(_, peak, _)| peak * gain * full_scale > LEAST_STEPS)
                .map(|(path, peak, shift)| echo_truth(&path, peak * gain, shift))
                .collect(),
            receiver: None,
        };
        let signal = vec![0.0; transform.length()];
        let grain = GrainNoise::new(scene, &stack, &pulse, first_peak);
        let mut made = Self {
            scene: asked.clone(),
            actual: scene.clone(),
            ideal: receive::is_ideal(asked),
            receiver,
            stack,
            paths: kept,
            pulse,
            gain,
            element,
            grain,
            by_trips: Vec::new(),
            whole,
            still: Vec::new(),
            noise_steps,
            converter,
            truth,
            transform,
            bins: Vec::new(),
            signal,
        };
        made.make_signal(&Variation::default());
        made.still = made.signal[..samples].to_vec();
        Ok(made)
    }

    /// The scene.
    #[must_use]
    pub const fn scene(&self) -> &Scene {
        &self.scene
    }

    /// The truth of the unchanged scene.
    #[must_use]
    pub const fn truth(&self) -> &Truth {
        &self.truth
    }

    /// The reference pulse at the record's rate: envelope peak 1, its origin at the returned position
    /// in samples from the first one.
    #[must_use]
    pub fn reference_pulse(&self) -> (Vec<f64>, f64) {
        let rate = self.actual.record.sample_rate_mhz * 1e6;
        let (before, after) = self.actual.pulse().reach();
        // What the anti-alias filter adds beyond, in ringing, is below a part in a million there.
        let (before, after) = ((before * rate).ceil(), (after * rate).ceil());
        let samples = self.pulse.sampled(-before / rate, rate, (before + after) as usize + 1);
        (samples, before)
    }

    /// A record of the scene as it is; only its noise and what the receiver adds depend on seed and shot.
    pub fn shot(&mut self, seed: u64, shot: u64) -> Shot {
        self.take(seed, shot, Variation::default())
    }

    /// A record of the scene with a wall, a delay or a gain of its own.
    ///
    /// A variation beyond its limits is cut to them.
    pub fn varied_shot(&mut self, seed: u64, shot: u64, variation: Variation) -> Shot {
        let samples = self.still.len();
        let longest = (0.25 * samples as f64 / (self.actual.record.sample_rate_mhz * 1e6)).min(1e-6);
        let thickest = 0.5 * self.stack.wall.thickness;
        let variation = Variation {
            time_shift: finite(variation.time_shift).clamp(-longest, longest),
            wall_change: finite(variation.wall_change).clamp(-thickest, thickest),
            gain_change: finite(variation.gain_change).clamp(-200.0, 200.0),
        };
        let mut made = self.take(seed, shot, variation);
        let truth = &mut made.truth;
        truth.wall_thickness_mm += variation.wall_change * 1e3;
        truth.least_wall_mm = self.least_wall(variation.wall_change) * 1e3;
        truth.face_ns += variation.time_shift * 1e9;
        let longer = 2.0 * variation.wall_change / self.stack.wall.velocity;
        let louder = libm::pow(10.0, variation.gain_change / 20.0);
        let changed =
            (!self.is_linear() && variation.wall_change != 0.0).then(|| self.changed_stack(variation.wall_change));
        for echo in &mut truth.echoes {
            let later = match &changed {
                None => f64::from(echo.wall_round_trips) * longer,
                Some(stack) => self.later_in(stack, echo),
            };
            echo.arrival_ns += (variation.time_shift + later) * 1e9;
            echo.amplitude_percent *= louder;
        }
        made
    }

    fn take(&mut self, seed: u64, shot: u64, variation: Variation) -> Shot {
        let samples = self.still.len();
        if self
            .grain
            .as_mut()
            .is_some_and(|grain| grain.move_to(seed, &mut self.transform))
        {
            self.make_signal(&Variation::default());
            self.still.copy_from_slice(&self.signal[..samples]);
        }
        if !self.ideal {
            return self.received(seed, shot, &variation);
        }
        let mut random = Random::new(seed, Purpose::Noise, shot);
        let mut codes = Vec::with_capacity(samples);
        let signal = if variation == Variation::default() {
            &self.still
        } else {
            self.make_signal(&variation);
            &self.signal[..samples]
        };
        for &steps in signal {
            codes.push(self.converter.code(noisy(steps, self.noise_steps, &mut random)));
        }
        let truth = Truth {
            seed,
            shot,
            ..self.truth.clone()
        };
        self.hand_over(codes, truth)
    }

    fn hand_over(&self, codes: Vec<i16>, truth: Truth) -> Shot {
        let record = &self.scene.record;
        Shot {
            codes,
            format: AdcFormat::signed(record.bits),
            clock: SampleClock {
                rate: Hertz::new((record.sample_rate_mhz * 1e6) as f32),
                first_sample: Seconds::new((record.first_sample_us * 1e-6) as f32),
            },
            truth,
        }
    }

    /// Echo spectra by round trips through the wall: a change of the wall is then one factor per trip.
    fn keep_spectra(&mut self) {
        if !self.by_trips.is_empty() {
            return;
        }
        let most = self.paths.iter().map(|path| path.wall_trips).max().unwrap_or(0) as usize;
        let bins = self.pulse.values().len();
        // The beam spreads differently in another wall: not a factor per trip.
        if self.element.spreads || !self.is_linear() || (most + 1).saturating_mul(bins) > MOST_KEPT_BINS {
            return;
        }
        self.by_trips = vec![vec![Complex::ZERO; bins]; most + 1];
        let mut slots: Vec<&mut [Complex]> = self.by_trips.iter_mut().map(Vec::as_mut_slice).collect();
        let start = self.actual.record.first_sample_us * 1e-6;
        add_echoes(&mut slots, &self.pulse, &self.stack, &self.paths, self.element, start);
    }

    fn changed_stack(&self, wall_change: f64) -> Stack {
        let mut stack = self.stack.clone();
        stack.wall.thickness += wall_change;
        stack
    }

    /// How much later an echo arrives in another stack.
    fn later_in(&self, stack: &Stack, echo: &EchoTruth) -> f64 {
        let same = |path: &&Path| {
            path.role == echo.role
                && path.coating_trips == echo.coating_round_trips
                && path.wall_trips == echo.wall_round_trips
                && (path.arrival * 1e9 - echo.arrival_ns).abs() < 1e-6
        };
        let path = self.paths.iter().find(same);
        path.map_or(0.0, |path| stack.arrival_of(path) - path.arrival)
    }

    fn least_wall(&self, wall_change: f64) -> f64 {
        least_wall(&self.scene, &self.changed_stack(wall_change))
    }

    /// Whether a thicker wall delays each path by the same time for every round trip through it.
    fn is_linear(&self) -> bool {
        self.stack.dual.is_none() && self.stack.mode_conversion.is_none() && self.stack.columns.is_empty()
    }

    /// Noise-free signal in steps of the converter.
    fn make_signal(&mut self, variation: &Variation) {
        let mut spectrum = if variation.wall_change == 0.0 {
            self.whole.clone()
        } else {
            self.keep_spectra();
            self.spectrum(variation.wall_change)
        };
        if let Some(grain) = &self.grain {
            grain.add_to(&mut spectrum);
        }
        let shift = variation.time_shift;
        let mut factor = self.gain * self.converter.full_scale();
        if variation.gain_change != 0.0 {
            factor *= libm::pow(10.0, variation.gain_change / 20.0);
        }
        let band = self.pulse.with_values(spectrum).shifted(shift, factor);
        transducer::to_time(&mut self.transform, &band, &mut self.bins, &mut self.signal);
        if !self.ideal {
            // What the time of a sample decides is added where that time is known.
            self.receiver.make_slopes(&mut self.transform, &band, &mut self.bins);
            return;
        }
        if let Some(transmission) = &self.actual.transmission_pulse {
            let record = &self.actual.record;
            let (rate, frequency) = (
                record.sample_rate_mhz * 1e6,
                self.actual.probe.centre_frequency_mhz * 1e6,
            );
            let full_scale = self.converter.full_scale();
            for (i, value) in self.signal[..record.samples].iter_mut().enumerate() {
                let time = record.first_sample_us * 1e-6 + i as f64 / rate - shift;
                *value += full_scale * transmission.value(time, frequency);
            }
        }
    }

    /// The echoes of another wall.
    fn spectrum(&self, wall_change: f64) -> Vec<Complex> {
        let mut sum = vec![Complex::ZERO; self.pulse.values().len()];
        let wall = &self.stack.wall;
        if self.by_trips.is_empty() {
            let stack = self.changed_stack(wall_change);
            let mut paths = self.paths.clone();
            for path in &mut paths {
                path.arrival = stack.arrival_of(path);
            }
            let start = self.actual.record.first_sample_us * 1e-6;
            add_echoes(&mut [&mut sum], &self.pulse, &stack, &paths, self.element, start);
            return sum;
        }
        // Horner's rule in the factor of one more round trip.
        let length = 2.0 * wall_change;
        let delay = Rotation::new(
            -TAU * self.pulse.spacing() * length / wall.velocity,
            self.pulse.first_bin() as u32,
        );
        let factors: Vec<Complex> = self
            .pulse
            .frequencies()
            .zip(delay)
            .map(|(frequency, turn)| turn * wall.attenuation.over(length, frequency))
            .collect();
        for echoes in self.by_trips.iter().rev() {
            for ((sum, &value), &factor) in sum.iter_mut().zip(echoes).zip(&factors) {
                *sum = *sum * factor + value;
            }
        }
        sum
    }
}

fn finite(value: f64) -> f64 {
    if value.is_finite() { value } else { 0.0 }
}

fn noisy(steps: f64, noise: f64, random: &mut Random) -> f64 {
    if noise > 0.0 {
        steps + noise * random.normal()
    } else {
        steps
    }
}

fn gain(scene: &Scene, first_peak: f64) -> Result<f64, SceneError> {
    if let Some(decibels) = scene.record.gain_db {
        let receiver = &scene.receiver;
        let in_force = receiver.nominal_gain(decibels) + receiver.gain_error(decibels);
        return Ok(libm::pow(10.0, in_force / 20.0));
    }
    if first_peak > 1e-12 {
        return Ok(scene.record.first_back_wall_percent.unwrap_or(50.0) / 100.0 / first_peak);
    }
    Err(SceneError {
        field: "record".into(),
        what: "there is no back-wall echo to set the gain by".into(),
        remedy: "give record.gain_db, or another medium behind or before the wall".into(),
    })
}

fn noise_steps(scene: &Scene, first_steps: f64) -> Result<f64, SceneError> {
    let Some(decibels) = scene.noise.snr_db else {
        return Ok(scene.noise.rms_steps.unwrap_or(0.0));
    };
    if first_steps > 0.0 {
        return Ok(first_steps * libm::pow(10.0, -decibels / 20.0));
    }
    Err(SceneError {
        field: "noise.snr_db".into(),
        what: "there is no back-wall echo to set the noise by".into(),
        remedy: "give noise.rms_steps".into(),
    })
}

#[cfg(test)]
mod tests;
