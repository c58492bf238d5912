//! Arrivals against delays that NumPy and SciPy found in the same integer codes, against the true
//! delays, and against the Cramér-Rao bound.

use halfpulse::SamplePosition;
use halfpulse::echo::arrival::{Arrival, Estimator, Search, estimate};
use halfpulse::echo::correlation::Sign;
use halfpulse::echo::pulse::{ReferencePulse, learn};
use halfpulse::setup::PULSE_CAPACITY;
use halfpulse_published::oracle;
use halfpulse_published::{Table, code_rows, number_rows, pairs};

const REACH: usize = 8;

/// Reads one record with one estimator; `around` is where the pulse's origin should lie.
fn read(
    estimator: Estimator,
    codes: &[i16],
    around: f64,
    reach: f64,
    samples_per_cycle: f64,
    pulse: &ReferencePulse<'_>,
) -> Arrival {
    let search = Search {
        around: around.round() as u32,
        reach: reach as f32,
        sign: Sign::Either,
        samples_per_cycle: samples_per_cycle as f32,
    };
    estimate(estimator, codes, &search, pulse, &mut [0.0; 2048]).expect("the echo is there")
}

/// Shift of the reference in samples against its own place, as the tables count it.
fn shift(arrival: Arrival, pulse: &ReferencePulse<'_>) -> f64 {
    f64::from(
        arrival
            .position
            .samples_after(SamplePosition::new(0, pulse.facts.origin)),
    )
}

/// Every record of every set, as (set, stated row, shift by cosine, shift by least squares).
///
/// The tables' correlation is the circular one, so each record is continued periodically by a few
/// samples. The converter's codes need no scale: a delay does not depend on it.
fn all_shifts() -> Vec<(usize, [f64; 3], f64, f64)> {
    let sets = Table::read("vectors/delay_sets.csv");
    let expected = Table::read("vectors/delays.csv");
    let references = number_rows("vectors/delay_references.csv");
    let mut all = Vec::new();
    for (number, (set, reference)) in sets.rows().zip(&references).enumerate() {
        let cycle = set.number("sample_rate_hz") / set.number("centre_frequency_hz");
        let reference: Vec<f32> = reference.iter().map(|&x| x as f32).collect();
        let mut buffer = [0.0f32; PULSE_CAPACITY];
        let facts = learn(&reference, cycle as f32, &mut buffer).expect("a reference pulse");
        let pulse = ReferencePulse::new(&buffer, facts);
        let rows = expected.rows().filter(|row| row.count("set") == number);
        for (row, codes) in rows.zip(code_rows(&format!("vectors/delay{number}_codes.csv"))) {
            let n = codes.len();
            let periodic: Vec<i16> = (0..n + 4 * REACH).map(|i| codes[(i + n - 2 * REACH) % n]).collect();
            let around = f64::from(facts.origin) + 2.0 * REACH as f64;
            let of = |estimator| {
                let arrival = read(estimator, &periodic, around, REACH as f64, cycle, &pulse);
                shift(arrival, &pulse) - 2.0 * REACH as f64
            };
            let stated = [
                row.number("true_delay"),
                row.number("cosine"),
                row.number("interpolated"),
            ];
            all.push((number, stated, of(Estimator::Correlation), of(Estimator::LeastSquares)));
        }
    }
    assert_eq!(all.len(), 96);
    all
}

/// Cosine through three values, and the band-limited maximum: the same codes, the same numbers, within
/// a small part of the bound that noise sets anyway.
///
/// Source: `delays.csv`, NumPy 2.4.6 in double precision, `tests/oracles/delays.py`.
#[test]
fn val_delays_of_numpy() {
    let bounds: Vec<f64> = Table::read("vectors/delay_sets.csv")
        .rows()
        .map(|set| set.number("bound_samples"))
        .collect();
    let (mut worst_cosine, mut worst_squares) = ([0.0f64; 6], [0.0f64; 6]);
    for (set, [_, cosine, interpolated], by_cosine, by_squares) in all_shifts() {
        worst_cosine[set] = worst_cosine[set].max((by_cosine - cosine).abs());
        worst_squares[set] = worst_squares[set].max((by_squares - interpolated).abs());
    }
    for (set, bound) in bounds.iter().enumerate() {
        println!(
            "set {set}: cosine {:.1e}, least squares {:.1e} samples off; bound {bound:.1e}",
            worst_cosine[set], worst_squares[set]
        );
        assert!(
            worst_cosine[set] < 0.1 * bound,
            "set {set}: cosine {}",
            worst_cosine[set]
        );
        assert!(
            worst_squares[set] < 0.1 * bound,
            "set {set}: least squares {}",
            worst_squares[set]
        );
    }
}

/// Against the truth: the scatter of 16 delays about their mean (the noise in a set's reference is
/// common to them) over the Cramér-Rao bound. All 96 together have 90 degrees of freedom: 0.80 to 1.20 are
/// 2.7 standard deviations of that ratio.
///
/// Source: `delay_sets.csv`, Cramér-Rao bound of each set by numerical derivatives (`tests/oracles/delays.py --bounds`), and the true
/// delays that the records were made with.
#[test]
fn val_scatter_is_the_bound() {
    let sets = Table::read("vectors/delay_sets.csv");
    let shifts = all_shifts();
    let mut squares = 0.0;
    for (number, set) in sets.rows().enumerate() {
        let errors: Vec<f64> = shifts
            .iter()
            .filter(|(of, ..)| *of == number)
            .map(|(_, [truth, ..], _, found)| (found - truth) / set.number("bound_samples"))
            .collect();
        let (mean, deviation) = oracle::mean_and_deviation(&errors);
        println!("set {number}: bias {mean:+.2}, scatter {deviation:.2} of the bound");
        squares += deviation * deviation * (errors.len() - 1) as f64;
    }
    let ratio = (squares / 90.0).sqrt();
    println!("all: scatter {ratio:.3} of the bound");
    assert!((0.80..1.20).contains(&ratio), "{ratio}");
}

/// Least squares with one echo on records of one or two echoes: place, sign and size of NumPy's best
/// single fit, wherever two overlapping echoes put it.
///
/// Source: `pairs.csv`, NumPy 2.4.6, `tests/oracles/pairs.py`.
#[test]
fn val_single_echo_fits_of_numpy() {
    let reference = pairs::reference();
    let mut buffer = [0.0f32; PULSE_CAPACITY];
    let facts = learn(&reference, 10.0, &mut buffer).expect("a reference pulse");
    let pulse = ReferencePulse::new(&buffer, facts);
    for (row, codes) in Table::read("vectors/pairs.csv")
        .rows()
        .zip(code_rows("vectors/pair_codes.csv"))
    {
        let stated = row.number("one_delay");
        // A cycle to either side, so that the right one has to be chosen. (Two equal echoes far apart
        // would tie over the whole record.)
        let around = stated - pairs::BEFORE_ORIGIN as f64 + f64::from(facts.origin);
        let arrival = read(Estimator::LeastSquares, &codes, around, 11.0, 10.0, &pulse);
        let place = shift(arrival, &pulse) + pairs::BEFORE_ORIGIN as f64;
        // The bound of one echo of amplitude 1 at this noise: 0.021 samples at 30 dB.
        let bound = 0.021 * 10f64.powf((30.0 - row.number("snr_db")) / 20.0);
        let amplitude = f64::from(arrival.amplitude) / pairs::UNIT;
        let name = format!("ratio {}, spacing {}", row.text("true_ratio"), row.text("true_spacing"));
        println!(
            "{name}: {place:.4} {stated:.4}, {amplitude:.4} {}",
            row.text("one_amplitude")
        );
        assert!(
            (place - stated).abs() < 0.25 * bound.max(0.006),
            "{name}: {place} {stated}"
        );
        assert!(
            (amplitude - row.number("one_amplitude")).abs() < 0.01,
            "{name}: amplitude {amplitude}"
        );
    }
}

/// What the standard deviation of each estimator is, over the Cramér-Rao bound, at 30 dB: 5 MHz, 60 %, 50
/// MS/s, 12 bit. Stated (NumPy Monte Carlo): half of the envelope 11, envelope peak 37, correlation with
/// cosine 0.98, with band-limited interpolation 0.98. Two thirds to three halves of it are allowed
/// for the window estimators (their envelopes differ), 0.93 to 1.07 for the two that reach the bound.
///
/// Source: NumPy Monte Carlo of the same estimators; the bound by `oracle::delay_bound`.
#[test]
fn val_estimators_over_the_bound() {
    const SHOTS: usize = 1500;
    let (f0, relative, rate, peak) = (5e6, 0.6, 50e6, 1500.0);
    let noise = peak * 10f64.powf(-30.0 / 20.0);
    let template: Vec<f32> = (-30..=30)
        .map(|k| oracle::gaussian_pulse(f64::from(k) / rate, f0, relative) as f32)
        .collect();
    let exact: Vec<f64> = template.iter().map(|&x| peak * f64::from(x)).collect();
    let bound = oracle::delay_bound(&exact, noise.hypot(12f64.sqrt().recip()));
    let mut buffer = [0.0f32; PULSE_CAPACITY];
    let facts = learn(&template, 10.0, &mut buffer).expect("a reference pulse");
    let pulse = ReferencePulse::new(&buffer, facts);
    for (estimator, low, high) in [
        (Estimator::LeastSquares, 0.93, 1.07),
        (Estimator::Correlation, 0.93, 1.07),
        (Estimator::FirstCrossing, 7.3, 16.5),
        (Estimator::EnvelopePeak, 14.0, 56.0),
    ] {
        let mut random = oracle::Random::new(11);
        let errors: Vec<f64> = (0..SHOTS)
            .map(|_| {
                let place = 100.0 + random.uniform();
                let record: Vec<f64> = (0..220)
                    .map(|k| {
                        peak * oracle::gaussian_pulse((f64::from(k) - place) / rate, f0, relative)
                            + noise * random.normal()
                    })
                    .collect();
                let arrival = read(estimator, &oracle::codes(&record, 12), 100.0, 6.0, 10.0, &pulse);
                f64::from(arrival.position.samples_after(SamplePosition::new(0, 0.0))) - place
            })
            .collect();
        let (mean, deviation) = oracle::mean_and_deviation(&errors);
        println!(
            "{estimator:?}: scatter {:.2} of the bound, bias {:+.2}",
            deviation / bound,
            mean / bound
        );
        let ratio = deviation / bound;
        assert!((low..high).contains(&ratio), "{estimator:?}: {ratio}");
        // Noise lifts an envelope's maximum, and with it the half of it: those two are biased.
        let allowed = if high < 2.0 { 0.1 } else { 0.5 * high };
        assert!((mean / bound).abs() < allowed, "{estimator:?}: bias {}", mean / bound);
    }
}

/// The right half cycle, without noise: an echo at any fraction of a sample, of any bandwidth down to 20 %,
/// with the sign free, is found where it is and the right way up. Half a cycle away a pulse of 20 % is
/// still 0.982 of itself (closed form exp(-T^2 / 16 sigma^2), `cycle_skip.csv`), so an estimator that compares
/// whole samples only is lost here: they can miss the top by more than that.
///
/// Source: `cycle_skip.csv`, closed form with SciPy 1.17.1; the places that the records are made with.
#[test]
fn val_right_half_cycle_at_any_fraction() {
    for row in Table::read("physics/cycle_skip.csv").rows() {
        let relative = row.number("fbw6");
        for cycle in [4.0, 4.5, 5.0, 7.0, 7.9, 8.0, 8.5, 9.0, 10.0, 11.0, 13.0, 15.0, 20.0] {
            // Above the band limit of the sample rate nothing can be told.
            if cycle < 2.5 * (1.0 + relative) {
                continue;
            }
            let sigma = oracle::gaussian_sigma(1.0 / cycle, relative);
            let likeness = (-(cycle / (4.0 * sigma)).powi(2)).exp();
            assert!((likeness - row.number("rho_half_mag")).abs() < 1e-9);
            let half = (3.0 * sigma).ceil() as i32;
            let template: Vec<f32> = (-half..=half)
                .map(|k| oracle::gaussian_pulse(f64::from(k), 1.0 / cycle, relative) as f32)
                .collect();
            let mut buffer = [0.0f32; PULSE_CAPACITY];
            let facts = learn(&template, cycle as f32, &mut buffer).expect("a reference pulse");
            let pulse = ReferencePulse::new(&buffer, facts);
            for step in 0..20 {
                let place = f64::from(4 * half) + f64::from(step) / 20.0;
                let record: Vec<f64> = (0..8 * half)
                    .map(|k| -1800.0 * oracle::gaussian_pulse(f64::from(k) - place, 1.0 / cycle, relative))
                    .collect();
                let arrival = read(
                    Estimator::LeastSquares,
                    &oracle::codes(&record, 12),
                    place,
                    0.8 * cycle,
                    cycle,
                    &pulse,
                );
                let found = f64::from(arrival.position.samples_after(SamplePosition::new(0, 0.0)));
                assert!(
                    (found - place).abs() < 2e-3 && arrival.amplitude < 0.0,
                    "{relative} bandwidth, {cycle} samples a cycle: {found} instead of {place}, amplitude {}",
                    arrival.amplitude
                );
            }
        }
    }
}
