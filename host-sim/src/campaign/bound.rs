//! The Cramér-Rao bound of a wall's thickness read from a clean train of back-wall echoes.
//!
//! For echoes of one pulse s that do not overlap, in white noise of variance σ², with start, period and
//! all amplitudes free: amplitude and delay of an echo do not disturb each other (∫ s s' dt = 0), so each
//! arrival has the information w_n = A_n² Σ s'(t_k)² / σ², and the period is the slope of a straight line
//! through arrivals with these weights: var T = 1 / Σ w_n (n - n̄)², with n̄ the weighted mean
//! (Kay, Fundamentals of Statistical Signal Processing: Estimation Theory, sections 3.5 and 3.8; from
//! memory). The converter's rounding counts as noise of 1/12 step².
//!
//! Compared with the numerical Fisher matrix of the same train by `val_bound_of_a_train` in the checks.
//! Not defined, and `None`, where echoes overlap, change their shape on the way (attenuation, beam, film,
//! roughness), stand in grain noise or are not alone (a delay line has
//! echoes of its own), or are fewer than two.

use crate::propagation::Role;
use crate::synthesise::{EchoTruth, Synthesiser};

/// Variance of rounding to whole steps.
const ROUNDING: f64 = 1.0 / 12.0;
/// An echo that a correlation finds further from its place than this has another shape than the pulse.
const MOST_SHIFT_NS: f64 = 1e-3;

/// Standard deviation at the bound, in metres, of a thickness read from back wall to back wall.
#[must_use]
pub fn thickness(maker: &Synthesiser) -> Option<f64> {
    let scene = maker.scene();
    if scene.grain.is_some()
        || scene.delay_line.is_some()
        || scene.dual_element.is_some()
        || scene.transmission_pulse.is_some()
    {
        return None;
    }
    let truth = maker.truth();
    let noise = truth.noise_rms_codes;
    let stranger = |echo: &EchoTruth| echo.role != Role::BackWall;
    let reshaped = |echo: &EchoTruth| echo.correlation_shift_ns.abs() > MOST_SHIFT_NS;
    if noise <= 0.0 || truth.echoes.iter().any(|echo| stranger(echo) || reshaped(echo)) {
        return None;
    }
    let rate = scene.record.sample_rate_mhz * 1e6;
    let (pulse, _) = maker.reference_pulse();
    let length_ns = pulse.len() as f64 / rate * 1e9;
    let steepness = slope_energy(&pulse);
    let full_scale = f64::from(1u32 << (scene.record.bits - 1));
    let variance = noise * noise + ROUNDING;
    let (first, last) = (
        scene.record.first_sample_us * 1e3,
        scene.record.first_sample_us * 1e3 + scene.record.samples as f64 / rate * 1e9,
    );
    let mut echoes = Vec::new();
    for echo in truth.back_walls() {
        // Half a pulse on either side, or the record has not all of it.
        if echo.arrival_ns - 0.5 * length_ns < first || echo.arrival_ns + 0.5 * length_ns > last {
            continue;
        }
        if echo.amplitude_percent >= 100.0 {
            return None;
        }
        let amplitude = 0.01 * echo.amplitude_percent * full_scale;
        let weight = amplitude * amplitude * steepness / variance;
        echoes.push((f64::from(echo.multiple?), weight, echo.arrival_ns));
    }
    // Below -40 dB an envelope no longer disturbs its neighbour: reach() goes down to a part in 1e9.
    let closest = truth
        .echoes
        .windows(2)
        .filter_map(|pair| Some(pair.last()?.arrival_ns - pair.first()?.arrival_ns))
        .fold(f64::INFINITY, f64::min);
    if echoes.len() < 2 || closest < 0.45 * length_ns {
        return None;
    }
    let sum: f64 = echoes.iter().map(|(_, weight, _)| weight).sum();
    let mean = echoes.iter().map(|(n, weight, _)| n * weight).sum::<f64>() / sum;
    let information: f64 = echoes
        .iter()
        .map(|(n, weight, _)| weight * (n - mean) * (n - mean))
        .sum();
    // The weights hold delays in samples.
    let period = 1.0 / information.sqrt() / rate;
    Some(0.5 * truth.wall_velocity_m_s * period)
}

/// Sum of the squares of a band-limited pulse's slope per sample, by the derivative of the sinc series.
fn slope_energy(pulse: &[f64]) -> f64 {
    let slope = |k: usize| -> f64 {
        pulse
            .iter()
            .enumerate()
            .filter(|(m, _)| *m != k)
            .map(|(m, value)| {
                let distance = k as f64 - m as f64;
                let sign = if (k + m).is_multiple_of(2) { 1.0 } else { -1.0 };
                value * sign / distance
            })
            .sum()
    };
    (0..pulse.len()).map(|k| slope(k) * slope(k)).sum()
}
