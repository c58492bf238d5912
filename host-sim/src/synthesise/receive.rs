//! From the signal at the probe to codes through a receiver that is not ideal.

use super::{Purpose, Random, Shot, Synthesiser, Truth, Variation, noisy};
use crate::fourier::{Complex, RealTransform};
use crate::front_end::band_limits::BandLimits;
use crate::front_end::drop_outs;
use crate::front_end::interference::Disturbance;
use crate::front_end::timing::{self, Phase};
use crate::scene::{self, Scene};
use crate::transducer::{self, BandPulse};
use halfpulse::Seconds;
use serde::Serialize;
use std::f64::consts::TAU;

/// What the receiver did to one record.
#[derive(Clone, Copy, Debug, Default, PartialEq, Serialize)]
pub struct ReceiverTruth {
    /// By how much all of the record is later than the receiver believes: trigger jitter, free-running
    /// clock, error of a pulser delay. Not part of the echoes' arrivals, which are the scene's.
    pub late_ns: f64,
    /// By how much the settled gain differs from the nominal one.
    pub gain_error_db: f64,
    /// Phase of equivalent-time sampling, from 0.
    pub phase: u8,
    /// The pulser did not fire: there are no echoes.
    pub lost: bool,
    /// Spikes that began in the record.
    pub spikes: u32,
    /// Samples that read 0.
    pub missing_samples: u32,
    /// Blocks that repeat the one before.
    pub repeated_blocks: u32,
    /// Blocks that are left out.
    pub skipped_blocks: u32,
}

/// What the receiver of a scene needs for each shot.
#[derive(Clone, Debug)]
pub(super) struct Receiving {
    /// Rms of the thermal noise in steps of the converter.
    thermal_steps: f64,
    /// What shapes it: transform, weight of each bin with mean square 1.
    band: Option<(RealTransform, Vec<f64>)>,
    /// First, half the second and a sixth of the third derivative of the signal in steps per second and
    /// so on; empty without aperture jitter.
    slopes: [Vec<f64>; 3],
    aperture: f64,
}

/// Whether there is nothing in the scene that the plain way from signal to codes leaves out. Band limits,
/// gain steps and the converter's errors are in signal and converter; a clock's error is in the rate.
pub(super) fn is_ideal(scene: &Scene) -> bool {
    let timing = scene::Timing {
        clock_error_ppm: 0.0,
        ..scene.timing.clone()
    };
    scene.receiver.thermal_noise_uv == 0.0
        && scene.receiver.gain_error_db == 0.0
        && scene.interference == scene::Interference::default()
        && timing == scene::Timing::default()
        && scene.equivalent_time.is_none()
        && scene.drop_outs == scene::DropOuts::default()
}

/// The scene with the rate and the samples that really are taken: those of a clock that is off, and of
/// all phases of equivalent-time sampling together.
pub(super) fn actual(asked: &Scene) -> Scene {
    let mut actual = asked.clone();
    let speed = 1.0 + 1e-6 * asked.timing.clock_error_ppm;
    let phases = asked.phases();
    actual.record.sample_rate_mhz *= speed * f64::from(phases);
    actual.record.first_sample_us /= speed;
    actual.record.samples *= usize::from(phases);
    actual
}

/// The pulse behind the band limits, whose delay at the pulse's centre is taken off: it is part of the
/// scene's zero.
pub(super) fn limited(pulse: BandPulse, limits: Option<&BandLimits>, centre: f64) -> BandPulse {
    let Some(limits) = limits else { return pulse };
    let values = pulse.values().iter().zip(pulse.frequencies());
    let shaped = values
        .map(|(&value, frequency)| value * limits.response(frequency))
        .collect();
    pulse.with_values(shaped).shifted(-limits.delay(centre), 1.0)
}

impl Receiving {
    /// `gain` is the factor from a total reflection to steps.
    pub(super) fn new(scene: &Scene, limits: Option<BandLimits>, gain: f64) -> Self {
        let receiver = &scene.receiver;
        let thermal_steps = 1e-3 * receiver.thermal_noise_uv / receiver.total_reflection_mv * gain;
        let band = limits.filter(|_| thermal_steps > 0.0).map(|limits| {
            let transform = RealTransform::new(scene.record.samples);
            let spacing = scene.record.sample_rate_mhz * 1e6 / transform.length() as f64;
            let half = transform.length() / 2;
            let mut weights: Vec<f64> = (0..=half)
                .map(|k| limits.response(spacing * k as f64).magnitude())
                .collect();
            // The outermost bins have no partner at the other sign of frequency.
            let inner: f64 = weights[1..half].iter().map(|w| 2.0 * w * w).sum();
            let outer = weights[0] * weights[0] + weights[half] * weights[half];
            let mean_square = (inner + outer) / transform.length() as f64;
            let scale = 1.0 / mean_square.max(1e-300).sqrt();
            weights.iter_mut().for_each(|weight| *weight *= scale);
            (transform, weights)
        });
        Self {
            thermal_steps,
            band,
            slopes: [Vec::new(), Vec::new(), Vec::new()],
            aperture: scene.timing.aperture_jitter_ns * 1e-9,
        }
    }

    /// All noise together, rms in steps.
    pub(super) fn with_thermal(&self, noise_steps: f64) -> f64 {
        if self.thermal_steps == 0.0 {
            return noise_steps;
        }
        (noise_steps * noise_steps + self.thermal_steps * self.thermal_steps).sqrt()
    }

    /// The signal's derivatives, if samples are not taken when they should be.
    pub(super) fn make_slopes(&mut self, transform: &mut RealTransform, band: &BandPulse, bins: &mut Vec<Complex>) {
        if self.aperture == 0.0 {
            return;
        }
        let mut values = band.values().to_vec();
        for (order, slope) in (1..).zip(&mut self.slopes) {
            for (value, frequency) in values.iter_mut().zip(band.frequencies()) {
                *value = *value * Complex::new(0.0, TAU * frequency / f64::from(order));
            }
            slope.resize(transform.length(), 0.0);
            transducer::to_time(transform, &band.with_values(values.clone()), bins, slope);
        }
    }

    /// Thermal noise of one shot for so many samples, in steps.
    fn thermal(&mut self, seed: u64, shot: u64, samples: usize) -> Vec<f64> {
        if self.thermal_steps == 0.0 {
            return Vec::new();
        }
        let mut random = Random::new(seed, Purpose::Thermal, shot);
        let rms = self.thermal_steps;
        let Some((transform, weights)) = &mut self.band else {
            return (0..samples).map(|_| rms * random.normal()).collect();
        };
        let length = transform.length();
        let mut noise: Vec<f64> = (0..length).map(|_| rms * random.normal()).collect();
        let mut spectrum = transform.to_spectrum(&noise);
        for (value, weight) in spectrum.iter_mut().zip(weights) {
            *value = value.scaled(*weight / length as f64);
        }
        transform.to_time(&spectrum, &mut noise);
        noise
    }
}

impl Synthesiser {
    /// The shot of one phase of equivalent-time sampling: phase `shot` mod phases, its pulser late by as
    /// much and its clock saying so. Without equivalent-time sampling, [`Synthesiser::shot`].
    pub fn phased_shot(&mut self, seed: u64, shot: u64) -> Shot {
        let phases = u64::from(self.scene.phases());
        if phases == 1 {
            return self.shot(seed, shot);
        }
        let delay = (shot % phases) as f64 / (self.scene.record.sample_rate_mhz * 1e6 * phases as f64);
        let delayed = Variation {
            time_shift: delay,
            ..Variation::default()
        };
        let mut made = self.take(seed, shot, delayed);
        made.clock.first_sample = made.clock.first_sample - Seconds::new(delay as f32);
        made
    }

    /// One shot through all that the receiver does.
    pub(super) fn received(&mut self, seed: u64, shot: u64, variation: &Variation) -> Shot {
        let phases = usize::from(self.scene.phases());
        let base_rate = self.actual.record.sample_rate_mhz * 1e6 / phases as f64;
        let (number, phase) = self.phase(variation.time_shift);
        let late = timing::trigger_late(&self.scene, seed, shot, 1.0 / base_rate) + phase.late;
        let lost = drop_outs::is_lost(&self.scene.drop_outs, seed, shot);
        let shift = variation.time_shift + late;
        if lost {
            self.signal.fill(0.0);
            self.receiver.slopes.iter_mut().for_each(|slope| slope.fill(0.0));
        } else {
            self.make_signal(&Variation {
                time_shift: shift,
                ..*variation
            });
        }
        let samples = self.scene.record.samples;
        let start = self.actual.record.first_sample_us * 1e-6;
        let end = start + samples as f64 / base_rate;
        let full_scale = self.converter.full_scale();
        let frequency = self.scene.probe.centre_frequency_mhz * 1e6;
        let transmission = self.scene.transmission_pulse.as_ref().filter(|_| !lost);
        // The interference's time runs with the samples, its phase with the shot's number.
        let mut disturbance = Disturbance::draw(&self.scene.interference, seed, shot, start, end);
        let mut noise = Random::new(seed, Purpose::Noise, shot);
        let mut aperture = Random::new(seed, Purpose::Aperture, shot);
        let thermal = self.receiver.thermal(seed, shot, samples * phases);
        let mut louder = 1.0;
        if variation.gain_change != 0.0 {
            louder = libm::pow(10.0, variation.gain_change / 20.0);
        }
        let jitter = self.receiver.aperture;
        let at = |values: &[f64], place: usize| values.get(place).copied().unwrap_or(0.0);
        let mut codes = Vec::with_capacity(samples);
        for i in 0..samples {
            let place = i * phases;
            let mut time = start + i as f64 / base_rate;
            let mut value = at(&self.signal, place);
            if jitter > 0.0 {
                let off = jitter * aperture.normal();
                time += off;
                let [first, second, third] = &self.receiver.slopes;
                value += off * (at(first, place) + off * (at(second, place) + off * at(third, place)));
            }
            if let Some(pulse) = transmission {
                value += full_scale * pulse.value(time - shift, frequency);
            }
            value += full_scale * disturbance.value(time) + louder * at(&thermal, place);
            value = phase.gain * noisy(value, self.noise_steps, &mut noise) + phase.offset;
            codes.push(self.converter.code(value));
        }
        let dropped = drop_outs::apply(&self.scene.drop_outs, seed, shot, &mut codes);
        let record = &self.scene.record;
        let mut truth = Truth {
            seed,
            shot,
            receiver: Some(ReceiverTruth {
                late_ns: late * 1e9,
                gain_error_db: record
                    .gain_db
                    .map_or(0.0, |asked| self.scene.receiver.gain_error(asked)),
                phase: number,
                lost,
                spikes: disturbance.spikes_from(start) as u32,
                missing_samples: dropped.missing,
                repeated_blocks: dropped.repeated,
                skipped_blocks: dropped.skipped,
            }),
            ..self.truth.clone()
        };
        if lost {
            truth.echoes.clear();
        }
        self.hand_over(codes, truth)
    }

    /// The phase that a delay of the pulser stands for.
    fn phase(&self, delay: f64) -> (u8, Phase) {
        let Some(table) = &self.scene.equivalent_time else {
            return (
                0,
                Phase {
                    late: 0.0,
                    offset: 0.0,
                    gain: 1.0,
                },
            );
        };
        let dense_rate = self.scene.record.sample_rate_mhz * 1e6 * f64::from(table.phases);
        let number = (delay * dense_rate).round().rem_euclid(f64::from(table.phases)) as u8;
        (number, table.phase(self.scene.receiver.specimen, number))
    }
}

#[cfg(test)]
mod tests;
