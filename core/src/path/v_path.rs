//! The V of a probe with two elements: down to the back wall and up again, bent at the part's surface where the
//! elements sit on delay blocks.
//!
//! Without blocks it is Pythagoras: t = sqrt(z² + q²), z = 2 d / c straight down and q = (distance of the elements) / c.
//! With blocks sound takes the way of the least time (Fermat), which obeys Snell's law at the surface: with both legs
//! alike, half the distance is p = h tan θ1 + d tan θ2, sin θ2 = (c2 / c1) sin θ1, and
//! t = 2 [h / (c1 cos θ1) + d / (c2 cos θ2)]. The tilt of the elements (roof angle) decides how strong an echo is, and
//! at which depth, but not when it comes.
//!
//! Centre to centre: the width of the elements is left out, which matters where the wall is thin against their
//! distance.

use crate::math;
use crate::setup::{DelayLine, ElementSeparation};
use crate::units::MetresPerSecond;

/// Steps of Newton's method towards the ray; each doubles the digits, and four are enough for a wall as thick as the
/// elements are apart.
const STEPS: usize = 12;
/// Steepest tangent of a ray: a wall of a thousandth of the elements' distance.
const GRAZING: f32 = 1e3;

/// A V-shaped way, in any unit of time.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct VPath {
    /// Distance of the elements over the velocity in the blocks, or in the part if there are no blocks.
    across: f32,
    /// Straight round trip through the blocks; 0 without.
    block: f32,
    /// Velocity in the part over that in the blocks; 1 without blocks.
    ratio: f32,
}

/// One ray of a [`VPath`].
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Ray {
    /// How much later than straight down and up it arrives.
    pub deviation: f32,
    /// Sine of its angle in the part, from the upright.
    pub sine: f32,
    /// Cosine of that angle: how much its time grows with the straight one. Above 0.
    pub cosine: f32,
}

impl VPath {
    /// The V of a probe on a part of this velocity, in seconds. Lengths and velocities must be positive, as
    /// [`GaugeSetup::check`](crate::setup::GaugeSetup::check) sees to; a distance of 0 is a straight way.
    #[must_use]
    pub fn new(separation: ElementSeparation, blocks: Option<DelayLine>, part: MetresPerSecond) -> Self {
        match blocks {
            Some(blocks) => Self {
                across: (separation.distance / blocks.velocity).get(),
                block: (blocks.length * 2.0 / blocks.velocity).get(),
                ratio: part / blocks.velocity,
            },
            None => Self {
                across: (separation.distance / part).get(),
                block: 0.0,
                ratio: 1.0,
            },
        }
    }

    pub(super) fn scaled(&self, factor: f32) -> Self {
        Self {
            across: self.across * factor,
            block: self.block * factor,
            ratio: self.ratio,
        }
    }

    /// The ray to a wall whose straight round trip is `straight`; a negative one counts as 0.
    #[must_use]
    pub fn at(&self, straight: f32) -> Ray {
        let straight = math::larger(straight, 0.0);
        // Widths are lengths over the blocks' velocity, twice. The unknown is the tangent in the faster medium: the
        // way sideways then grows with it and bends downwards, and Newton's method from 0 never overshoots.
        let wide = straight * self.ratio;
        let part_is_faster = self.ratio >= 1.0;
        let (fast, slow, ratio) = if part_is_faster {
            (wide, self.block, self.ratio)
        } else {
            (self.block, wide, 1.0 / self.ratio)
        };
        let (square, rest) = (ratio * ratio, ratio * ratio - 1.0);
        let mut tangent = 0.0;
        for _ in 0..STEPS {
            let root = math::sqrt(square + rest * tangent * tangent);
            let missing = self.across - fast * tangent - slow * tangent / root;
            let growth = fast + slow * square / (root * root * root);
            let next = tangent + missing / growth;
            // Also where nothing is left to go through: neither wall nor blocks.
            if !(next < GRAZING) {
                tangent = GRAZING;
                break;
            }
            let step = next - tangent;
            tangent = next;
            if step.abs() <= 1e-6 * tangent {
                break;
            }
        }
        let secant = math::sqrt(1.0 + tangent * tangent);
        let (fast_sine, fast_cosine) = (tangent / secant, 1.0 / secant);
        let slow_sine = fast_sine / ratio;
        let slow_cosine = math::sqrt(1.0 - slow_sine * slow_sine);
        let (sine, cosine, block_sine, block_cosine) = if part_is_faster {
            (fast_sine, fast_cosine, slow_sine, slow_cosine)
        } else {
            (slow_sine, slow_cosine, fast_sine, fast_cosine)
        };
        // t = p sin θ1 / c1 + Σ h cos θ / c for each leg: the least time, so that an error of the angle counts by its
        // square only. Less the straight way, 1 - cos = sin² / (1 + cos) keeps all digits.
        let upright = |sine: f32, cosine: f32| sine * sine / (1.0 + cosine);
        Ray {
            deviation: block_sine * self.across
                - self.block * upright(block_sine, block_cosine)
                - straight * upright(sine, cosine),
            sine,
            cosine,
        }
    }

    /// The straight time that belongs to an actual one; negative before the first echo that could come.
    pub(super) fn straighten(&self, elapsed: f32) -> f32 {
        if self.block == 0.0 && elapsed >= self.across {
            return math::sqrt((elapsed - self.across) * (elapsed + self.across));
        }
        let earliest = self.at(0.0).deviation;
        if !(elapsed > earliest) {
            return elapsed - earliest;
        }
        // The actual time bends upwards over the straight one and never lies below it: from the right Newton's method
        // comes down to the root without passing it.
        let mut straight = elapsed;
        for _ in 0..STEPS {
            let ray = self.at(straight);
            let step = (straight + ray.deviation - elapsed) / ray.cosine;
            straight = math::larger(straight - step, 0.0);
            if step.abs() <= 2e-7 * elapsed {
                break;
            }
        }
        straight
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::path::PathLaw;
    use crate::units::{Metres, Seconds};
    use proptest::prelude::*;

    const STEEL: MetresPerSecond = MetresPerSecond::new(5920.0);

    fn law(distance_mm: f32, blocks: Option<(f32, f32)>, part: f32) -> PathLaw<'static> {
        let separation = ElementSeparation::new(Metres::from_mm(distance_mm), Metres::ZERO);
        let blocks = blocks.map(|(mm, velocity)| DelayLine {
            length: Metres::from_mm(mm),
            velocity: MetresPerSecond::new(velocity),
        });
        PathLaw::V(VPath::new(separation, blocks, MetresPerSecond::new(part))).scaled(1e9)
    }

    fn trip(mm: f32) -> f32 {
        (Metres::from_mm(2.0 * mm) / STEEL).as_ns()
    }

    #[test]
    fn val_without_blocks() {
        // 2 sqrt(d² + s²) / c in double precision: s = 2 mm (elements 4 mm apart), 5920 m/s.
        let law = law(4.0, None, 5920.0);
        for (mm, us) in [
            (1.0, 0.755_428_4),
            (2.0, 0.955_549_7),
            (5.0, 1.819_312_4),
            (10.0, 3.445_283),
            (25.0, 8.472_93f32),
        ] {
            let actual = trip(mm) + law.deviation(trip(mm));
            assert!((actual - us * 1e3).abs() < 1e-3, "{mm}: {actual}");
            assert!((law.straighten(us * 1e3) - trip(mm)).abs() < 2e-3, "{mm}");
        }
        // Noise counts 2.236 times at 1 mm: sqrt(d² + s²) / d.
        assert!((1.0 / law.slope(trip(1.0)) - 5f32.sqrt()).abs() < 1e-5);
    }

    #[test]
    fn val_with_blocks() {
        // Fermat's way through 8 mm of 2350 m/s, elements 6.4 mm apart, steel 5920 m/s: the time by direct minimisation
        // in double precision (SciPy 1.17, minimize_scalar), less the straight way through the blocks.
        let law = law(6.4, Some((8.0, 2350.0)), 5920.0);
        let blocks = 16.0e6 / 2350.0;
        for (mm, us) in [(1.0, 7.538_640_3), (5.0, 8.703_990_8), (25.0, 15.315_669f64)] {
            let actual = trip(mm) + law.deviation(trip(mm));
            let expected = (us * 1e3 - blocks) as f32;
            assert!((actual - expected).abs() < 2e-3, "{mm}: {actual} {expected}");
            assert!((law.straighten(expected) - trip(mm)).abs() < 3e-3, "{mm}");
        }
        // Angles in the part at 1, 2, 3 and 5 mm, from the same.
        for (mm, degrees) in [
            (1.0, 43.226_077),
            (2.0, 34.295_698),
            (3.0, 28.733_698),
            (5.0, 21.850_318f32),
        ] {
            assert!((law.slope(trip(mm)) - degrees.to_radians().cos()).abs() < 1e-5, "{mm}");
        }
    }

    #[test]
    fn nothing_sideways_is_straight() {
        for law in [law(0.0, None, 5920.0), law(0.0, Some((8.0, 2350.0)), 5920.0)] {
            assert_eq!((law.deviation(500.0), law.slope(500.0)), (0.0, 1.0));
            assert!((law.straighten(500.0) - 500.0).abs() < 1e-3);
        }
    }

    #[test]
    fn a_wall_of_nothing() {
        // Along the surface: 4 mm at the part's velocity; through blocks 1 mm high along their sloping ends.
        assert!((law(4.0, None, 5920.0).deviation(0.0) - 4.0e6 / 5920.0).abs() < 0.01);
        let critical = (2350.0f32 / 5920.0).asin();
        let head = 6.4e6 / 5920.0 + 2.0e6 / 2350.0 * (critical.cos() - 1.0);
        let found = law(6.4, Some((1.0, 2350.0)), 5920.0).deviation(0.0);
        assert!((found - head).abs() < 0.01, "{found} {head}");
    }

    #[test]
    fn echoes_of_a_thin_wall_lie_closer_than_its_period() {
        let law = law(6.0, Some((9.4, 2350.0)), 5920.0);
        let period = law.period_of_spacing(332.0);
        let spacing = period + law.deviation(2.0 * period) - law.deviation(period);
        assert!(period > 380.0 && (spacing - 332.0).abs() < 0.1, "{period} {spacing}");
    }

    proptest! {
        #[test]
        fn straightening_undoes_the_way(
            distance in 0.1f32..20.0, height in 0.5f32..30.0, block in 1000.0f32..6000.0, part in 1000.0f32..7000.0,
            depth in 0.2f32..200.0, blocks: bool,
        ) {
            let law = law(distance, blocks.then_some((height, block)), part);
            let straight = Seconds::new(2e-3 * depth / part).as_ns();
            let actual = straight + law.deviation(straight);
            prop_assert!(law.deviation(straight) >= 0.0);
            // Below, an error of the time counts 20 times and more.
            prop_assume!(law.slope(straight) > 0.05);
            let back = law.straighten(actual);
            prop_assert!((back - straight).abs() < 2e-5 * actual, "{back} {straight}");
        }

        #[test]
        fn slope_is_the_derivative(distance in 1.0f32..10.0, height in 2.0f32..20.0, part in 1500.0f32..7000.0, depth in 1.0f32..50.0) {
            let law = law(distance, Some((height, 2350.0)), part);
            let (a, b) = (1.98e6 * depth / part, 2.02e6 * depth / part);
            let grown = (b + law.deviation(b) - a - law.deviation(a)) / (b - a);
            prop_assert!((grown - law.slope(0.5 * (a + b))).abs() < 2e-3, "{grown}");
        }

        #[test]
        fn any_input_ends(across in any::<f32>(), block in any::<f32>(), ratio in any::<f32>(), time in any::<f32>()) {
            let path = VPath { across, block, ratio };
            let _ = path.at(time);
            let _ = path.straighten(time);
        }
    }
}
