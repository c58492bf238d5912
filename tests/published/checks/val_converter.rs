//! What a converter's rounding does, and what averaging leaves of it.

use halfpulse::{AdcFormat, Hertz, SampleClock, SamplePosition, Seconds};
use halfpulse_published::{Table, oracle};

/// The rounding noise of an ideal converter over its full scale.
///
/// Source: `quantisation.csv`; step / sqrt(12), B. Widrow 1956 (from memory).
#[test]
fn val_rounding_noise_of_a_converter() {
    for row in Table::read("physics/quantisation.csv").rows() {
        let format = AdcFormat::signed(row.count("bits") as u8);
        let share = f64::from(format.rounding_noise(0.0)) / f64::from(format.full_scale());
        assert!(
            (share / row.number("sigma_q_FS1") - 1.0).abs() < 1e-6,
            "{row:?}: {share}"
        );
    }
}

/// The signal-to-noise ratio of a full-scale sine through an ideal converter of N bits, 6.02 N + 1.76 dB.
///
/// Source: IEEE Std 1057 and IEEE Std 1241, effective number of bits (from memory).
#[test]
fn val_effective_bits() {
    for bits in [6u8, 8, 10, 12, 14, 16] {
        let format = AdcFormat::signed(bits);
        let sine = f64::from(format.full_scale()) / 2f64.sqrt();
        let db = 20.0 * (sine / f64::from(format.rounding_noise(0.0))).log10();
        assert!(
            (db - (6.0206 * f64::from(bits) + 1.7609)).abs() < 1e-3,
            "{bits} bits: {db} dB"
        );
        assert_eq!(i32::from(format.upper_rail()), (1 << (bits - 1)) - 1);
        assert_eq!(i32::from(format.lower_rail()), -(1 << (bits - 1)));
    }
}

/// What is left of rounding in an average of shots that their own noise dithers, by rounding numbers in this check.
///
/// Source: B. Widrow and I. Kollár, Quantization Noise (2008): dithered rounding errors are white and independent of the
/// signal, so that they average like noise (from memory); Monte Carlo of 20000 averages.
#[test]
fn val_dithered_rounding_averages() {
    const SHOTS: u16 = 16;
    let format = AdcFormat {
        codes_per_step: 64.0,
        shots: SHOTS,
        ..AdcFormat::signed(10)
    };
    let mut random = oracle::Random::new(3);
    let noise = 1.0;
    // Rounding error of the average, in codes: the mean of the rounded less the mean of the unrounded.
    let errors: Vec<f64> = (0..20_000)
        .map(|_| {
            let level = random.uniform();
            let sum: f64 = (0..SHOTS)
                .map(|_| {
                    let value = level + noise * random.normal();
                    value.round() - value
                })
                .sum();
            64.0 * sum / f64::from(SHOTS)
        })
        .collect();
    let (_, deviation) = oracle::mean_and_deviation(&errors);
    let stated = f64::from(format.rounding_noise((64.0 * noise / f64::from(SHOTS).sqrt()) as f32));
    assert!(
        (stated / deviation - 1.0).abs() < 0.02,
        "{stated} stated, {deviation} found"
    );
}

/// Times of samples, as double precision has them.
///
/// Source: arithmetic in double precision, t = t0 + i / rate.
#[test]
fn val_times_of_samples() {
    for (rate, first, index, fraction) in [
        (50e6, 0.0, 4095u32, 0.25f64),
        (100e6, 6e-6, 777, -0.4),
        (40e6, 12.5e-6, 16_000, 0.75),
    ] {
        let clock = SampleClock {
            rate: Hertz::new(rate as f32),
            first_sample: Seconds::new(first as f32),
        };
        let exact = first + (f64::from(index) + fraction) / rate;
        let position = SamplePosition::new(index, fraction as f32);
        let time = f64::from(clock.time_of(position).get());
        assert!((time / exact - 1.0).abs() < 1.5e-7, "{time} {exact}");
        let back = f64::from(clock.samples_at(Seconds::new(exact as f32)));
        assert!((back / (f64::from(index) + fraction) - 1.0).abs() < 3e-7, "{back}");
    }
}
