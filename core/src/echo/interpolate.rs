//! Values between samples of a band-limited sequence.
//!
//! Formula: y(x) = Σ y_k sinc(x - k) w((x - k) / REACH) with the window w(u) = (1 - u²)³. Relative
//! error below 3e-5 up to a fifth of the sample rate, 2e-4 up to 0.3 of it and 1e-3 up to 0.35
//! (`kernel_error_is_as_stated`). Not for signals with energy above 0.4 of the sample rate.

use crate::math;

/// Samples needed on either side of the place.
pub const REACH: usize = 10;

/// The value of `samples` at `place` (in samples from the first). Samples beyond the ends count as
/// zero.
#[must_use]
#[inline(never)]
pub fn at(samples: &[f32], place: f32) -> f32 {
    let whole = math::floor(place);
    let fraction = place - whole;
    let base = math::saturating_i32(whole);
    if fraction == 0.0 {
        return usize::try_from(base)
            .ok()
            .and_then(|i| samples.get(i))
            .copied()
            .unwrap_or(0.0);
    }
    let sine = first_sign(fraction);
    let reach = REACH as i32;
    let start = base + 1 - reach;
    let inside = usize::try_from(start)
        .ok()
        .and_then(|i| samples.get(i..)?.first_chunk::<{ 2 * REACH }>());
    if let Some(taps) = inside {
        return weighted_taps(taps, fraction, sine);
    }
    let tap = |k: i32| {
        usize::try_from(start + k)
            .ok()
            .and_then(|i| samples.get(i))
            .copied()
            .unwrap_or(0.0)
    };
    weighted((0..2 * reach).map(tap), fraction, sine)
}

/// The value of a record `fraction` of a sample (0 to 1) beyond sample `index`. Codes beyond the ends count as zero.
#[must_use]
pub fn at_codes(codes: &[i16], index: usize, fraction: f32) -> f32 {
    let code = |i: Option<usize>| i.and_then(|i| codes.get(i)).map_or(0.0, |&code| f32::from(code));
    if fraction == 0.0 {
        return code(Some(index));
    }
    let first = |tap: usize| (index + 1 + tap).checked_sub(REACH);
    weighted(
        (0..2 * REACH).map(|tap| code(first(tap))),
        fraction,
        first_sign(fraction),
    )
}

/// One over the window's half length.
const STEP: f32 = 1.0 / REACH as f32;

/// sin(π x) / π with the sign that it has at the first tap: it alternates from tap to tap, so one sine serves all.
fn first_sign(fraction: f32) -> f32 {
    let sine = math::sin_pi_unit(fraction) * core::f32::consts::FRAC_1_PI;
    if REACH & 1 == 0 { -sine } else { sine }
}

/// Weight of the tap at `number`.
#[inline(always)]
fn tap_weight(fraction: f32, number: f32, sign: f32) -> f32 {
    // From whole numbers each time: summed up, the distance would lose the digits that matter
    // beside a sample.
    let distance = fraction - number;
    let u = distance * STEP;
    let v = 1.0 - u * u;
    (sign / distance) * (v * v * v)
}

/// Sum of the taps, each with its weight; `sine` is sin(π x) / π with the first tap's sign.
#[inline(always)]
fn weighted(taps: impl Iterator<Item = f32>, fraction: f32, sine: f32) -> f32 {
    let (mut sum, mut number, mut sign) = (0.0, 1.0 - REACH as f32, sine);
    for tap in taps {
        sum += tap * tap_weight(fraction, number, sign);
        sign = -sign;
        number += 1.0;
    }
    sum
}

/// [`weighted`] for taps that are all there, four at a time.
fn weighted_taps(taps: &[f32; 2 * REACH], fraction: f32, sine: f32) -> f32 {
    let (mut sum, mut number) = (0.0, 1.0 - REACH as f32);
    let (fours, _) = taps.as_chunks::<4>();
    for [a, b, c, d] in fours {
        sum += a * tap_weight(fraction, number, sine);
        sum += b * tap_weight(fraction, number + 1.0, -sine);
        sum += c * tap_weight(fraction, number + 2.0, sine);
        sum += d * tap_weight(fraction, number + 3.0, -sine);
        number += 4.0;
    }
    sum
}

const _: () = assert!(REACH & 1 == 0, "taps are summed four at a time");

/// The same for many places that lie equally far from their samples: the weights are worked out once.
#[derive(Clone, Copy, Debug)]
pub struct Between {
    weights: [f32; 2 * REACH],
    shift: i32,
}

impl Between {
    /// Values at `number + shift`, for whole numbers.
    #[must_use]
    pub fn new(shift: f32) -> Self {
        let whole = math::floor(shift);
        let fraction = shift - whole;
        let mut between = Self {
            weights: [0.0; 2 * REACH],
            shift: math::saturating_i32(whole) - (REACH as i32 - 1),
        };
        if fraction == 0.0 {
            if let Some(weight) = between.weights.get_mut(REACH - 1) {
                *weight = 1.0;
            }
        } else {
            let mut sign = first_sign(fraction);
            for (tap, weight) in between.weights.iter_mut().enumerate() {
                *weight = tap_weight(fraction, tap as f32 + 1.0 - REACH as f32, sign);
                sign = -sign;
            }
        }
        between
    }

    /// The value of `samples` at `number` plus the shift. Samples beyond the ends count as zero.
    #[must_use]
    pub fn of(&self, samples: &[f32], number: i32) -> f32 {
        let first = number.saturating_add(self.shift);
        let (skip, start) = if first < 0 {
            (first.unsigned_abs() as usize, 0)
        } else {
            (0, first.unsigned_abs() as usize)
        };
        let (Some(weights), Some(taps)) = (self.weights.get(skip..), samples.get(start..)) else {
            return 0.0;
        };
        if let (Some(weights), Some(taps)) = (weights.first_chunk(), taps.first_chunk()) {
            return dot(weights, taps);
        }
        let mut sum = 0.0;
        for (weight, tap) in weights.iter().zip(taps) {
            sum += weight * tap;
        }
        sum
    }
}

/// Sum of products in the order of a plain loop.
#[inline(always)]
fn dot(weights: &[f32; 2 * REACH], taps: &[f32; 2 * REACH]) -> f32 {
    let mut sum = 0.0;
    let (weights, taps) = (weights.as_chunks::<5>().0, taps.as_chunks::<5>().0);
    for (w, x) in weights.iter().zip(taps) {
        let ([a, b, c, d, e], [k, l, m, n, o]) = (w, x);
        sum += a * k;
        sum += b * l;
        sum += c * m;
        sum += d * n;
        sum += e * o;
    }
    sum
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn codes_and_samples_agree() {
        let codes: std::vec::Vec<i16> = (0..60).map(|i| (i * i * 7 % 1000 - 500) as i16).collect();
        let samples: std::vec::Vec<f32> = codes.iter().map(|&code| f32::from(code)).collect();
        for (index, fraction) in [(0, 0.3), (9, 0.5), (30, 0.0), (30, 0.99), (58, 0.2)] {
            let (a, b) = (at_codes(&codes, index, fraction), at(&samples, index as f32 + fraction));
            assert!((a - b).abs() < 0.01, "{index} + {fraction}: {a} {b}");
        }
    }

    fn worst(frequency: f32) -> f32 {
        let mut samples = [0.0; 64];
        let wave = |x: f32| math::cos(core::f32::consts::TAU * frequency * x + 0.3);
        for (i, s) in samples.iter_mut().enumerate() {
            *s = wave(i as f32);
        }
        let mut worst = 0.0;
        for i in 0..200 {
            let place = 30.0 + i as f32 * 0.017;
            worst = math::larger(worst, (at(&samples, place) - wave(place)).abs());
        }
        worst
    }

    #[test]
    fn kernel_error_is_as_stated() {
        for (frequency, limit) in [(0.02, 3e-5), (0.1, 3e-5), (0.2, 4e-5), (0.3, 2.5e-4), (0.35, 1e-3)] {
            assert!(worst(frequency) < limit, "{frequency}: {}", worst(frequency));
        }
        assert!(worst(0.45) > 1e-2, "the stated limit of the kernel is real");
    }

    #[test]
    fn weights_worked_out_once_give_the_same() {
        let mut samples = [0.0; 64];
        for (i, s) in samples.iter_mut().enumerate() {
            *s = math::cos(0.7 * i as f32 + 0.2);
        }
        for shift in [0.0, 0.25, -0.4, 3.7, -12.3, 70.0, -70.0] {
            let between = Between::new(shift);
            for number in [0, 1, 5, 30, 60, 63] {
                let expected = at(&samples, number as f32 + shift);
                assert!(
                    (between.of(&samples, number) - expected).abs() < 1e-4,
                    "{number} {shift}"
                );
            }
        }
    }

    #[test]
    fn a_hair_beside_a_sample_is_the_sample() {
        let mut samples = [0.0; 64];
        for (i, s) in samples.iter_mut().enumerate() {
            *s = math::cos(0.3 * i as f32);
        }
        for hair in [2e-6, 1e-5, 3e-5, 1e-4] {
            for place in [30.0 - hair, 30.0 + hair] {
                assert!((at(&samples, place) - math::cos(0.3 * place)).abs() < 3e-5, "{place}");
            }
        }
    }

    #[test]
    fn samples_themselves_are_exact_and_ends_are_zero() {
        let samples = [1.0, 2.0, -3.0];
        assert_eq!(at(&samples, 2.0), -3.0);
        assert_eq!(at(&samples, 40.0), 0.0);
        assert_eq!(at(&samples, -40.5), 0.0);
        assert!(at(&samples, f32::NAN).is_nan());
    }
}
