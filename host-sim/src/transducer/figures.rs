//! What a pulse measures: band and durations, as truth.

use super::{BandPulse, Pulse, anti_alias};
use crate::fourier::Kept;
use serde::Serialize;

/// 10^(-6/20): what "-6 dB" means.
const MINUS_6_DB: f64 = 0.501_187_233_627_272_2;

/// What a pulse measures, as truth. Two-way spectrum at -6 dB; durations at -20 dB.
#[derive(Clone, Copy, Debug, PartialEq, Serialize)]
pub struct PulseFigures {
    /// Middle of the -6 dB limits.
    pub centre_frequency_mhz: f64,
    /// Lower -6 dB limit, next to the spectrum's maximum.
    pub lower_frequency_mhz: f64,
    /// Upper -6 dB limit.
    pub upper_frequency_mhz: f64,
    /// Width of the band over its centre.
    pub relative_bandwidth_percent: f64,
    /// From the first to the last time at which the envelope has 10 % of its maximum.
    pub duration_20db_envelope_ns: f64,
    /// The same of the rectified signal with 10 % of its highest half-wave: shorter, and dependent on
    /// the carrier's phase.
    pub duration_20db_rectified_ns: f64,
}

impl PulseFigures {
    /// Of a pulse behind the anti-alias filter at `sample_rate`.
    #[must_use]
    pub fn of(pulse: &Pulse, sample_rate: f64) -> Self {
        thread_local! {
            static KEPT: Kept<(Pulse, f64), PulseFigures> = const { Kept::new() };
        }
        KEPT.with(|kept| kept.get((*pulse, sample_rate), || Self::measure(pulse, sample_rate)))
    }

    fn measure(pulse: &Pulse, sample_rate: f64) -> Self {
        let (before, after) = pulse.reach();
        // Figures do not depend on the record's length, so the grid is the pulse's own.
        let length = ((4.0 * (before + after) * sample_rate) as usize).next_power_of_two();
        let band = BandPulse::new(pulse, sample_rate, length.max(64));
        let (lower, upper) = limits(pulse, sample_rate);
        let envelope = |time: f64| band.analytic(time).magnitude();
        let (start, end) = outermost(&envelope, 0.1, before, after, 1.0 / (16.0 * pulse.centre));
        let step = 1.0 / (256.0 * pulse.centre);
        let steps = ((start.abs() + end) / step) as i64 + 2;
        let highest = (0..steps)
            .map(|i| band.analytic(start + i as f64 * step).re.abs())
            .fold(0.0, f64::max);
        let rectified = |time: f64| band.analytic(time).re.abs();
        let (first, last) = outermost(&rectified, 0.1 * highest, -start, end, step);
        Self {
            centre_frequency_mhz: (lower + upper) / 2e6,
            lower_frequency_mhz: lower / 1e6,
            upper_frequency_mhz: upper / 1e6,
            relative_bandwidth_percent: 200.0 * (upper - lower) / (upper + lower),
            duration_20db_envelope_ns: (end - start) * 1e9,
            duration_20db_rectified_ns: (last - first) * 1e9,
        }
    }
}

/// -6 dB limits next to the spectrum's maximum, which is looked for inside the nominal band.
fn limits(pulse: &Pulse, sample_rate: f64) -> (f64, f64) {
    let magnitude = |frequency: f64| pulse.magnitude(frequency) * anti_alias(frequency, sample_rate);
    let step = (pulse.upper_frequency() - pulse.centre) / 32.0;
    let mut top = pulse.centre;
    for i in -32..=32 {
        let frequency = pulse.centre + f64::from(i) * step;
        if frequency > 0.0 && magnitude(frequency) > magnitude(top) {
            top = frequency;
        }
    }
    let (left, middle, right) = (magnitude(top - step), magnitude(top), magnitude(top + step));
    let bend = left - 2.0 * middle + right;
    let rise = if bend < 0.0 {
        (left - right) * (left - right) / (8.0 * bend)
    } else {
        0.0
    };
    let level = MINUS_6_DB * (middle - rise);
    let crossing = |direction: f64| {
        let (mut inside, mut outside) = (top, top + direction);
        while magnitude(outside) >= level && outside > 0.0 && outside < 0.5 * sample_rate {
            (inside, outside) = (outside, outside + direction);
        }
        for _ in 0..48 {
            let between = 0.5 * (inside + outside);
            if magnitude(between) >= level {
                inside = between;
            } else {
                outside = between;
            }
        }
        inside.max(0.0)
    };
    (crossing(-step), crossing(step))
}

/// First and last time at which `height` reaches `level`, searched inwards from the far ends.
fn outermost(height: &dyn Fn(f64) -> f64, level: f64, before: f64, after: f64, step: f64) -> (f64, f64) {
    let search = |from: f64, direction: f64| {
        let steps = ((before + after) / step) as i64;
        let mut outside = from;
        for i in 1..=steps {
            let time = from + direction * step * i as f64;
            if height(time) >= level {
                let mut inside = time;
                for _ in 0..40 {
                    let middle = 0.5 * (inside + outside);
                    if height(middle) >= level {
                        inside = middle;
                    } else {
                        outside = middle;
                    }
                }
                return inside;
            }
            outside = time;
        }
        from
    };
    (search(-before, 1.0), search(after, -1.0))
}
