//! Which echoes come back from a layered part, when, how strong, and how they are changed.
//!
//! Probe face, optional coating, wall, back medium: every reverberation returns after a whole number
//! of round trips through the coating and through the wall. All orders in which the same round trips
//! can be made arrive together; they are counted, not listed, so that one [`Path`] stands for all of
//! them and the sum over paths is exact for plane waves.

use crate::fourier::Complex;
use serde::Serialize;
use std::f64::consts::{FRAC_PI_2, LN_10, PI, TAU};

/// Attenuation after a power law, with the dispersion that causality ties to it.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Attenuation {
    /// Amplitude attenuation at the reference frequency in Np/m.
    at_reference: f64,
    /// Exponent y of alpha ~ f^y, above 0 and below 3.
    exponent: f64,
    /// Reference frequency in hertz, at which the velocity is the layer's.
    reference: f64,
}

impl Attenuation {
    /// `decibels` per metre at `reference` hertz, growing with the `exponent`-th power of frequency.
    #[must_use]
    pub fn new(decibels: f64, exponent: f64, reference: f64) -> Self {
        Self {
            at_reference: decibels * (LN_10 / 20.0),
            exponent,
            reference,
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
            scale * libm::tan(FRAC_PI_2 * self.exponent) * (libm::pow(ratio, self.exponent - 1.0) - 1.0)
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

/// A layer that sound crosses.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Layer {
    /// Thickness in metres.
    pub thickness: f64,
    /// Velocity at the centre frequency in m/s.
    pub velocity: f64,
    /// Impedance in rayl.
    pub impedance: f64,
    /// What it takes from the sound.
    pub attenuation: Attenuation,
}

impl Layer {
    /// Time there and back in seconds, at the centre frequency.
    #[must_use]
    pub fn round_trip(&self) -> f64 {
        2.0 * self.thickness / self.velocity
    }
}

/// What lies in front of the probe.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Stack {
    /// When sound that turned back at the probe's own face would arrive, in seconds.
    pub zero: f64,
    /// A delay line or water path, if there is one.
    pub delay_line: Option<Layer>,
    /// Impedance of what touches the part: delay line, or wear plate with its couplant.
    pub face_impedance: f64,
    /// A coating on the part.
    pub coating: Option<Layer>,
    /// The wall.
    pub wall: Layer,
    /// Impedance of what lies behind the wall.
    pub back_impedance: f64,
}

/// What an echo is.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Role {
    /// From the end of the delay line.
    Interface,
    /// From the border between coating and wall, or a reverberation in the coating.
    Coating,
    /// From the back wall, without further reverberation in the coating.
    BackWall,
}

/// All sound that made the same round trips.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Path {
    /// Round trips through the coating.
    pub coating_trips: u32,
    /// Round trips through the wall.
    pub wall_trips: u32,
    /// Sum of the pressure factors, without attenuation; 1 is a total reflection at the probe's face.
    pub amplitude: f64,
    /// When it arrives, in seconds after the trigger, at the velocities of the centre frequency.
    pub arrival: f64,
    /// What it is.
    pub role: Role,
    /// Which multiple of the back-wall echo, from 1; `None` for other roles.
    pub multiple: Option<u32>,
}

/// Limits of an enumeration.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Limits {
    /// No path that arrives later, in seconds.
    pub until: f64,
    /// No path below this share of the strongest.
    pub smallest: f64,
    /// No path with more round trips through the wall.
    pub wall_trips: u32,
}

/// Most paths that are followed.
pub const MOST_PATHS: usize = 5_000;

/// Pressure reflection factor of a border, seen from `near`.
#[must_use]
pub fn reflection_factor(near: f64, far: f64) -> f64 {
    (far - near) / (far + near)
}

impl Stack {
    /// When the part's surface (of the coating, if there is one) echoes: zero and delay line.
    #[must_use]
    pub fn face_time(&self) -> f64 {
        self.zero + self.delay_line.map_or(0.0, |line| line.round_trip())
    }

    /// All paths within the limits, in the order of their arrival; `None` if there are more than
    /// [`MOST_PATHS`].
    ///
    /// A contact probe's own face gives no echo: it drowns in the transmission pulse.
    #[must_use]
    pub fn paths(&self, limits: &Limits) -> Option<Vec<Path>> {
        let start = self.face_time();
        let face = if self.delay_line.is_some() { 1.0 } else { 0.0 };
        let back = reflection_factor(self.wall.impedance, self.back_impedance);
        let mut found = Vec::new();
        let Some(coating) = self.coating else {
            let front = reflection_factor(self.face_impedance, self.wall.impedance);
            found.push(self.path(0, 0, face * front));
            for trips in 1..=self.most_wall_trips(start, limits) {
                found.push(self.path(0, trips, wall_factor(front, back, 1, trips)));
                if found.len() > MOST_PATHS {
                    return None;
                }
            }
            return finish(found, limits);
        };
        let outer = reflection_factor(self.face_impedance, coating.impedance);
        let inner = reflection_factor(coating.impedance, self.wall.impedance);
        found.push(self.path(0, 0, face * outer));
        // (1 - r_t^2) (-r_t)^(m-1): in once, m - 1 times turned back at the face from below, out once.
        let mut through = 1.0 - outer * outer;
        for coats in 1u32.. {
            let arrival = start + f64::from(coats) * coating.round_trip();
            if arrival > limits.until || through.abs() < 0.1 * limits.smallest {
                break;
            }
            for trips in 0..=self.most_wall_trips(arrival, limits) {
                let amplitude = through * wall_factor(inner, back, coats, trips);
                found.push(self.path(coats, trips, amplitude));
                if found.len() > MOST_PATHS {
                    return None;
                }
            }
            through *= -outer;
        }
        finish(found, limits)
    }

    fn most_wall_trips(&self, from: f64, limits: &Limits) -> u32 {
        let fitting = (limits.until - from) / self.wall.round_trip();
        let most = f64::from(limits.wall_trips).min(MOST_PATHS as f64 + 1.0);
        if fitting > 0.0 { fitting.min(most) as u32 } else { 0 }
    }

    fn path(&self, coating_trips: u32, wall_trips: u32, amplitude: f64) -> Path {
        let coating = self.coating.map_or(0.0, |layer| layer.round_trip());
        let through_coating_once = coating_trips == u32::from(self.coating.is_some());
        let role = match (wall_trips, coating_trips) {
            (0, 0) => Role::Interface,
            (1.., _) if through_coating_once => Role::BackWall,
            _ => Role::Coating,
        };
        Path {
            coating_trips,
            wall_trips,
            amplitude,
            arrival: self.face_time()
                + f64::from(coating_trips) * coating
                + f64::from(wall_trips) * self.wall.round_trip(),
            role,
            multiple: (role == Role::BackWall).then_some(wall_trips),
        }
    }

    /// Sum over layers of length times velocity on a path, in m2/s: over frequency and the square of
    /// the element's radius it is the S of [`diffraction`].
    #[must_use]
    pub fn spreading(&self, path: &Path) -> f64 {
        let layer = |layer: &Layer, trips: f64| 2.0 * layer.thickness * layer.velocity * trips;
        self.delay_line.map_or(0.0, |line| layer(&line, 1.0))
            + self
                .coating
                .map_or(0.0, |coating| layer(&coating, f64::from(path.coating_trips)))
            + layer(&self.wall, f64::from(path.wall_trips))
    }
}

/// Coefficient of n wall trips in G^m, where G = r + sum over n of (1 - r^2) s (-r s)^(n-1): seen from
/// above, the border reflects r, or lets sound in for one or more round trips between back wall (s)
/// and border (-r). j of the m meetings go into the wall, in C(m, j) orders, and share the n trips in
/// C(n - 1, j - 1) ways.
fn wall_factor(front: f64, back: f64, meetings: u32, trips: u32) -> f64 {
    if trips == 0 {
        return power(front, meetings);
    }
    let mut sum = 0.0;
    for inside in 1..=meetings.min(trips) {
        sum += binomial(meetings, inside)
            * binomial(trips - 1, inside - 1)
            * power(front, meetings - inside)
            * power(1.0 - front * front, inside)
            * power(-front, trips - inside);
    }
    sum * power(back, trips)
}

fn binomial(of: u32, choose: u32) -> f64 {
    (0..choose).fold(1.0, |product, i| product * f64::from(of - i) / f64::from(i + 1))
}

/// Whole powers by repeated squaring: the same bits on every machine.
fn power(base: f64, exponent: u32) -> f64 {
    let (mut result, mut square, mut left) = (1.0, base, exponent);
    while left > 0 {
        if left & 1 == 1 {
            result *= square;
        }
        square *= square;
        left >>= 1;
    }
    result
}

fn finish(mut paths: Vec<Path>, limits: &Limits) -> Option<Vec<Path>> {
    // Counts of orders overflow in a stack that rings for thousands of round trips.
    if !paths.iter().all(|path| path.amplitude.is_finite()) {
        return None;
    }
    let strongest = paths.iter().map(|path| path.amplitude.abs()).fold(0.0, f64::max);
    paths.retain(|path| path.arrival <= limits.until && path.amplitude.abs() > limits.smallest * strongest);
    paths.sort_by(|a, b| a.arrival.total_cmp(&b.arrival));
    Some(paths)
}

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

#[cfg(test)]
mod tests {
    use super::*;
    use crate::layered::{ExactLayer, reflection};

    const EVERYTHING: Limits = Limits {
        until: 1.0,
        smallest: 0.0,
        wall_trips: 60,
    };

    fn plain(thickness: f64, velocity: f64, impedance: f64) -> Layer {
        Layer {
            thickness,
            velocity,
            impedance,
            attenuation: Attenuation::new(0.0, 1.0, 5e6),
        }
    }

    fn coated() -> Stack {
        Stack {
            zero: 0.0,
            delay_line: Some(plain(0.0, 2350.0, 2.48e6)),
            face_impedance: 2.48e6,
            coating: Some(plain(0.8e-3, 2600.0, 2.99e6)),
            wall: plain(6e-3, 5920.0, 46.47e6),
            back_impedance: 1e-3,
        }
    }

    /// Times and amplitudes of delay line | 0.8 mm coat | 6 mm steel | air: closed forms evaluated and
    /// compared with the inverse transform of the exact layer model, with NumPy 2.4.
    #[test]
    fn amplitudes_match_the_closed_forms() {
        let limits = Limits {
            until: 5e-6,
            ..EVERYTHING
        };
        let paths = coated().paths(&limits).unwrap();
        for (coats, trips, time, amplitude, role) in [
            (0, 0, 0.0, 0.093_235_831_809_9, Role::Interface),
            (1, 0, 6.153_846_153_85e-7, 0.871_452_321_551, Role::Coating),
            (1, 1, 2.642_411_642_41e-6, -0.225_218_382_921, Role::BackWall),
            (1, 2, 4.669_438_669_44e-6, -0.197_988_178_112, Role::BackWall),
            (2, 0, 1.230_769_230_77e-6, -0.071_426_916_881_2, Role::Coating),
            (2, 1, 3.257_796_257_8e-6, 0.036_919_184_949_6, Role::Coating),
        ] {
            let path = paths
                .iter()
                .find(|p| (p.coating_trips, p.wall_trips) == (coats, trips))
                .unwrap();
            assert!((path.arrival - time).abs() < 1e-17, "{path:?}");
            assert!((path.amplitude - amplitude).abs() < 1e-9, "{path:?}");
            assert_eq!(path.role, role);
            assert_eq!(path.multiple, (role == Role::BackWall).then_some(trips));
        }
        assert!(paths.is_sorted_by(|a, b| a.arrival <= b.arrival));
    }

    /// Steel plate in water: interface +0.93755865, then -0.11342939, -0.09970627, -0.08764343, each
    /// 0.87901622 of the one before (Airy's formula for the plate, evaluated with NumPy 2.4).
    #[test]
    fn bare_plate_in_water_matches_the_closed_form() {
        let stack = Stack {
            coating: None,
            face_impedance: 1.4805e6,
            wall: plain(6e-3, 5920.0, 45.94e6),
            back_impedance: 1.4805e6,
            ..coated()
        };
        let paths = stack.paths(&EVERYTHING).unwrap();
        for (path, expected) in paths
            .iter()
            .zip([0.937_558_65, -0.113_429_39, -0.099_706_27, -0.087_643_43])
        {
            assert!((path.amplitude - expected).abs() < 1e-8, "{path:?}");
        }
    }

    /// Summed over all round trips, the paths are the exact reflection of the layered part; what is left
    /// of 0.88 after 90 returns bounds the difference.
    #[test]
    fn sum_over_paths_is_the_exact_reflection() {
        for (face, coat, back) in [(2.48e6, 2.99e6, 413.0), (6e6, 3.3e6, 1.48e6), (3.2e6, 9.0e6, 1.5e6)] {
            let mut stack = coated();
            stack.face_impedance = face;
            stack.back_impedance = back;
            stack.coating = Some(plain(0.3e-3, 2300.0, coat));
            let layers =
                [(0.3e-3, 2300.0, coat), (6e-3, 5920.0, 46.47e6)].map(|(thickness, velocity, impedance)| ExactLayer {
                    thickness,
                    velocity,
                    impedance,
                });
            let limits = Limits {
                until: 2e-3,
                smallest: 1e-15,
                wall_trips: 90,
            };
            let paths = stack.paths(&limits).unwrap();
            let sum_at = |frequency: f64| {
                let mut sum = Complex::ZERO;
                for path in &paths {
                    sum += Complex::polar(path.amplitude, -TAU * frequency * path.arrival);
                }
                sum
            };
            for frequency in [0.73e6, 2.1e6, 4.96e6, 5.17e6, 9.3e6] {
                let exact = reflection(face, &layers, back, frequency);
                let summed = sum_at(frequency);
                assert!(
                    (exact - summed).magnitude() < 1e-5,
                    "{face} {coat} {frequency}: {exact:?} {summed:?}"
                );
            }
        }
    }

    /// Closed forms of the Kramers-Kronig relations for a power law, checked against a numerically
    /// evaluated subtracted dispersion integral with SciPy 1.17: slowness at 2 w0 for a = 1.
    #[test]
    fn dispersion_is_causal() {
        for (exponent, expected) in [
            (0.5, -0.292_893_218_8),
            (1.0, -0.441_271_200_3),
            (1.5, -0.414_213_562_4),
            (2.0, 0.0),
            (2.5, 1.828_427_124_7),
        ] {
            // w0 = 1 rad/s and alpha = 1 Np/m there.
            let law = Attenuation::new(20.0 / LN_10, exponent, 1.0 / TAU);
            let change = law.slowness_change(2.0 / TAU);
            assert!((change - expected).abs() < 1e-9, "{exponent}: {change}");
        }
        // An acrylic-like plastic, 450 dB/m at 5 MHz, y = 1: 2717.465 m/s at 1 MHz, 2735.434 at 10 MHz.
        let plastic = Attenuation::new(450.0, 1.0, 5e6);
        for (frequency, velocity) in [(1e6, 2717.465), (2.5e6, 2724.587), (10e6, 2735.434)] {
            let computed = 1.0 / (1.0 / 2730.0 + plastic.slowness_change(frequency));
            assert!((computed - velocity).abs() < 1e-3, "{frequency}: {computed}");
        }
    }

    /// Rogers and Van Buren 1974 (formula from memory), evaluated with mpmath and SciPy 1.17.
    #[test]
    fn diffraction_has_the_published_values() {
        for (s, re, im) in [
            (0.1, 0.928_966_592_5, 0.070_753_593_9),
            (0.5, 0.842_492_607_517_9, 0.154_530_815_584_2),
            (1.0, 0.779_723_091_5, 0.212_382_530_1),
            (10.0, 0.093_186_779_4, 0.289_366_457_0),
            (100.0, 0.000_986_392_4, 0.031_390_098_7),
        ] {
            let value = diffraction(s);
            assert!((value - Complex::new(re, im)).magnitude() < 1e-9, "{s}: {value:?}");
        }
        let (near, far) = (diffraction(0.999_999e6), diffraction(1.000_001e6));
        assert!((near - far).magnitude() < 1e-9);
    }

    #[test]
    fn too_many_paths_are_refused() {
        let mut stack = coated();
        stack.wall.thickness = 1e-7;
        assert!(
            stack
                .paths(&Limits {
                    wall_trips: u32::MAX,
                    ..EVERYTHING
                })
                .is_none()
        );
    }
}
