//! Receiver and converter: what happens between the probe and the memory, one module for each effect.
//!
//! Random numbers are drawn per purpose and shot, so that an effect that is switched on leaves all others
//! as they were.

pub mod band_limits;
pub mod converter;
pub mod drop_outs;
pub mod gain;
pub mod interference;
mod normal;
pub mod timing;

use crate::scene::TransmissionPulse;
use normal::{Words, Ziggurat};
use rand_chacha::ChaCha8Rng;
use rand_chacha::rand_core::{Rng, SeedableRng};
use std::f64::consts::{PI, TAU};

pub use converter::Converter;

/// What random numbers are drawn for: each purpose has a sequence of its own, so that one more draw
/// for one of them leaves the others as they were.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[repr(u8)]
pub enum Purpose {
    /// Noise of the receiver.
    Noise = 0,
    /// What differs from shot to shot: thickness, delay, gain.
    Variation = 1,
    /// Where the grains of a wall are.
    Grain = 16,
    /// Thermal noise at the receiver's input.
    Thermal = 32,
    /// Jitter of the trigger, and shots that do not fire.
    Trigger = 33,
    /// Jitter of each sample.
    Aperture = 34,
    /// Tones, bursts and hum.
    Interference = 35,
    /// Spikes.
    Spikes = 36,
    /// Samples and blocks that get lost.
    DropOuts = 37,
    /// What is fixed on one board: seed and shot are its specimen and what is drawn.
    Specimen = 38,
    /// Faults that a wrapped receiver makes on purpose.
    Faults = 39,
}

/// Random numbers that depend on seed, purpose and shot alone, whatever was drawn before: ChaCha with
/// 8 rounds, used as a counter.
#[derive(Clone, Debug)]
pub struct Random {
    generator: ChaCha8Rng,
    ziggurat: &'static Ziggurat,
}

impl Random {
    /// The sequence of one shot.
    #[must_use]
    pub fn new(seed: u64, purpose: Purpose, shot: u64) -> Self {
        let mut key = [0u8; 32];
        key[..8].copy_from_slice(&seed.to_le_bytes());
        key[8] = purpose as u8;
        let mut generator = ChaCha8Rng::from_seed(key);
        generator.set_stream(shot);
        Self {
            generator,
            ziggurat: Ziggurat::shared(),
        }
    }

    /// Uniform, at least 0 and below 1.
    pub fn uniform(&mut self) -> f64 {
        Words::uniform(self)
    }

    /// Normal, mean 0 and standard deviation 1.
    #[inline]
    pub fn normal(&mut self) -> f64 {
        self.ziggurat.draw(self)
    }
}

impl Words for Random {
    #[inline]
    fn word(&mut self) -> u64 {
        self.generator.next_u64()
    }
}

impl TransmissionPulse {
    /// Share of full scale at `time` seconds after the trigger, with the ringing at `frequency` hertz.
    ///
    /// Zero before the trigger; a raised cosine over half a cycle leads into the decays, because no
    /// receiver jumps.
    #[must_use]
    pub fn value(&self, time: f64, frequency: f64) -> f64 {
        if time <= 0.0 {
            return 0.0;
        }
        let onset = (2.0 * time * frequency).min(1.0);
        let onset = 0.5 - 0.5 * libm::cos(PI * onset);
        let fall = |percent: f64, ns: f64| 0.01 * percent * libm::exp(-time / (ns * 1e-9));
        let ringing = fall(self.amplitude_percent, self.decay_ns) * libm::cos(TAU * frequency * time);
        onset * (ringing + fall(self.recovery_percent, self.recovery_ns))
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn sequences_depend_on_seed_purpose_and_shot() {
        let first = |seed, purpose, shot| Random::new(seed, purpose, shot).uniform();
        let base = first(7, Purpose::Noise, 3);
        assert_eq!(base, first(7, Purpose::Noise, 3));
        for other in [
            first(8, Purpose::Noise, 3),
            first(7, Purpose::Variation, 3),
            first(7, Purpose::Noise, 4),
        ] {
            assert_ne!(base, other);
        }
    }

    #[test]
    fn transmission_pulse_starts_at_the_trigger_and_dies_away() {
        let pulse = TransmissionPulse {
            amplitude_percent: 400.0,
            decay_ns: 200.0,
            recovery_percent: -20.0,
            recovery_ns: 1500.0,
        };
        assert_eq!(pulse.value(-1e-9, 5e6), 0.0);
        let highest = (0..1000)
            .map(|i| pulse.value(f64::from(i) * 1e-9, 5e6).abs())
            .fold(0.0, f64::max);
        assert!((1.0..4.2).contains(&highest), "{highest}");
        assert!((pulse.value(6e-6, 5e6) + 0.2 * (-4f64).exp()).abs() < 1e-6);
    }
}
