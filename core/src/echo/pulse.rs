//! The reference pulse, and what one echo tells about the pulse.
//!
//! **In**: a set-up (for the modelled pulse) or samples around an echo (for a learned pulse and for
//! the metrics). **Out**: [`ReferencePulse`] and [`PulseMetrics`].
//!
//! The modelled pulse is a Gaussian: s(t) = exp(-t²/2σ²) cos(2π f t), σ = 1.175394 / (π B) with the
//! -6 dB bandwidth B, cut where its envelope is below -52 dB. A learned pulse is better wherever the
//! echo's phase matters, that is in every span that uses a zero.
//!
//! Both are scaled to an envelope peak of 1. The *origin*, the place that an arrival refers to, is
//! the interpolated maximum of the envelope. The mean is taken out, so that a constant under the echo
//! cannot move it.

use crate::echo::envelope::{interpolated_maximum, squared_at, stride};
use crate::echo::interpolate;
use crate::math;
use crate::setup::{GaugeSetup, PULSE_CAPACITY, SetupError};
use crate::units::{Decibels, Hertz, Metres, MetresPerSecond, Seconds};

/// sqrt(ln 10 · 6 / 10): a Gaussian's -6 dB half width over its σ.
const GAUSSIAN_6DB: f32 = 1.175_394;
/// The same for -52 dB: where a modelled pulse is cut off.
const GAUSSIAN_52DB: f32 = 3.460_277;
/// -6 dB as a ratio of amplitudes.
const MINUS_6DB: f32 = 0.501_187_2;
/// Smallest signal-to-noise ratio from which a pulse is described: below it the -20 dB points lie in
/// the noise.
pub const METRICS_MINIMUM_SNR: Decibels = Decibels::new(26.0);

/// What is known of a reference pulse besides its samples.
#[derive(Clone, Copy, Debug, PartialEq, Default)]
pub struct PulseFacts {
    /// How many samples.
    pub length: u16,
    /// Place of the envelope's maximum, in samples from the first.
    pub origin: f32,
    /// Sum of the squared samples.
    pub energy: f32,
    /// Sum of the squared derivative, per sample²: what a time delay's information comes from.
    pub derivative_energy: f32,
    /// Highest autocorrelation about one cycle away, over the energy: how alike neighbouring cycles are.
    pub cycle_likeness: f32,
    /// -20 dB duration of the envelope, in samples.
    pub envelope_duration: f32,
    /// Root mean square angular frequency in radians a sample: sqrt(derivative energy / energy).
    pub angular_frequency: f32,
    /// Root mean square of the pulse's own noise per sample, over its envelope's peak; 0 for a modelled pulse, or if nobody
    /// measured it. See [`PulseQuality`].
    pub noise: f32,
    /// How far echoes of other shots differ from the pulse, likewise. See [`PulseQuality`].
    pub mismatch: f32,
}

/// How good a learned pulse is, and what it was learned on: found while it is learned, kept with it in the set-up.
#[derive(Clone, Copy, Debug, PartialEq, Default)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct PulseQuality {
    /// Root mean square of its noise per sample over its envelope's peak: that of one shot over the root of the shots.
    pub noise: f32,
    /// Root of the energy of an isolated echo of another shot that the fitted pulse leaves unexplained, less the noise's,
    /// over the root of the fitted energy. 0.03 is -30 dB.
    pub mismatch: f32,
    /// Thickness of the block whose first back wall it was learned from; 0 for the interface echo of a delay line. The
    /// beam has turned the pulse's phase on its way there, and what it does to an echo is told against that. `None`: not
    /// known, and taken for a pulse that no beam has changed.
    pub learned_on: Option<Metres>,
}

impl PulseQuality {
    /// Nothing is known: a modelled pulse, or one of unknown origin.
    pub const UNKNOWN: Self = Self {
        noise: 0.0,
        mismatch: 0.0,
        learned_on: None,
    };

    /// Are both what shares of a pulse can be, 0 to 1, and is the block's thickness one, up to 1 km?
    #[must_use]
    pub const fn is_possible(&self) -> bool {
        let on_block = match self.learned_on {
            Some(block) => block.get() >= 0.0 && block.get() <= 1e3,
            None => true,
        };
        on_block && self.noise >= 0.0 && self.noise <= 1.0 && self.mismatch >= 0.0 && self.mismatch <= 1.0
    }
}

impl PulseFacts {
    /// The same pulse with its measured quality.
    #[must_use]
    pub const fn with_quality(mut self, quality: PulseQuality) -> Self {
        self.noise = quality.noise;
        self.mismatch = quality.mismatch;
        self
    }
}

/// A reference pulse: samples at the record's rate, envelope peak 1, mean 0.
#[derive(Clone, Copy, Debug)]
pub struct ReferencePulse<'p> {
    /// The samples.
    pub samples: &'p [f32],
    /// What is known of them.
    pub facts: PulseFacts,
}

impl<'p> ReferencePulse<'p> {
    /// Looks at a buffer that [`model`] or [`learn`] has filled.
    #[must_use]
    pub fn new(buffer: &'p [f32; PULSE_CAPACITY], facts: PulseFacts) -> Self {
        Self {
            samples: buffer.get(..usize::from(facts.length)).unwrap_or(&[]),
            facts,
        }
    }
}

/// Writes the pulse that the probe's data sheet promises.
///
/// # Errors
/// [`SetupError::PulseTooLong`].
pub fn model(setup: &GaugeSetup, buffer: &mut [f32; PULSE_CAPACITY]) -> Result<PulseFacts, SetupError> {
    let rate = setup.sample_rate;
    let sigma = GAUSSIAN_6DB / core::f32::consts::PI * (rate / setup.probe.bandwidth());
    let half = math::saturating_i32(math::floor(GAUSSIAN_52DB * sigma)).max(2);
    let length = usize::try_from(half)
        .unwrap_or(PULSE_CAPACITY)
        .saturating_mul(2)
        .saturating_add(1);
    let Some(samples) = buffer.get_mut(..length) else {
        return Err(SetupError::PulseTooLong);
    };
    let turn = core::f32::consts::TAU * (setup.probe.centre_frequency / rate);
    for (i, sample) in samples.iter_mut().enumerate() {
        let t = i as f32 - half as f32;
        *sample = math::exp(-t * t / (2.0 * sigma * sigma)) * math::cos(turn * t);
    }
    facts_of(samples, setup.samples_per_cycle())
}

/// Takes over a pulse from samples of an echo at the record's rate.
///
/// # Errors
/// [`SetupError::PulseTooLong`], or [`SetupError::PulseEmpty`] if there are fewer than two cycles, if
/// some are not numbers or if all are zero. The buffer may have been overwritten then.
pub fn learn(
    samples: &[f32],
    samples_per_cycle: f32,
    buffer: &mut [f32; PULSE_CAPACITY],
) -> Result<PulseFacts, SetupError> {
    let Some(own) = buffer.get_mut(..samples.len()) else {
        return Err(SetupError::PulseTooLong);
    };
    if (samples.len() as f32) < 2.0 * samples_per_cycle || samples.iter().any(|s| !s.is_finite()) {
        return Err(SetupError::PulseEmpty);
    }
    for (to, from) in own.iter_mut().zip(samples) {
        *to = *from;
    }
    facts_of(own, samples_per_cycle)
}

/// Scales to an envelope peak of 1, takes the mean out and finds the facts.
fn facts_of(samples: &mut [f32], samples_per_cycle: f32) -> Result<PulseFacts, SetupError> {
    let length = u16::try_from(samples.len()).map_err(|_| SetupError::PulseTooLong)?;
    let stride = stride(samples_per_cycle);
    let (index, origin, peak) = envelope_peak(samples, stride);
    if !(peak > 0.0 && peak.is_finite()) {
        return Err(SetupError::PulseEmpty);
    }
    let level = 0.1 * peak;
    let (first, last) = durations(
        samples,
        stride,
        index,
        |s, i| math::sqrt(squared_at(s, i, stride)),
        level,
    );
    let mut mean = 0.0;
    for &sample in samples.iter() {
        mean += sample;
    }
    mean /= f32::from(length);
    for sample in samples.iter_mut() {
        *sample = (*sample - mean) / peak;
    }

    // Autocorrelation at whole lags, then between them.
    let mut lags = [0.0; 2 * interpolate::REACH];
    let middle = interpolate::REACH - 1;
    for (place, value) in lags.iter_mut().enumerate() {
        *value = autocorrelation(samples, place.abs_diff(middle));
    }
    let energy = autocorrelation(samples, 0);
    if !(energy > 0.0) {
        return Err(SetupError::PulseEmpty);
    }
    // Second difference at two steps, extrapolated to none (Richardson): -d²ρ/dt² at 0.
    let curvature = |step: f32| {
        let beside = interpolate::at(&lags, middle as f32 + step);
        2.0 * (energy - beside) / (step * step)
    };
    let derivative_energy = (4.0 * curvature(0.25) - curvature(0.5)) / 3.0;
    let mut likeness = 0.0;
    let (from, to) = (0.6 * samples_per_cycle, 1.4 * samples_per_cycle + 1.0);
    for lag in math::saturating_i32(from).max(1)..=math::saturating_i32(to) {
        likeness = math::larger(likeness, autocorrelation(samples, lag.unsigned_abs() as usize));
    }
    if !(derivative_energy > 0.0) {
        return Err(SetupError::PulseEmpty);
    }
    Ok(PulseFacts {
        length,
        origin,
        energy,
        derivative_energy,
        cycle_likeness: likeness / energy,
        envelope_duration: last - first,
        angular_frequency: math::sqrt(derivative_energy / energy),
        noise: 0.0,
        mismatch: 0.0,
    })
}

/// Sum of products of a pulse with itself `lag` samples later.
#[must_use]
pub fn autocorrelation(samples: &[f32], lag: usize) -> f32 {
    let mut sum = 0.0;
    for (a, b) in samples.iter().zip(samples.get(lag..).unwrap_or(&[])) {
        sum += a * b;
    }
    sum
}

/// Highest envelope of a window: sample, interpolated place and value.
fn envelope_peak(samples: &[f32], stride: usize) -> (usize, f32, f32) {
    let (mut index, mut highest) = (0, 0.0);
    for i in 0..samples.len() {
        let squared = squared_at(samples, i, stride);
        if squared > highest {
            (index, highest) = (i, squared);
        }
    }
    let left = index.checked_sub(1).map_or(0.0, |i| squared_at(samples, i, stride));
    let (offset, peak) = interpolated_maximum(left, highest, squared_at(samples, index + 1, stride));
    (index, index as f32 + offset, peak)
}

/// Where `value` last lies at `level` or above on either side of `index`, without a gap of more than
/// `gap` samples: interpolated places of first and last crossing.
fn durations(
    samples: &[f32],
    gap: usize,
    index: usize,
    value: impl Fn(&[f32], usize) -> f32,
    level: f32,
) -> (f32, f32) {
    let crossing = |inside: usize, outside: usize| {
        let (a, b) = (value(samples, inside), value(samples, outside));
        let share = if a > b {
            math::clamp((a - level) / (a - b), 0.0, 1.0)
        } else {
            0.0
        };
        inside as f32 + share * (outside as f32 - inside as f32)
    };
    let mut first = index;
    let mut i = index;
    while i > 0 && first - i < gap.max(1) {
        i -= 1;
        if value(samples, i) >= level {
            first = i;
        }
    }
    let mut last = index;
    i = index;
    while i + 1 < samples.len() && i - last < gap.max(1) {
        i += 1;
        if value(samples, i) >= level {
            last = i;
        }
    }
    let start = if first > 0 { crossing(first, first - 1) } else { 0.0 };
    let end = if last + 1 < samples.len() {
        crossing(last, last + 1)
    } else {
        last as f32
    };
    (start, end)
}

/// The pulse as one echo shows it. Frequencies are those of the two-way spectrum at -6 dB.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct PulseMetrics {
    /// Lower -6 dB frequency.
    pub lower_frequency: Hertz,
    /// Upper -6 dB frequency.
    pub upper_frequency: Hertz,
    /// -20 dB duration of the envelope: between the places where it is a tenth of its peak. A property of the pulse's shape
    /// alone, whatever its phase: the one to compare probes by.
    pub envelope_duration: Seconds,
    /// -20 dB duration of the rectified signal: from the first to the last instant at which it reaches a tenth of its largest
    /// half-wave. Never longer than the envelope's, and by how much it is shorter depends on the carrier's phase: half-waves
    /// are half a cycle apart, and the outermost on either side comes up to the level or does not, so that a small
    /// change of phase or noise makes the duration jump, by a quarter of a cycle at the least (5 MHz, 60 %: 535 ns of
    /// envelope, 461 to 530 ns rectified, in jumps of 50 ns). Some data sheets state this one.
    pub rectified_duration: Seconds,
    /// Velocity times the envelope duration.
    pub spatial_pulse_length: Metres,
}

impl PulseMetrics {
    /// Arithmetic middle of the two limits.
    #[must_use]
    pub fn centre_frequency(&self) -> Hertz {
        (self.lower_frequency + self.upper_frequency) * 0.5
    }

    /// -6 dB width.
    #[must_use]
    pub fn bandwidth(&self) -> Hertz {
        self.upper_frequency - self.lower_frequency
    }

    /// Width over centre frequency.
    #[must_use]
    pub fn relative_bandwidth(&self) -> f32 {
        self.bandwidth() / self.centre_frequency()
    }

    /// Centre frequency over width.
    #[must_use]
    pub fn q(&self) -> f32 {
        self.centre_frequency() / self.bandwidth()
    }

    /// Half the spatial pulse length: walls and flaws closer than this merge.
    #[must_use]
    pub fn axial_resolution(&self) -> Metres {
        self.spatial_pulse_length * 0.5
    }
}

/// What [`measure_pulse`] has to know besides the samples.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct PulseContext {
    /// Samples per second.
    pub sample_rate: Hertz,
    /// Where the spectrum is expected.
    pub centre_frequency: Hertz,
    /// How wide it is expected.
    pub bandwidth: Hertz,
    /// For lengths.
    pub velocity: MetresPerSecond,
    /// Root mean square of the noise per sample, in the samples' unit.
    pub noise: f32,
}

/// Describes the strongest echo of a short window. The window is overwritten: tapered
/// at the ends of the echo's -40 dB support.
///
/// Spectrum: discrete Fourier sums at 51 frequencies a twentieth of the expected bandwidth apart, -6 dB
/// limits next to the peak by linear interpolation. Durations: envelope with the noise's share taken
/// out, linear interpolation at a tenth of its peak, the middle of the first and the last crossing on either side.
///
/// Root mean square errors of a single shot at 30 dB (`val_metrics_scatter` prints them, for 5 to 40 samples a cycle):
///
/// | bandwidth, samples a cycle | centre frequency | bandwidth | envelope duration |
/// |---|---|---|---|
/// | 30 %, 10 | 0.2 % | 1.9 % | 3.3 % |
/// | 60 %, 10 | 0.5 % | 2.6 % | 3.9 % |
/// | 100 %, 20 | 0.8 % | 2.8 % | 3.8 % |
///
/// At 40 dB they are a third of that. At 100 % and 10 samples a cycle or fewer the centre is off by 1.2 % and more, which
/// is 1.2 times the Cramér-Rao bound: average shots, or sample faster.
///
/// `None` below [`METRICS_MINIMUM_SNR`], or if the spectrum has no -6 dB limits where it is expected.
#[must_use]
pub fn measure_pulse(window: &mut [f32], context: &PulseContext) -> Option<PulseMetrics> {
    let samples_per_cycle = context.sample_rate / context.centre_frequency;
    let stride = stride(samples_per_cycle);
    let mut mean = 0.0;
    for &sample in window.iter() {
        mean += sample;
    }
    mean /= window.len().max(1) as f32;
    for sample in window.iter_mut() {
        *sample -= mean;
    }
    let (index, _, raw_peak) = envelope_peak(window, stride);
    let floor = 2.0 * context.noise * context.noise;
    let peak = math::sqrt(raw_peak * raw_peak - floor);
    if !(peak > 0.0)
        || (context.noise > 0.0 && Decibels::from_amplitude_ratio(peak / context.noise) < METRICS_MINIMUM_SNR)
    {
        return None;
    }
    let clean = |s: &[f32], i: usize| math::sqrt(squared_at(s, i, stride) - floor);
    // Where noise makes the envelope cross the level more than once, the first crossing outwards is early and the last one
    // late, and the more so the more samples there are: their middle is neither.
    let first = durations(window, 1, index, clean, 0.1 * peak);
    let half = math::saturating_i32(0.5 * samples_per_cycle).unsigned_abs() as usize;
    let last = durations(window, half, index, clean, 0.1 * peak);
    let (start, end) = (0.5 * (first.0 + last.0), 0.5 * (first.1 + last.1));
    let largest = window.iter().fold(0.0, |m, s| math::larger(m, s.abs()));
    let half_cycle = math::saturating_i32(0.75 * samples_per_cycle).unsigned_abs() as usize;
    let (rectified_start, rectified_end) = durations(
        window,
        half_cycle,
        index,
        |s, i| s.get(i).map_or(0.0, |v| v.abs()),
        0.1 * largest,
    );

    // Cut to the -40 dB support: 0.28 of the -20 dB duration beyond it on either side (0.21 for a Gaussian, more where a
    // tail follows). Measured, it would end where the noise begins, and a short cut widens the spectrum: by 3 % at 30 dB.
    let beyond = 0.28 * (end - start);
    let from = usize::try_from(math::saturating_i32(start - beyond)).unwrap_or(0);
    let to = usize::try_from(math::saturating_i32(end + beyond)).unwrap_or(0) + 2;
    let support = window.get_mut(from..)?;
    let length = (to - from).min(support.len());
    let support = support.get_mut(..length)?;
    taper(support);

    let step = core::f32::consts::TAU * (context.bandwidth / context.sample_rate) / 20.0;
    let centre = core::f32::consts::TAU / samples_per_cycle;
    let (lower, upper) =
        spectrum_limits(support, centre, step).or_else(|| spectrum_limits(support, centre, 2.0 * step))?;
    let hertz = |angular: f32| context.sample_rate * (angular / core::f32::consts::TAU);
    let seconds = |samples: f32| context.sample_rate.period() * samples;
    let envelope_duration = seconds(end - start);
    Some(PulseMetrics {
        lower_frequency: hertz(lower),
        upper_frequency: hertz(upper),
        envelope_duration,
        rectified_duration: seconds(rectified_end - rectified_start),
        spatial_pulse_length: context.velocity * envelope_duration,
    })
}

/// Raised-cosine taper over a twentieth at either end.
fn taper(samples: &mut [f32]) {
    let edge = samples.len() / 20;
    let turn = core::f32::consts::PI / (edge as f32 + 1.0);
    for i in 0..edge {
        let weight = 0.5 - 0.5 * math::cos(turn * (i as f32 + 1.0));
        if let Some(s) = samples.get_mut(i) {
            *s *= weight;
        }
        let mirrored = samples.len() - 1 - i;
        if let Some(s) = samples.get_mut(mirrored) {
            *s *= weight;
        }
    }
}

/// Number of frequencies looked at on either side of the expected centre.
const SPECTRUM_SIDE: usize = 25;

/// -6 dB limits (radians a sample) of the spectrum, looked for around `centre` in steps of `step`.
fn spectrum_limits(samples: &[f32], centre: f32, step: f32) -> Option<(f32, f32)> {
    let mut magnitudes = [0.0; 2 * SPECTRUM_SIDE + 1];
    // A start below zero frequency would mirror the spectrum: begin at a whole step above zero.
    let lowest = centre - SPECTRUM_SIDE as f32 * step;
    let start = if lowest > step { lowest } else { step };
    // Rotators by recurrence: four calls of sin and cos in all instead of hundreds.
    let (mut cos, mut sin) = (math::cos(start), math::sin(start));
    let (step_cos, step_sin) = (math::cos(step), math::sin(step));
    for magnitude in &mut magnitudes {
        let (mut re, mut im, mut c, mut s) = (0.0, 0.0, 1.0, 0.0);
        for &x in samples {
            re += x * c;
            im += x * s;
            (c, s) = (c * cos - s * sin, c * sin + s * cos);
        }
        *magnitude = math::sqrt(re * re + im * im);
        (cos, sin) = (cos * step_cos - sin * step_sin, cos * step_sin + sin * step_cos);
    }
    let (mut peak, mut highest) = (0, 0.0);
    for (i, &m) in magnitudes.iter().enumerate() {
        if m > highest {
            (peak, highest) = (i, m);
        }
    }
    let level = MINUS_6DB * highest;
    let at = |i: usize| magnitudes.get(i).copied();
    let crossing = |inside: usize, outside: usize| {
        let (a, b) = (at(inside)?, at(outside)?);
        let place = inside as f32 + (a - level) / (a - b) * (outside as f32 - inside as f32);
        Some(start + step * place)
    };
    let mut low = peak;
    while at(low.checked_sub(1)?)? >= level {
        low -= 1;
    }
    let mut high = peak;
    while at(high + 1)? >= level {
        high += 1;
    }
    Some((crossing(low, low - 1)?, crossing(high, high + 1)?))
}
