//! The band of an unknown probe, estimated from its strongest echo.
//!
//! Only for looking at records without a set-up: centre frequency and bandwidth decide which detector
//! the echo search uses, and no thickness rests on them.

use std::f64::consts::{PI, TAU};

/// -6 dB as a ratio of amplitudes: 10^(-6/20).
const MINUS_6DB: f64 = 0.501_187_233_627_272_3;

/// What one record tells about the probe's band.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Band {
    /// Middle of the -6 dB limits, as a share of the sample rate.
    pub centre: f64,
    /// -6 dB width over the centre.
    pub relative_bandwidth: f64,
    /// The first sample beyond the transmission pulse, if the record starts with one; else 0.
    pub first_quiet_sample: usize,
}

/// A stretch of samples round one burst.
#[derive(Clone, Copy)]
struct Burst {
    start: usize,
    end: usize,
    half_cycle: usize,
}

/// The band of the strongest burst beyond a transmission pulse at the record's start.
///
/// `None` if nothing stands out from the noise (peak below six times the median of the rectified
/// record) or the record is shorter than 16 samples.
#[must_use]
pub fn estimate(codes: &[i16], starts_at_trigger: bool) -> Option<Band> {
    if codes.len() < 16 {
        return None;
    }
    // The median, because a large transmission pulse moves the mean.
    let mut ordered = codes.to_vec();
    ordered.sort_unstable();
    let offset = f64::from(ordered[ordered.len() / 2]);
    let signal: Vec<f64> = codes.iter().map(|code| f64::from(*code) - offset).collect();
    let mut sorted: Vec<f64> = signal.iter().map(|x| x.abs()).collect();
    sorted.sort_by(f64::total_cmp);
    // A quantised quiet record has a median of 0: one code is the least that counts as noise.
    let floor = sorted[sorted.len() / 2].max(0.5);
    let first = strongest(&signal, 0, floor)?;
    let (burst, first_quiet_sample) = if starts_at_trigger && first.start <= 2 * first.half_cycle {
        match strongest(&signal, first.end, floor) {
            Some(next) => (next, first.end),
            None => (first, 0),
        }
    } else {
        (first, 0)
    };
    let (lower, upper) = limits(signal.get(burst.start..burst.end)?)?;
    let centre = 0.5 * (lower + upper);
    Some(Band {
        centre,
        relative_bandwidth: (upper - lower) / centre,
        first_quiet_sample,
    })
}

/// The burst round the largest sample from `from` on.
fn strongest(signal: &[f64], from: usize, floor: f64) -> Option<Burst> {
    let rest = signal.get(from..)?;
    let (at, peak) = rest.iter().enumerate().max_by(|a, b| a.1.abs().total_cmp(&b.1.abs()))?;
    let (at, sign, peak) = (at + from, peak.signum(), peak.abs());
    if peak < 6.0 * floor {
        return None;
    }
    let same_side = |x: &&f64| **x * sign > 0.05 * peak;
    let after = signal[at..].iter().take_while(same_side).count();
    let before = signal[from..=at].iter().rev().take_while(same_side).count();
    let half_cycle = (before + after).saturating_sub(1).max(1);
    // The burst ends where nothing above a tenth of its peak follows for two cycles.
    let loud = |x: &f64| x.abs() >= 0.1 * peak;
    let edge = |samples: &mut dyn Iterator<Item = &f64>| {
        let mut last = 0;
        for (distance, x) in samples.enumerate() {
            if loud(x) {
                last = distance;
            } else if distance - last > 4 * half_cycle {
                break;
            }
        }
        last + half_cycle
    };
    let right = edge(&mut signal[at..].iter());
    let left = edge(&mut signal[from..=at].iter().rev());
    Some(Burst {
        start: at.saturating_sub(left).max(from),
        end: (at + right + 1).min(signal.len()),
        half_cycle,
    })
}

/// The -6 dB limits round the largest line of the spectrum, as shares of the sample rate.
fn limits(burst: &[f64]) -> Option<(f64, f64)> {
    const LINES: usize = 1024;
    // Long bursts have narrow spectra; beyond this length the lines would be too coarse for them.
    let burst = burst.get(..burst.len().min(LINES))?;
    let taper = (burst.len() / 8).max(1);
    let level = |line: usize| {
        let (mut re, mut im) = (0.0, 0.0);
        for (i, x) in burst.iter().enumerate() {
            let edge = i.min(burst.len() - 1 - i);
            let weight = if edge < taper {
                0.5 - 0.5 * libm::cos(PI * (edge as f64 + 0.5) / taper as f64)
            } else {
                1.0
            };
            let phase = TAU * (line * i % (2 * LINES)) as f64 / (2 * LINES) as f64;
            re += weight * x * libm::cos(phase);
            im += weight * x * libm::sin(phase);
        }
        libm::hypot(re, im)
    };
    let spectrum: Vec<f64> = (0..=LINES).map(level).collect();
    let (top, peak) = spectrum.iter().enumerate().max_by(|a, b| a.1.total_cmp(b.1))?;
    let half = peak * MINUS_6DB;
    let crossing = |inner: usize, outer: usize| {
        let (a, b) = (spectrum[inner], spectrum[outer]);
        let part = (a - half) / (a - b);
        (inner as f64 + part * (outer as f64 - inner as f64)) / (2 * LINES) as f64
    };
    let below = (0..top)
        .rev()
        .find(|i| spectrum[*i] < half)
        .map_or(0.0, |i| crossing(i + 1, i));
    let above = (top + 1..=LINES)
        .find(|i| spectrum[*i] < half)
        .map_or(0.5, |i| crossing(i - 1, i));
    (above > below && above > 0.0).then_some((below, above))
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    /// A Gaussian burst: its amplitude spectrum is Gaussian too, so that the -6 dB width is
    /// sqrt(2 ln(10^(6/20))) / (pi sigma) by the Fourier transform of a Gaussian.
    fn burst(centre: f64, relative: f64, at: f64, samples: usize) -> Vec<i16> {
        let width = centre * relative;
        let sigma = (-2.0 * libm::log(MINUS_6DB)).sqrt() / (PI * width);
        (0..samples)
            .map(|i| {
                let t = i as f64 - at;
                let envelope = libm::exp(-0.5 * (t / sigma) * (t / sigma));
                (10_000.0 * envelope * libm::cos(TAU * centre * t)).round() as i16
            })
            .collect()
    }

    #[test]
    fn law_band_of_a_gaussian_burst() {
        for (centre, relative) in [(0.1, 0.6), (0.05, 0.3), (0.2, 0.8)] {
            let band = estimate(&burst(centre, relative, 500.0, 1000), false).unwrap();
            assert!((band.centre / centre - 1.0).abs() < 0.03, "{band:?}");
            assert!((band.relative_bandwidth / relative - 1.0).abs() < 0.25, "{band:?}");
            assert_eq!(band.first_quiet_sample, 0);
        }
    }

    #[test]
    fn a_transmission_pulse_is_passed_over() {
        let mut codes = burst(0.1, 0.6, 600.0, 1000);
        for (i, code) in codes.iter_mut().take(40).enumerate() {
            *code = if i % 3 == 0 { 30_000 } else { -20_000 };
        }
        let band = estimate(&codes, true).unwrap();
        assert!((band.centre / 0.1 - 1.0).abs() < 0.03, "{band:?}");
        assert!((40..200).contains(&band.first_quiet_sample), "{band:?}");
    }

    #[test]
    fn nothing_is_made_of_nothing() {
        assert_eq!(estimate(&[], false), None);
        assert_eq!(estimate(&[5; 100], true), None);
        assert_eq!(estimate(&[1; 15], true), None);
    }

    proptest! {
        #[test]
        fn any_record_is_survived(codes in prop::collection::vec(any::<i16>(), 0..300), trigger in any::<bool>()) {
            if let Some(band) = estimate(&codes, trigger) {
                prop_assert!(band.centre > 0.0 && band.centre <= 0.5);
                prop_assert!(band.relative_bandwidth > 0.0 && band.relative_bandwidth <= 2.0);
                prop_assert!(band.first_quiet_sample <= codes.len());
            }
        }
    }
}
