//! The textbook's way that `cargo board cost` compares a reading with computes what it says: against SciPy 1.17.1
//! (`tests/oracles/textbook.py`, every 16th value), and against sums in `f64` at every sample, the ends included.

use halfpulse_tests::published::{Table, code_rows};
use halfpulse_textbook::{HILBERT, HILBERT_DELAY, PADDING, PULSE, convert, filter, magnitude};

/// Largest difference that rounding to `f32` makes of sums of 64 products.
const ROUNDING: f64 = 2e-6;

struct Done {
    codes: Vec<i16>,
    envelope: Vec<f32>,
    correlation: Vec<f32>,
}

fn textbook() -> Done {
    let codes = code_rows("vectors/scene_codes.csv").swap_remove(0);
    let mut padded = vec![f32::NAN; codes.len() + 2 * PADDING];
    convert(&codes, &mut padded);
    let mut envelope = vec![0.0; codes.len()];
    filter(&HILBERT, &padded[HILBERT_DELAY..], &mut envelope);
    magnitude(&padded[PADDING..], &mut envelope, f32::sqrt);
    let mut correlation = vec![0.0; codes.len() + PADDING];
    filter(&PULSE, &padded, &mut correlation);
    Done {
        codes,
        envelope,
        correlation,
    }
}

fn largest(values: impl Iterator<Item = f64>) -> f64 {
    values.fold(0.0, |most, value| most.max(value.abs()))
}

#[test]
fn val_textbook_against_scipy() {
    let done = textbook();
    let table = Table::read("vectors/textbook.csv");
    let column = |name: &str| -> Vec<f64> { table.rows().map(|row| row.number(name)).collect() };
    let (envelope, hilbert) = (column("filter_envelope"), column("hilbert_envelope"));
    let correlation = column("correlation");
    // Without so many values at either end.
    let worst = |found: &[f32], stated: &[f64], ends: usize| {
        assert!(stated.len() == 256, "{} values", stated.len());
        let inside = found.iter().step_by(16).zip(stated).skip(ends).take(256 - 2 * ends);
        let most = largest(stated.iter().copied());
        largest(inside.map(|(&a, b)| f64::from(a) - b)) / most
    };
    for (what, error, allowed) in [
        ("filter", worst(&done.envelope, &envelope, 0), ROUNDING),
        ("correlation", worst(&done.correlation, &correlation, 0), ROUNDING),
        // The transmission pulse has shares below the filter's band, and SciPy takes the record for one period.
        ("transform", worst(&done.envelope, &hilbert, 4), 0.05),
    ] {
        println!("{what}: {error:.2e} of the largest");
        assert!(error < allowed, "{what}: {error}");
    }
}

#[test]
fn val_textbook_against_plain_sums() {
    let done = textbook();
    let code = |place: i64| -> f64 {
        usize::try_from(place)
            .ok()
            .and_then(|place| done.codes.get(place))
            .map_or(0.0, |&code| f64::from(code))
    };
    let sum = |kernel: &[f32; 64], first: i64| -> f64 {
        kernel
            .iter()
            .zip(first..)
            .map(|(&tap, place)| f64::from(tap) * code(place))
            .sum()
    };
    let correlation = done.correlation.iter().zip(0i64..);
    let off = largest(correlation.map(|(&found, lag)| f64::from(found) - sum(&PULSE, lag - 63)));
    let of = largest(done.correlation.iter().map(|&value| f64::from(value)));
    assert!(off < ROUNDING * of && of > 1000.0, "correlation: {off} of {of}");
    let envelope = done.envelope.iter().zip(0i64..);
    let off = largest(envelope.map(|(&found, place)| {
        // The middle of 63 taps, of which the first stands at place 1 of the kernel.
        f64::from(found) - code(place).hypot(sum(&HILBERT, place - 32))
    }));
    assert!(off < ROUNDING * of, "envelope: {off}");
}
