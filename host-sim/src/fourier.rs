//! Complex numbers and the discrete Fourier transform, the same to the last bit on every machine.
//!
//! A library's transform picks its kernel by the processor, and takes its factors from the system's
//! sine: both differ in the last digit between machines. Records made here must not, so the transform
//! is a plain one of radix 2 with factors from `libm`.

use std::cell::RefCell;
use std::f64::consts::TAU;
use std::ops::{Add, AddAssign, Mul, Sub};
use std::rc::Rc;
use std::sync::Arc;

/// Factors of a transform, shared by all of the same length in a thread.
type Factors = Arc<[Complex]>;

/// The last few results of a costly function, by what they depend on.
pub(crate) struct Kept<K, V>(RefCell<Vec<(K, Rc<V>)>>);

impl<K: PartialEq, V: Clone> Kept<K, V> {
    /// How many are kept.
    const MOST: usize = 4;

    pub(crate) const fn new() -> Self {
        Self(RefCell::new(Vec::new()))
    }

    /// The result for `key`, made if it is not there.
    pub(crate) fn get(&self, key: K, make: impl FnOnce() -> V) -> V {
        let found = self
            .0
            .borrow()
            .iter()
            .find(|(known, _)| *known == key)
            .map(|(_, value)| value.clone());
        let value = found.unwrap_or_else(|| {
            let value = Rc::new(make());
            let mut kept = self.0.borrow_mut();
            kept.truncate(Self::MOST - 1);
            kept.insert(0, (key, value.clone()));
            value
        });
        (*value).clone()
    }
}

/// A complex number.
#[derive(Clone, Copy, Debug, PartialEq, Default)]
pub struct Complex {
    /// Real part.
    pub re: f64,
    /// Imaginary part.
    pub im: f64,
}

impl Complex {
    /// Zero.
    pub const ZERO: Self = Self { re: 0.0, im: 0.0 };

    /// From real and imaginary part.
    #[must_use]
    pub const fn new(re: f64, im: f64) -> Self {
        Self { re, im }
    }

    /// `magnitude * exp(j angle)`, the angle in radians.
    #[must_use]
    pub fn polar(magnitude: f64, angle: f64) -> Self {
        let (sine, cosine) = libm::sincos(angle);
        Self::new(magnitude * cosine, magnitude * sine)
    }

    /// The magnitude.
    #[must_use]
    pub fn magnitude(self) -> f64 {
        (self.re * self.re + self.im * self.im).sqrt()
    }

    /// The conjugate.
    #[must_use]
    pub const fn conjugate(self) -> Self {
        Self::new(self.re, -self.im)
    }

    /// Times a real factor.
    #[must_use]
    pub fn scaled(self, factor: f64) -> Self {
        Self::new(self.re * factor, self.im * factor)
    }
}

impl Add for Complex {
    type Output = Self;
    fn add(self, other: Self) -> Self {
        Self::new(self.re + other.re, self.im + other.im)
    }
}

impl AddAssign for Complex {
    fn add_assign(&mut self, other: Self) {
        *self = *self + other;
    }
}

impl Sub for Complex {
    type Output = Self;
    fn sub(self, other: Self) -> Self {
        Self::new(self.re - other.re, self.im - other.im)
    }
}

impl Mul for Complex {
    type Output = Self;
    fn mul(self, other: Self) -> Self {
        Self::new(
            self.re * other.re - self.im * other.im,
            self.re * other.im + self.im * other.re,
        )
    }
}

/// `exp(j step k)` for k = 0, 1, 2 and so on: one multiplication each, set right again from time to
/// time so that rounding does not build up.
#[derive(Clone, Copy, Debug)]
pub struct Rotation {
    step: f64,
    turn: Complex,
    now: Complex,
    count: u32,
}

impl Rotation {
    /// Starts at `exp(j step first)`.
    #[must_use]
    pub fn new(step: f64, first: u32) -> Self {
        Self {
            step,
            turn: Complex::polar(1.0, step),
            now: Complex::polar(1.0, step * f64::from(first)),
            count: first,
        }
    }
}

impl Iterator for Rotation {
    type Item = Complex;
    fn next(&mut self) -> Option<Complex> {
        let value = self.now;
        self.count = self.count.wrapping_add(1);
        self.now = if self.count.is_multiple_of(32) {
            Complex::polar(1.0, self.step * f64::from(self.count))
        } else {
            self.now * self.turn
        };
        Some(value)
    }
}

/// Transforms between a real record and its spectrum.
#[derive(Clone, Debug)]
pub struct RealTransform {
    length: usize,
    /// `exp(j 2 pi k / length)` for k below half the length.
    factors: Factors,
    /// The same for each step of the transform in a row: `exp(j pi k / half)` for k below half, for
    /// half = 1, 2, 4 ...
    steps: Factors,
    scratch: Vec<Complex>,
}

impl RealTransform {
    /// For records of `length` samples, rounded up to a power of two, at least 4.
    #[must_use]
    pub fn new(length: usize) -> Self {
        let length = length.max(4).next_power_of_two();
        thread_local! {
            static KEPT: Kept<usize, (Factors, Factors)> = const { Kept::new() };
        }
        let (factors, steps) = KEPT.with(|kept| kept.get(length, || Self::factors(length)));
        Self {
            length,
            factors,
            steps,
            scratch: vec![Complex::ZERO; length / 2],
        }
    }

    fn factors(length: usize) -> (Factors, Factors) {
        let factors: Factors = (0..length / 2)
            .map(|k| Complex::polar(1.0, TAU * k as f64 / length as f64))
            .collect();
        let (mut steps, mut half) = (Vec::with_capacity(length / 2), 1);
        while half < length / 2 {
            steps.extend(factors.iter().step_by(length / 2 / half).take(half));
            half *= 2;
        }
        (factors, steps.into())
    }

    /// Samples of a record.
    #[must_use]
    pub const fn length(&self) -> usize {
        self.length
    }

    /// The real signal whose spectrum has the given bins from bin 0 on; bins that are missing are
    /// zero. Sum over both signs of frequency, not divided by the length: a bin `k` of `a` gives
    /// `2 Re(a exp(j 2 pi k i / length))`, bin 0 its real part.
    pub fn to_time(&mut self, spectrum: &[Complex], signal: &mut [f64]) {
        let half = self.length / 2;
        let bin = |k: usize| {
            let value = spectrum.get(k).copied().unwrap_or(Complex::ZERO);
            // The outermost bins have no partner at the other sign of frequency.
            if k == 0 || k == half {
                Complex::new(value.re, 0.0)
            } else {
                value
            }
        };
        // Even samples become the real, odd ones the imaginary part of a transform of half the length.
        for (k, slot) in self.scratch.iter_mut().enumerate() {
            let (here, mirrored) = (bin(k), bin(half - k).conjugate());
            let odd = (here - mirrored) * self.factors[k];
            let even = here + mirrored;
            *slot = Complex::new(even.re - odd.im, even.im + odd.re);
        }
        transform(&mut self.scratch, &self.steps);
        for (pair, value) in signal.chunks_mut(2).zip(&self.scratch) {
            pair[0] = value.re;
            if let Some(second) = pair.get_mut(1) {
                *second = value.im;
            }
        }
    }
}

impl RealTransform {
    /// The spectrum of a real signal of the transform's length (shorter ones are filled with zeros):
    /// sum of `signal[i] exp(-j 2 pi k i / length)` for k = 0 up to half the length.
    pub fn to_spectrum(&mut self, signal: &[f64]) -> Vec<Complex> {
        let half = self.length / 2;
        let sample = |i: usize| signal.get(i).copied().unwrap_or(0.0);
        // Conjugated on the way in and out, the transform with +j becomes the one with -j.
        for (n, slot) in self.scratch.iter_mut().enumerate() {
            *slot = Complex::new(sample(2 * n), -sample(2 * n + 1));
        }
        transform(&mut self.scratch, &self.steps);
        let packed = |k: usize| {
            self.scratch
                .get(k % half)
                .map_or(Complex::ZERO, |value| value.conjugate())
        };
        (0..=half)
            .map(|k| {
                let (here, mirrored) = (packed(k), packed(half - k).conjugate());
                let (even, odd) = ((here + mirrored).scaled(0.5), (here - mirrored).scaled(0.5));
                // exp(-j 2 pi k / length) times odd / j.
                let turn = self.factors.get(k).map_or(Complex::new(-1.0, 0.0), |f| f.conjugate());
                even + turn * Complex::new(odd.im, -odd.re)
            })
            .collect()
    }
}

/// In place, sign +j, radix 2; `steps` are the factors of each step, one after the other.
fn transform(values: &mut [Complex], steps: &[Complex]) {
    let length = values.len();
    if length < 2 {
        return;
    }
    let shift = usize::BITS - length.trailing_zeros();
    for index in 0..length {
        let mirrored = index.reverse_bits() >> shift;
        if index < mirrored {
            values.swap(index, mirrored);
        }
    }
    // The first step's only factor is 1.
    for pair in values.chunks_exact_mut(2) {
        if let [low, high] = pair {
            (*low, *high) = (*low + *high, *low - *high);
        }
    }
    let (mut half, mut left) = (2, steps.get(1..).unwrap_or_default());
    // Two steps in one go: the same sums and products with half the way to the memory.
    while 2 * half < length {
        let (first, rest) = left.split_at(half);
        let (second, rest) = rest.split_at(half);
        let (third, rest) = rest.split_at(half);
        for block in values.chunks_exact_mut(4 * half) {
            let (low, high) = block.split_at_mut(2 * half);
            let ((a, b), (c, d)) = (low.split_at_mut(half), high.split_at_mut(half));
            let quarters = a.iter_mut().zip(b).zip(c.iter_mut().zip(d));
            let factors = first.iter().zip(second.iter().zip(third));
            for (((a, b), (c, d)), (&first, (&second, &third))) in quarters.zip(factors) {
                let (turned_b, turned_d) = (*b * first, *d * first);
                let (sum, difference) = (*a + turned_b, *a - turned_b);
                let turned_sum = (*c + turned_d) * second;
                let turned_difference = (*c - turned_d) * third;
                (*a, *c) = (sum + turned_sum, sum - turned_sum);
                (*b, *d) = (difference + turned_difference, difference - turned_difference);
            }
        }
        left = rest;
        half *= 4;
    }
    if half < length {
        let (low, high) = values.split_at_mut(half);
        for ((low, high), &factor) in low.iter_mut().zip(high).zip(left) {
            let turned = *high * factor;
            (*low, *high) = (*low + turned, *low - turned);
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Against the sum that defines it.
    #[test]
    fn equals_the_defining_sum() {
        for length in [4, 8, 64, 256] {
            let spectrum: Vec<Complex> = (0..=length / 2)
                .map(|k| Complex::polar(1.0 / (1 + k) as f64, (k * k) as f64 * 0.7 + 0.3))
                .collect();
            let mut transform = RealTransform::new(length);
            let mut signal = vec![0.0; length];
            transform.to_time(&spectrum, &mut signal);
            for (i, &value) in signal.iter().enumerate() {
                let expected: f64 = (0..=length / 2)
                    .map(|k| {
                        let turned = spectrum[k] * Complex::polar(1.0, TAU * (k * i) as f64 / length as f64);
                        if k == 0 {
                            spectrum[0].re
                        } else if k == length / 2 {
                            // The bin at half the sample rate counts once, with its real part.
                            spectrum[k].re * if i % 2 == 0 { 1.0 } else { -1.0 }
                        } else {
                            2.0 * turned.re
                        }
                    })
                    .sum();
                assert!((value - expected).abs() < 1e-11, "{length} {i}: {value} {expected}");
            }
        }
    }

    #[test]
    fn there_and_back() {
        for length in [4, 32, 512] {
            let signal: Vec<f64> = (0..length).map(|i| ((i * i * 7 + 3) % 11) as f64 - 4.0).collect();
            let mut transform = RealTransform::new(length);
            let spectrum = transform.to_spectrum(&signal);
            for (k, &bin) in spectrum.iter().enumerate() {
                let mut expected = Complex::ZERO;
                for (i, &value) in signal.iter().enumerate() {
                    expected += Complex::polar(value, -TAU * (k * i) as f64 / length as f64);
                }
                assert!((bin - expected).magnitude() < 1e-9, "{length} {k}");
            }
            let mut back = vec![0.0; length];
            transform.to_time(&spectrum, &mut back);
            for (a, b) in back.iter().zip(&signal) {
                assert!((a / length as f64 - b).abs() < 1e-12);
            }
        }
    }

    #[test]
    fn rotation_does_not_drift() {
        let step = -1.234_567;
        for (k, value) in Rotation::new(step, 5).take(5000).enumerate() {
            let expected = Complex::polar(1.0, step * (k + 5) as f64);
            assert!((value - expected).magnitude() < 1e-11);
        }
    }
}
