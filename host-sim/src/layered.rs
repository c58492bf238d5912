//! Exact reflection and transmission of a stack of layers, for plane waves at normal incidence.
//!
//! Transfer matrices of pressure and particle velocity: nothing is enumerated, every reverberation is
//! in it. It stands beside the enumerated echo paths as their check, and makes a couplant film exact.

use crate::fourier::Complex;

/// One layer without loss.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct ExactLayer {
    /// Thickness in metres.
    pub thickness: f64,
    /// Velocity in m/s.
    pub velocity: f64,
    /// Impedance in rayl.
    pub impedance: f64,
}

/// Pressure reflection factor at `frequency` hertz, seen from a half-space of impedance `front`
/// through the layers (nearest first) into a half-space of impedance `back`.
///
/// Carries the input impedance from the back to the front: Z_in = Z (Z_L + j Z tan kd) /
/// (Z + j Z_L tan kd), written with sine and cosine so that it holds at every phase.
#[must_use]
pub fn reflection(front: f64, layers: &[ExactLayer], back: f64, frequency: f64) -> Complex {
    let mut load = Complex::new(back, 0.0);
    for layer in layers.iter().rev() {
        let phase = std::f64::consts::TAU * frequency / layer.velocity * layer.thickness;
        let (sine, cosine) = libm::sincos(phase);
        let (turned, own) = (Complex::new(0.0, sine), layer.impedance);
        let above = load.scaled(cosine) + turned.scaled(own);
        let below = Complex::new(own * cosine, 0.0) + load * turned;
        load = quotient(above, below).scaled(own);
    }
    let front = Complex::new(front, 0.0);
    quotient(load - front, load + front)
}

/// Pressure factors of layers between two half-spaces, from both sides.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct TwoPort {
    /// Reflection seen from the front.
    pub reflection_front: Complex,
    /// From front to back.
    pub transmission_in: Complex,
    /// From back to front.
    pub transmission_out: Complex,
    /// Reflection seen from the back.
    pub reflection_back: Complex,
}

/// The factors at `frequency` hertz, the layers nearest to the front first.
///
/// With [p; v] = M [p; v] and M = [[cos, j Z sin], [j sin / Z, cos]] for each layer:
/// D = A Z2 + B + C Z1 Z2 + D' Z1, reflections (A Z2 + B - C Z1 Z2 - D' Z1) / D and
/// (D' Z1 + B - C Z1 Z2 - A Z2) / D, transmissions 2 Z2 / D and 2 Z1 / D.
#[must_use]
pub fn two_port(front: f64, layers: &[ExactLayer], back: f64, frequency: f64) -> TwoPort {
    let (mut a, mut b) = (Complex::new(1.0, 0.0), Complex::ZERO);
    let (mut c, mut d) = (Complex::ZERO, Complex::new(1.0, 0.0));
    for layer in layers {
        let phase = std::f64::consts::TAU * frequency / layer.velocity * layer.thickness;
        let (sine, cosine) = libm::sincos(phase);
        let (up, down) = (
            Complex::new(0.0, layer.impedance * sine),
            Complex::new(0.0, sine / layer.impedance),
        );
        (a, b) = (a.scaled(cosine) + b * down, a * up + b.scaled(cosine));
        (c, d) = (c.scaled(cosine) + d * down, c * up + d.scaled(cosine));
    }
    let (az, cz, dz) = (a.scaled(back), c.scaled(front * back), d.scaled(front));
    let sum = az + b + cz + dz;
    TwoPort {
        reflection_front: quotient(az + b - cz - dz, sum),
        transmission_in: quotient(Complex::new(2.0 * back, 0.0), sum),
        transmission_out: quotient(Complex::new(2.0 * front, 0.0), sum),
        reflection_back: quotient(dz + b - cz - az, sum),
    }
}

fn quotient(a: Complex, b: Complex) -> Complex {
    (a * b.conjugate()).scaled(1.0 / (b.re * b.re + b.im * b.im))
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Oil film between steel half-spaces at 5 MHz: |R| = 0.938934 at -160.214 degrees, from the
    /// transfer matrix evaluated with NumPy 2.4 and checked against the thin-film formula.
    #[test]
    fn film_between_steel_reflects_as_computed_elsewhere() {
        let film = ExactLayer {
            thickness: 10e-6,
            velocity: 1740.0,
            impedance: 1.51e6,
        };
        let factor = reflection(45.94e6, &[film], 45.94e6, 5e6);
        assert!((factor.magnitude() - 0.938_934).abs() < 1e-6);
        let degrees = libm::atan2(factor.im, factor.re).to_degrees();
        assert!((degrees + 160.214).abs() < 1e-3);
        // Thin-film formula: 1 - |R|^2 = 4 Z0^2 / (4 Z0^2 cos^2 + (Zf + Z0^2 / Zf)^2 sin^2).
        assert!((1.0 - factor.magnitude() * factor.magnitude() - 0.118_403_300_537).abs() < 1e-9);
    }

    /// The two ways of writing the same physics, energy and reciprocity, for three layers.
    #[test]
    fn two_port_agrees_with_the_impedance_and_conserves_energy() {
        let layers = [
            (10e-6, 1740.0, 1.51e6),
            (0.3e-3, 2600.0, 2.99e6),
            (1.1e-3, 5920.0, 46.47e6),
        ]
        .map(|(thickness, velocity, impedance)| ExactLayer {
            thickness,
            velocity,
            impedance,
        });
        let mirrored = [layers[2], layers[1], layers[0]];
        let (front, back) = (2.48e6, 1.48e6);
        for frequency in [0.4e6, 2.3e6, 5e6, 9.7e6] {
            let port = two_port(front, &layers, back, frequency);
            let direct = reflection(front, &layers, back, frequency);
            let reverse = reflection(back, &mirrored, front, frequency);
            assert!((port.reflection_front - direct).magnitude() < 1e-10);
            assert!((port.reflection_back - reverse).magnitude() < 1e-10);
            let (r, t) = (port.reflection_front.magnitude(), port.transmission_in.magnitude());
            assert!((r * r + t * t * front / back - 1.0).abs() < 1e-10);
            let ratio = port.transmission_in.scaled(front) - port.transmission_out.scaled(back);
            assert!(ratio.magnitude() < 1e-6);
        }
    }
}
