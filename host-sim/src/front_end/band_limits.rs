//! Butterworth high-pass and low-pass in the frequency domain.
//!
//! The responses are those of the analogue filters (Butterworth 1930, "On the theory of filter
//! amplifiers"): a low-pass of order n has its poles at exp(j pi (2k + n - 1) / 2n), k = 1 to n, in units
//! of its -3 dB frequency, and the magnitude 1 / sqrt(1 + (f/f0)^2n); a high-pass is a low-pass in f0/f.

use crate::fourier::Complex;
use crate::scene::Receiver;
use std::f64::consts::{PI, TAU};

/// The band of a receiver.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct BandLimits {
    /// -3 dB frequency in hertz and order.
    high_pass: Option<(f64, u8)>,
    low_pass: Option<(f64, u8)>,
}

impl BandLimits {
    /// Those of a scene's receiver; `None` if it has none.
    #[must_use]
    pub fn of(receiver: &Receiver) -> Option<Self> {
        let limit = |mhz: Option<f64>, order| mhz.map(|mhz| (mhz * 1e6, order));
        let limits = Self {
            high_pass: limit(receiver.high_pass_mhz, receiver.high_pass_order),
            low_pass: limit(receiver.low_pass_mhz, receiver.low_pass_order),
        };
        (limits.high_pass.is_some() || limits.low_pass.is_some()).then_some(limits)
    }

    /// The response at a frequency of 0 hertz or more.
    #[must_use]
    pub fn response(&self, frequency: f64) -> Complex {
        let mut response = Complex::new(1.0, 0.0);
        if let Some((corner, order)) = self.low_pass {
            response = response * low_pass(frequency / corner, order);
        }
        if let Some((corner, order)) = self.high_pass {
            let share = if frequency > 0.0 {
                low_pass(corner / frequency, order).conjugate()
            } else {
                Complex::ZERO
            };
            response = response * share;
        }
        response
    }

    /// The group delay at a frequency above 0 in seconds, from the phases a thousandth of it apart.
    #[must_use]
    pub fn delay(&self, frequency: f64) -> f64 {
        let step = 5e-4 * frequency;
        let turned = self.response(frequency + step) * self.response(frequency - step).conjugate();
        -libm::atan2(turned.im, turned.re) / (2.0 * step * TAU)
    }
}

/// A low-pass of corner 1 at `j x`.
fn low_pass(x: f64, order: u8) -> Complex {
    let order = u32::from(order);
    let mut product = Complex::new(1.0, 0.0);
    for k in 1..=order {
        let angle = PI * f64::from(2 * k + order - 1) / f64::from(2 * order);
        // 1 / (j x - pole), whose magnitude at x = 0 is 1.
        let below = Complex::new(0.0, x) - Complex::polar(1.0, angle);
        let size = below.re * below.re + below.im * below.im;
        product = product * below.conjugate().scaled(1.0 / size);
    }
    product
}

#[cfg(test)]
mod tests {
    use super::*;

    /// The closed form of the magnitude.
    #[test]
    fn val_magnitude_is_butterworths() {
        for order in 1..=8u8 {
            let limits = BandLimits {
                high_pass: Some((1e6, order)),
                low_pass: Some((9e6, 9 - order)),
            };
            for k in 1..200 {
                let frequency = f64::from(k) * 1e5;
                let high = 1.0 / (1.0 + (1e6 / frequency).powi(2 * i32::from(order))).sqrt();
                let low = 1.0 / (1.0 + (frequency / 9e6).powi(2 * i32::from(9 - order))).sqrt();
                let found = limits.response(frequency).magnitude();
                assert!((found - high * low).abs() < 1e-12, "{order} {frequency}: {found}");
            }
            assert_eq!(limits.response(0.0), Complex::ZERO);
        }
    }

    /// Poles and phase against SciPy 1.17: `scipy.signal.freqs(*butter(n, 2*pi*corner, kind, analog=True))`.
    #[test]
    fn val_response_is_that_of_scipy() {
        let high = BandLimits {
            high_pass: Some((1e6, 3)),
            low_pass: None,
        };
        let low = BandLimits {
            high_pass: None,
            low_pass: Some((8e6, 4)),
        };
        for (limits, frequency, re, im) in [
            (true, 7.0e+05, -0.324387173433, -0.00613788407631),
            (true, 5.0e+06, 0.919941123768, 0.391974913606),
            (false, 2.0e+06, 0.79050584019, -0.612442044662),
            (false, 1.1e+07, -0.136500252539, 0.232279049266),
        ]
        .map(|(high_pass, f, re, im)| (if high_pass { high } else { low }, f, re, im))
        {
            let found = limits.response(frequency);
            assert!(
                (found - Complex::new(re, im)).magnitude() < 1e-9,
                "{frequency}: {found:?}"
            );
        }
    }

    /// A first-order low-pass delays by 1 / (2 pi f0 (1 + (f/f0)^2)).
    #[test]
    fn val_delay_of_the_first_order() {
        let limits = BandLimits {
            high_pass: None,
            low_pass: Some((5e6, 1)),
        };
        for frequency in [1e5f64, 2e6, 5e6, 2e7] {
            let expected = 1.0 / (TAU * 5e6 * (1.0 + (frequency / 5e6).powi(2)));
            assert!((limits.delay(frequency) / expected - 1.0).abs() < 1e-6);
        }
    }
}
