//! Noise below the converter's step, from how often the codes change where nothing else does.
//!
//! **In**: the quiet stretches of a single shot. **Out**: [`Rest`]: the variance that the codes have there, and the one that they
//! have under an echo.
//!
//! A quiet stretch rests at one place between two codes. With little noise its codes hardly change if that is a step's middle,
//! and by half a step if it is the edge: their root mean square says 0.1 or 0.5 steps of a noise of 0.2. Under an echo,
//! which passes all places, rounding adds 1/12 of a squared step whatever the noise. But the shares of the codes below
//! each edge tell place and noise apart: for normal noise they are Φ((edge - place) / σ), so σ is the distance of two edges over the
//! distance of their normal quantiles (probit analysis: Bliss 1934, from memory).
//!
//! Not for averages, whose codes are finer than the converter's, and of no use above 0.6 steps, where rounding is as good
//! as independent of the noise (Widrow & Kollar, Quantization Noise, 2008; from memory).

use crate::echo::noise::{Reached, TimingNoise, quiet_places};
use crate::math;
use crate::record::rounds::TwoRounds;
use crate::record::{Record, SampleRange};

/// Root mean square of the codes, in steps, from which on it tells the noise itself.
const OF_USE_BELOW: f32 = 0.6;
/// Codes that are told apart, the first sample's in the middle.
const CODES: usize = 9;
/// Fewest samples that tell anything.
const FEWEST: u32 = 200;
/// Share of the samples beyond those codes that makes them no noise below a step.
const BEYOND: u32 = 100;
/// Samples that make an edge's share known well enough.
const WELL_KNOWN: u32 = 4;
/// The scan's variance may exceed that of the codes by so much by chance; what is more is noise of the probe's own band.
const CHANCE: f32 = 1.1;
/// Variance of rounding, in squared steps.
const ROUNDING: f32 = 1.0 / 12.0;

/// Variances in squared codes.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Rest {
    /// Of the codes where nothing but noise is; not below that of rounding, as the scan's is not.
    pub at_rest: f32,
    /// Of what noise and rounding do to a sample under an echo.
    pub moving: f32,
}

impl Rest {
    /// What a noise that was measured at rest is under an echo.
    #[must_use]
    pub fn under_echo(&self, noise: f32) -> f32 {
        math::sqrt(self.variance(noise * noise))
    }

    fn variance(&self, at_rest: f32) -> f32 {
        self.moving + math::larger(at_rest - CHANCE * self.at_rest, 0.0)
    }

    /// The same for the noise of arrivals.
    pub(crate) fn timing(&self, noise: &mut TimingNoise) {
        noise.change_variances(|variance| self.variance(variance));
    }
}

/// Is this a single shot whose noise, as the scan has found it, is so small that rounding hides it?
#[must_use]
pub fn is_below_the_step(record: &Record<'_>, noise: f32) -> bool {
    let format = record.format();
    noise < OF_USE_BELOW && format.shots <= 1 && format.codes_per_step == 1.0
}

/// Looks at such a shot; `None` where the codes do not tell: too few quiet samples, codes that do not change at all, or
/// that wander.
#[must_use]
pub fn rest(record: &Record<'_>, range: SampleRange, echoes: &[Reached]) -> Option<Rest> {
    let code = |place: usize| record.codes().get(place).map(|&code| i32::from(code));
    count(code, range, echoes)
}

/// [`rest`] for the mean of two rounds of one shot each, whose sums and differences give the codes of the first back.
#[must_use]
pub fn rest_of_rounds(rounds: &TwoRounds<'_>, range: SampleRange, echoes: &[Reached], noise: f32) -> Option<Rest> {
    let (mean, difference) = (rounds.mean(), rounds.difference());
    let format = mean.format();
    if !(noise * noise < 2.0 * OF_USE_BELOW * OF_USE_BELOW && format.shots == 2 && format.codes_per_step == 2.0) {
        return None;
    }
    let code = |place: usize| {
        let (sum, difference) = (*mean.codes().get(place)?, *difference.codes().get(place)?);
        Some((i32::from(sum) - i32::from(difference)) >> 1)
    };
    let of_one = count(code, range, echoes)?;
    Some(Rest {
        at_rest: math::larger(2.0 * of_one.at_rest, 4.0 * ROUNDING),
        moving: 2.0 * of_one.moving,
    })
}

#[inline(never)]
fn count(code: impl Fn(usize) -> Option<i32>, range: SampleRange, echoes: &[Reached]) -> Option<Rest> {
    let mut counts = [0u32; CODES];
    let (mut middle, mut all) = (None, 0u32);
    quiet_places(
        range,
        |_| 1,
        echoes,
        |place| {
            let Some(code) = code(place as usize) else {
                return;
            };
            let lowest = *middle.get_or_insert(code) - (CODES / 2) as i32;
            all += 1;
            let slot = usize::try_from(code - lowest).ok();
            if let Some(count) = slot.and_then(|slot| counts.get_mut(slot)) {
                *count += 1;
            }
        },
    );
    of_counts(&counts, all)
}

/// From how often each of the codes came.
fn of_counts(counts: &[u32; CODES], all: u32) -> Option<Rest> {
    let seen: u32 = counts.iter().sum();
    if seen < FEWEST || (all - seen).saturating_mul(BEYOND) > all {
        return None;
    }
    let total = seen as f32;
    let (mut sum, mut squares, mut code) = (0u32, 0u32, 0u32);
    for &count in counts {
        sum += count * code;
        squares += count * code * code;
        code += 1;
    }
    let mean = sum as f32 / total;
    let noise = match edges(counts, seen, WELL_KNOWN).or_else(|| edges(counts, seen, 1))? {
        (first, last) if last.code > first.code => (last.code - first.code) / (last.quantile - first.quantile),
        // Two codes: of the edges to either side no sample says where they are, but that they are far.
        (only, _) => 1.0 / (only.quantile.abs() + math::normal_quantile_of_tail(0.5 / total)),
    };
    Some(Rest {
        at_rest: math::larger(squares as f32 / total - mean * mean, ROUNDING),
        moving: noise * noise + ROUNDING,
    })
}

/// The edge above a code, and how many standard deviations above the resting place it lies.
#[derive(Clone, Copy)]
struct Edge {
    code: f32,
    quantile: f32,
}

/// Lowest and highest edge that so many samples lie on either side of; `None` if that is true of none, or of one alone
/// although more is asked than a single sample.
#[inline(never)]
fn edges(counts: &[u32; CODES], seen: u32, least: u32) -> Option<(Edge, Edge)> {
    let (mut below, mut code) = (0, 0.0);
    let mut found: Option<(Edge, Edge)> = None;
    for &count in counts {
        below += count;
        if below >= least && seen - below >= least {
            let edge = Edge {
                code,
                quantile: math::normal_quantile_of_tail(1.0 - below as f32 / seen as f32),
            };
            found = Some((found.map_or(edge, |(first, _)| first), edge));
        }
        code += 1.0;
    }
    found.filter(|(first, last)| least <= 1 || last.code > first.code)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::record::{AdcFormat, SampleClock};
    use crate::test_support::Noise as Normals;
    use crate::units::Hertz;
    use std::vec::Vec;

    fn look(codes: &[i16], noise: f32) -> Option<Rest> {
        let record = Record::new(codes, AdcFormat::signed(12), SampleClock::new(Hertz::from_mhz(50.0)));
        let range = SampleRange {
            start: 0,
            end: codes.len() as u32,
        };
        is_below_the_step(&record, noise)
            .then(|| rest(&record, range, &[]))
            .flatten()
    }

    #[test]
    fn noise_is_told_wherever_between_two_codes_it_rests() {
        let mut normals = Normals::new(17);
        for sigma in [0.2, 0.3, 0.4, 0.5] {
            for offset in [0.0, 0.2, 0.35, 0.5] {
                let codes: Vec<i16> = (0..4000)
                    .map(|_| math::round_to_i32(offset + sigma * normals.normal()) as i16)
                    .collect();
                let found = look(&codes, 0.5).unwrap();
                let noise = math::sqrt(found.moving - ROUNDING);
                std::println!(
                    "{sigma} steps at {offset}: {noise:.3}, at rest {:.3}",
                    math::sqrt(found.at_rest)
                );
                // Between two codes a fifth of a step never reaches the next ones: only that they are far is known then.
                let above = if sigma < 0.3 { 0.4 } else { 0.1 };
                assert!(
                    (-0.1..above).contains(&(noise / sigma - 1.0)),
                    "{sigma} {offset} {noise}"
                );
                assert!((found.under_echo(math::sqrt(found.at_rest)) - math::sqrt(found.moving)).abs() < 1e-6);
            }
        }
    }

    #[test]
    fn by_hand() {
        // 100, 800, 100: edges at -1.2816 and 1.2816, so the noise is 1 / 2.5631 steps.
        let rest = of_counts(&[0, 0, 0, 100, 800, 100, 0, 0, 0], 1000).unwrap();
        assert!((math::sqrt(rest.moving - ROUNDING) - 0.390_15).abs() < 1e-4);
        assert!((rest.at_rest - 0.2).abs() < 1e-4);
        // Half of them on either side of one edge: 1 / (0 + 3.2905).
        let rest = of_counts(&[0, 0, 0, 500, 500, 0, 0, 0, 0], 1000).unwrap();
        assert!((math::sqrt(rest.moving - ROUNDING) - 0.3039).abs() < 1e-4);
        // Codes that do not change, too few, and too many elsewhere.
        assert_eq!(of_counts(&[0, 0, 0, 0, 1000, 0, 0, 0, 0], 1000), None);
        assert_eq!(of_counts(&[0, 0, 0, 50, 50, 50, 0, 0, 0], 150), None);
        assert_eq!(of_counts(&[0, 0, 0, 500, 500, 0, 0, 0, 0], 1020), None);
    }

    #[test]
    fn loud_records_and_averages_are_not_looked_at() {
        let codes: Vec<i16> = (0..1000).map(|i| i % 2).collect();
        assert!(look(&codes, 0.5).is_some() && look(&codes, 0.61).is_none() && look(&codes, f32::NAN).is_none());
        assert!(look(&[], 0.1).is_none());
    }
}
