//! Has anything moved between two shots of the same delay?
//!
//! Shots may be averaged and interleaved only while probe and part keep still. **In**: two shots of one delay, one
//! of which stands in a record whose slope is known ([`movement`] for two plain records, [`super::average::Interleaver::again`]
//! for a delay of an interleaved one). **Out**: [`Movement`], how much later the echoes came the second time, as one number for all of them,
//! with its uncertainty.
//!
//! The difference of the two is noise, and minus the slope times the delay if the echoes have moved: so its regression on
//! the slope tells the delay, and its power where the record is loud, against that where it is quiet, tells a change that no
//! small delay explains. Nothing is known of echoes or pulse. Noise may be coloured: its correlation over
//! [`LAGS`] samples counts. A delay of more than a quarter of a cycle is noticed, but its size is not told.
//!
//! Not for a record that is loud throughout (more than half of it echoes), and blind to whatever changes between other
//! shots: repeat the first delay last, and more delays for more certainty.

use crate::math;
use crate::record::Record;
use crate::record::average::{AverageError, median};
use crate::units::Seconds;

/// Neighbours within which noise may be correlated, in samples of a shot.
pub const LAGS: usize = 16;

/// So many standard uncertainties are no chance any more (1 in 370).
const BEYOND_CHANCE: f32 = 3.0;

/// Correlation of two records that is not one of noise any more, what chance does apart.
const UPSIDE_DOWN: f32 = -0.3;

/// What changed from one shot to another.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Movement {
    /// How much later the echoes came in the second shot: the mean over all of them, weighted by their slopes.
    /// The slope is that of a polynomial through four neighbours, 0.5 % too flat at ten samples a cycle, 15 % at four.
    pub later_by: Seconds,
    /// Its standard uncertainty from noise (k = 1); infinite if the record has no slope.
    pub standard_uncertainty: Seconds,
    /// Mean square of the differences where the record is loud over what noise explains.
    power: f32,
    /// The ratio that chance does not pass.
    power_limit: f32,
    /// What a jitter of one second would add to that ratio.
    power_by_jitter: f32,
}

impl Movement {
    /// Has anything moved, by more than noise and a trigger that jitters so much (root mean square from shot to shot; zero for one that
    /// does not) explain? Chance passes the limit in less than 1 % of cases (`val_movement`).
    #[must_use]
    pub fn has_moved(&self, jitter: Seconds) -> bool {
        let (noise, jitter) = (self.standard_uncertainty.get(), jitter.get());
        let limit = BEYOND_CHANCE * math::sqrt(noise * noise + 2.0 * jitter * jitter);
        // One jitter holds for all samples: its square scatters as widely as a single number's does.
        let by_jitter = BEYOND_CHANCE * BEYOND_CHANCE * 2.0 * jitter * jitter * self.power_by_jitter;
        self.later_by.get().abs() > limit || self.power > self.power_limit + by_jitter
    }

    /// This comparison and another of the same two rounds, taken together.
    #[must_use]
    pub fn with(self, other: Self) -> Self {
        let weight = |movement: &Self| {
            let u = movement.standard_uncertainty.get() * 1e9;
            1.0 / math::larger(u * u, f32::MIN_POSITIVE)
        };
        let (mine, others) = (weight(&self), weight(&other));
        let sum = mine + others;
        if !(sum > 0.0 && sum.is_finite()) {
            return self;
        }
        let worse = if self.power - self.power_limit > other.power - other.power_limit {
            self
        } else {
            other
        };
        Self {
            later_by: self.later_by * (mine / sum) + other.later_by * (others / sum),
            standard_uncertainty: Seconds::from_ns(1.0 / math::sqrt(sum)),
            ..worse
        }
    }
}

/// Compares two records of one place: of the same length, format and clock, single shots or averages.
///
/// # Errors
/// The records differ in length, format or clock, or are too short to tell (fewer than 16 samples that are not clipped).
pub fn movement(earlier: &Record<'_>, later: &Record<'_>) -> Result<Movement, AverageError> {
    if earlier.clock() != later.clock() {
        return Err(AverageError::ClockChanged);
    }
    if earlier.format() != later.format() {
        return Err(AverageError::FormatChanged);
    }
    if earlier.codes().len() != later.codes().len() {
        return Err(AverageError::LengthChanged {
            expected: u32::try_from(earlier.codes().len()).unwrap_or(u32::MAX),
            got: u32::try_from(later.codes().len()).unwrap_or(u32::MAX),
        });
    }
    let pair = Pair {
        dense: earlier,
        step: 1,
        first: 0,
        second: later,
        offset: 0,
        rails: rails(earlier),
    };
    pair.compare().ok_or(AverageError::Nothing)
}

/// A shot beside the record in which its like stands at every `step`-th sample from `first` on.
#[derive(Clone, Copy)]
pub(super) struct Pair<'a> {
    pub dense: &'a Record<'a>,
    pub step: usize,
    pub first: usize,
    pub second: &'a Record<'a>,
    /// Taken off the second shot.
    pub offset: i32,
    /// Codes at and beyond which samples of either are clipped.
    pub rails: (i16, i16),
}

/// The lower and the upper rail.
pub(super) fn rails(record: &Record<'_>) -> (i16, i16) {
    (record.format().lower_rail(), record.format().upper_rail())
}

/// Five codes from a place on.
fn five(record: &Record<'_>, start: usize) -> Option<[i16; 5]> {
    record.codes().get(start..)?.first_chunk::<5>().copied()
}

/// One sample of the pair.
#[derive(Clone, Copy)]
struct Place {
    difference: f32,
    /// Sum of the two.
    sum: f32,
    /// Codes per sample of the dense record.
    slope: f32,
    /// How loud it is around.
    activity: i32,
}

/// Fewest samples in the quiet half, and half of the fewest in all.
const FEWEST: u32 = 8;

impl Pair<'_> {
    /// The place of the second shot's sample `number`; `None` next to the ends and where anything is clipped.
    fn at(&self, number: usize) -> Option<Place> {
        let place = number.checked_mul(self.step)?.checked_add(self.first)?;
        let start = place.checked_sub(2)?;
        let dense = five(self.dense, start)?;
        let [_, _, here, _, _] = dense;
        let (lower, upper) = self.rails;
        let whole = |code: i16| (code < upper && code > lower).then_some(i32::from(code));
        let here = whole(here)?;
        // Twice the signal around. The noise of the two records' sum knows nothing of that of their difference, and
        // neither does the noise of other shots.
        let others = if self.step == 1 {
            five(self.second, start)?
        } else {
            dense
        };
        let mut sums = [0; 5];
        for ((sum, one), other) in sums.iter_mut().zip(dense).zip(others) {
            *sum = whole(one)? + whole(other)?;
        }
        let [a, b, _, c, d] = sums;
        let second = whole(*self.second.codes().get(number)?)? - self.offset;
        Some(Place {
            difference: (second - here) as f32,
            sum: (second + here) as f32,
            // The derivative of the polynomial of fourth order through five points at their middle.
            slope: (8 * (c - b) - (d - a)) as f32 / 24.0,
            activity: a.abs() + b.abs() + c.abs() + d.abs(),
        })
    }

    fn places(&self) -> impl Iterator<Item = Place> + Clone + '_ {
        (0..self.second.codes().len()).filter_map(|number| self.at(number))
    }

    pub(super) fn compare(&self) -> Option<Movement> {
        let ordinary = median(self.places().map(|place| place.activity));
        let (mut quiet, mut loud) = (Half::default(), Half::default());
        let (mut product, mut sum, mut sums) = (0.0, 0.0, 0.0);
        for place in self.places() {
            let half = if place.activity <= ordinary {
                &mut quiet
            } else {
                &mut loud
            };
            half.samples += 1;
            half.differences += place.difference * place.difference;
            half.slopes += place.slope * place.slope;
            product += place.difference * place.slope;
            sum += place.sum;
            sums += place.sum * place.sum;
        }
        if quiet.samples < FEWEST || quiet.samples.saturating_add(loud.samples) < 2 * FEWEST {
            return None;
        }
        let (few, many) = (quiet.samples as f32, loud.samples.max(1) as f32);
        // Noise below the converter's step shows where the codes change, at the echoes, and hardly where the record rests:
        // twice the rounding's variance, and half as much again for what is between.
        let mean = quiet.differences / few;
        let rounding = self.dense.format().rounding_noise(math::sqrt(0.5 * mean));
        let variance = mean + 3.0 * rounding * rounding;
        let slopes = quiet.slopes + loud.slopes;
        let white = variance * slopes;
        let coloured = white + self.by_colour(ordinary);
        // A variance from few samples may be too small.
        let certainty = 1.0 + 3.0 / few;
        let deviation = math::sqrt(math::larger(white, coloured)) * certainty;
        let period = self.dense.clock().rate.period();
        // Correlated neighbours are fewer independent ones.
        let alike = if coloured > white { coloured / white } else { 1.0 };
        // Half a cycle makes the one record the other upside down: their sum is quiet everywhere, and tells nothing.
        let all = few + loud.samples as f32;
        let (unlike, like) = (quiet.differences + loud.differences, sums - sum * sum / all);
        let correlation = (like - unlike) / math::larger(like + unlike, f32::MIN_POSITIVE);
        let upside_down = correlation < UPSIDE_DOWN - 4.0 * math::sqrt(alike / all);
        let ratio = |value: f32| if slopes > 0.0 { value / slopes } else { f32::INFINITY };
        let rate = self.dense.clock().rate.get();
        Some(Movement {
            later_by: if slopes > 0.0 {
                period * (-product / slopes)
            } else {
                Seconds::ZERO
            },
            standard_uncertainty: period * ratio(deviation),
            power: if upside_down {
                f32::INFINITY
            } else {
                loud.differences / many / variance
            },
            power_limit: math::exp(BEYOND_CHANCE * math::sqrt((2.0 / few + 2.0 / many) * alike)),
            power_by_jitter: loud.slopes / many / variance * rate * rate,
        })
    }

    /// What the correlation of neighbours adds to the variance of Σ difference · slope: twice the sum over the lags of the
    /// differences' autocovariance, where it is quiet, times the slopes' correlation.
    fn by_colour(&self, ordinary: i32) -> f32 {
        let mut sum = 0.0;
        for lag in 1..=LAGS {
            let (mut pairs, mut differences, mut slopes) = (0u32, 0.0, 0.0);
            for number in 0..self.second.codes().len() {
                let (Some(here), Some(there)) = (self.at(number), self.at(number.saturating_add(lag))) else {
                    continue;
                };
                slopes += here.slope * there.slope;
                if here.activity <= ordinary && there.activity <= ordinary {
                    pairs += 1;
                    differences += here.difference * there.difference;
                }
            }
            if pairs >= FEWEST {
                sum += 2.0 * differences / pairs as f32 * slopes;
            }
        }
        sum
    }
}

/// Sums over the quiet or the loud half of the places.
#[derive(Clone, Copy, Default)]
struct Half {
    samples: u32,
    differences: f32,
    slopes: f32,
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::record::{AdcFormat, SampleClock};
    use crate::units::Hertz;
    use std::vec::Vec;

    fn record(codes: &[i16]) -> Record<'_> {
        Record::new(codes, AdcFormat::signed(12), SampleClock::new(Hertz::from_mhz(50.0)))
    }

    /// A burst of 5 MHz in the last fifth of 400 samples, so many nanoseconds late.
    fn burst(late: f64) -> Vec<i16> {
        let value = |i: u32| {
            let t = f64::from(i) * 20e-9 - late * 1e-9;
            if i < 320 {
                0.0
            } else {
                1500.0 * (std::f64::consts::TAU * 5e6 * t).sin()
            }
        };
        (0..400).map(|i| value(i).round() as i16).collect()
    }

    #[test]
    fn a_delay_is_told() {
        let (still, late) = (burst(0.0), burst(1.0));
        let found = movement(&record(&still), &record(&late)).unwrap();
        // The slope's own error at ten samples a cycle, and rounding.
        assert!((found.later_by.as_ns() - 1.0).abs() < 0.01, "{found:?}");
        assert!(found.has_moved(Seconds::ZERO) && !found.has_moved(Seconds::from_ns(1.0)));
        let back = movement(&record(&late), &record(&still)).unwrap();
        assert!((back.later_by.as_ns() + 1.0).abs() < 0.01);
        // Half a cycle: no small delay, but a change.
        let far = burst(100.0);
        assert!(
            movement(&record(&still), &record(&far))
                .unwrap()
                .has_moved(Seconds::from_ns(1.0))
        );
        let none = movement(&record(&still), &record(&still)).unwrap();
        assert!(none.later_by == Seconds::ZERO && !none.has_moved(Seconds::ZERO));
        // Two comparisons are surer than one.
        let both = none.with(found);
        assert!((both.later_by.as_ns() - 0.5).abs() < 0.01);
        let less = both.standard_uncertainty.get() / none.standard_uncertainty.get();
        assert!((less - core::f32::consts::FRAC_1_SQRT_2).abs() < 0.01);
    }

    #[test]
    fn what_cannot_be_compared() {
        let (long, short) = (burst(0.0), [0i16; 15]);
        assert!(matches!(
            movement(&record(&long), &record(&short)),
            Err(AverageError::LengthChanged { .. })
        ));
        assert_eq!(movement(&record(&short), &record(&short)), Err(AverageError::Nothing));
        let clock = SampleClock::new(Hertz::from_mhz(25.0));
        let other = Record::new(&long, AdcFormat::signed(12), clock);
        assert_eq!(movement(&record(&long), &other), Err(AverageError::ClockChanged));
        let other = Record::new(&long, AdcFormat::signed(14), record(&long).clock());
        assert_eq!(movement(&record(&long), &other), Err(AverageError::FormatChanged));
        // Nothing but rails, and nothing at all, tell nothing.
        let rails = [2047i16; 100];
        assert_eq!(movement(&record(&rails), &record(&rails)), Err(AverageError::Nothing));
        let silence = [0i16; 100];
        let still = movement(&record(&silence), &record(&silence)).unwrap();
        assert!(!still.has_moved(Seconds::ZERO) && !still.with(still).has_moved(Seconds::ZERO));
    }
}
