//! What a material takes from sound on its way, and what that does to its velocity.

use crate::fourier::Complex;
use std::f64::consts::{FRAC_PI_2, LN_10, TAU};

/// Attenuation after a power law, with the dispersion that causality ties to it.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Attenuation {
    /// Amplitude attenuation at the reference frequency in Np/m.
    at_reference: f64,
    /// Exponent y of alpha ~ f^y, above 0 and below 3.
    exponent: f64,
    /// Reference frequency in hertz, at which the velocity is the layer's.
    reference: f64,
    /// tan(pi y / 2).
    tangent: f64,
}

impl Attenuation {
    /// `decibels` per metre at `reference` hertz, growing with the `exponent`-th power of frequency.
    #[must_use]
    pub fn new(decibels: f64, exponent: f64, reference: f64) -> Self {
        Self {
            at_reference: decibels * (LN_10 / 20.0),
            exponent,
            reference,
            tangent: libm::tan(FRAC_PI_2 * exponent),
        }
    }

    /// Nothing is lost.
    #[must_use]
    pub const fn is_none(&self) -> bool {
        self.at_reference == 0.0
    }

    /// Np/m at a frequency.
    #[must_use]
    pub fn at(&self, frequency: f64) -> f64 {
        self.at_reference * libm::pow(frequency.abs() / self.reference, self.exponent)
    }

    /// 1/c(f) - 1/c(reference) in s/m, from the Kramers-Kronig relations (Szabo 1994; Waters and
    /// others 2000): a tan(pi y / 2) (w^(y-1) - w0^(y-1)), and -(2/pi) a ln(w / w0) for y = 1, with
    /// alpha = a w^y.
    #[must_use]
    pub fn slowness_change(&self, frequency: f64) -> f64 {
        let ratio = frequency.abs() / self.reference;
        if self.is_none() || ratio == 0.0 {
            return 0.0;
        }
        let scale = self.at_reference / (TAU * self.reference);
        if (self.exponent - 1.0).abs() < 1e-6 {
            -scale * libm::log(ratio) / FRAC_PI_2
        } else {
            scale * self.tangent * (libm::pow(ratio, self.exponent - 1.0) - 1.0)
        }
    }

    /// What `length` metres do to a component of `frequency`, beyond the plain delay at the reference
    /// velocity.
    #[must_use]
    pub fn over(&self, length: f64, frequency: f64) -> Complex {
        if self.is_none() || length == 0.0 {
            return Complex::new(1.0, 0.0);
        }
        Complex::polar(
            libm::exp(-self.at(frequency) * length),
            -TAU * frequency * self.slowness_change(frequency) * length,
        )
    }
}
