//! The border between probe and part: a couplant film, a rough surface, a curved part under a flat probe.
//!
//! All three depend on frequency, so their factors multiply spectra instead of amplitudes.

use crate::fourier::Complex;
use crate::layered::{ExactLayer, two_port};
use serde::Serialize;
use std::f64::consts::{FRAC_PI_2, FRAC_PI_4, TAU};

/// Places on the element at which the gap under it is evaluated.
const STRIPS: u32 = 128;

/// What lies between probe and part.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Film {
    /// The couplant where the gap is least; its thickness may be 0.
    pub couplant: ExactLayer,
    /// Root mean square of the surface's height in metres.
    pub roughness: f64,
    /// Velocity in what the surface belongs to: coating, or wall.
    pub part_velocity: f64,
    /// Radius of a cylinder under a flat, round element, with the element's radius: the gap between
    /// them is full of couplant.
    pub curvature: Option<Curvature>,
}

/// A flat, round element on a cylinder.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Curvature {
    /// Radius of the element in metres.
    pub element: f64,
    /// Radius of the cylinder in metres, larger than the element's.
    pub cylinder: f64,
}

impl Curvature {
    /// The gap `across` metres beside the line of contact: R - sqrt(R^2 - y^2).
    #[must_use]
    pub fn gap(&self, across: f64) -> f64 {
        let radius = self.cylinder;
        // R - sqrt(R^2 - y^2) without the difference of near numbers.
        across * across / (radius + (radius * radius - across * across).max(0.0).sqrt())
    }
}

/// Pressure factors of the border at one frequency.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Factors {
    /// Reflection seen from the probe.
    pub front: Complex,
    /// In and out once.
    pub through: Complex,
    /// Reflection seen from the part.
    pub below: Complex,
}

/// How often a path meets the border, by kind.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Default, Serialize)]
pub struct Meetings {
    /// Turned back towards the probe.
    pub front: u32,
    /// In and out.
    pub through: u32,
    /// Turned back into the part.
    pub below: u32,
}

impl Meetings {
    /// What is missing to reach `other`, if that is only more.
    #[must_use]
    pub const fn up_to(self, other: Self) -> Option<Self> {
        if other.front < self.front || other.through < self.through || other.below < self.below {
            return None;
        }
        Some(Self {
            front: other.front - self.front,
            through: other.through - self.through,
            below: other.below - self.below,
        })
    }
}

impl Factors {
    /// A plain border without a film.
    #[must_use]
    pub fn plain(reflection: f64) -> Self {
        Self {
            front: Complex::new(reflection, 0.0),
            through: Complex::new(1.0 - reflection * reflection, 0.0),
            below: Complex::new(-reflection, 0.0),
        }
    }

    /// The sign by which an echo of these meetings is called positive or negative: a passage delays and
    /// does not turn over, however far its phase lags; a reflection has the sign of its real part.
    #[must_use]
    pub fn sign(&self, meetings: Meetings) -> f64 {
        let turned = |factor: Complex, count: u32| factor.re < 0.0 && count % 2 == 1;
        if turned(self.front, meetings.front) == turned(self.below, meetings.below) {
            1.0
        } else {
            -1.0
        }
    }

    /// The product over all meetings.
    #[must_use]
    pub fn product(&self, meetings: Meetings) -> Complex {
        power(self.front, meetings.front) * power(self.through, meetings.through) * power(self.below, meetings.below)
    }
}

fn power(base: Complex, exponent: u32) -> Complex {
    let (mut result, mut square, mut left) = (Complex::new(1.0, 0.0), base, exponent);
    while left > 0 {
        if left & 1 == 1 {
            result = result * square;
        }
        square = square * square;
        left >>= 1;
    }
    result
}

impl Film {
    /// The border between media of impedance `near` (probe) and `far` (part) at `frequency` hertz.
    ///
    /// The film is an exact layer for plane waves. A rough surface is a random delay of the coherent
    /// wave (Kirchhoff: gentle slopes, heights of a normal distribution, correlation length of a
    /// wavelength or more): exp(-(k1 - k2)^2 s^2) in and out, exp(-2 k1^2 s^2) and exp(-2 k2^2 s^2)
    /// when it reflects towards the probe and into the part; k1 in the couplant, k2 in the part. What
    /// is scattered is not in it. Over a cylinder the film's factors are averaged over the element,
    /// each strip as if it were plane: good for gaps that are shallow beside the element's width.
    #[must_use]
    pub fn factors(&self, near: f64, far: f64, frequency: f64) -> Factors {
        let at = |gap: f64| {
            let mut layer = self.couplant;
            layer.thickness += gap;
            let port = two_port(near, &[layer], far, frequency);
            Factors {
                front: port.reflection_front,
                through: port.transmission_in * port.transmission_out,
                below: port.reflection_back,
            }
        };
        let mut factors = match &self.curvature {
            None => at(0.0),
            Some(curvature) => {
                let mut sum = Factors {
                    front: Complex::ZERO,
                    through: Complex::ZERO,
                    below: Complex::ZERO,
                };
                for strip in 0..STRIPS {
                    // y = a sin(theta): a chord's share of the disc is cos^2(theta) d theta / (pi / 4).
                    let angle = FRAC_PI_2 * (f64::from(strip) + 0.5) / f64::from(STRIPS);
                    let (sine, cosine) = libm::sincos(angle);
                    let share = cosine * cosine * (FRAC_PI_2 / f64::from(STRIPS)) / FRAC_PI_4;
                    let here = at(curvature.gap(curvature.element * sine));
                    sum.front += here.front.scaled(share);
                    sum.through += here.through.scaled(share);
                    sum.below += here.below.scaled(share);
                }
                sum
            }
        };
        if self.roughness > 0.0 {
            let height = TAU * frequency * self.roughness;
            let (outside, inside) = (height / self.couplant.velocity, height / self.part_velocity);
            factors.front = factors.front.scaled(libm::exp(-2.0 * outside * outside));
            factors.through = factors.through.scaled(rough_passage(outside - inside));
            factors.below = factors.below.scaled(rough_reflection(inside));
        }
        factors
    }
}

/// Coherent share after two passes through a rough surface, exp(-((k1 - k2) s)^2), from the
/// difference of wave numbers times height.
#[must_use]
pub fn rough_passage(difference: f64) -> f64 {
    libm::exp(-difference * difference)
}

/// Coherent share after one reflection by a rough surface, exp(-2 (k s)^2), from wave number times
/// height (Kirchhoff).
#[must_use]
pub fn rough_reflection(height: f64) -> f64 {
    libm::exp(-2.0 * height * height)
}

/// The frequency-dependent factors over a band, and the product along a path that grows from the one
/// before.
#[derive(Clone, Debug)]
pub struct BorderBand {
    factors: Vec<Factors>,
    reached: Meetings,
    product: Vec<Complex>,
}

impl BorderBand {
    /// At the given frequencies.
    #[must_use]
    pub fn new(film: &Film, near: f64, far: f64, frequencies: impl Iterator<Item = f64>) -> Self {
        let factors: Vec<Factors> = frequencies
            .map(|frequency| film.factors(near, far, frequency))
            .collect();
        let product = vec![Complex::new(1.0, 0.0); factors.len()];
        Self {
            factors,
            reached: Meetings::default(),
            product,
        }
    }

    /// The product over a path's meetings, one value a frequency.
    pub fn along(&mut self, meetings: Meetings) -> &[Complex] {
        let more = match self.reached.up_to(meetings) {
            Some(more) => more,
            None => {
                self.product.fill(Complex::new(1.0, 0.0));
                meetings
            }
        };
        self.reached = meetings;
        if more != Meetings::default() {
            for (product, factors) in self.product.iter_mut().zip(&self.factors) {
                *product = *product * factors.product(more);
            }
        }
        &self.product
    }
}
