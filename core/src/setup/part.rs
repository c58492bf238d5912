//! The part's outside: a coating on it, and its shape under the probe.

use crate::units::{Metres, MetresPerSecond};

/// A coating between probe and part, whose thickness shall be read too.
///
/// The wall is read between back walls then, and owes nothing to the coating's velocity. The coating is what is left of
/// the first back wall's arrival, first back wall - start - period: a time, from which its velocity makes a thickness. So
/// a coating need not show an echo of its own, and may lie in the dead zone.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Coating {
    /// Velocity of longitudinal waves in the coating. `None`: not known; the coating is given as a time then.
    pub velocity: Option<MetresPerSecond>,
    /// Standard uncertainty (k = 1) of a known velocity. The same paint differs by its pigments, its age and how far it has
    /// cured, by some 5 % (common practice).
    pub velocity_standard_uncertainty: MetresPerSecond,
}

impl Coating {
    /// A coating of unknown velocity.
    pub const UNKNOWN: Self = Self {
        velocity: None,
        velocity_standard_uncertainty: MetresPerSecond::ZERO,
    };

    /// A coating of known velocity, with the velocity's standard uncertainty (k = 1).
    #[must_use]
    pub const fn new(velocity: MetresPerSecond, standard_uncertainty: MetresPerSecond) -> Self {
        Self {
            velocity: Some(velocity),
            velocity_standard_uncertainty: standard_uncertainty,
        }
    }

    /// Can there be such a coating? A velocity from 1 to 1e6 m/s, an uncertainty from 0 to as much.
    #[must_use]
    pub(super) const fn is_possible(&self) -> bool {
        let uncertainty = self.velocity_standard_uncertainty.get();
        let known = match self.velocity {
            Some(velocity) => velocity.get() >= 1.0 && velocity.get() <= 1e6,
            None => true,
        };
        known && uncertainty >= 0.0 && uncertainty <= 1e6
    }
}

/// The shape of the part under the probe.
#[derive(Clone, Copy, Debug, PartialEq, Default)]
pub enum Surface {
    /// Flat, or the probe is made to fit it.
    #[default]
    Flat,
    /// A flat probe on the outside of a pipe of this outer radius.
    Convex(Metres),
    /// A flat probe inside a pipe of this inner radius.
    Concave(Metres),
}

impl Surface {
    /// Can there be such a surface? A radius from 0.1 mm to 10 km.
    #[must_use]
    pub(super) const fn is_possible(&self) -> bool {
        match self {
            Self::Flat => true,
            Self::Convex(radius) | Self::Concave(radius) => radius.get() >= 1e-4 && radius.get() <= 1e4,
        }
    }
}
