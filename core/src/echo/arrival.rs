//! When exactly an echo arrived: the estimators side by side.
//!
//! **In**: codes, where to look, the reference pulse. **Out**: the place of the pulse's origin and the
//! fitted amplitude. Every estimator refers to the same origin, by applying itself to the reference
//! pulse too; so they agree on a clean echo of the learned shape.
//!
//! [`Estimator::LeastSquares`] is the default, because its scatter is that of the Cramér-Rao bound
//! (standard deviation over bound 0.95 to 1.05 from 20 to 50 dB) while a crossing scatters 5 to 15
//! times as much and can slip a cycle. The others stay because builders know them, and because two
//! estimators that must agree test each other. The bound for a known shape with unknown amplitude:
//! standard deviation = noise / (amplitude · sqrt(Σ s'²)).
//!
//! What all of them share: an echo whose *phase* differs from the reference pulse is read early or
//! late by that phase (1 degree is 0.53 ns at 5 MHz). Zero-phase changes of shape do nothing.

use crate::echo::correlation::{Sign, coarse_maximum, correlate_into, curvature, refine};
use crate::echo::envelope::{interpolated_maximum, squared_at, stride};
use crate::echo::interpolate::{REACH, at};
use crate::echo::pulse::ReferencePulse;
use crate::math;
use crate::units::SamplePosition;

/// How an arrival is found.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Default)]
pub enum Estimator {
    /// The envelope first reaches half of its maximum. Robust against a wrong cycle; scatters about
    /// ten times the bound.
    FirstCrossing,
    /// The first zero after the signal has reached half of its maximum. Sharp, but a noise peak near
    /// the half moves it by a whole half cycle.
    ZeroCrossing,
    /// The envelope's maximum. Insensitive to phase; scatters 15 to 50 times the bound.
    EnvelopePeak,
    /// The correlation's highest sample and its neighbours, through a cosine. 1.00 to 1.05 of the
    /// bound from ten samples a cycle, 2 to 5 times at four.
    Correlation,
    /// The maximum of the correlation, interpolated band-limited: least squares.
    #[default]
    LeastSquares,
}

/// An echo's place and size.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Arrival {
    /// Where the reference pulse's origin lies.
    pub position: SamplePosition,
    /// Fitted envelope peak in codes; negative for an echo upside down. The estimators without a
    /// pulse give the window's envelope maximum, always positive.
    pub amplitude: f32,
    /// How far, in samples, the envelope of the correlation peaks behind its carrier: 0 for an echo that
    /// looks like the pulse or like an evenly attenuated one, and just the shift for an echo whose phase is
    /// turned or that something overlaps. Only least squares tells; the others say 0.
    pub group_lag: f32,
    /// How sharp the correlation's top is over that of the pulse with itself: 1 for an echo of the pulse's
    /// shape, less for one that has lost its higher frequencies, whose arrival scatters by that much
    /// more. Between 0.5 and 1.1; 1 from the estimators that do not look.
    pub sharpness: f32,
}

/// Where an arrival is looked for.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Search {
    /// The sample near which the origin should lie.
    pub around: u32,
    /// How far from it, in samples.
    pub reach: f32,
    /// Which sign the echo may have.
    pub sign: Sign,
    /// Samples a cycle of the centre frequency.
    pub samples_per_cycle: f32,
}

/// Finds one echo's arrival. `scratch` needs [`scratch_needed`] entries; with less, the search
/// narrows. `None` if nothing in reach has the sign, or if the pulse there would stand out of the record.
#[must_use]
pub fn estimate(
    estimator: Estimator,
    codes: &[i16],
    search: &Search,
    pulse: &ReferencePulse<'_>,
    scratch: &mut [f32],
) -> Option<Arrival> {
    match estimator {
        Estimator::LeastSquares | Estimator::Correlation => {
            by_correlation(estimator == Estimator::LeastSquares, codes, search, pulse, scratch)
        }
        Estimator::FirstCrossing | Estimator::ZeroCrossing | Estimator::EnvelopePeak => {
            by_window(estimator, codes, search, pulse, scratch)
        }
    }
}

/// Entries of scratch for a search over `reach` samples each way.
#[must_use]
pub fn scratch_needed(reach: f32, pulse: &ReferencePulse<'_>) -> usize {
    let reach = usize::try_from(math::saturating_i32(reach)).unwrap_or(0) + 1;
    2 * (reach + REACH) + 1 + pulse.samples.len()
}

fn by_correlation(
    least_squares: bool,
    codes: &[i16],
    search: &Search,
    pulse: &ReferencePulse<'_>,
    scratch: &mut [f32],
) -> Option<Arrival> {
    let room = scratch.len().checked_sub(2 * REACH + 1)? / 2;
    let count = |samples: f32| {
        usize::try_from(math::saturating_i32(samples))
            .unwrap_or(0)
            .saturating_add(1)
    };
    // The side lobes half a cycle from an echo at the edge of the search are looked at too.
    let margin = count(0.25 * search.samples_per_cycle);
    let reach = count(search.reach).saturating_add(margin).min(room);
    let lags = scratch.get_mut(..2 * (reach + REACH) + 1)?;
    let whole_origin = math::saturating_i32(math::floor(pulse.facts.origin + 0.5));
    let first = i32::try_from(search.around).ok()? - whole_origin - (reach + REACH) as i32;
    correlate_into(codes, first, pulse, lags);
    let (from, to) = (REACH + margin, (REACH + 2 * reach).saturating_sub(margin));
    let coarse = coarse_maximum(lags, from, to, search.sign, search.samples_per_cycle)?;
    let (place, value) = if least_squares {
        refine(lags, coarse)
    } else {
        cosine(lags, coarse)
    };
    // The whole pulse must lie inside the record: a piece of one has another centre.
    let start = first.saturating_add(math::saturating_i32(math::floor(place)));
    let start_index = usize::try_from(start).ok()?;
    codes.get(start_index..start_index + pulse.samples.len())?;
    let base = u32::try_from(start).ok()?;
    let position = SamplePosition::new(base, (place - math::floor(place)) + pulse.facts.origin);
    let group_lag = if least_squares {
        group_lag(lags, place, value, search.samples_per_cycle, pulse)
    } else {
        0.0
    };
    let amplitude = value / pulse.facts.energy;
    let sharpness = if least_squares {
        sharpness(curvature(lags, place, value), amplitude, pulse)
    } else {
        1.0
    };
    Some(Arrival {
        position,
        amplitude,
        group_lag,
        sharpness,
    })
}

/// Curvature of a correlation's top over what the pulse itself would give at this amplitude, kept within what
/// noise leaves believable.
#[must_use]
pub fn sharpness(curvature: f32, amplitude: f32, pulse: &ReferencePulse<'_>) -> f32 {
    math::clamp(curvature / (amplitude.abs() * pulse.facts.derivative_energy), 0.5, 1.1)
}

/// How far the envelope of the correlation peaks behind the carrier's top at `place`.
///
/// For a Gaussian envelope of the correlation the logarithm of the two side lobes' ratio, half a cycle
/// after and before, is proportional to it: lag = T / (2 ln(1/ρ)) · ln(after / before), with ρ the
/// likeness of neighbouring cycles.
fn group_lag(lags: &[f32], place: f32, value: f32, samples_per_cycle: f32, pulse: &ReferencePulse<'_>) -> f32 {
    let half = 0.5 * samples_per_cycle;
    let sign = if value < 0.0 { -1.0 } else { 1.0 };
    let after = -sign * at(lags, place + half);
    let before = -sign * at(lags, place - half);
    // Without side lobes of the right sign there is no carrier to speak of: as far off as can be told.
    if !(after > 0.0 && before > 0.0) {
        return samples_per_cycle;
    }
    let lag = group_factor(samples_per_cycle, pulse) * math::ln(after / before);
    math::clamp(lag, -samples_per_cycle, samples_per_cycle)
}

/// Samples of group lag per unit of the side lobes' logarithmic ratio.
fn group_factor(samples_per_cycle: f32, pulse: &ReferencePulse<'_>) -> f32 {
    let likeness = math::clamp(pulse.facts.cycle_likeness, 1e-3, 0.999);
    0.5 * samples_per_cycle / -math::ln(likeness)
}

/// Standard deviation of [`Arrival::group_lag`] from white noise, in samples, for an echo of this
/// amplitude over the noise: about 5 times that of the arrival at 60 % bandwidth.
#[must_use]
pub fn group_lag_noise(samples_per_cycle: f32, amplitude_over_noise: f32, pulse: &ReferencePulse<'_>) -> f32 {
    // Two side lobes of height ρ^(1/4) whose noises correlate by ρ.
    let likeness = math::clamp(pulse.facts.cycle_likeness, 1e-3, 0.999);
    let side = math::sqrt(math::sqrt(likeness));
    let spread = math::sqrt(2.0 * (1.0 - likeness)) / (side * math::sqrt(pulse.facts.energy));
    group_factor(samples_per_cycle, pulse) * spread / amplitude_over_noise
}

/// The maximum through the highest lag and its neighbours as if they were samples of a cosine:
/// w = acos((left + right) / 2 middle), offset = atan2(right - left, 2 middle sin w) / w.
fn cosine(lags: &[f32], coarse: f32) -> (f32, f32) {
    let get = |i: usize| lags.get(i).copied().unwrap_or(0.0);
    // The place may lie between two lags: the higher of them, which need not be the nearer.
    let below = usize::try_from(math::saturating_i32(math::floor(coarse))).unwrap_or(0);
    let middle_index = if get(below + 1).abs() > get(below).abs() {
        below + 1
    } else {
        below
    };
    let (left, middle, right) = (
        get(middle_index.wrapping_sub(1)),
        get(middle_index),
        get(middle_index + 1),
    );
    let w = math::acos((left + right) / (2.0 * middle));
    let sine = math::sin(w);
    if !(w > 1e-3 && sine > 1e-3) {
        return (middle_index as f32, middle);
    }
    // Both arguments carry the sign of the echo: take it out, or the angle would point backwards.
    let flip = if middle < 0.0 { -1.0 } else { 1.0 };
    let offset = math::atan2(flip * (right - left), flip * 2.0 * middle * sine) / w;
    let value = middle * math::cos(w * offset) + (right - left) * 0.5 * (math::sin(w * offset) / sine);
    (middle_index as f32 + offset, value)
}

/// The estimators that look at the signal itself.
fn by_window(
    estimator: Estimator,
    codes: &[i16],
    search: &Search,
    pulse: &ReferencePulse<'_>,
    scratch: &mut [f32],
) -> Option<Arrival> {
    let length = pulse.samples.len();
    let reach = usize::try_from(math::saturating_i32(search.reach))
        .unwrap_or(0)
        .saturating_add(1);
    let origin = math::saturating_i32(math::floor(pulse.facts.origin + 0.5));
    let first = i32::try_from(search.around).ok()? - origin - reach as i32;
    let start = usize::try_from(first).unwrap_or(0);
    let window = codes.get(start..)?;
    let window = window.get(..window.len().min(length + 2 * reach).min(scratch.len()))?;
    let samples = scratch.get_mut(..window.len())?;
    let mut mean = 0.0;
    for (sample, &code) in samples.iter_mut().zip(window) {
        *sample = f32::from(code);
        mean += *sample;
    }
    mean /= window.len().max(1) as f32;
    for sample in samples.iter_mut() {
        *sample -= mean;
    }
    let (place, amplitude) = feature(estimator, samples, search.samples_per_cycle)?;
    let (own, _) = feature(estimator, pulse.samples, search.samples_per_cycle)?;
    let base = u32::try_from(start).ok()?;
    Some(Arrival {
        position: SamplePosition::new(base, place - own + pulse.facts.origin),
        amplitude,
        group_lag: 0.0,
        sharpness: 1.0,
    })
}

/// Place of an estimator's feature in a window, and the window's envelope maximum.
fn feature(estimator: Estimator, samples: &[f32], samples_per_cycle: f32) -> Option<(f32, f32)> {
    let stride = stride(samples_per_cycle);
    let squared = |i: usize| squared_at(samples, i, stride);
    let (mut index, mut highest) = (0, 0.0);
    for i in 0..samples.len() {
        let value = squared(i);
        if value > highest {
            (index, highest) = (i, value);
        }
    }
    let left = if index > 0 { squared(index - 1) } else { 0.0 };
    let (offset, peak) = interpolated_maximum(left, highest, squared(index + 1));
    if !(peak > 0.0) {
        return None;
    }
    let place = match estimator {
        Estimator::FirstCrossing => {
            let level = 0.5 * peak;
            let i = (1..=index).find(|&i| squared(i) >= level * level)?;
            let (a, b) = (math::sqrt(squared(i - 1)), math::sqrt(squared(i)));
            if a < level {
                (i - 1) as f32 + (level - a) / (b - a)
            } else {
                0.0
            }
        }
        Estimator::ZeroCrossing => {
            let largest = samples.iter().fold(0.0, |m, s| math::larger(m, s.abs()));
            let trigger = samples.iter().position(|s| s.abs() >= 0.5 * largest)?;
            let tail = samples.get(trigger..)?;
            let i = tail
                .windows(2)
                .position(|w| matches!(w, [a, b] if (*a > 0.0) != (*b > 0.0)))?;
            let (a, b) = (tail.get(i).copied()?, tail.get(i + 1).copied()?);
            (trigger + i) as f32 + a / (a - b)
        }
        _ => index as f32 + offset,
    };
    Some((place, peak))
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::echo::pulse::{PulseFacts, learn};
    use crate::setup::PULSE_CAPACITY;

    const SPC: f32 = 10.0;

    fn sample(t: f32) -> f32 {
        math::exp(-t * t / (2.0 * 6.236 * 6.236)) * math::cos(core::f32::consts::TAU * t / SPC + 0.4)
    }

    fn reference(buffer: &mut [f32; PULSE_CAPACITY]) -> PulseFacts {
        let mut samples = [0.0; 49];
        for (i, s) in samples.iter_mut().enumerate() {
            *s = sample(i as f32 - 24.0);
        }
        learn(&samples, SPC, buffer).unwrap()
    }

    /// Places an echo and reads it with one estimator.
    fn read(estimator: Estimator, place: f32, amplitude: f32, sign: Sign) -> Option<Arrival> {
        let mut codes = [0i16; 400];
        for (i, c) in codes.iter_mut().enumerate() {
            *c = math::round_to_i32(amplitude * sample(i as f32 - place)) as i16;
        }
        let mut buffer = [0.0; PULSE_CAPACITY];
        let facts = reference(&mut buffer);
        let pulse = ReferencePulse::new(&buffer, facts);
        let search = Search {
            around: place as u32 + 2,
            reach: 12.0,
            sign,
            samples_per_cycle: SPC,
        };
        estimate(estimator, &codes, &search, &pulse, &mut [0.0; 256])
    }

    #[test]
    fn all_estimators_agree_on_a_clean_echo() {
        for place in [150.0, 150.25, 200.5, 200.77f32] {
            for (estimator, tolerance) in [
                (Estimator::LeastSquares, 3e-3),
                (Estimator::Correlation, 4e-3),
                (Estimator::EnvelopePeak, 0.05),
                (Estimator::FirstCrossing, 0.05),
                (Estimator::ZeroCrossing, 0.05),
            ] {
                let found = read(estimator, place, 20_000.0, Sign::Either).unwrap();
                let error = found.position.as_samples() - place;
                assert!(error.abs() < tolerance, "{estimator:?} at {place}: {error}");
                assert!(
                    (found.amplitude / 20_000.0 - 1.0).abs() < 0.02,
                    "{estimator:?}: {}",
                    found.amplitude
                );
            }
        }
    }

    #[test]
    fn a_turned_phase_shows_as_group_lag_and_attenuation_does_not() {
        let mut buffer = [0.0; PULSE_CAPACITY];
        let facts = reference(&mut buffer);
        let pulse = ReferencePulse::new(&buffer, facts);
        let search = Search {
            around: 200,
            reach: 8.0,
            sign: Sign::Either,
            samples_per_cycle: SPC,
        };
        let lag_of = |phase: f32, frequency: f32| {
            let mut codes = [0i16; 400];
            for (i, code) in codes.iter_mut().enumerate() {
                let t = i as f32 - 200.0;
                let envelope = math::exp(-t * t / (2.0 * 6.236 * 6.236));
                let carrier = math::cos(frequency * core::f32::consts::TAU * t / SPC + 0.4 + phase);
                *code = math::round_to_i32(20_000.0 * envelope * carrier) as i16;
            }
            let found = estimate(Estimator::LeastSquares, &codes, &search, &pulse, &mut [0.0; 256]).unwrap();
            (found.position.as_samples() - 200.0, found.group_lag)
        };
        // 20 degrees ahead: the carrier arrives 20/360 of a cycle early, the envelope in time.
        let (shift, lag) = lag_of(20.0f32.to_radians(), 1.0);
        assert!((shift + SPC * 20.0 / 360.0).abs() < 0.05, "{shift}");
        assert!((lag - SPC * 20.0 / 360.0).abs() < 0.08, "{lag}");
        let (_, lag) = lag_of(0.0, 1.0);
        assert!(lag.abs() < 0.01, "{lag}");
    }

    #[test]
    fn law_an_echo_upside_down_keeps_its_place() {
        let upright = read(Estimator::LeastSquares, 170.3, 9000.0, Sign::Either).unwrap();
        let turned = read(Estimator::LeastSquares, 170.3, -9000.0, Sign::Either).unwrap();
        assert!((upright.position.as_samples() - turned.position.as_samples()).abs() < 1e-3);
        assert!((upright.amplitude + turned.amplitude).abs() < 3.0);
        // A search for the wrong sign finds a neighbouring half cycle, and a smaller echo.
        let wrong = read(Estimator::LeastSquares, 170.3, 9000.0, Sign::Negative).unwrap();
        assert!((wrong.position.as_samples() - 170.3).abs() > 4.0 && wrong.amplitude < 0.0);
        assert!(wrong.amplitude.abs() < upright.amplitude);
    }

    #[test]
    fn a_pulse_that_stands_out_of_the_record_is_no_echo() {
        assert_eq!(read(Estimator::LeastSquares, 5.0, 9000.0, Sign::Either), None);
        assert_eq!(read(Estimator::LeastSquares, 396.0, 9000.0, Sign::Either), None);
    }
}
