//! Correlation of a window with the reference pulse, and of the pulse with itself, as tables that can be
//! read at any place: all that a fit of several pulses needs to know of the record.
//!
//! Both are sampled no finer than their band asks for (8 to 16 points a cycle however fast the converter
//! was), so that the work and the memory do not grow with the sample rate.

use crate::echo::Surroundings;
use crate::echo::correlation::correlate_every;
use crate::echo::interpolate::{self, REACH};
use crate::echo::pulse::{ReferencePulse, autocorrelation};
use crate::math;

/// Distance, in points, of the values that slopes are taken from.
const BESIDE: f32 = 0.25;

/// The tables of one window. A *place* counts points from the first; the pulse's energy is scaled to 1,
/// so that a correlation has the noise of one sample and its square is what a fit explains.
#[derive(Clone, Copy, Debug)]
pub struct Lags<'s> {
    /// The window's correlation, [`REACH`] points wider than the range of delays on either side.
    pub correlation: &'s [f32],
    /// The pulse's autocorrelation from -[`REACH`] points on: 1 at no delay.
    pub likeness: &'s [f32],
    /// Place of the first sample of the pulse in the record, for the first point.
    pub start: i32,
    /// Samples a point.
    pub step: usize,
    /// Points a cycle.
    pub points_per_cycle: f32,
    /// Energy of the derivative of the pulse of unit energy, per point².
    pub derivative_energy: f32,
}

/// Value, slope and curvature of a table at a place.
#[derive(Clone, Copy, Debug)]
pub struct Local {
    /// The value.
    pub value: f32,
    /// Its slope, per point.
    pub slope: f32,
    /// Its curvature, per point².
    pub curvature: f32,
}

/// How many samples stand for one point of a table.
#[must_use]
pub fn step(samples_per_cycle: f32) -> usize {
    usize::try_from(math::saturating_i32(samples_per_cycle * 0.125))
        .unwrap_or(1)
        .max(1)
}

impl<'s> Lags<'s> {
    /// Fills the tables for pulses whose origins lie at `from` to `to` (samples of the record), at spacings of up to
    /// `longest` points, as far as the memory reaches.
    #[must_use]
    pub fn fill(
        surroundings: &Surroundings<'_>,
        from: f32,
        to: f32,
        longest: usize,
        correlation: &'s mut [f32],
        likeness: &'s mut [f32],
    ) -> Option<Self> {
        let Surroundings { pulse, record, .. } = surroundings;
        let step = step(surroundings.samples_per_cycle);
        let points = |samples: f32| samples / step as f32;
        let width = usize::try_from(math::saturating_i32(points(to - from))).ok()? + 1;
        let margin = i32::try_from(REACH * step).ok()?;
        let start = math::saturating_i32(math::floor(from - pulse.facts.origin)).checked_sub(margin)?;
        let room = correlation.len();
        let correlation = correlation.get_mut(..(width + 2 * REACH + 1).min(room))?;
        correlate_every(record.codes(), start, step, pulse, correlation);
        let energy = pulse.facts.energy;
        let scale = 1.0 / math::sqrt(energy);
        for value in correlation.iter_mut() {
            *value *= scale;
        }
        let likeness = fill_likeness(pulse, step, longest, likeness)?;
        Some(Self {
            correlation,
            likeness,
            start,
            step,
            points_per_cycle: points(surroundings.samples_per_cycle),
            derivative_energy: pulse.facts.derivative_energy / energy * (step * step) as f32,
        })
    }

    /// The last place that the interpolation can be trusted at; the first is [`REACH`].
    #[must_use]
    pub fn last(&self) -> f32 {
        self.correlation.len().saturating_sub(REACH + 1) as f32
    }

    /// Longest spacing that the autocorrelation covers, in points.
    #[must_use]
    pub fn longest(&self) -> f32 {
        self.likeness.len().saturating_sub(2 * REACH + 1) as f32
    }

    /// The window's correlation at a place.
    #[must_use]
    pub fn at(&self, place: f32) -> f32 {
        interpolate::at(self.correlation, place)
    }

    /// The window's correlation at a place, with its slope and curvature.
    #[must_use]
    pub fn around(&self, place: f32) -> Local {
        local(self.correlation, place)
    }

    /// The autocorrelation at a spacing.
    #[must_use]
    pub fn alike(&self, spacing: f32) -> f32 {
        interpolate::at(self.likeness, REACH as f32 + spacing.abs())
    }

    /// The autocorrelation at a spacing, with its slope and curvature.
    #[must_use]
    pub fn alike_around(&self, spacing: f32) -> Local {
        local(self.likeness, REACH as f32 + spacing)
    }
}

/// The autocorrelation of the pulse from -[`REACH`] points to `longest` and the reach of the interpolation beyond.
fn fill_likeness<'s>(
    pulse: &ReferencePulse<'_>,
    step: usize,
    longest: usize,
    likeness: &'s mut [f32],
) -> Option<&'s [f32]> {
    let likeness = likeness.get_mut(..longest + 2 * REACH + 1)?;
    let scale = 1.0 / pulse.facts.energy;
    for (number, value) in likeness.iter_mut().enumerate() {
        *value = scale * autocorrelation(pulse.samples, number.abs_diff(REACH) * step);
    }
    Some(likeness)
}

fn local(table: &[f32], place: f32) -> Local {
    let value = interpolate::at(table, place);
    let (before, after) = (
        interpolate::at(table, place - BESIDE),
        interpolate::at(table, place + BESIDE),
    );
    Local {
        value,
        slope: (after - before) / (2.0 * BESIDE),
        curvature: (after - 2.0 * value + before) / (BESIDE * BESIDE),
    }
}
