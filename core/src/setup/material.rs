//! The part's material: how fast sound is in it, how that changes with temperature, and how much
//! the part may differ from the blocks.

use crate::math;
use crate::math::RECTANGULAR;
use crate::units::{Celsius, MetresPerSecond};

/// How far a part whose temperature nobody states may be from the temperature that its velocity holds at:
/// half-width of a rectangular distribution, in kelvin. A convention; hot pipes are further off.
pub const UNKNOWN_TEMPERATURE: Celsius = Celsius::new(10.0);

/// The part's material.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Material {
    /// Velocity of longitudinal waves.
    pub velocity: MetresPerSecond,
    /// Its standard uncertainty (k = 1): of the blocks it was learned on, or of the table it stands in.
    pub velocity_standard_uncertainty: MetresPerSecond,
    /// How far the part's velocity may differ from that of the blocks, as a standard uncertainty (k = 1): heat,
    /// rolling direction, alloy. 0 if `velocity` was learned on the part itself, or if its uncertainty says it already.
    /// It adds to the velocity's own as the root of the sum of squares.
    ///
    /// A block that is not of the part's own material and heat tells nothing about it; steels of one grade differ by
    /// some 0.1 to 0.5 % (common practice), 3 to 15 m/s as a standard uncertainty.
    pub part_velocity_standard_uncertainty: MetresPerSecond,
    /// How the velocity follows temperature. `None`: the velocity's uncertainty covers whatever temperature does.
    pub temperature: Option<VelocityTemperature>,
}

/// How a velocity follows temperature, c(T) = c + β (T - T0), and what is known of the part's temperature.
///
/// Good for some tens of kelvin: over hundreds the velocity is no straight line, and β belongs to the material
/// at hand. The reading is the thickness at the part's temperature: what it has shrunk or grown is not
/// calculated back (steel: 12 µm a metre and kelvin, a tenth of what the velocity does).
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct VelocityTemperature {
    /// β in metres per second and kelvin; negative for nearly all solids.
    pub coefficient: f32,
    /// Its standard uncertainty (k = 1), in metres per second and kelvin.
    pub coefficient_standard_uncertainty: f32,
    /// T0, the temperature at which the material's velocity holds: that of the blocks.
    pub reference: Celsius,
    /// What is known of the part; `None` means unknown, see [`UNKNOWN_TEMPERATURE`].
    pub part: Option<PartTemperature>,
}

/// A part's temperature.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct PartTemperature {
    /// The mean over the wall under the probe.
    pub temperature: Celsius,
    /// Its standard uncertainty (k = 1), in kelvin.
    pub standard_uncertainty: Celsius,
}

impl VelocityTemperature {
    /// A coefficient with a fifth of itself as its standard uncertainty, and a part of unknown temperature.
    ///
    /// The fifth: for low-carbon steel -0.8 m/s/K was measured where the usual rule (1 % in 55 K) gives -1.07; half
    /// of their distance as a rectangle.
    #[must_use]
    pub const fn new(coefficient: f32, reference: Celsius) -> Self {
        Self {
            coefficient,
            coefficient_standard_uncertainty: 0.2 * coefficient.abs(),
            reference,
            part: None,
        }
    }

    /// The same with the part's temperature and the temperature's standard uncertainty in kelvin.
    #[must_use]
    pub const fn with_part(mut self, temperature: Celsius, standard_uncertainty: Celsius) -> Self {
        self.part = Some(PartTemperature {
            temperature,
            standard_uncertainty,
        });
        self
    }
}

impl Material {
    /// A material with its velocity and the velocity's standard uncertainty; the part is like the blocks, and
    /// temperature is left out.
    #[must_use]
    pub const fn new(velocity: MetresPerSecond, velocity_standard_uncertainty: MetresPerSecond) -> Self {
        Self {
            velocity,
            velocity_standard_uncertainty,
            part_velocity_standard_uncertainty: MetresPerSecond::ZERO,
            temperature: None,
        }
    }

    /// The same for a part whose velocity may differ from that of the blocks by this standard uncertainty.
    #[must_use]
    pub const fn with_part_uncertainty(mut self, standard_uncertainty: MetresPerSecond) -> Self {
        self.part_velocity_standard_uncertainty = standard_uncertainty;
        self
    }

    /// The same with what temperature does to the velocity.
    #[must_use]
    pub const fn with_temperature(mut self, temperature: VelocityTemperature) -> Self {
        self.temperature = Some(temperature);
        self
    }

    /// The velocity at the part's temperature: what a thickness is made with. The velocity as it stands if
    /// temperature is left out or the part's is unknown.
    #[must_use]
    pub const fn velocity_in_part(&self) -> MetresPerSecond {
        if let Some(follows) = self.temperature
            && let Some(part) = follows.part
        {
            let warmer = part.temperature.get() - follows.reference.get();
            return MetresPerSecond::new(self.velocity.get() + follows.coefficient * warmer);
        }
        self.velocity
    }

    /// What temperature adds to the velocity's standard uncertainty (k = 1).
    ///
    /// With a stated temperature T ± u(T): u² = β² u²(T) + (T - T0)² u²(β), as JCGM 100:2008, 5.1.2 propagates.
    /// Unknown: T - T0 is a rectangle of [`UNKNOWN_TEMPERATURE`], so that u² = (β² + u²(β)) (10 K)² / 3.
    #[must_use]
    pub fn temperature_uncertainty(&self) -> MetresPerSecond {
        let Some(follows) = self.temperature else {
            return MetresPerSecond::ZERO;
        };
        let (slope, slope_uncertainty) = (follows.coefficient, follows.coefficient_standard_uncertainty);
        let (by_temperature, by_slope) = match follows.part {
            Some(part) => {
                let warmer = part.temperature - follows.reference;
                (
                    slope * part.standard_uncertainty.get(),
                    slope_uncertainty * warmer.get(),
                )
            }
            None => {
                let spread = UNKNOWN_TEMPERATURE.get() * RECTANGULAR;
                (slope * spread, slope_uncertainty * spread)
            }
        };
        MetresPerSecond::new(math::sqrt(by_temperature * by_temperature + by_slope * by_slope))
    }

    /// This material as the blocks are: nothing is added for the part, and the velocity is taken as it stands. For
    /// calibrating and for checking the gauge on a block at the blocks' temperature.
    #[must_use]
    pub const fn of_blocks(mut self) -> Self {
        self.part_velocity_standard_uncertainty = MetresPerSecond::ZERO;
        self.temperature = None;
        self
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    const STEEL: Material = Material::new(MetresPerSecond::new(5920.0), MetresPerSecond::new(5.0));

    #[test]
    fn val_velocity_at_the_parts_temperature() {
        // By hand: 5920 - 0.6 · 55 = 5887 m/s; u = root of (0.6 · 2)² and (0.12 · 55)²: 6.708204 m/s.
        let follows = VelocityTemperature::new(-0.6, Celsius::new(20.0));
        let warm = STEEL.with_temperature(follows.with_part(Celsius::new(75.0), Celsius::new(2.0)));
        assert!((warm.velocity_in_part().get() - 5887.0).abs() < 1e-3);
        assert!((warm.temperature_uncertainty().get() - 6.708_204).abs() < 1e-5);
        // Unknown: 10 K / sqrt(3) times root of 0.6² and 0.12²: 3.532704 m/s.
        let unknown = STEEL.with_temperature(follows);
        assert_eq!(unknown.velocity_in_part(), STEEL.velocity);
        assert!((unknown.temperature_uncertainty().get() - 3.532_704).abs() < 1e-5);
        assert_eq!(STEEL.temperature_uncertainty(), MetresPerSecond::ZERO);
        assert_eq!(warm.with_part_uncertainty(MetresPerSecond::new(9.0)).of_blocks(), STEEL);
    }
}
