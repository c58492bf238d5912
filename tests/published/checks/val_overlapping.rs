//! Overlapping echoes of known place: spacing and period that come out, and the uncertainty that is stated of them.
//!
//! The records are made here without noise; the noise that the steps are told is that of the tables of bounds.

use crate::train_records::echo_near;
use halfpulse::echo::Surroundings;
use halfpulse::echo::noise::TimingNoise;
use halfpulse::echo::pulse::{ReferencePulse, learn};
use halfpulse::echo::separation::model::{Answer, LEAST_SPACING, Stretch, decide};
use halfpulse::echo::separation::thin_wall::{Prior, ThinWall, thin_wall};
use halfpulse::echo::separation::{LEARNED_MISMATCH, PulseTrust, Unresolved, Verdict, judge};
use halfpulse::setup::PULSE_CAPACITY;
use halfpulse::{AdcFormat, Hertz, Record, SampleClock};
use halfpulse_published::{Table, oracle, pairs};
use std::f64::consts::TAU;

/// -20 dB duration of the vectors' pulse, in samples (`README.md`).
const DURATION: f64 = 26.25;
/// Envelope peak of the larger echo, in codes of 16 bits: 800 of 12 bits.
const PEAK: f64 = 12_800.0;
/// A code of 12 bits in those of 16: what the tables' rounding noise is of.
const CODE: f64 = 16.0;

/// Noise that the tables of bounds were made with: this far below the peak, and rounding to 12 bits.
fn noise_of(snr_db: f64) -> f32 {
    (PEAK * 10f64.powf(-snr_db / 20.0)).hypot(CODE / 12f64.sqrt()) as f32
}

/// What a record says to somebody who knows this pulse of ten samples a cycle.
pub fn with_record<T>(samples: &[f64], template: &[f32], noise: f32, ask: impl FnOnce(&Surroundings<'_>) -> T) -> T {
    sampled(10.0, samples, template, noise, ask)
}

/// The same for any number of samples a cycle.
fn sampled<T>(
    samples_per_cycle: f32,
    samples: &[f64],
    template: &[f32],
    noise: f32,
    ask: impl FnOnce(&Surroundings<'_>) -> T,
) -> T {
    let codes = oracle::codes(samples, 16);
    let mut buffer = [0.0f32; PULSE_CAPACITY];
    let facts = learn(template, samples_per_cycle, &mut buffer).expect("a reference pulse");
    ask(&Surroundings {
        record: Record::new(&codes, AdcFormat::signed(16), SampleClock::new(Hertz::from_mhz(50.0))),
        pulse: ReferencePulse::new(&buffer, facts),
        noise,
        timing_noise: TimingNoise::steady(noise),
        samples_per_cycle,
    })
}

/// How far behind the vectors' own origin the core finds the pulse's.
fn origin() -> f64 {
    with_record(&[], &pairs::reference(), 1.0, |surroundings| {
        f64::from(surroundings.pulse.facts.origin) - pairs::BEFORE_ORIGIN as f64
    })
}

fn split(samples: &[f64], template: &[f32], middle: f64, trust: PulseTrust) -> Answer {
    with_record(samples, template, noise_of(30.0), |surroundings| {
        let stretch = Stretch {
            from: (middle - 40.0) as f32,
            to: (middle + 40.0) as f32,
            least_spacing: 0.1,
            trust,
        };
        decide(surroundings, &stretch, &mut [0.0; 512], &mut [0.0; 416])
    })
}

/// The spacing of two echoes, their ratio, and the stated standard uncertainty of the spacing.
///
/// Source: `pair_bound.csv`, Cramér-Rao bound by NumPy's numerical derivatives (`tests/oracles/pairs.py`); spacing and ratio are
/// those that the records are made with.
#[test]
fn val_bound_of_a_spacing() {
    for row in Table::read("vectors/pair_bound.csv").rows() {
        let (ratio, x) = (row.number("ratio"), row.number("x"));
        let (first, spacing) = (150.4, x * DURATION);
        let mut samples = vec![0.0; 400];
        pairs::add(&mut samples, first, PEAK);
        pairs::add(&mut samples, first + spacing, ratio * PEAK);
        let trust = PulseTrust::Learned { mismatch: 0.0 };
        let answer = split(&samples, &pairs::reference(), first + 0.5 * spacing, trust);
        let found = answer.split.unwrap_or_else(|why| panic!("{row:?}: {why:?} {answer:?}"));
        let bound = row.number("spacing_bound_ns") / 20.0;
        let off = f64::from(found.spacing) - spacing;
        let stated = f64::from(found.spacing_uncertainty) / bound;
        let amplitudes = f64::from(found.second_amplitude / found.first_amplitude);
        println!("{row:?}: off {off:+.4} of a bound of {bound:.4}, stated {stated:.3}, ratio {amplitudes:.3}");
        // The reference is cut at its ends: that is what the spacing is off by.
        assert!(off.abs() < 0.1 * bound, "{row:?}: {off}");
        assert!((stated - 1.0).abs() < 0.03, "{row:?}: {stated}");
        assert!((amplitudes - ratio).abs() < 0.005, "{row:?}: {amplitudes}");
        let place = f64::from(found.first.as_samples());
        assert!((place - first - origin()).abs() < 0.01, "{row:?}: {place}");
    }
}

/// Records that are sampled more often, or just often enough, and pulses of other widths: spacing and period at their bounds.
///
/// Source: Cramér-Rao bound of two echoes with all amplitudes free, numerical Fisher matrix (`oracle::period_bound`); of a thin
/// wall by the same derivatives with its decay and both amplitudes (`thin_bound`).
#[test]
fn val_bounds_at_other_rates() {
    for (cycle, bandwidth) in [(5.0, 0.6), (8.0, 0.4), (16.0, 0.7), (24.0, 0.6), (30.0, 0.6)] {
        let sigma = oracle::gaussian_sigma(1.0 / cycle, bandwidth);
        let pulse = |t: f64| (-0.5 * (t / sigma).powi(2)).exp() * (TAU * t / cycle).cos();
        let half = (3.4 * sigma).ceil() as i32;
        let template: Vec<f32> = (-half..=half).map(|k| pulse(f64::from(k)) as f32).collect();
        let duration = 2.0 * (2.0 * 10f64.ln()).sqrt() * sigma;
        let noise = noise_of(35.0);
        let first = 4.0 * duration + 0.3;
        let length = (16.0 * duration) as usize;
        let times: Vec<f64> = (0..length).map(|i| i as f64).collect();
        for (ratio, x) in [(1.0, 0.3), (-0.6, 0.5), (0.5, 0.9)] {
            let (spacing, name) = (
                x * duration,
                format!("{cycle} samples a cycle, {bandwidth}: ratio {ratio}, x {x}"),
            );
            let samples: Vec<f64> = times
                .iter()
                .map(|t| PEAK * (pulse(t - first) + ratio * pulse(t - first - spacing)))
                .collect();
            let middle = first + 0.5 * spacing;
            let answer = sampled(cycle as f32, &samples, &template, noise, |surroundings| {
                let stretch = Stretch {
                    from: (middle - 1.4 * duration) as f32,
                    to: (middle + 1.4 * duration) as f32,
                    least_spacing: LEAST_SPACING,
                    trust: PulseTrust::Learned { mismatch: 0.0 },
                };
                decide(surroundings, &stretch, &mut [0.0; 512], &mut [0.0; 416])
            });
            let found = answer.split.unwrap_or_else(|why| panic!("{name}: {why:?}"));
            let heights = [PEAK, ratio * PEAK];
            let bound = oracle::period_bound(pulse, &times, first - spacing, spacing, &heights, f64::from(noise));
            let (off, stated) = (
                f64::from(found.spacing) - spacing,
                f64::from(found.spacing_uncertainty) / bound,
            );
            println!("{name}: off {:+.3} of the bound, stated {stated:.3}", off / bound);
            assert!(off.abs() < 0.2 * bound, "{name}: {off} {bound}");
            assert!((stated - 1.0).abs() < 0.06, "{name}: {stated}");
        }
        let period = 0.5 * duration;
        let (wall, decay) = (-0.6, 0.5);
        let model = |t: f64, [start, period, wall, interface, decay]: [f64; 5]| -> f64 {
            let echoes = (1..=9).map(|n| wall * decay.powi(n - 1) * pulse(t - start - f64::from(n) * period));
            interface * pulse(t - start) + echoes.sum::<f64>()
        };
        let truth = [first, period, wall, 1.0, decay];
        let samples: Vec<f64> = times.iter().map(|&t| PEAK * model(t, truth)).collect();
        let name = format!("{cycle} samples a cycle, {bandwidth}: thin wall");
        let found = sampled(cycle as f32, &samples, &template, noise, |surroundings| {
            thin_wall(
                surroundings,
                &prior(first.round() as f32),
                &mut [0.0; 512],
                &mut [0.0; 416],
            )
        });
        let found = found.unwrap_or_else(|why| panic!("{name}: {why:?}"));
        let bound = f64::from(noise) / PEAK * thin_bound(&model, &times, truth);
        let (off, stated) = (
            f64::from(found.period) - period,
            f64::from(found.period_uncertainty) / bound,
        );
        println!("{name}: off {:+.3} of the bound, stated {stated:.3}", off / bound);
        assert!(off.abs() < 0.3 * bound, "{name}: {off} {bound}");
        assert!((stated - 1.0).abs() < 0.1, "{name}: {stated}");
    }
}

/// Standard deviation of the second number of a model for noise of 1 a sample: Fisher's matrix by numerical derivatives, and
/// elimination of the others.
fn thin_bound(model: &impl Fn(f64, [f64; 5]) -> f64, times: &[f64], truth: [f64; 5]) -> f64 {
    let mut fisher = [[0.0; 5]; 5];
    for &t in times {
        let slopes = oracle::gradient(|p| model(t, p), truth, 1e-6);
        for (row, a) in fisher.iter_mut().zip(slopes) {
            for (cell, b) in row.iter_mut().zip(slopes) {
                *cell += a * b;
            }
        }
    }
    // What is left of the second number's information when the others are eliminated.
    for pivot in [0, 2, 3, 4] {
        let lead = fisher[pivot];
        for (i, row) in fisher.iter_mut().enumerate() {
            let factor = row[pivot] / lead[pivot];
            if i != pivot {
                for (cell, above) in row.iter_mut().zip(lead) {
                    *cell -= factor * above;
                }
            }
        }
    }
    fisher[1][1].sqrt().recip()
}

/// Twice the logarithm of the likelihood ratio of two echoes over one.
///
/// Source: the energies that one and two pulses leave, from least squares over the samples in double precision with the best single
/// place found by search, over the noise's variance (S. S. Wilks 1938, from memory).
#[test]
fn val_likelihood_of_two_echoes() {
    let template: Vec<f64> = pairs::whole_reference();
    for (ratio, x) in [(1.0, 0.25), (0.5, 0.5), (-0.5, 0.25)] {
        let mut samples = vec![0.0; 400];
        pairs::add(&mut samples, 150.4, PEAK);
        pairs::add(&mut samples, 150.4 + x * DURATION, ratio * PEAK);
        let energy: f64 = samples.iter().map(|s| s * s).sum();
        let own: f64 = template.iter().map(|s| s * s).sum();
        // What the best single echo explains: its correlation squared over the pulse's energy.
        let explained = |place: f64| -> f64 {
            let mut one = vec![0.0; 400];
            pairs::add(&mut one, place, 1.0);
            let product: f64 = one.iter().zip(&samples).map(|(a, b)| a * b).sum();
            product * product / own
        };
        let places = (0..21).map(|i| 145.0 + f64::from(i));
        let near = places
            .max_by(|a, b| explained(*a).total_cmp(&explained(*b)))
            .expect("places");
        let (mut low, mut high) = (near - 1.0, near + 1.0);
        for _ in 0..14 {
            let (a, b) = (low + 0.382 * (high - low), low + 0.618 * (high - low));
            if explained(a) > explained(b) {
                high = b;
            } else {
                low = a;
            }
        }
        let best = explained(0.5 * (low + high));
        let expected = (energy - best) / f64::from(noise_of(30.0)).powi(2);
        let trust = PulseTrust::Learned { mismatch: 0.0 };
        let answer = split(&samples, &pairs::reference(), 150.4 + 0.5 * x * DURATION, trust);
        let twice = 2.0 * f64::from(answer.log_odds.expect("a fit"));
        println!("ratio {ratio}, x {x}: {twice:.2}, {expected:.2}");
        assert!(
            (twice / expected - 1.0).abs() < 0.002,
            "ratio {ratio}, x {x}: {twice} {expected}"
        );
        // What the pulse may be off by is as much more noise: the share of the energy that one echo explains.
        for mismatch in [3e-4, 2e-3] {
            let variance = f64::from(noise_of(30.0)).powi(2);
            let trust = PulseTrust::Learned {
                mismatch: mismatch as f32,
            };
            let answer = split(&samples, &pairs::reference(), 150.4 + 0.5 * x * DURATION, trust);
            let twice = 2.0 * f64::from(answer.log_odds.expect("a fit"));
            let expected = (energy - best) / (variance + mismatch * best);
            assert!(
                (twice / expected - 1.0).abs() < 0.01,
                "ratio {ratio}, x {x}: {twice} {expected}"
            );
        }
    }
}

/// The classical verdict: a spacing of at least the -20 dB duration. (The valley of Gaussian echoes is deep enough from there on.)
///
/// Source: `axial_resolution.csv`: half the spatial pulse length, in time the envelope's -20 dB duration of 2 sqrt(2 ln 10) σ
/// (closed form of the Gaussian pulse).
#[test]
fn val_classical_verdict() {
    let template: Vec<f32> = (-35..=35)
        .map(|k| gaussian(f64::from(k), 0.1, 0.6, 0.0) as f32)
        .collect();
    let table = Table::read("physics/axial_resolution.csv");
    let row = table
        .rows()
        .find(|row| row.number("f0_Hz") == 5e6 && row.number("fbw6") == 0.6);
    let duration = 50e6 * row.expect("5 MHz and 60 %").number("t20_s");
    for (share, ratio, resolved) in [
        (1.03, 1.0, true),
        (0.97, 1.0, false),
        (1.03, -0.3, true),
        (0.97, -0.5, false),
        (1.6, 0.5, true),
    ] {
        for offset in [0.0, 3_000.0] {
            let spacing = share * duration;
            let echo = |t: f64| 12_000.0 * gaussian(t, 0.1, 0.6, 0.0);
            let samples: Vec<f64> = (0..600)
                .map(|i| offset + echo(f64::from(i) - 200.0) + ratio * echo(f64::from(i) - 200.0 - spacing))
                .collect();
            with_record(&samples, &template, 10.0, |surroundings| {
                let find = |place: f64| echo_near(surroundings, place);
                let (first, second) = (find(200.0), find(200.0 + spacing));
                let found = judge(surroundings, &first, &second, &mut [0.0; 512]);
                let name = format!("{share} durations, ratio {ratio}, offset {offset}");
                assert_eq!(
                    found.verdict == Verdict::ResolvedClassically,
                    resolved,
                    "{name}: {found:?}"
                );
                assert_eq!(found.unresolved, (!resolved).then_some(Unresolved::Overlap), "{name}");
                let pair = found.pair.expect("two echoes");
                assert!(
                    (f64::from(pair.spacing.as_ns()) - 20.0 * spacing).abs() < 5.0,
                    "{name}: {pair:?}"
                );
                assert!(
                    (f64::from(pair.amplitude_ratio) - ratio).abs() < 0.02,
                    "{name}: {pair:?}"
                );
                let both = first
                    .standard_uncertainty
                    .get()
                    .hypot(second.standard_uncertainty.get());
                assert!((pair.standard_uncertainty.get() / both - 1.0).abs() < 1e-5, "{name}");
            });
        }
    }
}

/// Every answer has a word of its own.
#[test]
fn words_are_distinct() {
    let verdicts = [
        Verdict::ResolvedClassically,
        Verdict::ResolvedByModel,
        Verdict::NotResolved,
    ];
    let reasons = [
        Unresolved::Overlap,
        Unresolved::OnePulse,
        Unresolved::TooClose,
        Unresolved::Ambiguous,
        Unresolved::ModelsDisagree,
        Unresolved::Clipped,
        Unresolved::NoRoom,
        Unresolved::PulseUnknown,
    ];
    let mut words: Vec<&str> = verdicts.iter().map(|verdict| verdict.word()).collect();
    words.extend(reasons.iter().map(|why| why.word()));
    assert!(words.iter().all(|word| word.len() > 3), "{words:?}");
    words.sort_unstable();
    words.dedup();
    assert_eq!(words.len(), verdicts.len() + reasons.len(), "{words:?}");
}

/// An echo that has lost its higher frequencies, or whose phase is turned, is no two, though the pulse was learned.
#[test]
fn attenuated_echoes_are_not_split() {
    let template: Vec<f32> = (-35..=35)
        .map(|k| gaussian(f64::from(k), 0.1, 0.6, 0.0) as f32)
        .collect();
    for (frequency, bandwidth, phase) in [
        (0.099, 0.6, 0.0),
        (0.098, 0.6, 0.0),
        (0.095, 0.6, 0.0),
        (0.1, 0.58, 0.0),
        (0.1, 0.6, 0.17),
        (0.1, 0.6, -0.35),
        (0.095, 0.57, 0.2),
    ] {
        let samples: Vec<f64> = (0..400)
            .map(|i| PEAK * gaussian(f64::from(i) - 170.2, frequency, bandwidth, phase))
            .collect();
        let answer = with_record(&samples, &template, noise_of(30.0), |surroundings| {
            let stretch = Stretch {
                from: 130.0,
                to: 210.0,
                least_spacing: LEAST_SPACING,
                trust: PulseTrust::Learned {
                    mismatch: LEARNED_MISMATCH,
                },
            };
            decide(surroundings, &stretch, &mut [0.0; 512], &mut [0.0; 416])
        });
        assert!(answer.split.is_err(), "{frequency}, {bandwidth}, {phase}: {answer:?}");
    }
}

/// One echo is one: whole, with a turned phase, or having lost its higher frequencies.
#[test]
fn one_echo_is_not_split() {
    let mut samples = vec![0.0; 400];
    pairs::add(&mut samples, 160.7, -PEAK);
    let trust = PulseTrust::Learned {
        mismatch: LEARNED_MISMATCH,
    };
    let answer = split(&samples, &pairs::reference(), 160.7, trust);
    assert_eq!(answer.split, Err(Unresolved::OnePulse), "{answer:?}");
    assert!(answer.log_odds.expect("a fit") < 7.0, "{answer:?}");
    samples[165] = 40_000.0;
    assert_eq!(
        split(&samples, &pairs::reference(), 160.7, trust).split,
        Err(Unresolved::Clipped)
    );
    // Outside the record.
    assert_eq!(
        split(&samples, &pairs::reference(), 900.0, trust).split,
        Err(Unresolved::NoRoom)
    );
    // A Gaussian echo with everything a little off, and a pulse that is only modelled.
    let template: Vec<f32> = (-35..=35)
        .map(|k| gaussian(f64::from(k), 0.1, 0.6, 0.0) as f32)
        .collect();
    for (frequency, bandwidth, phase) in [
        (0.1, 0.6, 0.3),
        (0.095, 0.6, 0.0),
        (0.1, 0.54, 0.0),
        (0.095, 0.54, 0.35),
    ] {
        let echo: Vec<f64> = (0..400)
            .map(|i| PEAK * gaussian(f64::from(i) - 170.2, frequency, bandwidth, phase))
            .collect();
        let answer = split(&echo, &template, 170.2, PulseTrust::Modelled);
        assert!(answer.split.is_err(), "{frequency}, {bandwidth}, {phase}: {answer:?}");
    }
}

pub fn gaussian(t: f64, frequency: f64, bandwidth: f64, phase: f64) -> f64 {
    let sigma = oracle::gaussian_sigma(frequency, bandwidth);
    (-0.5 * (t / sigma).powi(2)).exp() * (TAU * frequency * t + phase).cos()
}

/// Two echoes of a pulse that is only modelled, and off in frequency, phase or width, or in nothing.
#[test]
fn two_echoes_of_a_modelled_pulse() {
    let template: Vec<f32> = (-35..=35)
        .map(|k| gaussian(f64::from(k), 0.1, 0.6, 0.0) as f32)
        .collect();
    for (frequency, bandwidth, phase) in [(0.1, 0.6, 0.0), (0.1, 0.6, 0.3), (0.096, 0.6, 0.0), (0.1, 0.55, 0.0)] {
        for (ratio, spacing) in [(1.0, 8.0), (0.5, 13.3), (-0.5, 17.1), (0.8, 24.6)] {
            let echo = |t: f64| PEAK * gaussian(t, frequency, bandwidth, phase);
            let samples: Vec<f64> = (0..400)
                .map(|i| echo(f64::from(i) - 160.3) + ratio * echo(f64::from(i) - 160.3 - spacing))
                .collect();
            let answer = split(&samples, &template, 160.3 + 0.5 * spacing, PulseTrust::Modelled);
            let name = format!("{frequency}, {bandwidth}, {phase}; ratio {ratio}, spacing {spacing}");
            let found = answer.split.unwrap_or_else(|why| panic!("{name}: {why:?}"));
            let off = f64::from(found.spacing) - spacing;
            println!("{name}: {off:+.3}, stated {:.3}", found.spacing_uncertainty);
            assert!(off.abs() < 0.25, "{name}: {off}");
            assert!(
                off.abs() < 3.0 * f64::from(found.spacing_uncertainty),
                "{name}: {off} {found:?}"
            );
            let amplitudes = f64::from(found.second_amplitude / found.first_amplitude);
            assert!((amplitudes - ratio).abs() < 0.1, "{name}: {amplitudes}");
        }
    }
}

/// A place, and a pulse whose shape is known for certain.
fn prior(around: f32) -> Prior {
    Prior {
        around,
        offset: 0.0,
        mismatch: 0.0,
    }
}

fn thin(wall: f64, decay: f64, period: f64, snr_db: f64) -> Result<ThinWall, Unresolved> {
    let place = 300.4;
    let mut samples = vec![0.0; 900];
    pairs::add(&mut samples, place, PEAK);
    for multiple in 1..=40 {
        let height = PEAK * wall * decay.powi(multiple - 1);
        let at = place + f64::from(multiple) * period;
        if height.abs() > 1e-3 * PEAK && at < 750.0 {
            pairs::add(&mut samples, at, height);
        }
    }
    with_record(&samples, &pairs::reference(), noise_of(snr_db), |surroundings| {
        thin_wall(surroundings, &prior(300.0), &mut [0.0; 512], &mut [0.0; 416])
    })
}

/// The period of a wall whose echoes run into the interface echo, and its stated standard uncertainty.
///
/// Source: `thin_wall_bound.csv`, Cramér-Rao bound of the model's five numbers by NumPy's numerical derivatives
/// (`tests/oracles/pairs.py`); the period and heights are those that the records are made with.
#[test]
fn val_bound_of_a_thin_wall() {
    for row in Table::read("vectors/thin_wall_bound.csv").rows() {
        let (snr, period) = (row.number("snr_db"), row.number("x") * DURATION);
        let found = thin(-0.6, 0.5, period, snr).unwrap_or_else(|why| panic!("{row:?}: {why:?}"));
        let bound = row.number("period_bound_ns") / 20.0;
        let (off, stated) = (
            f64::from(found.period) - period,
            f64::from(found.period_uncertainty) / bound,
        );
        println!(
            "{row:?}: off {:+.3} of the bound, stated {stated:.3}; {found:?}",
            off / bound
        );
        assert!(off.abs() < 0.3 * bound, "{row:?}: {off}");
        assert!((stated - 1.0).abs() < 0.05, "{row:?}: {stated}");
        assert!((f64::from(found.decay) - 0.5).abs() < 0.002, "{found:?}");
        assert!(
            (f64::from(found.interface_amplitude) / PEAK - 1.0).abs() < 0.05,
            "{found:?}"
        );
        assert!((f64::from(found.wall_amplitude) / PEAK + 0.6).abs() < 0.01, "{found:?}");
        assert!(
            (f64::from(found.interface.as_samples()) - 300.4).abs() < 0.1,
            "{found:?}"
        );
    }
    assert_eq!(thin(0.0, 0.5, 10.0, 30.0).unwrap_err(), Unresolved::OnePulse);
}
