//! Interference: tones, bursts, spikes, hum.

use super::{Purpose, Random};
use crate::scene::{Bursts, Interference};
use std::f64::consts::{PI, TAU};

/// Beyond so many decay times a spike is forgotten.
const SPIKE_LASTS: f64 = 25.0;

/// The interference of one shot.
#[derive(Clone, Debug)]
pub struct Disturbance {
    /// Amplitude over full scale, angular frequency, phase.
    sines: Vec<(f64, f64, f64)>,
    bursts: Option<(Bursts, f64)>,
    /// Time and signed height of each spike, in order of time.
    spikes: Vec<(f64, f64)>,
    spike_decay: f64,
    next_spike: usize,
    /// Sum of all spikes so far, at the time of the last.
    spike_sum: f64,
    last_spike: f64,
}

impl Disturbance {
    /// Draws it for one shot whose samples lie between `from` and `to` seconds.
    #[must_use]
    pub fn draw(scene: &Interference, seed: u64, shot: u64, from: f64, to: f64) -> Self {
        let mut random = Random::new(seed, Purpose::Interference, shot);
        // Hum and bursts first, so that one more tone changes nothing of them.
        let hum_phase = TAU * random.uniform();
        let burst_start = random.uniform();
        let mut sines = Vec::new();
        for tone in &scene.tones {
            let phase = TAU * random.uniform();
            sines.push((0.01 * tone.amplitude_percent, TAU * tone.frequency_mhz * 1e6, phase));
        }
        if let Some(hum) = &scene.hum {
            sines.push((0.01 * hum.amplitude_percent, TAU * hum.frequency_hz, hum_phase));
        }
        let bursts = scene.bursts.clone().map(|bursts| {
            let start = match bursts.after_trigger_us {
                Some(after) => after * 1e-6,
                None => burst_start * bursts.period_us * 1e-6,
            };
            (bursts, start)
        });
        let (mut spikes, mut spike_decay) = (Vec::new(), 1.0);
        if let Some(table) = scene.spikes.as_ref().filter(|table| table.rate_per_ms > 0.0) {
            let mut random = Random::new(seed, Purpose::Spikes, shot);
            spike_decay = table.decay_ns * 1e-9;
            let mut time = from - SPIKE_LASTS * spike_decay;
            loop {
                // Gaps of a Poisson process are exponentially distributed.
                time -= libm::log(1.0 - random.uniform()) / (table.rate_per_ms * 1e3);
                if time >= to {
                    break;
                }
                let sign = if random.uniform() < 0.5 { -0.01 } else { 0.01 };
                spikes.push((time, sign * table.amplitude_percent));
            }
        }
        Self {
            sines,
            bursts,
            spikes,
            spike_decay,
            next_spike: 0,
            spike_sum: 0.0,
            last_spike: f64::NEG_INFINITY,
        }
    }

    /// Spikes from `from` seconds on.
    #[must_use]
    pub fn spikes_from(&self, from: f64) -> usize {
        self.spikes.iter().filter(|spike| spike.0 >= from).count()
    }

    /// Share of full scale at `time` seconds. Times must not go back by more than the jitter of a sample.
    pub fn value(&mut self, time: f64) -> f64 {
        let mut value = 0.0;
        for &(amplitude, frequency, phase) in &self.sines {
            value += amplitude * libm::sin(frequency * time + phase);
        }
        if let Some((bursts, start)) = &self.bursts {
            let period = bursts.period_us * 1e-6;
            let length = bursts.length_us * 1e-6;
            let since = time - start;
            let inside = since - (since / period).floor() * period;
            // Locked bursts do not come before their first.
            let begun = since >= 0.0 || bursts.after_trigger_us.is_none();
            if begun && inside < length {
                let rise = libm::sin(PI * inside / length);
                let carrier = libm::sin(TAU * bursts.frequency_mhz * 1e6 * inside);
                value += 0.01 * bursts.amplitude_percent * rise * rise * carrier;
            }
        }
        while let Some(&(at, height)) = self.spikes.get(self.next_spike).filter(|spike| spike.0 <= time) {
            self.spike_sum = self.spike_sum * libm::exp((self.last_spike - at) / self.spike_decay) + height;
            self.last_spike = at;
            self.next_spike += 1;
        }
        if self.spike_sum != 0.0 {
            value += self.spike_sum * libm::exp(-(time - self.last_spike).max(0.0) / self.spike_decay);
        }
        value
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::scene::{Hum, Spikes, Tone};

    fn taken(scene: &Interference, shot: u64, samples: u32) -> Vec<f64> {
        let mut drawn = Disturbance::draw(scene, 3, shot, 0.0, f64::from(samples) * 1e-8);
        (0..samples).map(|i| drawn.value(f64::from(i) * 1e-8)).collect()
    }

    fn rms(values: &[f64]) -> f64 {
        (values.iter().map(|x| x * x).sum::<f64>() / values.len() as f64).sqrt()
    }

    /// A sine's rms is its peak over sqrt(2); independent phases add in power; a burst's rms is that of
    /// its squared sine, sqrt(3/16) of the peak, times the root of its share of time.
    #[test]
    fn val_tones_and_bursts_have_their_power() {
        let mut scene = Interference {
            tones: vec![
                Tone {
                    frequency_mhz: 1.3,
                    amplitude_percent: 3.0,
                },
                Tone {
                    frequency_mhz: 7.1,
                    amplitude_percent: 4.0,
                },
            ],
            ..Interference::default()
        };
        let found = rms(&taken(&scene, 0, 100_000));
        assert!((found / (0.05 / 2f64.sqrt()) - 1.0).abs() < 0.005, "{found}");
        assert_ne!(taken(&scene, 0, 100), taken(&scene, 1, 100));
        scene = Interference {
            bursts: Some(Bursts {
                period_us: 10.0,
                length_us: 4.0,
                frequency_mhz: 3.3,
                amplitude_percent: 8.0,
                after_trigger_us: None,
            }),
            ..Interference::default()
        };
        let found = rms(&taken(&scene, 0, 100_000));
        let expected = 0.08 * (3f64 / 16.0 * 0.4).sqrt();
        assert!((found / expected - 1.0).abs() < 0.01, "{found} {expected}");
        assert_ne!(taken(&scene, 0, 2000), taken(&scene, 1, 2000));
        scene.bursts.as_mut().unwrap().after_trigger_us = Some(2.0);
        let locked = taken(&scene, 0, 2000);
        assert_eq!(locked, taken(&scene, 1, 2000));
        assert!(locked[..200].iter().all(|x| *x == 0.0) && locked[200..600].iter().any(|x| *x > 0.05));
        scene = Interference {
            hum: Some(Hum {
                frequency_hz: 50.0,
                amplitude_percent: 10.0,
            }),
            ..Interference::default()
        };
        // Within a record the mains hardly move: from shot to shot they do.
        let first: Vec<f64> = (0..2000).map(|shot| taken(&scene, shot, 1)[0]).collect();
        assert!((rms(&first) / (0.1 / 2f64.sqrt()) - 1.0).abs() < 0.04);
    }

    /// Counts are Poisson: mean and variance are the rate; the power is that of shot noise, rate times
    /// the integral of the squared pulse (Campbell 1909).
    #[test]
    fn val_spikes_are_poisson() {
        let scene = Interference {
            spikes: Some(Spikes {
                rate_per_ms: 400.0,
                amplitude_percent: 5.0,
                decay_ns: 40.0,
            }),
            ..Interference::default()
        };
        let counts: Vec<f64> = (0..3000)
            .map(|shot| Disturbance::draw(&scene, 1, shot, 0.0, 20e-6).spikes_from(0.0) as f64)
            .collect();
        let mean = counts.iter().sum::<f64>() / 3000.0;
        let variance = counts.iter().map(|x| (x - mean).powi(2)).sum::<f64>() / 2999.0;
        println!("spikes: mean {mean:.3} and variance {variance:.3} of 8");
        assert!((mean - 8.0).abs() < 0.2 && (variance - 8.0).abs() < 0.8);
        let power = (0..60)
            .map(|shot| rms(&taken(&scene, shot, 20_000)).powi(2))
            .sum::<f64>()
            / 60.0;
        let expected = 4e5 * 0.05f64.powi(2) * 40e-9 / 2.0;
        println!("spikes: power {power:.4e}, Campbell {expected:.4e}");
        assert!((power / expected - 1.0).abs() < 0.04);
    }
}
