//! What the element's size does to an echo: the beam spreads, and a tilted wall sends it past.

use crate::fourier::Complex;
use std::f64::consts::{PI, TAU};

/// Average pressure over a round piston that hears its own beam back from a flat reflector (Rogers
/// and Van Buren 1974, for pulse echo): D = 1 - exp(-j u) (J0(u) + j J1(u)), u = 2 pi / S, with
/// S = sum of path lengths times wavelengths over the square of the radius, there and back.
///
/// Fluid-like piston in the Fresnel limit: good for k a above about 16 and distances beyond a third of
/// the radius; a solid's edge shear waves are not in it.
#[must_use]
pub fn diffraction(s: f64) -> Complex {
    if s <= 0.0 {
        return Complex::new(1.0, 0.0);
    }
    // Beyond S = 1e8 the difference drowns in rounding; its limit is j pi / S.
    if s > 1e6 {
        return Complex::new(0.0, PI / s);
    }
    let u = TAU / s;
    Complex::new(1.0, 0.0) - Complex::polar(1.0, -u) * Complex::new(libm::j0(u), libm::j1(u))
}

/// Steps of the table of [`Diffraction`] per unit of u = 2 pi / S.
const STEPS: f64 = 256.0;
/// Where the table ends: S of about 0.1, a reflector in front of the face.
const TABLE_END: f64 = 64.0;

/// [`diffraction`] from a table, for many frequencies: Bessel functions cost a hundred times as much.
///
/// Cubic interpolation between 256 steps a unit of u = 2 pi / S: within 1e-10 of the formula. Beyond
/// the table (u above 64) the formula itself.
#[derive(Clone, Copy, Debug)]
pub struct Diffraction {
    table: &'static [Complex],
}

impl Diffraction {
    /// The table, made once in a process.
    #[must_use]
    pub fn new() -> Self {
        static TABLE: std::sync::OnceLock<Vec<Complex>> = std::sync::OnceLock::new();
        let table = TABLE.get_or_init(|| {
            (0..=(TABLE_END * STEPS) as u32 + 3)
                // One point before zero, for the first cell's interpolation.
                .map(|i| by_u((f64::from(i) - 1.0) / STEPS))
                .collect()
        });
        Self { table }
    }

    /// The factor for S, as [`diffraction`].
    #[must_use]
    pub fn at(&self, s: f64) -> Complex {
        let place = TAU / s * STEPS;
        if !(s > 0.0 && place < TABLE_END * STEPS) || s > 1e6 {
            return diffraction(s);
        }
        let cell = place as usize;
        let x = place - cell as f64;
        let Some(&[before, left, right, after]) = self.table.get(cell..cell + 4) else {
            return diffraction(s);
        };
        // Lagrange through four points at -1, 0, 1, 2.
        before.scaled(-x * (x - 1.0) * (x - 2.0) / 6.0)
            + left.scaled((x + 1.0) * (x - 1.0) * (x - 2.0) / 2.0)
            + right.scaled(-(x + 1.0) * x * (x - 2.0) / 2.0)
            + after.scaled((x + 1.0) * x * (x - 1.0) / 6.0)
    }
}

impl Default for Diffraction {
    fn default() -> Self {
        Self::new()
    }
}

fn by_u(u: f64) -> Complex {
    Complex::new(1.0, 0.0) - Complex::polar(1.0, -u) * Complex::new(libm::j0(u), libm::j1(u))
}

/// What is left of an echo whose wave front comes back tilted by `angle` radians: 2 J1(x) / x with
/// x = k a sin(angle), the mean of its phase over a round element of radius `radius` metres. A back
/// wall tilted by b sends the first echo back under 2 b, the n-th multiple under 2 n b.
///
/// Plane wave and small angles; the beam's own spreading is not in it.
#[must_use]
pub fn tilt(angle: f64, radius: f64, velocity: f64, frequency: f64) -> f64 {
    let x = TAU * frequency / velocity * radius * libm::sin(angle);
    if x.abs() < 1e-6 {
        return 1.0;
    }
    2.0 * libm::j1(x) / x
}

/// Full -6 dB width in metres of the pulse-echo beam after `way`, the sum of length times wavelength
/// over the media one way in m2: 1.02734 way / D in the far field (from the directivity 2 J1(x) / x),
/// and never narrower than the element, whose whole width counts in the near field.
#[must_use]
pub fn width(way: f64, diameter: f64) -> f64 {
    (1.027_34 * way / diameter).max(diameter)
}

#[cfg(test)]
mod tests {
    use super::*;

    /// The table against the formula, from the near field to the far field and across the table's end.
    #[test]
    fn table_and_formula_agree() {
        let table = Diffraction::new();
        for step in 0..4000 {
            let s = libm::pow(10.0, -1.5 + f64::from(step) * 1e-3 * 2.0);
            let apart = (table.at(s) - diffraction(s)).magnitude();
            assert!(apart < 1e-10, "{s}: {apart}");
        }
        assert_eq!(table.at(0.0), Complex::new(1.0, 0.0));
    }
}
