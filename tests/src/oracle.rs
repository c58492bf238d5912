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
