//! Quantiles of values that are met one by one, in bounded memory.
//!
//! Up to [`MOST_EXACT`] values are kept: their quantiles are exact, interpolated between neighbours (type 7 of
//! Hyndman and Fan 1996, The American Statistician 50, 361; what NumPy and R do unless told otherwise). More are
//! counted in buckets whose limits grow by a constant ratio, for either sign: a quantile is then within
//! [`ACCURACY`] of a value that was met, relative to that value (Masson, Rim and Lee 2019, DDSketch,
//! Proceedings of the VLDB Endowment 12, 2195). The smallest and the largest value are always exact, and the order
//! of the values changes nothing.

use std::collections::BTreeMap;

/// As many values are kept as they are.
pub const MOST_EXACT: usize = 512;
/// Relative accuracy of a quantile of more values.
pub const ACCURACY: f64 = 0.005;
/// Smaller values count as 0: a picometre, where values are micrometres.
const SMALLEST: f64 = 1e-6;
/// Larger ones count as this.
const LARGEST: f64 = 1e9;

/// The values, or how many of them fell into which bucket.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Quantiles {
    count: u64,
    exact: Vec<f64>,
    buckets: BTreeMap<i16, u64>,
    limits: Option<(f64, f64)>,
}

/// Upper limit of a bucket over its lower one.
fn ratio() -> f64 {
    (1.0 + ACCURACY) / (1.0 - ACCURACY)
}

fn bucket(value: f64) -> i16 {
    let size = value.abs();
    if size <= SMALLEST {
        return 0;
    }
    let number = libm::ceil(libm::log(size.min(LARGEST) / SMALLEST) / libm::log(ratio()));
    // 1e15 in steps of 1 % are fewer than 3500.
    let number = number as i16;
    if value < 0.0 { -number } else { number }
}

/// The value that is as far, relatively, from one end of the bucket as from the other.
fn middle(bucket: i16) -> f64 {
    if bucket == 0 {
        return 0.0;
    }
    let upper = SMALLEST * libm::pow(ratio(), f64::from(bucket.unsigned_abs()));
    let value = 2.0 * upper / (1.0 + ratio());
    if bucket < 0 { -value } else { value }
}

impl Quantiles {
    /// One more value; what is no number counts as infinite.
    pub fn add(&mut self, value: f64) {
        let value = if value.is_nan() { f64::INFINITY } else { value };
        self.count += 1;
        let (smallest, largest) = self.limits.unwrap_or((value, value));
        self.limits = Some((smallest.min(value), largest.max(value)));
        if self.buckets.is_empty() && self.exact.len() < MOST_EXACT {
            self.exact.push(value);
            return;
        }
        for value in std::mem::take(&mut self.exact).into_iter().chain([value]) {
            *self.buckets.entry(bucket(value)).or_insert(0) += 1;
        }
    }

    /// How many values.
    #[must_use]
    pub const fn count(&self) -> u64 {
        self.count
    }

    /// Are all values kept as they are?
    #[must_use]
    pub fn is_exact(&self) -> bool {
        self.buckets.is_empty()
    }

    /// The value below which this share of the values lies, from 0 to 1; `None` without values.
    #[must_use]
    pub fn quantile(&self, share: f64) -> Option<f64> {
        let (smallest, largest) = self.limits?;
        let place = share.clamp(0.0, 1.0) * (self.count - 1) as f64;
        let below = libm::floor(place);
        if self.is_exact() {
            let mut sorted = self.exact.clone();
            sorted.sort_by(f64::total_cmp);
            let low = *sorted.get(below as usize)?;
            let high = sorted.get(below as usize + 1).copied().unwrap_or(low);
            let part = place - below;
            return Some(if part == 0.0 { low } else { low + part * (high - low) });
        }
        let mut met = 0;
        let reached = |(_, count): &(&i16, &u64)| {
            met += **count;
            met > below as u64
        };
        let (number, _) = self.buckets.iter().find(reached)?;
        Some(middle(*number).clamp(smallest, largest))
    }

    /// The value furthest from 0, with its sign.
    #[must_use]
    pub fn worst(&self) -> Option<f64> {
        let (smallest, largest) = self.limits?;
        Some(if -smallest > largest { smallest } else { largest })
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn of(values: impl IntoIterator<Item = f64>) -> Quantiles {
        let mut quantiles = Quantiles::default();
        values.into_iter().for_each(|value| quantiles.add(value));
        quantiles
    }

    /// By hand from -9, -1, 1, 2, 3, 4, 5, 6: place 7 p, so -9 + 0.175 x 8, the middle of 2 and 3, and 5 + 0.825 x 1.
    #[test]
    fn val_few_are_exact() {
        let few = of([3.0, -1.0, 4.0, 1.0, 5.0, -9.0, 2.0, 6.0]);
        for (share, value) in [(0.0, -9.0), (0.025, -7.6), (0.5, 2.5), (0.975, 5.825), (1.0, 6.0)] {
            let got = few.quantile(share).unwrap();
            assert!((got - value).abs() < 1e-12, "{share}: {got}");
        }
        assert_eq!((few.count(), few.is_exact(), few.worst()), (8, true, Some(-9.0)));
        let none = Quantiles::default();
        assert_eq!((none.quantile(0.5), none.worst()), (None, None));
    }

    /// Quantiles of distributions in closed form: uniform, and the log-uniform, whose tails span eight decades.
    #[test]
    fn val_many_are_within_the_accuracy() {
        let count = 40_001;
        let evenly = (0..count).map(|i| f64::from(i) / f64::from(count - 1));
        // In another order the same.
        let shuffled = (0..count).map(|i| f64::from((i * 7919) % count) / f64::from(count - 1));
        let spread = |share: f64| libm::pow(10.0, 8.0 * share - 4.0);
        for (name, value) in [
            ("uniform", (|share| 10.0 * share - 3.0) as fn(f64) -> f64),
            ("log-uniform", |share| libm::pow(10.0, 8.0 * share - 4.0)),
            ("negative", |share| -libm::pow(10.0, 4.0 - 8.0 * share)),
        ] {
            let many = of(evenly.clone().map(value));
            assert_eq!(many, of(shuffled.clone().map(value)), "{name}");
            assert!(!many.is_exact() && many.buckets.len() < 4000);
            for share in [0.0, 0.001, 0.025, 0.25, 0.5, 0.9, 0.975, 1.0] {
                let (got, wanted) = (many.quantile(share).unwrap(), value(share));
                // The accuracy, and one value more or less.
                let step = (value((share + 2.5e-5).min(1.0)) - value((share - 2.5e-5).max(0.0))).abs();
                let allowed = 1.001 * ACCURACY * wanted.abs() + step;
                assert!((got - wanted).abs() <= allowed, "{name} {share}: {got} for {wanted}");
            }
        }
        assert!((of(evenly.map(spread)).worst().unwrap() - 1e4).abs() < 1e-6);
    }

    #[test]
    fn what_is_no_number_is_infinitely_wrong() {
        let mut values: Vec<f64> = vec![0.0, -1e-9, 1e300, f64::NAN, f64::NEG_INFINITY];
        values.extend((0..1000).map(|i| f64::from(i % 7) - 3.0));
        let many = of(values);
        assert_eq!(many.worst(), Some(f64::INFINITY));
        assert!((many.quantile(0.5).unwrap()).abs() < 1e-9);
    }
}
