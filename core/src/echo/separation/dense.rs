//! Correlation and autocorrelation sampled so finely that a polynomial reads value, slope and curvature between their points.
//!
//! The tables of [`super::lags`] are read through a long kernel; a fit that reads them thousands of times is better served
//! by twice as many points and seven neighbours: at 16 points a cycle the polynomial of the sixth degree is 4e-6 off for a
//! sine of the centre frequency, at one and a half times that frequency 6e-5.

use super::lags::{Lags, Local};
use crate::echo::interpolate::{Between, REACH};
use crate::math;

/// Points a cycle, at least.
const POINTS: f32 = 16.0;
/// Points on either side of a place that the polynomial needs, and one to spare for rounding.
const MARGIN: usize = 4;

/// Both tables. A *place* counts points from the first of the correlation, a spacing counts points.
#[derive(Clone, Copy, Debug)]
pub(super) struct Dense<'a> {
    correlation: &'a [f32],
    likeness: &'a [f32],
    /// Points of these tables for one of the [`Lags`].
    pub(super) divide: usize,
    /// Points a cycle.
    pub(super) points_per_cycle: f32,
}

impl<'a> Dense<'a> {
    /// Fills the tables from coarser ones: the autocorrelation up to `longest` coarse points, the correlation as far as
    /// `memory` reaches after that. `None` without room.
    pub(super) fn fill(lags: &Lags<'_>, longest: usize, memory: &'a mut [f32]) -> Option<Self> {
        let divide = math::larger(math::floor(POINTS / lags.points_per_cycle + 0.999), 1.0);
        let divide = usize::try_from(math::saturating_i32(divide)).ok()?.max(1);
        let (likeness, correlation) = memory.split_at_mut_checked(longest * divide + 2 * MARGIN + 1)?;
        let whole = usize::try_from(math::saturating_i32(lags.last())).ok()?;
        let places = whole.checked_sub(REACH)? * divide + 1;
        let room = correlation.len();
        let correlation = correlation.get_mut(..places.min(room))?;
        for phase in 0..divide {
            let share = phase as f32 / divide as f32;
            let between = Between::new(share);
            for (number, value) in correlation.iter_mut().skip(phase).step_by(divide).enumerate() {
                *value = between.of(lags.correlation, (REACH + number) as i32);
            }
        }
        for (number, value) in likeness.iter_mut().enumerate() {
            *value = lags.alike(number.abs_diff(MARGIN) as f32 / divide as f32);
        }
        Some(Self {
            correlation,
            likeness,
            divide,
            points_per_cycle: lags.points_per_cycle * divide as f32,
        })
    }

    /// The correlation's points.
    pub(super) const fn points(&self) -> &'a [f32] {
        self.correlation
    }

    /// The last place that can be read.
    pub(super) fn last(&self) -> f32 {
        self.correlation.len().saturating_sub(MARGIN + 1) as f32
    }

    /// Longest spacing at which pulses still look alike.
    pub(super) fn longest(&self) -> f32 {
        self.likeness.len().saturating_sub(2 * MARGIN + 1) as f32
    }

    /// The correlation at a place.
    pub(super) fn around(&self, place: f32) -> Local {
        local(self.correlation, place)
    }

    /// The autocorrelation at a spacing.
    pub(super) fn alike(&self, spacing: f32) -> Local {
        local(self.likeness, spacing + MARGIN as f32)
    }
}

/// Value, slope and curvature of the polynomial through the seven points nearest to a place; nothing beyond the ends.
#[inline(never)]
fn local(table: &[f32], place: f32) -> Local {
    let nearest = math::floor(place + 0.5);
    let u = place - nearest;
    let points = usize::try_from(math::saturating_i32(nearest) - 3)
        .ok()
        .and_then(|first| table.get(first..)?.first_chunk::<7>());
    let Some([p, q, r, s, t, v, w]) = points else {
        return Local {
            value: 0.0,
            slope: 0.0,
            curvature: 0.0,
        };
    };
    // Odd and even halves, each a polynomial through three points.
    let (o1, o2, o3) = (0.5 * (t - r), 0.5 * (v - q), 0.5 * (w - p));
    let (e1, e2, e3) = (0.5 * (t + r) - s, 0.5 * (v + q) - s, 0.5 * (w + p) - s);
    let c5 = (o3 - 4.0 * o2 + 5.0 * o1) * (1.0 / 120.0);
    let c3 = (o2 - 2.0 * o1) * (1.0 / 6.0) - 5.0 * c5;
    let c1 = o1 - c3 - c5;
    let c6 = (e3 - 6.0 * e2 + 15.0 * e1) * (1.0 / 360.0);
    let c4 = (e2 - 4.0 * e1) * (1.0 / 12.0) - 5.0 * c6;
    let c2 = e1 - c4 - c6;
    Local {
        value: s + u * (c1 + u * (c2 + u * (c3 + u * (c4 + u * (c5 + u * c6))))),
        slope: c1 + u * (2.0 * c2 + u * (3.0 * c3 + u * (4.0 * c4 + u * (5.0 * c5 + u * 6.0 * c6)))),
        curvature: 2.0 * c2 + u * (6.0 * c3 + u * (12.0 * c4 + u * (20.0 * c5 + u * 30.0 * c6))),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// A sine of 16 points a cycle, against the closed form.
    #[test]
    fn a_sine_is_read_between_its_points() {
        for (points, limit) in [(16.0f32, 4e-6f32), (10.7, 7e-5)] {
            let turn = core::f32::consts::TAU / points;
            let mut table = [0.0; 40];
            for (number, value) in table.iter_mut().enumerate() {
                *value = math::sin(turn * number as f32 + 0.4);
            }
            for step in 0..200 {
                let place = 10.0 + 0.1 * step as f32 * 0.77;
                let (sine, cosine) = (math::sin(turn * place + 0.4), math::cos(turn * place + 0.4));
                let found = local(&table, place);
                assert!((found.value - sine).abs() < limit, "{points} {place}: {found:?}");
                assert!(
                    (found.slope - turn * cosine).abs() < 10.0 * limit * turn,
                    "{points} {place}: {found:?}"
                );
                assert!(
                    (found.curvature + turn * turn * sine).abs() < 60.0 * limit * turn,
                    "{points} {place}: {found:?}"
                );
            }
        }
        assert_eq!(local(&[1.0; 10], 2.4).value, 0.0, "too near the end");
        assert_eq!(local(&[1.0; 10], 6.4).value, 1.0);
        assert_eq!(local(&[1.0; 10], 6.6).value, 0.0);
        assert_eq!(local(&[1.0; 10], f32::NAN).value, 0.0);
    }
}
