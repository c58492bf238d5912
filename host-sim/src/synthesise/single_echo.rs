//! Height and place of single echoes, for the truth.

use crate::fourier::Complex;
use crate::transducer::BandPulse;

/// Fewer bins of a spectrum whose signal is short: the figures of single echoes need no more.
pub(super) struct Thinner {
    first: usize,
    step: usize,
}

impl Thinner {
    /// For echoes of a pulse of `length` seconds: a period of at least eight times that.
    pub(super) fn new(pulse: &BandPulse, length: f64) -> Self {
        let most = 1.0 / (8.0 * length * pulse.spacing());
        let mut step = 1;
        while f64::from(2 * step as u32) <= most && step < 1024 {
            step *= 2;
        }
        let first = pulse.first_bin().next_multiple_of(step) - pulse.first_bin();
        Self { first, step }
    }

    pub(super) fn of(&self, pulse: &BandPulse, values: &[Complex]) -> BandPulse {
        let thinned = values.iter().skip(self.first).step_by(self.step);
        let scale = self.step as f64;
        pulse.thinned(self.step, thinned.map(|value| value.scaled(scale)).collect())
    }

    /// Where the correlation of a shape (turned over, or not) with the pulse has its maximum, in seconds.
    pub(super) fn correlation_shift(&self, pulse: &BandPulse, shape: &[Complex], turned: bool, cycle: f64) -> f64 {
        let sign = if turned { -1.0 } else { 1.0 };
        let cross: Vec<Complex> = shape
            .iter()
            .zip(pulse.values())
            .map(|(&value, pulse)| (value * pulse.conjugate()).scaled(sign))
            .collect();
        self.of(pulse, &cross).real_maximum(cycle)
    }
}
