//! Echoes of a wall's grains: noise that averaging does not lower.
//!
//! Scatterers at random times (Poisson), each an echo of the pulse with a random phase and with the
//! square of frequency (Rayleigh scattering: grains small beside the wavelength). They lie between the
//! surface and the end of the record, weaker with the way through the wall and, after each return of
//! the wall, by as much as the back-wall echoes. By Campbell's theorem their variance is rate times
//! mean square amplitude times the energy of one echo.

use crate::fourier::{Complex, RealTransform};
use crate::front_end::{Purpose, Random};
use crate::propagation::{Stack, reflection_factor};
use crate::scene::{Grain, Scene};
use crate::transducer::BandPulse;
use std::f64::consts::{PI, TAU};

/// Anisotropy of alpha iron: c11 231.4, c12 134.7, c44 116.4 GPa (from memory).
const IRON_ANISOTROPY: f64 = -136.1e9;

/// Grain noise of one wall.
#[derive(Clone, Debug)]
pub(super) struct GrainNoise {
    place: u64,
    /// Mean number of scatterers in a sample.
    rate: f64,
    /// Shape of one scatterer's echo over the pulse's band, such that `rate` of them have an rms of 1.
    shape: Vec<Complex>,
    first_bin: usize,
    /// Root mean square just below the surface, in units of pressure at the probe's face.
    rms: f64,
    sample_rate: f64,
    first_sample: f64,
    face: f64,
    round_trip: f64,
    /// Amplitude left after one return of the wall, without its losses on the way.
    return_factor: f64,
    /// Np in a second of the wall.
    loss: f64,
    seed: Option<u64>,
    spectrum: Vec<Complex>,
}

impl GrainNoise {
    /// `first_peak` is the envelope's peak of the first back-wall echo.
    pub(super) fn new(scene: &Scene, stack: &Stack, pulse: &BandPulse, first_peak: f64) -> Option<Self> {
        let grain = scene.grain.as_ref()?;
        let level = match (grain.level_db, grain.size_um) {
            (Some(decibels), _) => libm::pow(10.0, decibels / 20.0),
            (None, Some(_)) => level_by_size(grain, scene, stack)?,
            (None, None) => return None,
        };
        let centre = stack.reference;
        let sample_rate = scene.record.sample_rate_mhz * 1e6;
        let rate = grain.scatterers_per_us * 1e6 / sample_rate;
        // Real signal s(t) = sum of 2 Re(v exp(j w t)): its energy over the period is 2 sum |v|^2 / spacing.
        let weighted: Vec<Complex> = pulse
            .frequencies()
            .zip(pulse.values())
            .map(|(frequency, value)| value.scaled(frequency * frequency / (centre * centre)))
            .collect();
        let energy: f64 = weighted.iter().map(|v| 2.0 * (v.re * v.re + v.im * v.im)).sum::<f64>() / pulse.spacing();
        let scale = 1.0 / (grain.scatterers_per_us * 1e6 * energy).sqrt();
        let (near, far) = stack.border_impedances();
        let below = match &stack.film {
            Some(film) => film.factors(near, far, centre).below.magnitude(),
            None => reflection_factor(near, far).abs(),
        };
        let inner = stack.coating.map_or(below, |coating| {
            reflection_factor(coating.impedance, stack.wall.impedance).abs()
        });
        let back = reflection_factor(stack.wall.impedance, stack.back_impedance).abs();
        Some(Self {
            place: u64::from(grain.place),
            rate,
            shape: weighted.iter().map(|value| value.scaled(scale)).collect(),
            first_bin: pulse.first_bin(),
            rms: level * first_peak,
            sample_rate,
            first_sample: scene.record.first_sample_us * 1e-6,
            face: stack.face_time() + stack.coating.map_or(0.0, |coating| coating.round_trip()),
            round_trip: stack.wall.round_trip(),
            return_factor: inner * back,
            loss: stack.wall.attenuation.at(centre) * stack.wall.velocity,
            seed: None,
            spectrum: vec![Complex::ZERO; weighted.len()],
        })
    }

    /// Draws the grains of a seed; `false` if they are there already.
    pub(super) fn move_to(&mut self, seed: u64, transform: &mut RealTransform) -> bool {
        if self.seed == Some(seed) {
            return false;
        }
        self.seed = Some(seed);
        let mut random = Random::new(seed, Purpose::Grain, self.place);
        let length = transform.length();
        let (mut real, mut imaginary) = (vec![0.0; length], vec![0.0; length]);
        // One place more before the record, where the echo of a scatterer just outside still reaches in.
        let period = length as f64 / self.sample_rate;
        let mut place = 0.0;
        loop {
            // Exponential gaps make a Poisson process.
            place -= libm::log(1.0 - random.uniform()) / self.rate;
            if place >= length as f64 {
                break;
            }
            let index = place as usize;
            let (sine, cosine) = libm::sincos(TAU * random.uniform());
            // The transform's second half stands for the times before the record.
            let mut time = self.first_sample + index as f64 / self.sample_rate;
            if index >= 3 * length / 4 {
                time -= period;
            }
            let after = time - self.face;
            if after < 0.0 {
                continue;
            }
            let returns = (after / self.round_trip).floor();
            let amplitude = self.rms * libm::exp(-self.loss * after) * libm::pow(self.return_factor, returns);
            if let (Some(re), Some(im)) = (real.get_mut(index), imaginary.get_mut(index)) {
                *re += amplitude * cosine;
                *im += amplitude * sine;
            }
        }
        let (real, imaginary) = (transform.to_spectrum(&real), transform.to_spectrum(&imaginary));
        let parts = real.iter().zip(&imaginary).skip(self.first_bin);
        self.spectrum.clear();
        self.spectrum
            .extend(self.shape.iter().zip(parts).map(|(&shape, (&re, &im))| {
                // Positive frequencies of (re + j im) times the pulse.
                shape * (re + Complex::new(-im.im, im.re))
            }));
        true
    }

    /// Adds the noise to the echoes' spectrum.
    pub(super) fn add_to(&self, spectrum: &mut [Complex]) {
        for (sum, &value) in spectrum.iter_mut().zip(&self.spectrum) {
            *sum += value;
        }
    }
}

/// Rms of the noise over the echo of a plane back wall, for single (Born) scattering in an untextured
/// cubic metal with W = exp(-2 r / D): backscatter coefficient
/// eta = 8 / (525 pi) k^4 a^3 (mu / density v^2)^2 / (1 + 4 k^2 a^2)^2 with a = D / 2, and the envelope's
/// rms (2 pi / k) sqrt(eta v s sqrt(pi) / (2 A)) for a collimated beam of area A and a Gaussian pulse of
/// standard deviation s; the noise itself is lower by the square root of 2.
///
/// For k D up to about 1; the diameter's meaning hangs on the correlation, a factor of 6 in power.
fn level_by_size(grain: &Grain, scene: &Scene, stack: &Stack) -> Option<f64> {
    let diameter = scene.probe.element_diameter_mm? * 1e-3;
    let density = stack.wall.impedance / stack.wall.velocity;
    let anisotropy = grain.anisotropy_gpa.map_or(IRON_ANISOTROPY, |value| value * 1e9);
    let noise = born_noise(&Born {
        correlation: 0.5e-6 * grain.size_um?,
        anisotropy,
        density,
        velocity: stack.wall.velocity,
        frequency: stack.reference,
        deviation: scene.pulse().deviation(),
        area: 0.25 * PI * diameter * diameter,
    });
    Some(noise / std::f64::consts::SQRT_2)
}

/// What grain noise depends on, SI units.
#[derive(Clone, Copy, Debug)]
struct Born {
    /// Half the grains' mean diameter.
    correlation: f64,
    /// c11 - c12 - 2 c44.
    anisotropy: f64,
    density: f64,
    velocity: f64,
    frequency: f64,
    /// Of the pulse's Gaussian envelope.
    deviation: f64,
    /// Of the beam.
    area: f64,
}

/// Rms of the noise's envelope over a plane back-wall echo.
fn born_noise(born: &Born) -> f64 {
    let k = TAU * born.frequency / born.velocity;
    let ka = k * born.correlation;
    let contrast = born.anisotropy / (born.density * born.velocity * born.velocity);
    let spread = 1.0 + 4.0 * ka * ka;
    let backscatter = 8.0 / (525.0 * PI) * k * ka * ka * ka * contrast * contrast / (spread * spread);
    let length = born.velocity * born.deviation * PI.sqrt();
    TAU / k * (backscatter * length / (2.0 * born.area)).sqrt()
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Single-scattering model evaluated with NumPy 2.4: alpha iron (7860 kg/m3, 5930 m/s), 5 MHz, 60 %,
    /// element 6 mm: -75.296, -63.850, -56.379 and -51.737 dB for grains of 20, 50, 100 and 200 um.
    #[test]
    fn born_level_is_the_computed_one() {
        for (micrometres, decibels) in [
            (20.0, -75.295_941),
            (50.0, -63.849_799),
            (100.0, -56.378_591),
            (200.0, -51.736_602),
        ] {
            let noise = born_noise(&Born {
                correlation: 0.5e-6 * micrometres,
                anisotropy: IRON_ANISOTROPY,
                density: 7860.0,
                velocity: 5930.0,
                frequency: 5e6,
                deviation: 124.713_2e-9,
                area: PI * 9e-6,
            });
            assert!((20.0 * noise.log10() - decibels).abs() < 1e-4, "{micrometres}: {noise}");
        }
    }
}
