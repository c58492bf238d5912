//! The converter: rounding and clipping, and the errors of its steps.

use super::{Purpose, Random};
use crate::scene::ConverterErrors;
use std::f64::consts::FRAC_1_SQRT_2;

/// A converter with signed codes, full scale 2^(bits-1), its zero in the middle of a step.
#[derive(Clone, Debug, PartialEq)]
pub struct Converter {
    bits: u8,
    /// Where each code but the lowest begins, in steps; empty where that is half a step below the code.
    levels: Vec<f64>,
    offset: f64,
    set: u32,
    cleared: u32,
}

impl Converter {
    /// An ideal one of 2 to 16 bits.
    #[must_use]
    pub fn new(bits: u8) -> Self {
        Self {
            bits: bits.clamp(2, 16),
            levels: Vec::new(),
            offset: 0.0,
            set: 0,
            cleared: 0,
        }
    }

    /// One with the errors of a scene, as the specimen has them.
    ///
    /// The smooth departure is a mixture of a bow and an S, zero at the end points. Each level is then off
    /// by a normal error of its own, which makes the widths of the steps err by sqrt(2) times as much; a
    /// code that never comes has a step of no width. Levels stay in order.
    #[must_use]
    pub fn with_errors(bits: u8, errors: &ConverterErrors, specimen: u32) -> Self {
        let mask = |bits: &[u8]| bits.iter().fold(0, |mask, &bit| mask | 1u32 << bit.min(15));
        let mut made = Self {
            offset: errors.offset_steps,
            set: mask(&errors.bits_stuck_high),
            cleared: mask(&errors.bits_stuck_low),
            ..Self::new(bits)
        };
        let (integral, differential) = (
            errors.integral_nonlinearity_steps,
            errors.differential_nonlinearity_steps,
        );
        if integral == 0.0 && differential == 0.0 && errors.missing_codes_percent == 0.0 {
            return made;
        }
        let full_scale = made.full_scale();
        let count = (1usize << made.bits) - 1;
        let draw = |number| Random::new(u64::from(specimen), Purpose::Specimen, number);
        let mut shape = draw(0);
        let (bow, bend) = (shape.normal(), shape.normal());
        let departure: Vec<f64> = (0..count)
            .map(|k| {
                let x = 2.0 * k as f64 / (count - 1).max(1) as f64 - 1.0;
                (bow + bend * 2.6 * x) * (1.0 - x * x)
            })
            .collect();
        let peak = departure.iter().map(|x| x.abs()).fold(1e-9, f64::max);
        let mut each = draw(1);
        made.levels = departure
            .iter()
            .enumerate()
            .map(|(k, x)| {
                let ideal = k as f64 - full_scale + 0.5;
                ideal + integral * x / peak + differential * FRAC_1_SQRT_2 * each.normal()
            })
            .collect();
        made.levels.sort_by(f64::total_cmp);
        let mut lost = draw(2);
        for k in 1..count {
            if 100.0 * lost.uniform() < errors.missing_codes_percent {
                made.levels[k] = made.levels[k - 1];
            }
        }
        made
    }

    /// Codes from zero to full scale.
    #[must_use]
    #[inline]
    pub fn full_scale(&self) -> f64 {
        f64::from(1u32 << (self.bits - 1))
    }

    /// The code of a value given in steps: rounded to the nearest, clipped to -full scale to full
    /// scale - 1.
    #[must_use]
    #[inline]
    pub fn code(&self, steps: f64) -> i16 {
        let full_scale = self.full_scale();
        let steps = steps + self.offset;
        let code = if self.levels.is_empty() {
            // The floor of it, without the call that a processor without such an instruction makes.
            let value = (steps + 0.5).clamp(-full_scale, full_scale - 1.0);
            let cut = value as i32;
            cut - i32::from(f64::from(cut) > value)
        } else {
            self.levels.partition_point(|&level| level <= steps) as i32 - full_scale as i32
        };
        if self.set | self.cleared == 0 {
            return code as i16;
        }
        let above_lowest = (code + full_scale as i32) as u32;
        let stuck = (above_lowest | self.set) & !self.cleared;
        (stuck as i32 - full_scale as i32) as i16
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use std::f64::consts::{PI, TAU};

    #[test]
    fn converter_rounds_and_clips() {
        let converter = Converter::new(12);
        assert_eq!(converter.full_scale(), 2048.0);
        let codes = [-0.5, -0.51, 0.49, 0.5, 2046.6, 1e9, -1e9, f64::INFINITY];
        assert_eq!(
            codes.map(|value| converter.code(value)),
            [0, -1, 0, 1, 2047, 2047, -2048, 2047]
        );
        assert_eq!(Converter::new(16).code(-1e9), i16::MIN);
    }

    /// Rounding noise is step / sqrt(12) (Bennett 1948), a full-scale sine's ratio to it 6.02 N + 1.76 dB.
    #[test]
    fn val_rounding_noise() {
        for bits in [8, 12, 16] {
            let converter = Converter::new(bits);
            let peak = converter.full_scale() - 1.0;
            let count = 200_000;
            // Of a ramp, and of a sine, which rests where it turns.
            let error = |wave: &dyn Fn(f64) -> f64| {
                let sum: f64 = (0..count)
                    .map(|i| {
                        let value = peak * wave(f64::from(i) * 0.618_033_988_75);
                        (f64::from(converter.code(value)) - value).powi(2)
                    })
                    .sum();
                (sum / f64::from(count)).sqrt()
            };
            let rms = error(&|turns| 2.0 * turns.fract() - 1.0);
            let decibels = 20.0 * (peak / 2f64.sqrt() / error(&|turns| (turns * TAU).sin())).log10();
            println!("{bits} bits: {rms:.5} steps, {decibels:.3} dB");
            assert!((rms * 12f64.sqrt() - 1.0).abs() < 0.01, "{bits}: {rms}");
            assert!((decibels - (6.0206 * f64::from(bits) + 1.761)).abs() < 0.1);
        }
    }

    /// Codes per occurrence of a sine that overdrives the converter a little: the levels from the
    /// cumulative histogram, level = -A cos(pi * share below) (the method of IEEE 1241, from memory).
    fn levels_by_histogram(converter: &Converter, samples: u32) -> Vec<f64> {
        let full_scale = converter.full_scale();
        let peak = 1.05 * full_scale;
        let mut counts = vec![0u32; 2 * full_scale as usize];
        for i in 0..samples {
            let value = peak * (f64::from(i) * 0.618_033_988_749_894_9 * TAU).sin();
            counts[(i32::from(converter.code(value)) + full_scale as i32) as usize] += 1;
        }
        let mut below = 0;
        counts
            .iter()
            .take(counts.len() - 1)
            .map(|count| {
                below += count;
                -peak * (PI * f64::from(below) / f64::from(samples)).cos()
            })
            .collect()
    }

    #[test]
    fn val_nonlinearity_by_histogram() {
        let errors = ConverterErrors {
            integral_nonlinearity_steps: 3.0,
            ..ConverterErrors::default()
        };
        let rough = ConverterErrors {
            differential_nonlinearity_steps: 0.3,
            missing_codes_percent: 2.0,
            ..ConverterErrors::default()
        };
        for specimen in [1, 2] {
            let levels = levels_by_histogram(&Converter::with_errors(10, &errors, specimen), 4_000_000);
            let peak = levels
                .iter()
                .enumerate()
                .map(|(k, level)| (level - (k as f64 - 511.5)).abs())
                .fold(0.0, f64::max);
            println!("specimen {specimen}: integral nonlinearity {peak:.3} of 3 steps");
            assert!((peak - 3.0).abs() < 0.05, "{peak}");
            let levels = levels_by_histogram(&Converter::with_errors(10, &rough, specimen), 4_000_000);
            let widths: Vec<f64> = levels.windows(2).map(|pair| pair[1] - pair[0]).collect();
            let missing = widths.iter().filter(|width| **width < 1e-6).count();
            // A code that takes in its missing neighbour is no measure of the others.
            let usual: Vec<f64> = widths
                .windows(2)
                .filter(|pair| pair[0] > 1e-6 && pair[1] > 1e-6)
                .map(|pair| (pair[1] - 1.0).powi(2))
                .collect();
            let rms = (usual.iter().sum::<f64>() / usual.len() as f64).sqrt();
            println!("specimen {specimen}: differential {rms:.3} of 0.3 steps, {missing} of 1021 codes missing (2 %)");
            assert!((rms - 0.3).abs() < 0.03, "{rms}");
            assert!((8..=36).contains(&missing), "{missing}");
        }
        let one = Converter::with_errors(10, &rough, 1);
        assert_eq!(one, Converter::with_errors(10, &rough, 1));
        assert_ne!(one, Converter::with_errors(10, &rough, 2));
    }

    #[test]
    fn stuck_bits_offset_and_limits() {
        let errors = ConverterErrors {
            offset_steps: 3.0,
            bits_stuck_high: vec![2],
            bits_stuck_low: vec![0],
            ..ConverterErrors::default()
        };
        let converter = Converter::with_errors(12, &errors, 0);
        for value in -2100..2100 {
            let plain = (value + 3).clamp(-2048, 2047) + 2048;
            let expected = ((plain | 4) & !1) - 2048;
            assert_eq!(i32::from(converter.code(f64::from(value))), expected);
        }
        let rough = ConverterErrors {
            integral_nonlinearity_steps: 2.0,
            differential_nonlinearity_steps: 0.5,
            ..ConverterErrors::default()
        };
        for bits in [4, 16] {
            let converter = Converter::with_errors(bits, &rough, 9);
            let highest = (1i32 << (bits - 1)) - 1;
            assert_eq!(i32::from(converter.code(1e9)), highest);
            assert_eq!(i32::from(converter.code(-1e9)), -highest - 1);
        }
    }
}
