//! The textbook's way through a record, to be compared with: a Hilbert filter for the envelope, its magnitude, and
//! the correlation with a pulse, each over all samples in `f32`.
//!
//! Nothing of the measuring core is in it. `cargo board cost` counts it on the board in the run in which the reading is
//! counted; `val_textbook` checks that it computes what it says. It is written to be fast: eight outputs at a time, so
//! that a sample and a tap are loaded once for several products, with all lengths known to the compiler.
#![no_std]
#![forbid(unsafe_code)]
#![deny(missing_docs)]

/// Taps of either filter.
pub const TAPS: usize = 64;
/// Outputs that are worked out together.
const BLOCK: usize = 8;
/// Samples that they need.
const NEEDED: usize = TAPS + BLOCK - 1;
/// Zeros before and after the samples of a record ([`convert`]).
pub const PADDING: usize = TAPS - 1;
/// From the padded record's first sample to where the Hilbert filter's output stands for the record's first.
pub const HILBERT_DELAY: usize = 31;

/// Taps in the order of the samples that they are multiplied with.
pub type Kernel = [f32; TAPS];

/// Equiripple from 0.03 to 0.47 of the sample rate (`scipy.signal.remez`, SciPy 1.17.1, 63 taps): `tests/oracles/textbook.py`.
#[rustfmt::skip]
pub const HILBERT: Kernel = [
    0.0, -0.000_931_096_1, 0.0, -0.001_424_720_5, 0.0, -0.002_461_688_6, 0.0, -0.003_944_729,
    0.0, -0.005_991_474_3, 0.0, -0.008_743_2, 0.0, -0.012_374_377, 0.0, -0.017_113_851,
    0.0, -0.023_282_64, 0.0, -0.031_373_72, 0.0, -0.042_217_474, 0.0, -0.057_373_2,
    0.0, -0.080_193_78, 0.0, -0.119_445_11, 0.0, -0.207_397_8, 0.0, -0.635_003_1,
    0.0, 0.635_003_1, 0.0, 0.207_397_8, 0.0, 0.119_445_11, 0.0, 0.080_193_78,
    0.0, 0.057_373_2, 0.0, 0.042_217_474, 0.0, 0.031_373_72, 0.0, 0.023_282_64,
    0.0, 0.017_113_851, 0.0, 0.012_374_377, 0.0, 0.008_743_2, 0.0, 0.005_991_474_3,
    0.0, 0.003_944_729, 0.0, 0.002_461_688_6, 0.0, 0.001_424_720_5, 0.0, 0.000_931_096_1,
];

/// 5 MHz, 60 % at 50 MS/s (`scipy.signal.gausspulse`, SciPy 1.17.1), its middle at sample 32.
#[rustfmt::skip]
pub const PULSE: Kernel = [
    0.000_000_590_723_46, 0.000_003_476_861, 0.000_009_416_474, 0.000_016_268_052, 0.000_012_932_445, -0.000_026_232_032, -0.000_135_765_47, -0.000_323_329,
    -0.000_491_186_2, -0.000_343_356_78, 0.000_612_422_6, 0.002_787_166_7, 0.005_836_770_4, 0.007_797_016, 0.004_792_721, -0.007_516_957,
    -0.030_082_097, -0.055_395_193, -0.065_070_21, -0.035_171_453, 0.048_507_01, 0.170_696_6, 0.276_403_25, 0.285_500_97,
    0.135_696_92, -0.164_565_38, -0.509_229_06, -0.725_079_8, -0.658_573_9, -0.275_246_14, 0.293_524_32, 0.798_680_5,
    1.0, 0.798_680_5, 0.293_524_32, -0.275_246_14, -0.658_573_9, -0.725_079_8, -0.509_229_06, -0.164_565_38,
    0.135_696_92, 0.285_500_97, 0.276_403_25, 0.170_696_6, 0.048_507_01, -0.035_171_453, -0.065_070_21, -0.055_395_193,
    -0.030_082_097, -0.007_516_957, 0.004_792_721, 0.007_797_016, 0.005_836_770_4, 0.002_787_166_7, 0.000_612_422_6, -0.000_343_356_78,
    -0.000_491_186_2, -0.000_323_329, -0.000_135_765_47, -0.000_026_232_032, 0.000_012_932_445, 0.000_016_268_052, 0.000_009_416_474, 0.000_003_476_861,
];

/// The codes as numbers, with [`PADDING`] zeros before and after. `padded` needs `codes.len() + 2 * PADDING` entries; what it has
/// more is filled with zeros.
#[inline(never)]
pub fn convert(codes: &[i16], padded: &mut [f32]) {
    let (before, rest) = padded.split_at_mut_checked(PADDING).unwrap_or_default();
    before.fill(0.0);
    let (samples, after) = rest.split_at_mut_checked(codes.len()).unwrap_or_default();
    for (sample, &code) in samples.iter_mut().zip(codes) {
        *sample = f32::from(code);
    }
    after.fill(0.0);
}

/// y\[n\] = Σ kernel\[j\] x\[n + j\] for as many outputs as there is room for and samples for.
#[inline(never)]
pub fn filter(kernel: &Kernel, samples: &[f32], outputs: &mut [f32]) {
    let (blocks, rest) = outputs.as_chunks_mut::<BLOCK>();
    let mut ahead = samples;
    for block in blocks {
        let Some(window) = ahead.first_chunk::<NEEDED>() else {
            return;
        };
        *block = eight(kernel, window);
        ahead = ahead.get(BLOCK..).unwrap_or(&[]);
    }
    for (output, window) in rest.iter_mut().zip(ahead.windows(TAPS)) {
        let mut sum = 0.0;
        for (tap, sample) in kernel.iter().zip(window) {
            sum += tap * sample;
        }
        *output = sum;
    }
}

/// Eight neighbouring outputs: of eight taps with the fifteen samples under them the compiler makes straight code.
#[inline(always)]
fn eight(kernel: &Kernel, window: &[f32; NEEDED]) -> [f32; BLOCK] {
    let mut sums = [0.0; BLOCK];
    let mut ahead: &[f32] = window;
    for taps in kernel.as_chunks::<BLOCK>().0 {
        let Some(samples) = ahead.first_chunk::<{ 2 * BLOCK - 1 }>() else {
            return sums;
        };
        for (place, tap) in taps.iter().enumerate() {
            for (output, sum) in sums.iter_mut().enumerate() {
                *sum += tap * samples[place + output];
            }
        }
        ahead = ahead.get(BLOCK..).unwrap_or(&[]);
    }
    sums
}

/// The magnitude of samples and their quadrature, into the latter's place.
#[inline(never)]
pub fn magnitude(samples: &[f32], quadrature: &mut [f32], square_root: impl Fn(f32) -> f32) {
    for (q, s) in quadrature.iter_mut().zip(samples) {
        *q = square_root(s * s + *q * *q);
    }
}
