//! Is one echo two? The decision between one pulse and two of the same shape in a stretch of the record.
//!
//! The statistic is twice the logarithm of the likelihood ratio, 2 ln Λ = (J2 - J1) / σ², with J what one or two
//! pulses explain of the energy. Two of a slightly wrong shape always explain more than one, so the noise is given
//! an allowance: 2 ln Λ / (1 + ε² J1 / σ²), with ε² the share of an echo's energy that the reference pulse leaves
//! unexplained: at least what is stated, and at least three times what the pair itself leaves here. The threshold stands
//! above the chi-square quantile of two more unknowns because the best pair is the best of a search. Three answers
//! more are refused although two pulses explain more than one: pairs so close that an echo which has lost its
//! higher frequencies looks the same, pairs that another spacing explains about as well, and everything with a
//! clipped sample in it.

use super::lags::{Lags, step};
use super::pair::{GRID, Pair, Single, pairs, single};
use super::{PulseTrust, Unresolved};
use crate::echo::Surroundings;
use crate::echo::correlation::energy;
use crate::echo::interpolate::REACH;
use crate::math;
use crate::units::SamplePosition;

/// Least 2 ln Λ for two echoes of a known shape: no false split in a thousand without any allowance.
pub const THRESHOLD: f32 = 20.0;
/// Ratio of the noise that moves arrivals to that of one sample from which on the two are not the same.
const GRAIN: f32 = 1.2;
/// Longest spacing that is searched, in pulse durations: beyond it the classical verdict needs no help.
pub const LONGEST: f32 = 1.6;
/// Shortest, likewise; shorter than what is ever declared, so that what looks like such a pair is known as one.
const SHORTEST: f32 = 0.05;
/// Least spacing that is declared unless the caller knows better, in pulse durations: an attenuated echo looks like two
/// equal ones 0.1 of the duration apart.
pub const LEAST_SPACING: f32 = 0.12;
/// How often what a pair leaves unexplained counts as allowance: a second pulse takes up more of a wrong shape than
/// it leaves.
pub(super) const LEFT_OVER: f32 = 3.0;
/// By how much 2 ln Λ the best pair must lead any pair of another spacing.
const LEAD: f32 = 1.0;

/// Where the two echoes may lie, and what is known of their shape.
#[derive(Clone, Copy, Debug)]
pub struct Stretch {
    /// First sample for an echo's origin.
    pub from: f32,
    /// Last.
    pub to: f32,
    /// Least spacing that is declared, in pulse durations: [`LEAST_SPACING`], or down to 0.06 if both echoes and the
    /// reference are known to have travelled the same way, so that their shapes cannot differ.
    pub least_spacing: f32,
    /// How well the reference pulse is known.
    pub trust: PulseTrust,
}

/// Two echoes, told apart.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Split {
    /// Origin of the first.
    pub first: SamplePosition,
    /// Samples from there to the second's.
    pub spacing: f32,
    /// Standard uncertainty of the spacing, in samples: noise, with the allowance for the shape.
    pub spacing_uncertainty: f32,
    /// Fitted envelope peak of the first, in codes, with its sign.
    pub first_amplitude: f32,
    /// Likewise of the second.
    pub second_amplitude: f32,
}

/// What came of the question.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Answer {
    /// Two echoes, or why they are not told apart.
    pub split: Result<Split, Unresolved>,
    /// Natural logarithm of the likelihood ratio of two echoes over one, with the allowance; `None` if nothing could be
    /// fitted.
    pub log_odds: Option<f32>,
}

impl Answer {
    pub(super) const fn refused(why: Unresolved) -> Self {
        Self {
            split: Err(why),
            log_odds: None,
        }
    }
}

/// Decides for one stretch. `memory` and `more` are scratch: 512 and 416 entries serve any pulse.
#[must_use]
#[inline(never)]
pub fn decide(surroundings: &Surroundings<'_>, stretch: &Stretch, memory: &mut [f32], more: &mut [f32]) -> Answer {
    let Surroundings { record, pulse, .. } = surroundings;
    let facts = &pulse.facts;
    let step = step(surroundings.samples_per_cycle);
    let points_per_cycle = surroundings.samples_per_cycle / step as f32;
    // The pulse has to lie inside the record as a whole.
    let end = record.codes().len() as f32 - (f32::from(facts.length) - facts.origin);
    let (from, to) = (math::larger(stretch.from, facts.origin), math::smaller(stretch.to, end));
    if !(to - from >= 0.5 * surroundings.samples_per_cycle) {
        return Answer::refused(Unresolved::NoRoom);
    }
    if clipped(surroundings, from, to) {
        return Answer::refused(Unresolved::Clipped);
    }
    // What the scratch memory holds, for a pulse of many cycles.
    let divide = math::larger(math::floor(GRID / points_per_cycle + 0.999), 1.0);
    let reach = 2.0 * REACH as f32 + 2.0;
    let duration = facts.envelope_duration / step as f32;
    let most = math::smaller(
        more.len() as f32 - reach,
        (memory.len() as f32 - reach) / (divide + 1.0),
    );
    let width = math::smaller((to - from) / step as f32, most);
    let middle = 0.5 * (from + to);
    let half = 0.5 * width * step as f32;
    let (from, to) = (middle - half, middle + half);
    let longest = math::smaller(LONGEST * duration, width);
    let longest = usize::try_from(math::saturating_i32(longest)).unwrap_or(0);
    let Some((likeness, grid)) = memory.split_at_mut_checked(longest + 2 * REACH + 1) else {
        return Answer::refused(Unresolved::NoRoom);
    };
    let Some(lags) = Lags::fill(surroundings, from, to, longest, more, likeness) else {
        return Answer::refused(Unresolved::NoRoom);
    };
    // Grain counts with what of it lies in the pulse's band; the larger of two estimates of one white noise would be
    // too large.
    let timing = surroundings.timing_noise.at(0.5 * (from + to));
    let heard = if timing > GRAIN * surroundings.noise {
        timing
    } else {
        surroundings.noise
    };
    let noise = math::larger(heard, record.format().rounding_noise(surroundings.noise));
    let shortest = SHORTEST * duration;
    let Some(one) = single(&lags) else {
        return Answer::refused(Unresolved::NoRoom);
    };
    let found = pairs(&lags, shortest, noise, grid);
    let Some(best) = found.first() else {
        return Answer {
            log_odds: Some(0.0),
            ..Answer::refused(Unresolved::OnePulse)
        };
    };
    let decision = Decision {
        surroundings,
        lags,
        noise,
        one,
        least: stretch.least_spacing * facts.envelope_duration,
    };
    match stretch.trust {
        PulseTrust::Learned { mismatch } => decision.known(best, &found, mismatch),
        PulseTrust::Modelled => decision.roughly_known(best, &found, grid),
    }
}

/// Any clipped sample under a pulse whose origin lies between `from` and `to`?
fn clipped(surroundings: &Surroundings<'_>, from: f32, to: f32) -> bool {
    let (upper, lower) = (
        surroundings.record.format().upper_rail(),
        surroundings.record.format().lower_rail(),
    );
    under(surroundings, from, to)
        .iter()
        .any(|&code| code >= upper || code <= lower)
}

/// The samples under pulses whose origins lie between `from` and `to`.
pub(super) fn under<'r>(surroundings: &Surroundings<'r>, from: f32, to: f32) -> &'r [i16] {
    let facts = &surroundings.pulse.facts;
    let whole = |place: f32| usize::try_from(math::saturating_i32(math::floor(place))).unwrap_or(0);
    let (first, last) = (
        whole(from - facts.origin),
        whole(to - facts.origin) + usize::from(facts.length) + 1,
    );
    let codes = surroundings.record.codes();
    codes.get(first..last.min(codes.len())).unwrap_or(&[])
}

/// One window with its single fit, before the verdict.
pub(super) struct Decision<'a> {
    pub(super) surroundings: &'a Surroundings<'a>,
    pub(super) lags: Lags<'a>,
    /// Root mean square of the noise, in codes.
    pub(super) noise: f32,
    pub(super) one: Single,
    /// Least spacing that is declared, in samples.
    pub(super) least: f32,
}

impl Decision<'_> {
    /// Sample of the pulse's origin at a place of the tables, counted from the tables' first pulse.
    pub(super) fn samples(&self, place: f32) -> f32 {
        place * self.lags.step as f32 + self.surroundings.pulse.facts.origin
    }

    pub(super) fn absolute(&self, place: f32) -> f32 {
        self.lags.start as f32 + self.samples(place)
    }

    /// 2 ln Λ with the allowance.
    pub(super) fn statistic(&self, gained: f32, mismatch: f32) -> f32 {
        let variance = self.noise * self.noise;
        gained / (variance + mismatch * self.one.explained())
    }

    /// Share of the explained energy that a pair leaves unexplained, less what noise explains with three standard
    /// deviations to spare.
    pub(super) fn unexplained(&self, first: f32, second: f32, explained: f32) -> f32 {
        let codes = under(self.surroundings, first, second);
        let freedom = math::larger(codes.len() as f32 - 5.0, 1.0);
        let by_noise = self.noise * self.noise * (freedom + 3.0 * math::sqrt(2.0 * freedom));
        math::larger(energy(codes) - explained - by_noise, 0.0) / explained
    }

    /// The pulse was learned from this probe: the shape stands.
    fn known(&self, best: &Pair, found: &[Pair], mismatch: f32) -> Answer {
        let left = self.unexplained(self.absolute(best.first), self.absolute(best.second), best.explained);
        let mismatch = math::larger(mismatch, LEFT_OVER * left);
        let gained = self.statistic(best.explained - self.one.explained(), mismatch);
        let step = self.lags.step as f32;
        let spacing = best.spacing() * step;
        let others = found.iter().map(|other| (other.spacing() * step, other.explained));
        let lead = self.lead((spacing, best.explained), others, mismatch);
        let split = self.accept(gained, THRESHOLD, spacing, lead).map(|()| {
            let variance = best.spacing_variance * self.inflation(mismatch);
            self.split(best, self.noise * math::sqrt(variance) * step)
        });
        Answer {
            split,
            log_odds: Some(0.5 * gained),
        }
    }

    /// 2 ln Λ of the best pair over the best of another spacing.
    pub(super) fn lead(&self, best: (f32, f32), others: impl Iterator<Item = (f32, f32)>, mismatch: f32) -> f32 {
        let other = 0.1 * self.surroundings.samples_per_cycle;
        let runner = others
            .filter(|(spacing, _)| (spacing - best.0).abs() > other)
            .fold(0.0, |most, (_, explained)| math::larger(most, explained));
        self.statistic(best.1 - runner, mismatch)
    }

    /// Two echoes, or why not.
    pub(super) fn accept(&self, gained: f32, threshold: f32, spacing: f32, lead: f32) -> Result<(), Unresolved> {
        if !(gained > threshold) {
            Err(Unresolved::OnePulse)
        } else if !(spacing >= self.least) {
            Err(Unresolved::TooClose)
        } else if !(lead > LEAD) {
            Err(Unresolved::Ambiguous)
        } else {
            Ok(())
        }
    }

    /// By how much the allowance widens a variance from noise alone.
    pub(super) fn inflation(&self, mismatch: f32) -> f32 {
        1.0 + mismatch * self.one.explained() / (self.noise * self.noise)
    }

    fn split(&self, pair: &Pair, spacing_uncertainty: f32) -> Split {
        let unit = 1.0 / math::sqrt(self.surroundings.pulse.facts.energy);
        Split {
            first: self.position(self.samples(pair.first)),
            spacing: (pair.second - pair.first) * self.lags.step as f32,
            spacing_uncertainty,
            first_amplitude: pair.first_amplitude * unit,
            second_amplitude: pair.second_amplitude * unit,
        }
    }

    /// A place in samples after the tables' first pulse as a place of the record.
    fn position(&self, samples: f32) -> SamplePosition {
        let (before, after) = (self.lags.start.min(0) as f32, self.lags.start.max(0));
        SamplePosition::new(after.unsigned_abs(), before + samples)
    }
}
