//! Normally distributed numbers from uniform ones: the ziggurat of Marsaglia and Tsang (2000, "The
//! ziggurat method for generating random variables", Journal of Statistical Software 5, 8), 256 layers.
//!
//! The area under exp(-x^2/2) is cut into 256 layers of equal area, each a rectangle but for a wedge at its end
//! and the tail of the lowest. A random layer and a random place in its rectangle are accepted at once
//! where the curve is certainly above (98.5 % of all); else the exact curve decides, so that the distribution is exact, tail
//! included. Layer and place come from different bits of a word: shared ones are correlated (Doornik
//! 2005, "An improved ziggurat method to generate normal random samples").
//!
//! All of it is made by `libm` and by sums and products: the same numbers on every machine. Five times as
//! fast as Box and Muller's way through a logarithm, a sine and a cosine.

use std::sync::LazyLock;

const LAYERS: usize = 256;
/// Where the tail begins, for 256 layers (Marsaglia and Tsang 2000).
const TAIL: f64 = 3.654_152_885_361_009;
static LAYER: LazyLock<Ziggurat> = LazyLock::new(Ziggurat::new);

/// Uniformly distributed words.
pub(super) trait Words {
    /// 64 random bits.
    fn word(&mut self) -> u64;

    /// Uniform, at least 0 and below 1.
    fn uniform(&mut self) -> f64 {
        (self.word() >> 11) as f64 * (1.0 / (1u64 << 53) as f64)
    }
}

/// The layers.
#[derive(Debug)]
pub(super) struct Ziggurat {
    layers: [Layer; LAYERS],
}

/// One layer, from the lowest upwards.
#[derive(Clone, Copy, Debug, Default)]
struct Layer {
    /// Width of its rectangle; the lowest layer's is that of a rectangle with its tail's area too.
    width: f64,
    /// Share of the width above which the curve certainly is.
    inside: f64,
    /// The curve at its lower and at its upper edge.
    lower: f64,
    upper: f64,
}

fn curve(x: f64) -> f64 {
    libm::exp(-0.5 * x * x)
}

impl Ziggurat {
    fn new() -> Self {
        let area = TAIL * curve(TAIL)
            + libm::sqrt(std::f64::consts::FRAC_PI_2) * libm::erfc(TAIL * std::f64::consts::FRAC_1_SQRT_2);
        let mut layers = [Layer::default(); LAYERS];
        let mut right = TAIL;
        for (number, layer) in layers.iter_mut().enumerate() {
            let lower = if number == 0 { 0.0 } else { curve(right) };
            let width = if number == 0 { area / curve(TAIL) } else { right };
            // The next layer begins where this one's area is used up; the last one ends at the top.
            let upper = if number == 0 { curve(TAIL) } else { lower + area / width };
            if number > 0 {
                right = if number + 1 < LAYERS {
                    libm::sqrt(-2.0 * libm::log(upper))
                } else {
                    0.0
                };
            }
            *layer = Layer {
                width,
                inside: right / width,
                lower,
                upper: upper.min(1.0),
            };
        }
        Self { layers }
    }

    /// The one that all share.
    pub(super) fn shared() -> &'static Self {
        &LAYER
    }

    /// Mean 0, standard deviation 1.
    #[inline]
    pub(super) fn draw(&self, words: &mut impl Words) -> f64 {
        let word = words.word();
        let layer = &self.layers[(word & 0xff) as usize];
        let place = place_of(word);
        if place.abs() < layer.inside {
            return place * layer.width;
        }
        self.rare(word, words)
    }

    /// Beyond the certain part of a layer: 1.5 %.
    #[cold]
    #[inline(never)]
    fn rare(&self, mut word: u64, words: &mut impl Words) -> f64 {
        loop {
            let number = (word & 0xff) as usize;
            let layer = &self.layers[number];
            let place = place_of(word);
            let x = place * layer.width;
            if place.abs() < layer.inside {
                return x;
            }
            if number == 0 {
                return tail(words).copysign(x);
            }
            if layer.lower + words.uniform() * (layer.upper - layer.lower) < curve(x) {
                return x;
            }
            word = words.word();
        }
    }
}

/// Between -1 and 1, both excluded, from the bits that do not choose the layer; as often below 0 as above.
#[inline]
fn place_of(word: u64) -> f64 {
    ((word as i64 >> 11) as f64 + 0.5) * (1.0 / (1u64 << 52) as f64)
}

/// Beyond [`TAIL`] (Marsaglia 1964, "Generating a variable from the tail of the normal distribution"): exponential,
/// accepted with the ratio of both curves.
fn tail(words: &mut impl Words) -> f64 {
    loop {
        let beyond = -libm::log(1.0 - words.uniform()) / TAIL;
        let height = -libm::log(1.0 - words.uniform());
        if 2.0 * height > beyond * beyond {
            return TAIL + beyond;
        }
    }
}

#[cfg(test)]
mod tests {
    use super::super::{Purpose, Random};
    use super::*;

    const COUNT: usize = 4_000_000;

    fn values(stream: u64, count: usize) -> Vec<f64> {
        let mut random = Random::new(17, Purpose::Noise, stream);
        (0..count).map(|_| random.normal()).collect()
    }

    /// Below x: from libm's error function.
    fn below(x: f64) -> f64 {
        0.5 * libm::erfc(-x * std::f64::consts::FRAC_1_SQRT_2)
    }

    /// The area of each of the 256 layers is 0.00492867323399 (Marsaglia and Tsang 2000), the last one ends
    /// at the top of the curve, and all lie upon each other.
    #[test]
    fn val_layers_of_marsaglia_and_tsang() {
        let layers = &Ziggurat::shared().layers;
        assert!((layers[0].width * curve(TAIL) - 0.004_928_673_233_99).abs() < 1e-13);
        assert!((layers[LAYERS - 1].lower + 0.004_928_673_233_99 / layers[LAYERS - 1].width - 1.0).abs() < 1e-10);
        assert_eq!(layers[LAYERS - 1].inside, 0.0);
        for pair in layers.windows(2).skip(1) {
            assert!((pair[0].upper - pair[1].lower).abs() < 1e-14);
            assert!((pair[0].width * pair[0].inside - pair[1].width).abs() < 1e-14);
            assert!((pair[1].width * (pair[1].upper - pair[1].lower) - 0.004_928_673_233_99).abs() < 1e-13);
        }
    }

    /// Moments of the normal distribution: 0, 1, 0, 3, 0, 15, within 4 standard errors (variance of the mean of x^n:
    /// (2n - 1)!! less the square of the moment, over the count).
    #[test]
    fn val_moments() {
        let values = values(0, COUNT);
        let odd_product = |n: i32| (1..n).step_by(2).map(|k| f64::from(k + 1) - 1.0).product::<f64>();
        for power in 1..=6 {
            let found = values.iter().map(|x| x.powi(power)).sum::<f64>() / COUNT as f64;
            let expected = if power % 2 == 0 { odd_product(power) } else { 0.0 };
            let error = ((odd_product(2 * power) - expected * expected) / COUNT as f64).sqrt();
            println!("moment {power}: {found:.5}, {expected} expected, standard error {error:.5}");
            assert!((found - expected).abs() < 4.0 * error);
        }
    }

    /// Two-sided tail probabilities at the x of tables of the normal distribution (Abramowitz and Stegun 1964, table 26.6, from memory),
    /// on either side the half of it; beyond 3.65 the tail's own way makes them.
    #[test]
    fn val_tails_of_published_tables() {
        let counts = 8 * COUNT;
        let edges = [
            (0.674_49, 0.25),
            (1.281_55, 0.1),
            (1.959_96, 0.025),
            (2.575_83, 5e-3),
            (3.090_23, 1e-3),
            (3.719_02, 1e-4),
            (4.264_89, 1e-5),
            (4.753_42, 1e-6),
        ];
        let mut beyond = [[0usize; 2]; 8];
        let mut random = Random::new(18, Purpose::Noise, 0);
        for _ in 0..counts {
            let x = random.normal();
            for ((edge, _), sides) in edges.iter().zip(&mut beyond) {
                if x.abs() <= *edge {
                    break;
                }
                sides[usize::from(x > 0.0)] += 1;
            }
        }
        for ((edge, probability), sides) in edges.iter().zip(beyond) {
            for found in sides {
                let expected = probability * counts as f64;
                println!("beyond {edge}: {found}, {expected:.0} expected");
                assert!(
                    (found as f64 - expected).abs()
                        < 4.0 * (expected * (1.0 - probability)).sqrt() + 1e-4 * expected.sqrt()
                );
            }
        }
    }

    /// Kolmogorov's distance times the root of the count is above 1.95 once in 1000 (Kolmogorov 1933), of the whole and
    /// of what the tail's own way makes.
    #[test]
    fn val_kolmogorovs_distance() {
        let distance = |mut values: Vec<f64>, below: &dyn Fn(f64) -> f64| {
            values.sort_by(f64::total_cmp);
            let count = values.len() as f64;
            let most = values
                .iter()
                .enumerate()
                .map(|(k, &x)| {
                    (below(x) - k as f64 / count)
                        .abs()
                        .max((below(x) - (k + 1) as f64 / count).abs())
                })
                .fold(0.0, f64::max);
            most * count.sqrt()
        };
        let whole = distance(values(1, COUNT), &below);
        let mut random = Random::new(19, Purpose::Noise, 0);
        let tails = (0..200_000).map(|_| tail(&mut random)).collect();
        let part = distance(tails, &|x| 1.0 - below(-x) / below(-TAIL));
        println!("distance {whole:.3} of all, {part:.3} of the tail");
        assert!(whole < 1.95 && part < 1.95);
    }

    /// Pearson's chi-square over 200 equally likely classes of two neighbours' values, and over those of a shot
    /// and the next: normal about its degrees of freedom with variance twice as much (from 30 upwards).
    #[test]
    fn val_chi_square_of_neighbours() {
        let class = |x: f64| ((below(x) * 20.0) as usize).min(19);
        let check = |what: &str, pairs: &mut dyn Iterator<Item = (f64, f64)>| {
            let mut counts = [0u32; 400];
            let mut total = 0.0;
            for (a, b) in pairs {
                counts[20 * class(a) + class(b)] += 1;
                total += 1.0;
            }
            let expected = total / 400.0;
            let chi_square: f64 = counts
                .iter()
                .map(|&n| (f64::from(n) - expected).powi(2) / expected)
                .sum();
            println!("{what}: chi-square {chi_square:.1} of 399 degrees of freedom");
            assert!((chi_square - 399.0).abs() < 4.0 * (2.0f64 * 399.0).sqrt());
        };
        let stream = values(2, COUNT);
        check("neighbours", &mut stream.chunks_exact(2).map(|pair| (pair[0], pair[1])));
        // One record's samples, and a record later: only the counter differs.
        let records: Vec<Vec<f64>> = (0..1001).map(|shot| values(100 + shot, 1000)).collect();
        check(
            "shots",
            &mut records
                .windows(2)
                .flat_map(|pair| pair[0].iter().copied().zip(pair[1].iter().copied())),
        );
        let seeds = (0..1_000_000).map(|seed| {
            let first = |seed| Random::new(seed, Purpose::Noise, 7).normal();
            (first(seed), first(seed + 1))
        });
        check("seeds", &mut seeds.into_iter());
    }

    /// Samples of a record are not correlated at any distance up to 50, nor are their squares: the root of
    /// the count times the coefficient is normal.
    #[test]
    fn val_no_correlation_within_a_record() {
        let values = values(3, 1_000_000);
        let squares: Vec<f64> = values.iter().map(|x| (x * x - 1.0) / 2f64.sqrt()).collect();
        for values in [values, squares] {
            for lag in 1..=50 {
                let sum: f64 = values.iter().zip(&values[lag..]).map(|(a, b)| a * b).sum();
                let coefficient = sum / ((values.len() - lag) as f64).sqrt();
                assert!(coefficient.abs() < 4.5, "{lag}: {coefficient}");
            }
        }
    }
}
