//! When the samples are really taken: trigger jitter, free-running clock, pulser delays.

use super::{Purpose, Random};
use crate::scene::{EquivalentTime, Scene};

/// The first of the specimen's sequences for equivalent-time phases.
const PHASES: u64 = 1 << 16;

/// How much later than the receiver believes the pulse went out, in seconds: jitter, and the part of a
/// sample `period` that a free-running clock lags.
#[must_use]
pub fn trigger_late(scene: &Scene, seed: u64, shot: u64, period: f64) -> f64 {
    let timing = &scene.timing;
    if timing.trigger_jitter_ns == 0.0 && !timing.free_running {
        return 0.0;
    }
    let mut random = Random::new(seed, Purpose::Trigger, shot);
    let lag = random.uniform();
    let jitter = timing.trigger_jitter_ns * 1e-9 * random.normal();
    if timing.free_running {
        jitter + lag * period
    } else {
        jitter
    }
}

/// What is fixed about one phase of equivalent-time sampling.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Phase {
    /// By how much its delay is too long, in seconds.
    pub late: f64,
    /// Offset in steps.
    pub offset: f64,
    /// Factor of its gain.
    pub gain: f64,
}

impl EquivalentTime {
    /// The errors of one phase of one board.
    #[must_use]
    pub fn phase(&self, specimen: u32, number: u8) -> Phase {
        let mut random = Random::new(u64::from(specimen), Purpose::Specimen, PHASES + u64::from(number));
        let (late, offset, gain) = (random.normal(), random.normal(), random.normal());
        Phase {
            late: self.delay_error_ns * 1e-9 * late,
            offset: self.offset_steps * offset,
            gain: 1.0 + 0.01 * self.gain_error_percent * gain.clamp(-4.0, 4.0),
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn moments(values: &[f64]) -> (f64, f64) {
        let mean = values.iter().sum::<f64>() / values.len() as f64;
        let variance = values.iter().map(|x| (x - mean).powi(2)).sum::<f64>() / (values.len() - 1) as f64;
        (mean, variance.sqrt())
    }

    /// Sample period / sqrt(12): 16, 48, 72 and 100 MHz give 18.04, 6.01, 4.01 and 2.89 ns.
    #[test]
    fn val_free_running_clock() {
        let mut scene = Scene::contact(5.0, 60.0, "carbon steel", 10.0);
        scene.timing.free_running = true;
        for (rate, expected) in [(16e6, 18.04e-9), (48e6, 6.01e-9), (72e6, 4.01e-9), (100e6, 2.89e-9)] {
            let late: Vec<f64> = (0..20_000)
                .map(|shot| trigger_late(&scene, 5, shot, 1.0 / rate))
                .collect();
            let (mean, spread) = moments(&late);
            println!(
                "{} MHz: {:.3} ns rms, {:.3} stated",
                rate * 1e-6,
                spread * 1e9,
                expected * 1e9
            );
            assert!((spread / expected - 1.0).abs() < 0.01);
            assert!((mean * rate - 0.5).abs() < 0.01);
        }
        scene.timing.free_running = false;
        assert_eq!(trigger_late(&scene, 5, 1, 1e-8), 0.0);
        scene.timing.trigger_jitter_ns = 1.0;
        let late: Vec<f64> = (0..20_000).map(|shot| trigger_late(&scene, 5, shot, 1e-8)).collect();
        let (mean, spread) = moments(&late);
        assert!(mean.abs() < 3e-11 && (spread * 1e9 - 1.0).abs() < 0.02);
    }
}
