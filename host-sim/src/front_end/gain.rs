//! Gain that is not what was asked for: steps, their errors, and a lag after each change.

use super::{Purpose, Random};
use crate::scene::Receiver;

/// The first of the specimen's sequences that belong to gain steps.
const FIRST_STEP: u64 = 1 << 32;

impl Receiver {
    /// The gain that the receiver sets, and believes in, when `asked` decibels are asked for: the nearest
    /// step.
    #[must_use]
    pub fn nominal_gain(&self, asked: f64) -> f64 {
        if self.gain_step_db > 0.0 {
            (asked / self.gain_step_db).round() * self.gain_step_db
        } else {
            asked
        }
    }

    /// By how many decibels the settled gain differs from the nominal one.
    #[must_use]
    pub fn gain_error(&self, asked: f64) -> f64 {
        if self.gain_error_db == 0.0 || self.gain_step_db == 0.0 {
            return 0.0;
        }
        // Numbers of steps are small: -200 dB in steps of a millionth is the worst.
        let step = (asked / self.gain_step_db).round() as i64;
        let mut random = Random::new(
            u64::from(self.specimen),
            Purpose::Specimen,
            FIRST_STEP.wrapping_add_signed(step),
        );
        self.gain_error_db * random.normal().clamp(-3.0, 3.0)
    }
}

/// Follows a gain that lags behind what is asked for.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct GainLag {
    in_force: Option<f64>,
}

impl GainLag {
    /// No shot yet.
    #[must_use]
    pub const fn new() -> Self {
        Self { in_force: None }
    }

    /// The gain in force in the next shot: after n shots with the same demand the distance has fallen to
    /// exp(-n / shots). The first shot of all finds the gain settled.
    pub fn next(&mut self, demanded: f64, shots: f64) -> f64 {
        let before = self.in_force.unwrap_or(demanded);
        let left = if shots > 0.0 { libm::exp(-1.0 / shots) } else { 0.0 };
        let now = demanded + (before - demanded) * left;
        self.in_force = Some(now);
        now
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn steps_have_fixed_errors_of_the_stated_size() {
        let receiver = |specimen| Receiver {
            specimen,
            gain_step_db: 0.5,
            gain_error_db: 0.4,
            ..Receiver::default()
        };
        assert_eq!(receiver(1).nominal_gain(20.2), 20.0);
        assert_eq!(receiver(1).gain_error(20.2), receiver(1).gain_error(19.8));
        assert_ne!(receiver(1).gain_error(20.0), receiver(2).gain_error(20.0));
        let errors: Vec<f64> = (-400..400)
            .map(|k| receiver(7).gain_error(f64::from(k) * 0.5))
            .collect();
        let rms = (errors.iter().map(|x| x * x).sum::<f64>() / errors.len() as f64).sqrt();
        assert!((rms / 0.4 - 1.0).abs() < 0.08, "{rms}");
        assert!(errors.iter().all(|x| x.abs() < 1.2 + 1e-9));
        assert_eq!(Receiver::default().nominal_gain(20.2), 20.2);
    }

    #[test]
    fn lag_falls_exponentially() {
        let mut lag = GainLag::default();
        assert_eq!(lag.next(10.0, 2.0), 10.0);
        for n in 1..6 {
            let found = lag.next(30.0, 2.0);
            assert!((found - (30.0 - 20.0 * (-0.5 * f64::from(n)).exp())).abs() < 1e-12);
        }
        assert_eq!(lag.next(0.0, 0.0), 0.0);
    }
}
