//! Is the wall thick enough? Below, above, or undecided within the uncertainty.
//!
//! A reading y with the standard uncertainty u is compared with a limit L through a *guard band* w on either side of it
//! (JCGM 106:2012, 8.3): only a reading beyond L by w or more is decided, so that a wrong decision is no more probable than
//! the guard band allows. Between, the state is [`LimitState::Undecided`], and neither "good" nor "bad" may be said:
//! measure again, with less uncertainty, or ask who is responsible.
//!
//! With errors that are normally distributed a reading at the edge of the band is on the wrong side with the
//! probability Q(w / u):
//!
//! | guard band | w / u at k = 2 | wrong at the edge |
//! |---|---|---|
//! | none ([`Guard::Expanded`] of 0) | 0 | 50 % |
//! | [`Guard::Expanded`] of 1, the usual one (ISO 14253-1's default rule; JCGM 106:2012, 8.3.2) | 2 | 2.3 % |
//! | [`Guard::WrongDecision`] of 0.05 | 1.645 | 5 % |
//!
//! Where rectangular terms dominate the budget that is still safe from w / u = 1.5 on; below that a rectangle has
//! the heavier tail.
//!
//! **Limits come from outside.** Which thickness is acceptable, with which decision rule, and what follows from "undecided"
//! is a matter of the codes that apply where the part stands and of people who are licensed to decide. This module only
//! compares numbers.

use crate::math;
use crate::outcome::Doubts;
use crate::units::Metres;
use core::fmt;

/// How wide the guard band is.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Guard {
    /// This many expanded uncertainties: r in w = r U. 0 to 10; 1 is usual.
    Expanded(f32),
    /// So wide that a decision at its edge is wrong with this probability at most: 0.0001 to 0.5. Less is not to be
    /// had: a wrong echo, which no uncertainty covers, would be more probable.
    WrongDecision(f32),
}

/// Smallest probability of a wrong decision that can be asked for.
pub const LEAST_WRONG_DECISION: f32 = 1e-4;

/// The limits of one place. They belong to the place and not to the gauge: the next one may have others.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Limits {
    /// The wall must not be thinner than this.
    pub minimum: Metres,
    /// A thickness above the minimum, below which somebody wants to know.
    pub warning: Option<Metres>,
    /// The wall must not be thicker than this.
    pub maximum: Option<Metres>,
    /// The guard band, the same on either side of each limit.
    pub guard: Guard,
}

/// Where a reading stands to one limit.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum LimitState {
    /// Below the limit, by the guard band or more.
    Below,
    /// Too close to the limit for this uncertainty, or the reading carries a doubt.
    Undecided,
    /// Above the limit, by the guard band or more.
    Above,
}

impl LimitState {
    /// One stable word for programs.
    #[must_use]
    pub const fn word(self) -> &'static str {
        match self {
            Self::Below => "below",
            Self::Undecided => "undecided",
            Self::Above => "above",
        }
    }

    /// The state of `value` to `limit` with a guard band of `guard` on either side: above from `limit + guard` on, below
    /// up to `limit - guard`. Without a guard band, a value at the limit keeps to it: it counts as above a
    /// limit from below. Undecided if anything is not a number.
    #[must_use]
    pub fn of(value: Metres, limit: Metres, guard: Metres) -> Self {
        let beyond = value - limit;
        if !(guard >= Metres::ZERO) {
            Self::Undecided
        } else if beyond >= guard {
            Self::Above
        } else if beyond <= -guard {
            Self::Below
        } else {
            Self::Undecided
        }
    }
}

/// Where a reading stands to all limits of its place.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct LimitsVerdict {
    /// To the minimum: [`LimitState::Above`] is good.
    pub minimum: LimitState,
    /// To the warning limit, if there is one.
    pub warning: Option<LimitState>,
    /// To the maximum, if there is one: [`LimitState::Below`] is good.
    pub maximum: Option<LimitState>,
    /// The guard band on either side of each limit.
    pub guard_band: Metres,
    /// Probability that the wall keeps to minimum and maximum, by the reading and its uncertainty alone: what doubts
    /// name, and what is known of such walls otherwise, is not in it (JCGM 106:2012, 7.2 to 7.4, with a normal
    /// distribution and no prior knowledge).
    pub conformance_probability: f32,
}

impl Limits {
    /// A minimum with a guard band of one expanded uncertainty.
    #[must_use]
    pub const fn minimum(minimum: Metres) -> Self {
        Self {
            minimum,
            warning: None,
            maximum: None,
            guard: Guard::Expanded(1.0),
        }
    }

    /// The same with a warning limit.
    #[must_use]
    pub const fn with_warning(mut self, warning: Metres) -> Self {
        self.warning = Some(warning);
        self
    }

    /// The same with a maximum.
    #[must_use]
    pub const fn with_maximum(mut self, maximum: Metres) -> Self {
        self.maximum = Some(maximum);
        self
    }

    /// The same with another guard band.
    #[must_use]
    pub const fn with_guard(mut self, guard: Guard) -> Self {
        self.guard = guard;
        self
    }

    /// The first thing that is wrong with these limits; `None` if they can be used.
    #[must_use]
    pub const fn check(&self) -> Option<LimitsError> {
        // Each comparison is false for "not a number".
        let minimum = self.minimum.get();
        if !(minimum >= 0.0 && minimum <= 1e3) {
            return Some(LimitsError::Minimum);
        }
        if let Some(warning) = self.warning
            && !(warning.get() >= minimum && warning.get() <= 1e3)
        {
            return Some(LimitsError::Warning);
        }
        if let Some(maximum) = self.maximum {
            let above_warning = match self.warning {
                Some(warning) => maximum.get() > warning.get(),
                None => true,
            };
            if !(maximum.get() > minimum && maximum.get() <= 1e3 && above_warning) {
                return Some(LimitsError::Maximum);
            }
        }
        let possible = match self.guard {
            Guard::Expanded(factor) => factor >= 0.0 && factor <= 10.0,
            Guard::WrongDecision(probability) => probability >= LEAST_WRONG_DECISION && probability <= 0.5,
        };
        if possible { None } else { Some(LimitsError::Guard) }
    }

    /// The guard band of a reading with this standard uncertainty and coverage factor.
    #[must_use]
    pub fn guard_band(&self, standard_uncertainty: Metres, coverage_factor: f32) -> Metres {
        match self.guard {
            Guard::Expanded(factor) => standard_uncertainty * (coverage_factor * factor),
            Guard::WrongDecision(probability) => standard_uncertainty * math::normal_quantile_of_tail(probability),
        }
    }

    /// Where a thickness with this standard uncertainty stands. A doubt makes every state undecided: what it names
    /// could move the reading beyond its uncertainty, and then a guard band decides nothing.
    #[must_use]
    pub fn judge(
        &self,
        thickness: Metres,
        standard_uncertainty: Metres,
        coverage_factor: f32,
        doubts: Doubts,
    ) -> LimitsVerdict {
        let guard_band = self.guard_band(standard_uncertainty, coverage_factor);
        let state = |limit: Metres| {
            if doubts.is_empty() {
                LimitState::of(thickness, limit, guard_band)
            } else {
                LimitState::Undecided
            }
        };
        // A maximum looks the other way: at it, a wall still keeps to it.
        let from_above = |limit: Metres| match LimitState::of(-thickness, -limit, guard_band) {
            _ if !doubts.is_empty() => LimitState::Undecided,
            LimitState::Above => LimitState::Below,
            LimitState::Below => LimitState::Above,
            LimitState::Undecided => LimitState::Undecided,
        };
        let beyond = |distance: Metres| {
            if standard_uncertainty > Metres::ZERO {
                math::normal_tail(distance / standard_uncertainty)
            } else if distance > Metres::ZERO {
                0.0
            } else {
                1.0
            }
        };
        let too_thin = 1.0 - beyond(self.minimum - thickness);
        let too_thick = self.maximum.map_or(0.0, |maximum| beyond(maximum - thickness));
        LimitsVerdict {
            minimum: state(self.minimum),
            warning: self.warning.map(state),
            maximum: self.maximum.map(from_above),
            guard_band,
            conformance_probability: math::clamp(1.0 - too_thin - too_thick, 0.0, 1.0),
        }
    }
}

/// What is wrong with limits.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum LimitsError {
    /// The minimum is negative, above 1 km or not a number.
    Minimum,
    /// The warning limit lies below the minimum, or is no length.
    Warning,
    /// The maximum does not lie above minimum and warning limit, or is no length.
    Maximum,
    /// The guard band's factor or probability is out of range.
    Guard,
}

impl LimitsError {
    /// The field and the remedy, in one sentence.
    #[must_use]
    pub const fn sentence(&self) -> &'static str {
        match self {
            Self::Minimum => "the minimum must be zero or a positive thickness up to 1 km",
            Self::Warning => "the warning limit must not lie below the minimum",
            Self::Maximum => "the maximum must lie above minimum and warning limit",
            Self::Guard => {
                "the guard band must be 0 to 10 expanded uncertainties, or a probability from 0.0001 to 0.5 of a wrong decision"
            }
        }
    }
}

impl fmt::Display for LimitsError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(self.sentence())
    }
}

impl core::error::Error for LimitsError {}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::outcome::Doubt;
    use proptest::prelude::*;

    const NONE: Doubts = Doubts::NONE;

    fn mm(mm: f32) -> Metres {
        Metres::from_mm(mm)
    }

    #[test]
    fn val_conformance_probability_of_jcgm_106() {
        // JCGM 106:2012, 7.3, worked examples (from memory): burst strength of a container, 509.7 with u = 8.6, limit 490
        // from below: 99 %; breakdown voltage, -5.47 with u = 0.05, limit -5.40 from above: 92 %. The digits: norm.cdf,
        // SciPy 1.17. The examples' units stand for millimetres here.
        let burst = Limits::minimum(mm(490.0)).judge(mm(509.7), mm(8.6), 2.0, NONE);
        assert!(
            (burst.conformance_probability - 0.989_009_5).abs() < 2e-6,
            "{}",
            burst.conformance_probability
        );
        let voltage = Limits::minimum(Metres::ZERO).with_maximum(mm(10.0 - 5.40));
        let voltage = voltage.judge(mm(10.0 - 5.47), mm(0.05), 2.0, NONE);
        assert!((voltage.conformance_probability - 0.919_243_3).abs() < 3e-6);
        // Both limits: 5.5(2) between 5 and 6, by norm.cdf.
        let both = Limits::minimum(mm(5.0)).with_maximum(mm(6.0));
        let both = both.judge(mm(5.5), mm(0.2), 2.0, NONE);
        assert!((both.conformance_probability - 0.987_580_7).abs() < 2e-6);
    }

    #[test]
    fn val_conformance_table_of_jcgm_106() {
        // JCGM 106:2012, table 1 (from memory): how many standard uncertainties beyond a limit give which probability.
        for (z, probability) in [(0.84, 0.80), (1.28, 0.90), (1.64, 0.95), (2.33, 0.99), (3.09, 0.999f32)] {
            let verdict = Limits::minimum(mm(5.0)).judge(mm(5.0 + 0.1 * z), mm(0.1), 2.0, NONE);
            assert!((verdict.conformance_probability - probability).abs() < 0.006 * (1.0 - probability) + 0.000_5);
            // The other way about: the guard band of that probability.
            let guard = Limits::minimum(mm(5.0)).with_guard(Guard::WrongDecision(1.0 - probability));
            assert!((guard.guard_band(mm(0.1), 2.0).as_mm() - 0.1 * z).abs() < 0.000_6);
        }
    }

    #[test]
    fn val_guarded_acceptance() {
        // JCGM 106:2012, 8.3.2: w = r U with U = 2 u and r = 1 keeps the wrong decisions at the edge to 2.3 %
        // (norm.sf(2), SciPy 1.17: 0.022750).
        let limits = Limits::minimum(mm(5.0));
        assert!((limits.guard_band(mm(0.1), 2.0).as_mm() - 0.2).abs() < 1e-6);
        let edge = limits.judge(mm(5.2), mm(0.1), 2.0, NONE);
        assert!((1.0 - edge.conformance_probability - 0.022_750_13).abs() < 3e-6);
        for (thickness, state) in [
            (4.79, LimitState::Below),
            (4.81, LimitState::Undecided),
            (5.0, LimitState::Undecided),
            (5.19, LimitState::Undecided),
            (5.21, LimitState::Above),
        ] {
            assert_eq!(
                limits.judge(mm(thickness), mm(0.1), 2.0, NONE).minimum,
                state,
                "{thickness}"
            );
            let maximum = Limits::minimum(Metres::ZERO).with_maximum(mm(5.0));
            assert_eq!(maximum.judge(mm(thickness), mm(0.1), 2.0, NONE).maximum, Some(state));
        }
    }

    #[test]
    fn at_the_limit_without_a_guard_band_a_wall_keeps_to_it() {
        let limits = Limits::minimum(mm(5.0)).with_warning(mm(5.0)).with_maximum(mm(6.0));
        let simple = limits.with_guard(Guard::Expanded(0.0));
        let low = simple.judge(mm(5.0), mm(0.1), 2.0, NONE);
        assert_eq!((low.minimum, low.warning), (LimitState::Above, Some(LimitState::Above)));
        let high = simple.judge(mm(6.0), mm(0.1), 2.0, NONE);
        assert_eq!(high.maximum, Some(LimitState::Below));
    }

    #[test]
    fn doubts_and_nonsense_decide_nothing() {
        let mut doubts = Doubts::NONE;
        doubts.raise(Doubt::PossibleDouble);
        let limits = Limits::minimum(mm(5.0)).with_maximum(mm(50.0));
        let doubted = limits.judge(mm(20.0), mm(0.01), 2.0, doubts);
        assert_eq!(
            (doubted.minimum, doubted.maximum),
            (LimitState::Undecided, Some(LimitState::Undecided))
        );
        let unknown = limits.judge(mm(20.0), Metres::new(f32::NAN), 2.0, NONE);
        assert_eq!(unknown.minimum, LimitState::Undecided);
        let nothing = limits.judge(Metres::new(f32::NAN), mm(0.1), 2.0, NONE);
        assert_eq!(nothing.minimum, LimitState::Undecided);
    }

    #[test]
    fn wrong_limits_are_named() {
        let good = Limits::minimum(mm(5.0)).with_warning(mm(6.0)).with_maximum(mm(12.0));
        assert_eq!(good.check(), None);
        assert_eq!(Limits::minimum(mm(-1.0)).check(), Some(LimitsError::Minimum));
        assert_eq!(
            Limits::minimum(Metres::new(f32::NAN)).check(),
            Some(LimitsError::Minimum)
        );
        assert_eq!(good.with_warning(mm(4.0)).check(), Some(LimitsError::Warning));
        assert_eq!(good.with_maximum(mm(6.0)).check(), Some(LimitsError::Maximum));
        assert_eq!(good.with_maximum(mm(2.0)).check(), Some(LimitsError::Maximum));
        for guard in [
            Guard::Expanded(-0.1),
            Guard::Expanded(f32::INFINITY),
            Guard::WrongDecision(0.0),
            Guard::WrongDecision(0.6),
        ] {
            assert_eq!(good.with_guard(guard).check(), Some(LimitsError::Guard));
        }
    }

    proptest! {
        /// Whatever the numbers: never below a lower limit and above a higher one, and more guard decides less.
        #[test]
        fn law_states_are_in_order(y in 0.1f32..100.0, u in 0.0f32..5.0, minimum in 0.1f32..100.0, r in 0.0f32..3.0) {
            let limits = Limits::minimum(mm(minimum)).with_warning(mm(minimum * 1.5));
            let at = |r| limits.with_guard(Guard::Expanded(r)).judge(mm(y), mm(u), 2.0, NONE);
            let (narrow, wide) = (at(r), at(r + 0.5));
            if narrow.minimum == LimitState::Below {
                prop_assert_eq!(narrow.warning, Some(LimitState::Below));
            }
            prop_assert!(wide.minimum == narrow.minimum || wide.minimum == LimitState::Undecided);
            prop_assert!((0.0..=1.0).contains(&narrow.conformance_probability));
        }
    }
}
