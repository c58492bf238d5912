//! A scene becomes records with their truth.
//!
//! All echoes are added up as spectra, each with its exact delay, and transformed once; so an echo
//! between two samples is as exact as one on a sample. The same seed and shot give the same codes on
//! every machine.

use crate::fourier::{Complex, RealTransform, Rotation};
use crate::front_end::{Converter, Purpose, Random};
use crate::propagation::{self, Limits, MOST_PATHS, Path, Role, Stack};
use crate::scene::{Scene, SceneError};
use crate::transducer::{self, BandPulse, PulseFigures};
use halfpulse::{AdcFormat, Hertz, Record, SampleClock, Seconds};
use serde::Serialize;
use std::f64::consts::TAU;

/// Echoes weaker than this share of the strongest are left out.
const SMALLEST: f64 = 1e-6;

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
}

/// What is in a record. Times are after the transmission trigger.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Truth {
    /// Seed of the random numbers.
    pub seed: u64,
    /// Number of the shot, from 0.
    pub shot: u64,
    /// The wall, without coating.
    pub wall_thickness_mm: f64,
    /// The wall's velocity at the centre frequency.
    pub wall_velocity_m_s: f64,
    /// The coating, if there is one.
    pub coating_thickness_mm: Option<f64>,
    /// The coating's velocity at the centre frequency.
    pub coating_velocity_m_s: Option<f64>,
    /// When the part's surface (the coating's, if there is one) echoes: the zero offset of a reading
    /// from the transmission pulse.
    pub face_ns: f64,
    /// Noise rms per sample in codes, before rounding.
    pub noise_rms_codes: f64,
    /// Peak of the first back-wall echo's envelope over the noise rms; `None` without noise.
    pub first_back_wall_snr_db: Option<f64>,
    /// The pulse's figures.
    pub pulse: PulseFigures,
    /// The echoes in the order of their arrival.
    pub echoes: Vec<EchoTruth>,
}

impl Truth {
    /// The plain back-wall echoes.
    pub fn back_walls(&self) -> impl Iterator<Item = &EchoTruth> {
        self.echoes.iter().filter(|echo| echo.role == Role::BackWall)
    }
}

/// One echo of a record.
#[derive(Clone, Copy, Debug, PartialEq, Serialize)]
pub struct EchoTruth {
    /// Shift of the reference pulse, whose origin is the maximum of its envelope: path over velocity at
    /// the centre frequency. What dispersion and the beam do to the echo's shape is not in it.
    pub arrival_ns: f64,
    /// Peak of the echo's envelope over full scale.
    pub amplitude_percent: f64,
    /// Relative to the pulse.
    pub polarity: &'static str,
    /// What it is.
    pub role: Role,
    /// Which multiple of the back-wall echo, from 1.
    pub multiple: Option<u32>,
    /// Round trips through the coating.
    pub coating_round_trips: u32,
    /// Round trips through the wall.
    pub wall_round_trips: u32,
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
    stack: Stack,
    paths: Vec<Path>,
    pulse: BandPulse,
    /// Factor from pressure at the probe's face to share of full scale.
    gain: f64,
    /// Echo spectra by round trips through the wall, from 0 on; empty if too large to keep.
    by_trips: Vec<Vec<Complex>>,
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
    pub fn new(scene: &Scene) -> Result<Self, SceneError> {
        let stack = scene.stack()?;
        let rate = scene.record.sample_rate_mhz * 1e6;
        let samples = scene.record.samples;
        let data_sheet = scene.pulse();
        let (before, after) = data_sheet.reach();
        // Twice the record, so that nothing before its start or after its end is folded into it.
        let margin = ((before + after) * rate) as usize + 64;
        let transform = RealTransform::new((2 * samples).max(samples + 4 * margin));
        let pulse = BandPulse::new(&data_sheet, rate, transform.length());
        let length = samples as f64 / rate;
        let start = scene.record.first_sample_us * 1e-6;
        let margin = (margin as f64 / rate).max(0.5 * length);
        let paths = echo_paths(scene, &stack, start + length + before + 0.5 * margin)?;
        let beam = beam_area(scene);
        let changed = beam.is_some() || has_losses(&stack);
        let cycle = 1.0 / data_sheet.centre_frequency();
        let (mut echoes, mut first_peak) = (Vec::with_capacity(paths.len()), 0.0);
        for_each_shape(&pulse, &stack, &paths, beam, |path, shape| {
            let listed = (start..start + length).contains(&path.arrival);
            if !listed && path.multiple != Some(1) {
                return;
            }
            let height = if changed {
                pulse
                    .with_values(shape.to_vec())
                    .envelope_maximum(0.0, 1.5 * cycle, cycle / 6.0)
                    .1
            } else {
                1.0
            };
            let peak = path.amplitude.abs() * height;
            if path.multiple == Some(1) {
                first_peak = peak;
            }
            if listed {
                echoes.push((*path, peak));
            }
        });
        echoes.sort_by(|a, b| a.0.arrival.total_cmp(&b.0.arrival));
        let mut kept = paths;
        kept.retain(|path| path.arrival > start - after - 0.5 * margin);
        let gain = gain(scene, first_peak)?;
        let converter = Converter::new(scene.record.bits);
        let full_scale = converter.full_scale();
        let first_steps = first_peak * gain * full_scale;
        let noise_steps = noise_steps(scene, first_steps)?;
        let truth = Truth {
            seed: 0,
            shot: 0,
            wall_thickness_mm: scene.wall.thickness_mm,
            wall_velocity_m_s: stack.wall.velocity,
            coating_thickness_mm: scene.coating.as_ref().map(|coating| coating.thickness_mm),
            coating_velocity_m_s: stack.coating.map(|coating| coating.velocity),
            face_ns: stack.face_time() * 1e9,
            noise_rms_codes: noise_steps,
            first_back_wall_snr_db: (noise_steps > 0.0 && first_steps > 0.0)
                .then(|| 20.0 * libm::log10(first_steps / noise_steps)),
            pulse: PulseFigures::of(&data_sheet, rate),
            echoes: echoes
                .into_iter()
                .filter(|(_, peak)| peak * gain * full_scale > LEAST_STEPS)
                .map(|(path, peak)| echo_truth(&path, peak * gain))
                .collect(),
        };
        let signal = vec![0.0; transform.length()];
        let mut made = Self {
            scene: scene.clone(),
            stack,
            paths: kept,
            pulse,
            gain,
            by_trips: Vec::new(),
            still: Vec::new(),
            noise_steps,
            converter,
            truth,
            transform,
            bins: Vec::new(),
            signal,
        };
        made.keep_spectra();
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
        let rate = self.scene.record.sample_rate_mhz * 1e6;
        let (before, after) = self.scene.pulse().reach();
        // What the anti-alias filter adds beyond, in ringing, is below a part in a million there.
        let (before, after) = ((before * rate).ceil(), (after * rate).ceil());
        let samples = self.pulse.sampled(-before / rate, rate, (before + after) as usize + 1);
        (samples, before)
    }

    /// A record of the scene as it is; only its noise depends on seed and shot.
    pub fn shot(&mut self, seed: u64, shot: u64) -> Shot {
        let mut codes = Vec::with_capacity(self.still.len());
        let mut random = Random::new(seed, Purpose::Noise, shot);
        for &steps in &self.still {
            codes.push(self.converter.code(noisy(steps, self.noise_steps, &mut random)));
        }
        self.hand_over(
            codes,
            Truth {
                seed,
                shot,
                ..self.truth.clone()
            },
        )
    }

    /// A record of the scene with a wall or a delay of its own.
    ///
    /// A variation beyond its limits is cut to them.
    pub fn varied_shot(&mut self, seed: u64, shot: u64, variation: Variation) -> Shot {
        let samples = self.still.len();
        let longest = (0.25 * samples as f64 / (self.scene.record.sample_rate_mhz * 1e6)).min(1e-6);
        let thickest = 0.5 * self.stack.wall.thickness;
        let variation = Variation {
            time_shift: finite(variation.time_shift).clamp(-longest, longest),
            wall_change: finite(variation.wall_change).clamp(-thickest, thickest),
        };
        self.make_signal(&variation);
        let mut random = Random::new(seed, Purpose::Noise, shot);
        let mut codes = Vec::with_capacity(samples);
        for &steps in &self.signal[..samples] {
            codes.push(self.converter.code(noisy(steps, self.noise_steps, &mut random)));
        }
        let mut truth = Truth {
            seed,
            shot,
            ..self.truth.clone()
        };
        truth.wall_thickness_mm += variation.wall_change * 1e3;
        truth.face_ns += variation.time_shift * 1e9;
        let longer = 2.0 * variation.wall_change / self.stack.wall.velocity;
        for echo in &mut truth.echoes {
            let later = variation.time_shift + f64::from(echo.wall_round_trips) * longer;
            echo.arrival_ns += later * 1e9;
        }
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
        let most = self.paths.iter().map(|path| path.wall_trips).max().unwrap_or(0) as usize;
        let bins = self.pulse.values().len();
        // The beam spreads differently in another wall: not a factor per trip.
        if beam_area(&self.scene).is_some() || (most + 1).saturating_mul(bins) > MOST_KEPT_BINS {
            return;
        }
        self.by_trips = vec![vec![Complex::ZERO; bins]; most + 1];
        let mut slots: Vec<&mut [Complex]> = self.by_trips.iter_mut().map(Vec::as_mut_slice).collect();
        let start = self.scene.record.first_sample_us * 1e-6;
        add_echoes(&mut slots, &self.pulse, &self.stack, &self.paths, None, start);
    }

    /// Noise-free signal in steps of the converter.
    fn make_signal(&mut self, variation: &Variation) {
        let spectrum = self.spectrum(variation.wall_change);
        let shift = variation.time_shift;
        let factor = self.gain * self.converter.full_scale();
        let band = self.pulse.with_values(spectrum).shifted(shift, factor);
        transducer::to_time(&mut self.transform, &band, &mut self.bins, &mut self.signal);
        if let Some(transmission) = &self.scene.transmission_pulse {
            let record = &self.scene.record;
            let (rate, frequency) = (
                record.sample_rate_mhz * 1e6,
                self.scene.probe.centre_frequency_mhz * 1e6,
            );
            let full_scale = self.converter.full_scale();
            for (i, value) in self.signal[..record.samples].iter_mut().enumerate() {
                let time = record.first_sample_us * 1e-6 + i as f64 / rate - shift;
                *value += full_scale * transmission.value(time, frequency);
            }
        }
    }

    fn spectrum(&self, wall_change: f64) -> Vec<Complex> {
        let mut sum = vec![Complex::ZERO; self.pulse.values().len()];
        let wall = &self.stack.wall;
        if self.by_trips.is_empty() {
            let mut stack = self.stack;
            stack.wall.thickness += wall_change;
            let longer = 2.0 * wall_change / wall.velocity;
            let mut paths = self.paths.clone();
            for path in &mut paths {
                path.arrival += f64::from(path.wall_trips) * longer;
            }
            let start = self.scene.record.first_sample_us * 1e-6;
            let area = beam_area(&self.scene);
            add_echoes(&mut [&mut sum], &self.pulse, &stack, &paths, area, start);
            return sum;
        }
        if wall_change == 0.0 {
            for echoes in &self.by_trips {
                for (sum, &value) in sum.iter_mut().zip(echoes) {
                    *sum += value;
                }
            }
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

fn has_losses(stack: &Stack) -> bool {
    let lossy = |layer: Option<propagation::Layer>| layer.is_some_and(|layer| !layer.attenuation.is_none());
    lossy(stack.delay_line) || lossy(stack.coating) || lossy(Some(stack.wall))
}

/// Square of the element's radius, if the beam is part of the scene.
fn beam_area(scene: &Scene) -> Option<f64> {
    let diameter = scene
        .probe
        .element_diameter_mm
        .filter(|_| scene.probe.beam_diffraction)?;
    Some(0.25e-6 * diameter * diameter)
}

/// The paths with what the table `[echoes]` asks for.
fn echo_paths(scene: &Scene, stack: &Stack, until: f64) -> Result<Vec<Path>, SceneError> {
    let wanted = &scene.echoes;
    let too_many = || SceneError {
        field: "wall.thickness_mm".into(),
        what: format!("the record holds more than {MOST_PATHS} echoes"),
        remedy: "record for less time, take a thicker wall or limit echoes.back_walls".into(),
    };
    // The first back wall sets gain and noise even where the record ends before it.
    let first = stack.face_time() + stack.coating.map_or(0.0, |coating| coating.round_trip()) + stack.wall.round_trip();
    let limits = Limits {
        until: until.max(first * (1.0 + 1e-12)),
        // With a decay of its own a train may last longer than the borders would let it.
        smallest: if wanted.decay.is_some() { 0.0 } else { SMALLEST },
        wall_trips: wanted.back_walls.unwrap_or(u32::MAX),
    };
    let mut paths = stack.paths(&limits).ok_or_else(too_many)?;
    if let (Some(decay), Some(first)) = (wanted.decay, first_back_wall(&paths)) {
        let first = paths[first].amplitude;
        let mut natural = vec![0.0];
        natural.extend(paths.iter().filter(|p| p.role == Role::BackWall).map(|p| p.amplitude));
        for path in paths.iter_mut().filter(|path| path.wall_trips > 0) {
            let trips = path.wall_trips;
            let ordered = first * libm::pow(decay, f64::from(trips - 1));
            path.amplitude = if path.role == Role::BackWall {
                ordered
            } else {
                match natural.get(trips as usize) {
                    Some(&plain) if plain != 0.0 => path.amplitude * ordered / plain,
                    _ => 0.0,
                }
            };
        }
        let strongest = paths.iter().map(|path| path.amplitude.abs()).fold(0.0, f64::max);
        paths.retain(|path| path.amplitude.abs() > SMALLEST * strongest);
    }
    Ok(paths)
}

fn first_back_wall(paths: &[Path]) -> Option<usize> {
    paths.iter().position(|path| path.multiple == Some(1))
}

fn gain(scene: &Scene, first_peak: f64) -> Result<f64, SceneError> {
    if let Some(decibels) = scene.record.gain_db {
        return Ok(libm::pow(10.0, decibels / 20.0));
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

fn echo_truth(path: &Path, share: f64) -> EchoTruth {
    EchoTruth {
        arrival_ns: path.arrival * 1e9,
        amplitude_percent: share * 100.0,
        polarity: if path.amplitude < 0.0 { "negative" } else { "positive" },
        role: path.role,
        multiple: path.multiple,
        coating_round_trips: path.coating_trips,
        wall_round_trips: path.wall_trips,
    }
}

/// Adds the echoes' spectra, with time zero at `start`, to the slot of their round trips through the
/// wall (to the only one if there is but one).
fn add_echoes(
    slots: &mut [&mut [Complex]],
    pulse: &BandPulse,
    stack: &Stack,
    paths: &[Path],
    beam: Option<f64>,
    start: f64,
) {
    for_each_shape(pulse, stack, paths, beam, |path, shape| {
        let slot = if slots.len() == 1 { 0 } else { path.wall_trips as usize };
        let Some(sums) = slots.get_mut(slot) else { return };
        let step = -TAU * pulse.spacing() * (path.arrival - start);
        let turns = Rotation::new(step, pulse.first_bin() as u32);
        for ((sum, &value), turn) in sums.iter_mut().zip(shape).zip(turns) {
            *sum += (value * turn).scaled(path.amplitude);
        }
    });
}

/// Visits each path with the spectrum that losses and beam make of the pulse on its way, before
/// reflection factors and delay.
fn for_each_shape(
    pulse: &BandPulse,
    stack: &Stack,
    paths: &[Path],
    beam: Option<f64>,
    mut visit: impl FnMut(&Path, &[Complex]),
) {
    let over = |layer: Option<propagation::Layer>| -> Vec<Complex> {
        match layer.filter(|layer| !layer.attenuation.is_none()) {
            Some(layer) => pulse
                .frequencies()
                .map(|frequency| layer.attenuation.over(2.0 * layer.thickness, frequency))
                .collect(),
            None => Vec::new(),
        }
    };
    let (coating, wall) = (over(stack.coating), over(Some(stack.wall)));
    let mut once = pulse.values().to_vec();
    multiply(&mut once, &over(stack.delay_line), 1);
    let mut order: Vec<&Path> = paths.iter().collect();
    order.sort_by_key(|path| (path.coating_trips, path.wall_trips));
    // The pulse after the round trips of the path before: the next path needs only the difference.
    let mut travelled = once.clone();
    let mut trips = (0, 0);
    let mut heard = Vec::new();
    for path in order {
        if path.coating_trips != trips.0 {
            multiply(&mut once, &coating, path.coating_trips - trips.0);
            travelled.clone_from(&once);
            trips = (path.coating_trips, 0);
        }
        multiply(&mut travelled, &wall, path.wall_trips - trips.1);
        trips.1 = path.wall_trips;
        let Some(area) = beam else {
            visit(path, &travelled);
            continue;
        };
        let spreading = stack.spreading(path) / area;
        heard.clear();
        heard.extend(travelled.iter().zip(pulse.frequencies()).map(|(&value, frequency)| {
            // Frequency 0 spreads out without end.
            let share = if frequency > 0.0 {
                propagation::diffraction(spreading / frequency)
            } else {
                Complex::ZERO
            };
            value * share
        }));
        visit(path, &heard);
    }
}

fn multiply(values: &mut [Complex], factors: &[Complex], times: u32) {
    for _ in 0..times {
        for (value, &factor) in values.iter_mut().zip(factors) {
            *value = *value * factor;
        }
    }
}

#[cfg(test)]
mod tests;
