//! Slow and plain computations in `f64` that stand beside the core: nothing here calls it.
//!
//! Where a closed form exists the numerical way is taken, so that a slip in one of the two shows.

use std::f64::consts::PI;

/// Standard deviation in time of the Gaussian envelope whose spectrum is `relative_bandwidth` wide
/// at -6 dB = 10^(-6/20) (SciPy's `gausspulse(t, fc, bw, bwr=-6)` is the same pulse).
#[must_use]
pub fn gaussian_sigma(centre_frequency: f64, relative_bandwidth: f64) -> f64 {
    // exp(-(pi BW sigma)^2 / 2) is the spectrum's fall at half the bandwidth.
    (2.0 * (6.0 / 20.0) * 10f64.ln()).sqrt() / (PI * centre_frequency * relative_bandwidth)
}

/// Gaussian pulse with envelope peak 1 and phase 0 at t = 0.
#[must_use]
pub fn gaussian_pulse(t: f64, centre_frequency: f64, relative_bandwidth: f64) -> f64 {
    let sigma = gaussian_sigma(centre_frequency, relative_bandwidth);
    (-0.5 * (t / sigma).powi(2)).exp() * (2.0 * PI * centre_frequency * t).cos()
}

/// Discrete Fourier transform of a real record, frequencies 0 to n/2, straight from its definition.
#[must_use]
pub fn transform(samples: &[f64]) -> Vec<(f64, f64)> {
    let n = samples.len();
    let turn: Vec<(f64, f64)> = (0..n).map(|k| (2.0 * PI * k as f64 / n as f64).sin_cos()).collect();
    (0..=n / 2)
        .map(|bin| {
            let mut sum = (0.0, 0.0);
            for (k, &x) in samples.iter().enumerate() {
                let (sin, cos) = turn[bin * k % n];
                sum = (sum.0 + x * cos, sum.1 - x * sin);
            }
            sum
        })
        .collect()
}

/// Derivative (per sample) of the band-limited signal through the samples: spectrum times jω.
#[must_use]
pub fn derivative(samples: &[f64]) -> Vec<f64> {
    let n = samples.len();
    let spectrum = transform(samples);
    (0..n)
        .map(|k| {
            let mut sum = 0.0;
            // The bin at half the sample rate has no derivative that the samples could tell.
            for (bin, &(re, im)) in spectrum.iter().enumerate().take(n.div_ceil(2)).skip(1) {
                let omega = 2.0 * PI * bin as f64 / n as f64;
                let (sin, cos) = (2.0 * PI * (bin * k % n) as f64 / n as f64).sin_cos();
                sum -= omega * (im * cos + re * sin);
            }
            2.0 * sum / n as f64
        })
        .collect()
}

/// Cramér-Rao bound of the delay of a known pulse with free amplitude in white noise, in samples:
/// noise / sqrt(sum of squared derivatives).
#[must_use]
pub fn delay_bound(pulse: &[f64], noise: f64) -> f64 {
    let energy: f64 = derivative(pulse).iter().map(|d| d * d).sum();
    noise / energy.sqrt()
}

/// Mean and standard deviation (divisor n - 1).
#[must_use]
pub fn mean_and_deviation(values: &[f64]) -> (f64, f64) {
    let n = values.len() as f64;
    let mean = values.iter().sum::<f64>() / n;
    let squares: f64 = values.iter().map(|v| (v - mean).powi(2)).sum();
    (mean, (squares / (n - 1.0)).sqrt())
}

/// Magnitude of the analytic signal: the spectrum's negative frequencies dropped, straight from the
/// definition (`abs(scipy.signal.hilbert(x))` is the same).
#[must_use]
pub fn envelope(samples: &[f64]) -> Vec<f64> {
    let n = samples.len();
    let spectrum = transform(samples);
    samples
        .iter()
        .enumerate()
        .map(|(k, &x)| {
            let mut quadrature = 0.0;
            for (bin, &(re, im)) in spectrum.iter().enumerate().take(n.div_ceil(2)).skip(1) {
                let (sin, cos) = (2.0 * PI * (bin * k % n) as f64 / n as f64).sin_cos();
                quadrature += re * sin + im * cos;
            }
            x.hypot(2.0 * quadrature / n as f64)
        })
        .collect()
}

/// The samples without everything outside `low` to `high` (in cycles a sample): their spectrum cut
/// off straight, so that what is left has no noise out of the band.
#[must_use]
pub fn band_limited(samples: &[f64], low: f64, high: f64) -> Vec<f64> {
    let n = samples.len();
    let spectrum = transform(samples);
    (0..n)
        .map(|k| {
            let mut sum = 0.0;
            for (bin, &(re, im)) in spectrum.iter().enumerate().take(n.div_ceil(2)).skip(1) {
                let frequency = bin as f64 / n as f64;
                if (low..=high).contains(&frequency) {
                    let (sin, cos) = (2.0 * PI * (bin * k % n) as f64 / n as f64).sin_cos();
                    sum += re * cos - im * sin;
                }
            }
            2.0 * sum / n as f64
        })
        .collect()
}

/// Width of the part around the largest value that stays above `share` of it, with linear
/// interpolation at both ends (`scipy.signal.peak_widths` where the curve falls to zero).
#[must_use]
pub fn width_at(curve: &[f64], share: f64) -> f64 {
    let (peak, &highest) = curve
        .iter()
        .enumerate()
        .max_by(|a, b| a.1.total_cmp(b.1))
        .expect("a curve has values");
    let level = share * highest;
    let crossing = |inside: usize, outside: usize| {
        let part = (curve[inside] - level) / (curve[inside] - curve[outside]);
        inside as f64 + part * (outside as f64 - inside as f64)
    };
    let low = (0..peak)
        .rev()
        .find(|&i| curve[i] < level)
        .expect("the curve falls before the peak");
    let high = (peak..curve.len())
        .find(|&i| curve[i] < level)
        .expect("the curve falls behind the peak");
    crossing(high - 1, high) - crossing(low + 1, low)
}

/// Random numbers for the checks: SplitMix64 (Steele, Lea, Flood, OOPSLA 2014), the same on every
/// machine. Not the simulator's generator, and not for cryptography.
#[derive(Clone, Debug)]
pub struct Random(u64);

impl Random {
    /// A stream of its own for every seed.
    #[must_use]
    pub const fn new(seed: u64) -> Self {
        Self(seed)
    }

    fn next(&mut self) -> u64 {
        self.0 = self.0.wrapping_add(0x9e37_79b9_7f4a_7c15);
        let mut z = self.0;
        z = (z ^ (z >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
        z = (z ^ (z >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
        z ^ (z >> 31)
    }

    /// Evenly between 0 and 1.
    pub fn uniform(&mut self) -> f64 {
        ((self.next() >> 11) as f64 + 0.5) / (1u64 << 53) as f64
    }

    /// Normal with mean 0 and variance 1 (Box and Muller 1958).
    pub fn normal(&mut self) -> f64 {
        (-2.0 * self.uniform().ln()).sqrt() * (2.0 * PI * self.uniform()).cos()
    }
}

/// The ideal converter: to the nearest whole code, limited to `bits`.
#[must_use]
pub fn codes(samples: &[f64], bits: u32) -> Vec<i16> {
    let full_scale = f64::from(1u32 << (bits - 1));
    let convert = |x: &f64| x.round().clamp(-full_scale, full_scale - 1.0) as i16;
    samples.iter().map(convert).collect()
}

/// Cramér-Rao bound (standard deviation, in the unit of the times) of the period of a train of echoes in white noise,
/// with start and all amplitudes free. The Fisher matrix is built from the samples themselves with
/// numerical derivatives and inverted by elimination: no formula for trains enters.
///
/// `pulse(t)` is the known pulse; echo n (from 1) arrives at `start + n period` with `amplitudes[n - 1]`; samples
/// at `times`.
#[must_use]
pub fn period_bound(
    pulse: impl Fn(f64) -> f64,
    times: &[f64],
    start: f64,
    period: f64,
    amplitudes: &[f64],
    noise: f64,
) -> f64 {
    let model = |t: f64, start: f64, period: f64, amplitudes: &[f64]| -> f64 {
        let echo = |(n, a): (usize, &f64)| a * pulse(t - start - (n + 1) as f64 * period);
        amplitudes.iter().enumerate().map(echo).sum()
    };
    // Period first, then start, then the amplitudes.
    let count = 2 + amplitudes.len();
    let step = 1e-4 * (times[1] - times[0]);
    let mut fisher = vec![vec![0.0; count + 1]; count];
    for &t in times {
        let mut slopes = vec![
            (model(t, start, period + step, amplitudes) - model(t, start, period - step, amplitudes)) / (2.0 * step),
            (model(t, start + step, period, amplitudes) - model(t, start - step, period, amplitudes)) / (2.0 * step),
        ];
        slopes.extend((0..amplitudes.len()).map(|n| pulse(t - start - (n + 1) as f64 * period)));
        for i in 0..count {
            for j in 0..count {
                fisher[i][j] += slopes[i] * slopes[j] / (noise * noise);
            }
        }
    }
    // The first column of the inverse solves F x = (1, 0, 0 ..): its first entry is the period's variance.
    // Rows and columns differ by many powers of ten, so both are scaled to a diagonal of 1.
    let scale: Vec<f64> = (0..count).map(|i| fisher[i][i].sqrt()).collect();
    for i in 0..count {
        for j in 0..count {
            fisher[i][j] /= scale[i] * scale[j];
        }
    }
    fisher[0][count] = 1.0;
    for pivot in 0..count {
        let lead = fisher[pivot].clone();
        for (i, row) in fisher.iter_mut().enumerate() {
            if i != pivot {
                let factor = row[pivot] / lead[pivot];
                for (value, above) in row.iter_mut().zip(&lead) {
                    *value -= factor * above;
                }
            }
        }
    }
    (fisher[0][count] / fisher[0][0]).sqrt() / scale[0]
}

/// Bessel function of the first kind and whole order by Bessel's own integral (Abramowitz and Stegun 9.1.21): the mean of
/// cos(n τ - x sin τ) over half a turn, by the trapezoidal rule, which converges faster than any power here.
#[must_use]
pub fn bessel(order: u32, x: f64) -> f64 {
    let steps = 64 + 2 * x.abs() as usize;
    let value = |i: usize| {
        let angle = PI * i as f64 / steps as f64;
        (f64::from(order) * angle - x * angle.sin()).cos()
    };
    let inner: f64 = (1..steps).map(value).sum();
    (0.5 * (value(0) + value(steps)) + inner) / steps as f64
}

/// How far the phase of a piston's pulse is ahead of a plane wave's, in radians, at the normalised distance `s`:
/// the angle of 1 - exp(-ju) [J0(u) + j J1(u)], u = 2 π / s (Rogers and Van Buren 1974, from memory).
#[must_use]
pub fn piston_advance(s: f64) -> f64 {
    let u = 2.0 * PI / s;
    let (j0, j1) = (bessel(0, u), bessel(1, u));
    let (sin, cos) = u.sin_cos();
    (sin * j0 - cos * j1).atan2(1.0 - cos * j0 - sin * j1)
}

/// Partial derivatives by central differences, each step being this share of its quantity (or of one where it is 0).
#[must_use]
pub fn gradient<const N: usize>(function: impl Fn([f64; N]) -> f64, at: [f64; N], share: f64) -> [f64; N] {
    std::array::from_fn(|i| {
        let step = share * if at[i] == 0.0 { 1.0 } else { at[i].abs() };
        let moved = |by: f64| {
            let mut there = at;
            there[i] += by;
            function(there)
        };
        (moved(step) - moved(-step)) / (2.0 * step)
    })
}

/// Standard uncertainty of a function of quantities with these standard uncertainties and this correlation between each
/// two: the whole double sum of JCGM 100:2008, 5.2.2, with the derivatives of [`gradient`].
#[must_use]
pub fn propagated<const N: usize>(
    function: impl Fn([f64; N]) -> f64,
    at: [f64; N],
    uncertainties: [f64; N],
    correlation: impl Fn(usize, usize) -> f64,
) -> f64 {
    let slopes = gradient(function, at, 1e-5);
    let mut variance = 0.0;
    for i in 0..N {
        for j in 0..N {
            let r = if i == j { 1.0 } else { correlation(i, j) };
            variance += slopes[i] * slopes[j] * uncertainties[i] * uncertainties[j] * r;
        }
    }
    variance.max(0.0).sqrt()
}

/// Correlation of two series of the same length.
#[must_use]
pub fn correlation(a: &[f64], b: &[f64]) -> f64 {
    let ((mean_a, deviation_a), (mean_b, deviation_b)) = (mean_and_deviation(a), mean_and_deviation(b));
    let products: f64 = a.iter().zip(b).map(|(x, y)| (x - mean_a) * (y - mean_b)).sum();
    products / (deviation_a * deviation_b * (a.len() as f64 - 1.0))
}
