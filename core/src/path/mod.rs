//! The way that sound takes: from the time an echo needs to the straight way that a thickness stands for.
//!
//! Were all ways straight down, the n-th back wall would come after n equal times. A probe with two elements sends
//! sound along a V, whose legs lie the steeper the deeper the wall: its echoes are not evenly spaced, and its thin walls
//! come late. The spreading of a beam brings echoes forward, the later ones more. A [`PathLaw`] says by how much, so that
//! choosing and fitting a train, thickness and calibration all follow the same law.
//!
//! Times here are plain numbers in any one unit, seconds or samples: a law is built in seconds and
//! [scaled](PathLaw::scaled) for a record.

pub mod diffraction;
pub mod v_path;

pub use diffraction::{Beam, Spreading};
pub use v_path::VPath;

/// How actual times follow from straight ones. A straight time is that of sound which goes straight down and up again:
/// n · 2 d / c for the n-th back wall. Both count from the start of the wall.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum PathLaw<'a> {
    /// Straight down and up.
    Straight,
    /// Two elements beside each other.
    V(VPath),
    /// Straight, with a beam that spreads.
    Beam(Beam<'a>),
}

impl PathLaw<'_> {
    /// The same law with times in another unit: `factor` of the new unit make one of the old.
    #[must_use]
    pub fn scaled(&self, factor: f32) -> Self {
        match self {
            Self::Straight => Self::Straight,
            Self::V(path) => Self::V(path.scaled(factor)),
            Self::Beam(beam) => Self::Beam(beam.scaled(factor)),
        }
    }

    /// How much later than straight an echo comes: 0 or more for a V; 0 or less for a beam that spreads, more only where the
    /// start holds a longer path.
    #[must_use]
    pub fn deviation(&self, straight: f32) -> f32 {
        match self {
            Self::Straight => 0.0,
            Self::V(path) => path.at(straight).deviation,
            Self::Beam(beam) => beam.deviation(straight),
        }
    }

    /// How far an echo's correlation peaks behind its carrier for the way it came, see [`Spreading::group_lag`]; 0 where that
    /// is not known.
    #[must_use]
    pub fn group_lag(&self, straight: f32) -> f32 {
        match self {
            Self::Straight | Self::V(_) => 0.0,
            Self::Beam(beam) => beam.group_lag(straight),
        }
    }

    /// How much the actual time grows where the straight one grows by one. Never 0. A beam's spreading changes it by a few
    /// per cent at most, and counts as nothing here.
    #[must_use]
    pub fn slope(&self, straight: f32) -> f32 {
        match self {
            Self::Straight | Self::Beam(_) => 1.0,
            Self::V(path) => path.at(straight).cosine,
        }
    }

    /// The straight time of an echo that came after `elapsed`. An echo that comes before any wall could send one gets
    /// a negative time.
    #[must_use]
    pub fn straighten(&self, elapsed: f32) -> f32 {
        match self {
            Self::Straight => elapsed,
            Self::V(path) => path.straighten(elapsed),
            Self::Beam(beam) => beam.straighten(elapsed),
        }
    }

    /// The straight period at which the first two echoes are `spacing` apart: where they go along a V, they lie closer
    /// than the period. A fixed point, good to a per cent, which is all that a limit needs.
    #[must_use]
    pub fn period_of_spacing(&self, spacing: f32) -> f32 {
        let mut period = spacing;
        if !matches!(self, Self::V(_)) {
            return period;
        }
        for _ in 0..12 {
            period = spacing + self.deviation(period) - self.deviation(2.0 * period);
        }
        period
    }
}
