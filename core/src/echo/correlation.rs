//! Correlation of a stretch of the record with the reference pulse, at whole lags and between them.
//!
//! For white noise the delay that maximises the squared correlation is the least-squares (and
//! maximum-likelihood) delay of a pulse of known shape and unknown amplitude, because shifting a
//! band-limited pulse does not change its energy. So every fit of a pulse is a search in these
//! numbers, and the record is touched once.

use crate::echo::interpolate;
use crate::echo::pulse::ReferencePulse;
use crate::math;

/// Half the distance, in samples, of the three points that a maximum is interpolated from. Small enough for the
/// curvature to be the local one, large enough for `f32`.
const STEP: f32 = 0.25;

/// R\[k\] = Σ_j s\[j\] x\[first + k + j\] for every k of `lags`. Samples outside the record count as zero.
pub fn correlate_into(codes: &[i16], first: i32, pulse: &ReferencePulse<'_>, lags: &mut [f32]) {
    let length = pulse.samples.len();
    let mut start = first;
    let mut blocks = lags.chunks_exact_mut(4);
    for block in &mut blocks {
        // Four lags at a time: every pulse sample is loaded once for the four.
        let inside = usize::try_from(start)
            .ok()
            .and_then(|s| codes.get(s..)?.get(..length + 3));
        if let (Some(x), Ok(block)) = (inside, <&mut [f32; 4]>::try_from(&mut *block)) {
            *block = four_lags(pulse.samples, x);
        } else {
            for (k, lag) in block.iter_mut().enumerate() {
                *lag = single(codes, start.saturating_add(k as i32), pulse);
            }
        }
        start = start.saturating_add(4);
    }
    for (k, lag) in blocks.into_remainder().iter_mut().enumerate() {
        *lag = single(codes, start.saturating_add(k as i32), pulse);
    }
}

/// Four neighbouring lags; `x` is three longer than the pulse. Every code is converted once and used for all
/// four: unrolled by four, so that it never has to be moved.
fn four_lags(samples: &[f32], x: &[i16]) -> [f32; 4] {
    let mut sums = (0.0f32, 0.0f32, 0.0f32, 0.0f32);
    let Some(([p, q, r], x)) = x.split_first_chunk::<3>() else {
        return [0.0; 4];
    };
    let (mut p, mut q, mut r) = (f32::from(*p), f32::from(*q), f32::from(*r));
    let (samples, last_samples) = samples.as_chunks::<4>();
    let (x, last_x) = x.as_chunks::<4>();
    for ([s0, s1, s2, s3], [x0, x1, x2, x3]) in samples.iter().zip(x) {
        let a = f32::from(*x0);
        sums = add_products(sums, *s0, (p, q, r, a));
        let b = f32::from(*x1);
        sums = add_products(sums, *s1, (q, r, a, b));
        let c = f32::from(*x2);
        sums = add_products(sums, *s2, (r, a, b, c));
        let d = f32::from(*x3);
        sums = add_products(sums, *s3, (a, b, c, d));
        (p, q, r) = (b, c, d);
    }
    for (s, x) in last_samples.iter().zip(last_x) {
        let a = f32::from(*x);
        sums = add_products(sums, *s, (p, q, r, a));
        (p, q, r) = (q, r, a);
    }
    sums.into()
}

type Four = (f32, f32, f32, f32);

#[inline(always)]
fn add_products(sums: Four, s: f32, x: Four) -> Four {
    (sums.0 + s * x.0, sums.1 + s * x.1, sums.2 + s * x.2, sums.3 + s * x.3)
}

/// The same at every `step`-th lag: R\[k\] = Σ_j s\[j\] x\[first + k step + j\].
pub fn correlate_every(codes: &[i16], first: i32, step: usize, pulse: &ReferencePulse<'_>, lags: &mut [f32]) {
    if step <= 1 {
        return correlate_into(codes, first, pulse, lags);
    }
    let step = i32::try_from(step).unwrap_or(i32::MAX);
    let mut start = first;
    for lag in lags {
        *lag = single(codes, start, pulse);
        start = start.saturating_add(step);
    }
}

/// One lag, with zeros outside the record.
fn single(codes: &[i16], start: i32, pulse: &ReferencePulse<'_>) -> f32 {
    let skip = if start < 0 { start.unsigned_abs() as usize } else { 0 };
    let begin = usize::try_from(start).unwrap_or(0);
    let (Some(samples), Some(x)) = (pulse.samples.get(skip..), codes.get(begin..)) else {
        return 0.0;
    };
    let mut sum = 0.0;
    for (s, &code) in samples.iter().zip(x) {
        sum += s * f32::from(code);
    }
    sum
}

/// Which sign of the correlation a search accepts.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Sign {
    /// The pulse as it is.
    Positive,
    /// The pulse upside down.
    Negative,
    /// Whichever fits better.
    Either,
}

impl Sign {
    /// The correlation as this search sees it: larger is better.
    fn merit(self, value: f32) -> f32 {
        match self {
            Self::Positive => value,
            Self::Negative => -value,
            Self::Either => value.abs(),
        }
    }
}

/// The best lag between `from` and `to` (indices into `lags`), to half a sample.
///
/// Tops are compared, not samples: a parabola through three lags, a quarter of a sample apart below eight
/// samples a cycle. Between two samples a correlation can fall by more than what distinguishes it from
/// the neighbouring half cycle (at 20 % bandwidth 1.8 %), and the wrong one would win without any noise.
#[must_use]
#[inline(never)]
pub fn coarse_maximum(lags: &[f32], from: usize, to: usize, sign: Sign, samples_per_cycle: f32) -> Option<f32> {
    // A power of two, so that nothing has to be divided.
    let shift = if samples_per_cycle < 8.0 { 2 } else { 0 };
    let step = 1.0 / (1u32 << shift) as f32;
    let grid = |k: usize| {
        if (k >> shift) << shift == k {
            lags.get(k >> shift).copied().unwrap_or(0.0)
        } else {
            interpolate::at(lags, k as f32 * step)
        }
    };
    let first = from << shift;
    let (mut earlier, mut value) = (grid(first.saturating_sub(1)), grid(first));
    let (mut place, mut best) = (None, 0.0);
    for k in first..=to.min(lags.len()) << shift {
        let later = grid(k + 1);
        let mut merit = sign.merit(value);
        if merit > 0.0 {
            let flip = if value < 0.0 { -1.0 } else { 1.0 };
            let (left, right) = (flip * earlier, flip * later);
            if merit >= left && merit >= right && left + right < 2.0 * merit {
                merit += (left - right) * (left - right) / (8.0 * (2.0 * merit - left - right));
            }
        }
        if merit > best {
            (place, best) = (Some(k as f32 * step), merit);
        }
        (earlier, value) = (value, later);
    }
    place
}

/// Climbs from `place` to the local maximum (or, where the correlation is negative, minimum) of the
/// interpolated correlation. Gives the place and the correlation there.
#[must_use]
#[inline(never)]
pub fn refine(lags: &[f32], place: f32) -> (f32, f32) {
    let mut place = place;
    let mut value = interpolate::at(lags, place);
    for _ in 0..6 {
        let left = interpolate::at(lags, place - STEP);
        let right = interpolate::at(lags, place + STEP);
        let curvature = left - 2.0 * value + right;
        // On the way to a top the curvature points down (as the value's sign sees it).
        if !(curvature * value < 0.0) {
            break;
        }
        let step = math::clamp(STEP * 0.5 * (left - right) / curvature, -0.5, 0.5);
        place += step;
        value = interpolate::at(lags, place);
        if step.abs() < 2e-4 {
            break;
        }
    }
    (place, value)
}

/// Downward curvature of the interpolated correlation at `place`, per sample², as the sign of `value` (the
/// correlation there) sees it: positive at a maximum, and at a minimum of a negative correlation.
#[must_use]
pub fn curvature(lags: &[f32], place: f32, value: f32) -> f32 {
    let beside = interpolate::at(lags, place - STEP) + interpolate::at(lags, place + STEP);
    let down = (2.0 * value - beside) / (STEP * STEP);
    if value < 0.0 { -down } else { down }
}

/// Slope of the interpolated correlation at `place`, per sample.
#[must_use]
#[inline(never)]
pub fn slope(lags: &[f32], place: f32) -> f32 {
    (interpolate::at(lags, place + STEP) - interpolate::at(lags, place - STEP)) / (2.0 * STEP)
}

/// Energy of a stretch of the record about its own mean.
#[must_use]
pub fn energy(codes: &[i16]) -> f32 {
    // 32-bit sums of squares of 16-bit codes would overflow: 64 bits hold 2^34 of them.
    let (mut sum, mut squares) = (0i64, 0i64);
    for &code in codes {
        sum += i64::from(code);
        squares += i64::from(i32::from(code) * i32::from(code));
    }
    let count = codes.len().max(1) as f32;
    let sum = sum as f32;
    squares as f32 - sum * (sum / count)
}
