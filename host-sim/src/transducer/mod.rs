//! The pulse that a probe sends and receives: shape in time, spectrum, and its figures as truth.
//!
//! A pulse is known by its centre frequency with either its relative bandwidth (a Gaussian envelope)
//! or its attack and decay (half a Gaussian on either side of the maximum), and by the carrier's
//! phase. What a record shows is that pulse behind the anti-alias filter; [`BandPulse`] holds it with
//! its origin at the maximum of its envelope and a peak of 1.

mod figures;

use crate::fourier::{Complex, Kept, RealTransform, Rotation};
pub use figures::PulseFigures;
use std::f64::consts::{LN_10, PI, TAU};

/// Half-width of a Gaussian at -6 dB and at -20 dB, in standard deviations: sqrt(dB ln 10 / 10).
fn half_width(decibels: f64) -> f64 {
    (decibels * LN_10 / 10.0).sqrt()
}
/// A Gaussian is left out beyond this many standard deviations: it has fallen to 1e-9.
const REACH: f64 = 6.5;

/// The pulse as the data sheet gives it, before any filter of the receiver.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Pulse {
    centre: f64,
    attack: f64,
    decay: f64,
    phase: f64,
}

impl Pulse {
    /// A Gaussian envelope of the given relative bandwidth: the -6 dB width of the two-way spectrum
    /// over the centre frequency in hertz. `phase` is the carrier's at the envelope's maximum, in
    /// radians; with 0 the pulse is symmetric.
    ///
    /// s(t) = exp(-t^2 / 2 s^2) cos(2 pi f t + phase), s = k6 / (pi bandwidth). Holds as long as the
    /// spectrum's image at negative frequencies is negligible: the -6 dB limits are right within 1e-6
    /// up to 60 %, 1.5e-5 at 80 % and 3e-3 at 100 %.
    #[must_use]
    pub fn gaussian(centre: f64, relative_bandwidth: f64, phase: f64) -> Self {
        let deviation = half_width(6.0) / (PI * centre * relative_bandwidth);
        Self {
            centre,
            attack: deviation,
            decay: deviation,
            phase,
        }
    }

    /// An envelope that rises from 10 % (-20 dB) to its maximum in `attack` seconds and falls back to
    /// 10 % in `decay` seconds, half a Gaussian each. Their sum is the -20 dB duration within about 1 %:
    /// the bend at the maximum makes the analytic envelope a little rounder.
    #[must_use]
    pub fn attack_decay(centre: f64, attack: f64, decay: f64, phase: f64) -> Self {
        Self {
            centre,
            attack: attack / half_width(20.0),
            decay: decay / half_width(20.0),
            phase,
        }
    }

    /// The carrier's frequency in hertz.
    #[must_use]
    pub const fn centre_frequency(&self) -> f64 {
        self.centre
    }

    /// The envelope at `time` seconds after its maximum.
    #[must_use]
    pub fn envelope(&self, time: f64) -> f64 {
        let deviation = if time < 0.0 { self.attack } else { self.decay };
        let ratio = time / deviation;
        libm::exp(-0.5 * ratio * ratio)
    }

    /// The pulse at `time` seconds after its envelope's maximum.
    #[must_use]
    pub fn value(&self, time: f64) -> f64 {
        self.envelope(time) * libm::cos(TAU * self.centre * time + self.phase)
    }

    /// Standard deviation of the Gaussian envelope in seconds; of another envelope the mean of its halves.
    #[must_use]
    pub fn deviation(&self) -> f64 {
        0.5 * (self.attack + self.decay)
    }

    /// How long before and after its maximum the pulse is above one part in a thousand million.
    #[must_use]
    pub fn reach(&self) -> (f64, f64) {
        (REACH * self.attack, REACH * self.decay)
    }

    /// About the upper -6 dB limit in hertz: exact for a Gaussian, within the band for other envelopes.
    #[must_use]
    pub fn upper_frequency(&self) -> f64 {
        self.centre + half_width(6.0) / (PI * (self.attack + self.decay))
    }

    /// The continuous spectrum (integral of s(t) exp(-j 2 pi f t) dt, in seconds) at `count`
    /// frequencies from 0 on, `spacing` hertz apart. The pulse must be shorter than 1 / `spacing`.
    fn spectrum(&self, spacing: f64, count: usize) -> Vec<Complex> {
        if self.attack == self.decay {
            return self.gaussian_spectrum(spacing, count);
        }
        // The envelope's bend at its maximum leaves a tail that falls with the cube of frequency:
        // sample 16 times faster than the highest frequency, and what is folded back is below 1e-6.
        let mut transform = RealTransform::new(16 * count);
        let length = transform.length();
        let step = 1.0 / (spacing * length as f64);
        let mut signal = vec![0.0; length];
        let (before, after) = self.reach();
        let (before, after) = ((before / step) as usize, (after / step) as usize);
        // Times before the maximum stand at the end: the transform sees a period.
        for (index, slot) in signal.iter_mut().enumerate().take(after + 1) {
            *slot = self.value(index as f64 * step) * step;
        }
        for index in 1..=before.min(length - 1) {
            signal[length - index] += self.value(-(index as f64) * step) * step;
        }
        let mut bins = transform.to_spectrum(&signal);
        bins.truncate(count);
        bins
    }

    /// Magnitude of the continuous spectrum at one frequency.
    fn magnitude(&self, frequency: f64) -> f64 {
        if self.attack == self.decay {
            // The second of two bins.
            let bins = self.gaussian_spectrum(frequency, 2);
            return bins.last().map_or(0.0, |value| value.magnitude());
        }
        let step = 1.0 / (32.0 * self.centre.max(frequency));
        let (before, after) = self.reach();
        let (first, last) = (-(before / step) as i64, (after / step) as i64);
        let mut sum = Complex::ZERO;
        for index in first..=last {
            let time = index as f64 * step;
            sum += Complex::polar(self.value(time) * step, -TAU * frequency * time);
        }
        sum.magnitude()
    }

    fn gaussian_spectrum(&self, spacing: f64, count: usize) -> Vec<Complex> {
        let deviation = 1.0 / (TAU * self.attack);
        let height = 0.5 * self.attack * TAU.sqrt();
        let lobe = |offset: f64| height * libm::exp(-0.5 * (offset / deviation) * (offset / deviation));
        (0..count)
            .map(|k| {
                let frequency = spacing * k as f64;
                Complex::polar(lobe(frequency - self.centre), self.phase)
                    + Complex::polar(lobe(frequency + self.centre), -self.phase)
            })
            .collect()
    }
}

/// Share of a frequency that the anti-alias filter passes: 1 up to 0.40 of the sample rate, then a
/// raised cosine down to 0 at 0.50.
#[must_use]
pub fn anti_alias(frequency: f64, sample_rate: f64) -> f64 {
    let place = (frequency / sample_rate - 0.4) / 0.1;
    if place <= 0.0 {
        1.0
    } else if place >= 1.0 {
        0.0
    } else {
        0.5 + 0.5 * libm::cos(PI * place)
    }
}

/// The pulse as a record shows it: band-limited, envelope peak 1, origin at the envelope's maximum.
#[derive(Clone, Debug, PartialEq)]
pub struct BandPulse {
    spacing: f64,
    first: usize,
    values: Vec<Complex>,
}

impl BandPulse {
    /// Behind the anti-alias filter of a record of `sample_rate`, on a grid of frequencies that are
    /// `sample_rate / length` apart. The pulse must be shorter than `length` samples.
    ///
    /// The last few are kept in each thread: scene after scene has the same pulse.
    #[must_use]
    pub fn new(pulse: &Pulse, sample_rate: f64, length: usize) -> Self {
        thread_local! {
            static KEPT: Kept<(Pulse, f64, usize), BandPulse> = const { Kept::new() };
        }
        KEPT.with(|kept| kept.get((*pulse, sample_rate, length), || Self::make(pulse, sample_rate, length)))
    }

    fn make(pulse: &Pulse, sample_rate: f64, length: usize) -> Self {
        let spacing = sample_rate / length as f64;
        let mut values = pulse.spectrum(spacing, length / 2);
        for (k, value) in values.iter_mut().enumerate() {
            // The sum over bins stands for the integral over frequency: each bin takes its width.
            // Frequency 0 has no partner of the other sign, so it gets half.
            let width = if k == 0 { 0.5 * spacing } else { spacing };
            *value = value.scaled(width * anti_alias(spacing * k as f64, sample_rate));
        }
        let strongest = values.iter().map(|value| value.magnitude()).fold(0.0, f64::max);
        let in_band = |value: &Complex| value.magnitude() > 1e-11 * strongest;
        let first = values.iter().position(in_band).unwrap_or(0);
        let end = values.iter().rposition(in_band).map_or(0, |last| last + 1);
        let band = Self {
            spacing,
            first,
            values: values.get(first..end).unwrap_or(&[]).to_vec(),
        };
        let step = 1.0 / (16.0 * pulse.centre);
        let (origin, peak) = band.envelope_maximum(0.0, 2.0 / pulse.centre, step);
        band.shifted(-origin, 1.0 / peak)
    }

    /// Distance of the bins in hertz.
    #[must_use]
    pub const fn spacing(&self) -> f64 {
        self.spacing
    }

    /// Number of the first bin that is not negligible.
    #[must_use]
    pub const fn first_bin(&self) -> usize {
        self.first
    }

    /// The bins that are not negligible, each with its width in it: s(t) = sum of 2 Re(v exp(j w t)).
    #[must_use]
    pub fn values(&self) -> &[Complex] {
        &self.values
    }

    /// The frequencies of these bins in hertz.
    pub fn frequencies(&self) -> impl Iterator<Item = f64> + '_ {
        (self.first..self.first + self.values.len()).map(|k| k as f64 * self.spacing)
    }

    /// The same band with other values (an echo made of this pulse).
    #[must_use]
    pub fn with_values(&self, values: Vec<Complex>) -> Self {
        Self { values, ..*self }
    }

    /// A signal that is shorter than the period of every `step`-th bin, from those bins.
    #[must_use]
    pub(crate) fn thinned(&self, step: usize, values: Vec<Complex>) -> Self {
        Self {
            spacing: self.spacing * step as f64,
            first: self.first.div_ceil(step),
            values,
        }
    }

    /// Time of the highest value near 0, within half a `cycle` (in seconds) or so: the phase at 0 says
    /// where to look, parabolas through three points close the search.
    #[must_use]
    pub(crate) fn real_maximum(&self, cycle: f64) -> f64 {
        let here = self.analytic(0.0);
        let mut time = -libm::atan2(here.im, here.re) / TAU * cycle;
        for span in [cycle / 8.0, cycle / 16.0, cycle / 32.0, cycle / 32.0] {
            let [left, middle, right] = [-span, 0.0, span].map(|offset| self.analytic(time + offset).re);
            let bend = left - 2.0 * middle + right;
            if bend >= 0.0 {
                break;
            }
            time += (0.5 * span * (left - right) / bend).clamp(-cycle / 4.0, cycle / 4.0);
        }
        time
    }

    /// Delayed by `delay` seconds and multiplied by `factor`.
    #[must_use]
    pub fn shifted(&self, delay: f64, factor: f64) -> Self {
        let rotation = Rotation::new(-TAU * self.spacing * delay, self.first as u32);
        let values = self.values.iter().zip(rotation);
        self.with_values(values.map(|(&value, turn)| (value * turn).scaled(factor)).collect())
    }

    /// The analytic signal at `time` seconds: the real part is the signal, the magnitude its envelope.
    #[must_use]
    pub fn analytic(&self, time: f64) -> Complex {
        let rotation = Rotation::new(TAU * self.spacing * time, self.first as u32);
        let mut sum = Complex::ZERO;
        for (&value, turn) in self.values.iter().zip(rotation) {
            sum += value * turn;
        }
        sum.scaled(2.0)
    }

    /// Time and height of the envelope's maximum within `reach` seconds of `around`, found on a grid
    /// of `step` and then refined to a part in 1e8 of it.
    #[must_use]
    pub fn envelope_maximum(&self, around: f64, reach: f64, step: f64) -> (f64, f64) {
        let height = |time: f64| self.analytic(time).magnitude();
        let steps = (reach / step) as i64;
        let coarse = (-steps..=steps)
            .map(|i| around + i as f64 * step)
            .map(|time| (time, height(time)))
            .fold((around, -1.0), |best, next| if next.1 > best.1 { next } else { best });
        // Golden section needs no derivative; near the top it resolves the root of the rounding only,
        // so a parabola through three points a little apart closes the search.
        let span = 0.25 * step;
        let mut time = coarse.0;
        for _ in 0..6 {
            let (left, middle, right) = (height(time - span), height(time), height(time + span));
            let bend = left - 2.0 * middle + right;
            if bend >= 0.0 {
                break;
            }
            let offset = 0.5 * span * (left - right) / bend;
            time += offset.clamp(-step, step);
        }
        (time, height(time))
    }

    /// The signal at `rate` samples a second, the first one at `from` seconds.
    #[must_use]
    pub fn sampled(&self, from: f64, rate: f64, count: usize) -> Vec<f64> {
        (0..count).map(|i| self.analytic(from + i as f64 / rate).re).collect()
    }
}

/// The signal of a spectrum on the grid of its transform.
pub(crate) fn to_time(transform: &mut RealTransform, band: &BandPulse, bins: &mut Vec<Complex>, signal: &mut [f64]) {
    bins.clear();
    bins.resize(band.first, Complex::ZERO);
    bins.extend_from_slice(&band.values);
    if band.first == 0
        && let Some(constant) = bins.first_mut()
    {
        *constant = constant.scaled(2.0);
    }
    transform.to_time(bins, signal);
}

#[cfg(test)]
mod tests {
    use super::*;

    fn close(value: f64, expected: f64, tolerance: f64) {
        assert!((value - expected).abs() <= tolerance, "{value} is not {expected}");
    }

    /// Closed forms of the Gaussian pulse, evaluated with SciPy 1.17 (`scipy.signal.gausspulse`):
    /// samples at 5 MHz, 60 %.
    #[test]
    fn gaussian_has_the_published_samples() {
        let pulse = Pulse::gaussian(5e6, 0.6, 0.0);
        close(pulse.value(20e-9), 0.798_680_490_688, 1e-11);
        close(pulse.value(100e-9), -0.725_079_768_439, 1e-11);
        close(pulse.value(200e-9), 0.276_403_252_722, 1e-11);
        close(pulse.value(-130e-9), -0.341_405_620_043, 1e-11);
    }

    /// Bandwidth times -20 dB duration is 1.605781443 for a Gaussian; durations of the rectified
    /// signal computed with SciPy 1.17 on a grid of 0.5 ns.
    #[test]
    fn figures_of_gaussians_match_closed_forms() {
        for (centre, relative, envelope, rectified) in [
            (5e6, 0.6, 535.260, 462.0),
            (5e6, 0.3, 1070.521, 1034.0),
            (2.25e6, 0.8, 892.101, 892.0),
        ] {
            let figures = PulseFigures::of(&Pulse::gaussian(centre, relative, 0.0), 100e6);
            // The closed form leaves out the image at negative frequencies: 1e-4 of the duration at 80 %.
            close(figures.duration_20db_envelope_ns, envelope, 1.2e-4 * envelope);
            close(figures.duration_20db_rectified_ns, rectified, 0.6);
            close(figures.centre_frequency_mhz, centre / 1e6, centre * 1e-10);
            close(figures.relative_bandwidth_percent, relative * 100.0, 5e-3);
        }
    }

    #[test]
    fn attack_and_decay_are_the_duration() {
        let pulse = Pulse::attack_decay(5e6, 180e-9, 360e-9, 0.6);
        let figures = PulseFigures::of(&pulse, 100e6);
        close(figures.duration_20db_envelope_ns, 540.0, 8.0);
        assert!(figures.lower_frequency_mhz < 5.0 && figures.upper_frequency_mhz > 5.0);
        close(figures.upper_frequency_mhz, pulse.upper_frequency() / 1e6, 0.2);
    }

    /// An envelope of two equal halves must give the closed form, by the numeric way too.
    #[test]
    fn numeric_spectrum_equals_the_closed_form() {
        let even = Pulse::gaussian(5e6, 0.6, 0.4);
        let uneven = Pulse {
            decay: even.decay * (1.0 + 1e-12),
            ..even
        };
        let spacing = 50e6 / 512.0;
        for (closed, numeric) in even.spectrum(spacing, 256).iter().zip(uneven.spectrum(spacing, 256)) {
            assert!((*closed - numeric).magnitude() < 1e-15);
        }
    }

    #[test]
    fn origin_is_the_envelope_maximum_and_the_peak_is_one() {
        for pulse in [
            Pulse::gaussian(5e6, 1.0, 1.0),
            Pulse::attack_decay(5e6, 120e-9, 300e-9, 0.6),
            Pulse::gaussian(10e6, 0.8, 0.0),
        ] {
            let band = BandPulse::new(&pulse, 50e6, 4096);
            let top = band.analytic(0.0).magnitude();
            close(top, 1.0, 1e-9);
            for offset in [-5e-9, -1e-9, 1e-9, 5e-9] {
                assert!(band.analytic(offset).magnitude() < top);
            }
        }
    }

    #[test]
    fn transform_and_direct_sum_agree() {
        let band = BandPulse::new(&Pulse::gaussian(5e6, 0.6, 0.3), 50e6, 1024).shifted(4.321e-6, 0.7);
        let mut transform = RealTransform::new(1024);
        let (mut bins, mut signal) = (Vec::new(), vec![0.0; 1024]);
        to_time(&mut transform, &band, &mut bins, &mut signal);
        for (i, &value) in signal.iter().enumerate() {
            close(value, band.analytic(i as f64 / 50e6).re, 1e-12);
        }
    }
}
