//! Trains of back walls of known place: which period is chosen, what the joint fit makes of them, and what it states.
//!
//! The records are made here, a Gaussian pulse of 5 MHz and 60 % at 50 MS/s (`oracle::gaussian_pulse`) without noise in 16 bits; the noise
//! that the steps are told is a number of its own, so that what they state of it can be compared to the last digits. Where only the
//! record's own truth is compared, no outside source speaks, and the check is not called `val_`.

use halfpulse::echo::arrival::{Estimator, Search, estimate};
use halfpulse::echo::correlation::Sign;
use halfpulse::echo::noise::TimingNoise;
use halfpulse::echo::pulse::{ReferencePulse, learn};
use halfpulse::echo::train::{Hypothesis, Rules, Train, Undecided, choose, fit, holds_thinner};
use halfpulse::echo::{EchoList, EchoRole, Polarity, Surroundings, echo_at};
use halfpulse::path::{PathLaw, VPath};
use halfpulse::setup::PULSE_CAPACITY;
use halfpulse::workspace::{ECHO_CAPACITY, TRAIN_LAGS};
use halfpulse::{AdcFormat, ElementSeparation, Hertz, Metres, MetresPerSecond, Record, SampleClock};
use halfpulse_published::oracle;

const RATE: f64 = 50e6;
const SAMPLES: usize = 2000;
const NOISE: f64 = 60.0;
/// Where the wall begins.
const START: f64 = 100.25;

fn pulse(t: f64) -> f64 {
    oracle::gaussian_pulse(t / RATE, 5e6, 0.6)
}

/// A record with echoes of these places and amplitudes.
fn codes(echoes: &[(f64, f64)]) -> Vec<i16> {
    let sample = |i: usize| {
        echoes
            .iter()
            .map(|(place, height)| height * pulse(i as f64 - place))
            .sum()
    };
    let samples: Vec<f64> = (0..SAMPLES).map(sample).collect();
    oracle::codes(&samples, 16)
}

/// Echoes that are multiples 1 to `count` of a wall of this period, falling by `decay` each time.
fn multiples(period: f64, height: f64, decay: f64, count: i32) -> Vec<(f64, f64)> {
    (1..=count)
        .map(|n| (START + f64::from(n) * period, height * decay.powi(n - 1)))
        .collect()
}

fn rules<'a>() -> Rules<'a> {
    Rules {
        start: START as f32,
        start_tolerance: 10.0,
        shortest: 15.0,
        visible_from: 110.0,
        visible_to: SAMPLES as f32,
        threshold: 4.5,
        law: PathLaw::Straight,
    }
}

/// What came of a record: the train and the echoes with their roles.
struct Outcome {
    choice: Result<Hypothesis, Undecided>,
    train: Result<Train, Undecided>,
    echoes: EchoList,
    thinner: bool,
}

/// Finds those of `seen` in the record of all `echoes`, chooses and fits.
fn read(echoes: &[(f64, f64)], seen: &[(f64, f64)], rules: &Rules<'_>) -> Outcome {
    read_codes(&codes(echoes), seen, rules)
}

/// The same for any record.
fn read_codes(codes: &[i16], seen: &[(f64, f64)], rules: &Rules<'_>) -> Outcome {
    let template: Vec<f32> = (-30..=30).map(|k| pulse(f64::from(k)) as f32).collect();
    let mut buffer = [0.0f32; PULSE_CAPACITY];
    let facts = learn(&template, 10.0, &mut buffer).expect("a reference pulse");
    let surroundings = Surroundings {
        record: Record::new(codes, AdcFormat::signed(16), SampleClock::new(Hertz::new(RATE as f32))),
        pulse: ReferencePulse::new(&buffer, facts),
        noise: NOISE as f32,
        timing_noise: TimingNoise::steady(NOISE as f32),
        samples_per_cycle: 10.0,
    };
    let mut found = EchoList::new();
    let mut seen = seen.to_vec();
    seen.sort_by(|a, b| a.0.total_cmp(&b.0));
    for (place, _) in seen {
        let search = Search {
            around: place.round() as u32,
            reach: 2.0,
            sign: Sign::Either,
            samples_per_cycle: 10.0,
        };
        let arrival = estimate(
            Estimator::LeastSquares,
            codes,
            &search,
            &surroundings.pulse,
            &mut [0.0; 512],
        );
        let echo = echo_at(&surroundings, arrival.expect("an echo")).expect("inside");
        found.push(echo).expect("room");
    }
    let mut lags = [0.0; ECHO_CAPACITY * TRAIN_LAGS];
    let choice = choose(&surroundings, &found, rules);
    let train = choice.and_then(|choice| fit(&surroundings, &mut found, rules, &choice, &mut lags));
    let thinner = train.is_ok_and(|train| holds_thinner(&surroundings, &found, rules, &train));
    Outcome {
        choice,
        train,
        echoes: found,
        thinner,
    }
}

fn near(found: f32, expected: f64, allowed: f64) -> bool {
    (f64::from(found) - expected).abs() < allowed
}

/// Period, place, numbers and roles of clean trains, upright and upside down.
#[test]
fn trains_of_known_period() {
    for (period, height, decay, count) in [
        (61.37, 12_000.0, 0.7, 6),
        (203.8, -9_000.0, 0.85, 5),
        (40.05, 20_000.0, 0.5, 5),
        (118.5, 15_000.0, 0.9, 12),
    ] {
        let echoes = multiples(period, height, decay, count);
        let outcome = read(&echoes, &echoes, &rules());
        let train = outcome.train.unwrap_or_else(|why| panic!("{period}: {why:?}"));
        assert!(near(train.period, period, 3e-3), "{train:?}");
        assert!(near(train.first.as_samples(), START + period, 5e-3), "{train:?}");
        assert!(near(train.start_difference, 0.0, 1e-2), "{train:?}");
        assert_eq!((train.first_multiple, i32::from(train.echoes)), (1, count), "{train:?}");
        assert_eq!(i32::from(train.freedom), count - 2);
        assert!(
            train.unevenness < 0.05 && !train.is_uneven() && train.unexplained < 1e-3,
            "{train:?}"
        );
        assert!(!train.may_be_double && !outcome.thinner, "{train:?}");
        let sign = if height < 0.0 {
            Polarity::Negative
        } else {
            Polarity::Positive
        };
        for (n, echo) in outcome.echoes.iter().enumerate() {
            assert_eq!((echo.role, echo.polarity), (EchoRole::BackWall(n as u8 + 1), sign));
        }
    }
}

/// What the fit states of its own uncertainty.
///
/// Source: Cramér-Rao bound of a train with all amplitudes free, numerical Fisher matrix (`oracle::period_bound`; S. M. Kay,
/// Fundamentals of Statistical Signal Processing, 1993, chapter 3, from memory); the correlation of first place and period
/// from weighted least squares, worked out here.
#[test]
fn val_stated_uncertainty_of_a_train() {
    for (period, decay, count) in [(150.3, 1.0, 2), (121.7, 0.8, 4), (97.1, 0.6, 6)] {
        let echoes = multiples(period, 10_000.0, decay, count);
        let train = read(&echoes, &echoes, &rules()).train.expect("a train");
        let times: Vec<f64> = (0..SAMPLES).map(|i| i as f64).collect();
        let heights: Vec<f64> = echoes.iter().map(|echo| echo.1).collect();
        let bound = oracle::period_bound(pulse, &times, START, period, &heights, NOISE);
        let stated = train.period_uncertainty.expect("two echoes");
        assert!(near(stated / bound as f32, 1.0, 0.01), "{stated} {bound}");
        // Moments of the multiples' numbers, counted from the first.
        let moment = |power: i32| -> f64 {
            let term = |(n, h): (usize, &f64)| h * h * (n as f64).powi(power);
            heights.iter().enumerate().map(term).sum()
        };
        let (s0, s1, s2) = (moment(0), moment(1), moment(2));
        assert!(near(train.correlation, -s1 / (s0 * s2).sqrt(), 2e-3), "{train:?}");
        let support = (s0 - 1e8).sqrt();
        assert!(near(train.support / support as f32, 1.0, 0.01), "{train:?} {support}");
    }
}

/// A multiple that lies off the line shows as chi-square per degree of freedom.
///
/// Source: weighted least squares of the echoes' places in double precision, worked out here; chi-square as in Abramowitz and
/// Stegun 26.4 (mean 1, variance 2 / n).
#[test]
fn val_uneven_trains() {
    for (moved, off) in [(1, 0.35), (2, -0.3), (3, 0.5)] {
        let mut echoes = multiples(120.4, 10_000.0, 0.9, 5);
        echoes[moved].0 += off;
        let train = read(&echoes, &echoes, &rules()).train.expect("a train");
        let weight = |n: usize| echoes[n].1 * echoes[n].1;
        let sum = |f: &dyn Fn(f64, f64) -> f64| -> f64 { (0..5).map(|n| weight(n) * f(n as f64, echoes[n].0)).sum() };
        let (s0, s1, s2) = (sum(&|_, _| 1.0), sum(&|n, _| n), sum(&|n, _| n * n));
        let (t0, t1) = (sum(&|_, x| x), sum(&|n, x| n * x));
        let determinant = s0 * s2 - s1 * s1;
        let (first, period) = ((s2 * t0 - s1 * t1) / determinant, (s0 * t1 - s1 * t0) / determinant);
        let template: Vec<f64> = (-40..=40).map(|k| pulse(f64::from(k))).collect();
        let variance = oracle::delay_bound(&template, NOISE).powi(2);
        let chi_square = sum(&|n, x| (x - first - n * period).powi(2)) / variance / 3.0;
        assert!(
            near(train.unevenness / chi_square as f32, 1.0, 0.06),
            "{train:?} {chi_square}"
        );
        assert!(
            near(train.period, period, 5e-3) && near(train.first.as_samples(), first, 1e-2),
            "{train:?}"
        );
        // Five standard deviations of chi-square over three degrees of freedom.
        assert_eq!(
            train.is_uneven(),
            chi_square > 1.0 + 5.0 * (2.0f64 / 3.0).sqrt(),
            "{chi_square}"
        );
    }
}

/// The period that is chosen before anything is fitted to the record: that of the echoes' places, each with the square of its
/// amplitude as its weight.
///
/// Source: weighted least squares of the places in double precision, worked out here (C. F. Gauss; any book on statistics).
#[test]
fn val_choice_is_the_weighted_mean() {
    for (decay, moved) in [
        (0.7, [0.6, -0.5, 0.4, -0.7, 0.3]),
        (0.9, [-0.8, 0.2, 0.7, 0.1, -0.6]),
        (0.8, [0.0, 0.9, -0.9, 0.9, -0.9]),
    ] {
        let mut echoes = multiples(140.3, 12_000.0, decay, 5);
        for (echo, off) in echoes.iter_mut().zip(moved) {
            echo.0 += off;
        }
        let choice = read(&echoes, &echoes, &rules()).choice.expect("a train");
        let sum = |f: &dyn Fn(f64, f64) -> f64| -> f64 {
            let term = |(n, echo): (usize, &(f64, f64))| echo.1 * echo.1 * f((n + 1) as f64, echo.0);
            echoes.iter().enumerate().map(term).sum()
        };
        let (s0, s1, s2) = (sum(&|_, _| 1.0), sum(&|n, _| n), sum(&|n, _| n * n));
        let (t0, t1) = (sum(&|_, x| x), sum(&|n, x| n * x));
        let determinant = s0 * s2 - s1 * s1;
        let (zero, period) = ((s2 * t0 - s1 * t1) / determinant, (s0 * t1 - s1 * t0) / determinant);
        for n in [0u8, 1, 2, 5] {
            let expected = zero + f64::from(n) * period;
            let found = choice.place(u32::from(n));
            assert!(
                near(found, expected, 5e-3),
                "decay {decay}, multiple {n}: {found} {expected}"
            );
        }
        for n in 1..=8 {
            let place = (zero + f64::from(n) * period) as f32;
            assert!(
                choice.explains(place, 0.5) && choice.explains(place - 0.4, 0.5) && choice.explains(place + 0.4, 0.5)
            );
            assert!(
                !choice.explains(place + 0.6, 0.5) && !choice.explains(place - 0.6, 0.5),
                "{n}"
            );
        }
        assert!(
            !choice.explains(zero as f32, 0.5),
            "where the wall begins there is no multiple"
        );
    }
}

/// Echoes between the multiples: their energy over the train's, no part in the fit.
#[test]
fn strangers_between_multiples() {
    let train_echoes = multiples(150.0, 12_000.0, 0.8, 6);
    let energy: f64 = train_echoes.iter().map(|echo| echo.1 * echo.1).sum();
    for (place, height) in [(331.0, 3_000.0), (480.0, -4_000.0)] {
        let mut echoes = train_echoes.clone();
        echoes.push((place, height));
        let outcome = read(&echoes, &echoes, &rules());
        let train = outcome.train.expect("a train");
        assert!(near(train.period, 150.0, 5e-3), "{train:?}");
        assert!(
            near(
                train.unexplained,
                height * height / energy,
                0.03 * height * height / energy
            ),
            "{train:?}"
        );
        let other = outcome
            .echoes
            .iter()
            .filter(|echo| echo.role == EchoRole::Other)
            .count();
        assert_eq!((other, train.echoes), (1, 6));
        assert!(!train.may_be_double);
        // What does not look like the pulse counts by the share of it that does.
        let strange = |t: f64| oracle::gaussian_pulse(t / RATE, 3.5e6, 0.9);
        let sum = |f: &dyn Fn(f64) -> f64| -> f64 { (-80..=80).map(|k| f(f64::from(k))).sum() };
        let own = sum(&|t| pulse(t) * pulse(t));
        let fitted = sum(&|t| pulse(t) * strange(t)) / own;
        let mismatch = (sum(&|t| strange(t) * strange(t)) / (fitted * fitted * own) - 1.0).sqrt();
        let samples: Vec<f64> = (0..SAMPLES)
            .map(|i| {
                let t = i as f64;
                let walls: f64 = train_echoes
                    .iter()
                    .map(|(place, height)| height * pulse(t - place))
                    .sum();
                walls + height * strange(t - 331.0)
            })
            .collect();
        let mut seen = train_echoes.clone();
        seen.push((331.0, height));
        let train = read_codes(&oracle::codes(&samples, 16), &seen, &rules())
            .train
            .expect("a train");
        let expected = (height * fitted).powi(2) / (1.0 + mismatch * mismatch) / energy;
        println!("mismatch {mismatch:.3}: {} {expected}", train.unexplained);
        assert!(
            near(train.unexplained / expected as f32, 1.0, 0.1),
            "{train:?} {expected}"
        );
        // Before the start nothing counts.
        let mut early = train_echoes.clone();
        early.push((60.0, height));
        let train = read(&early, &early, &rules()).train.expect("a train");
        assert!(train.unexplained < 1e-3, "{train:?}");
    }
}

/// Multiples that nobody has seen yet are found by the fit where they must be, and the one echo too many is not.
#[test]
fn weak_multiples_are_found() {
    let echoes = multiples(131.3, 14_000.0, 0.6, 7);
    let outcome = read(&echoes, &echoes[..3], &rules());
    let train = outcome.train.expect("a train");
    // 14000 · 0.6^6 is 653 codes: 25 standard deviations of an amplitude.
    assert_eq!(train.echoes, 7, "{train:?}");
    assert!(near(train.period, 131.3, 5e-3), "{train:?}");
    assert_eq!(outcome.echoes.len(), 7);
    for (echo, (place, height)) in outcome.echoes.iter().zip(&echoes) {
        assert!(near(echo.position.as_samples(), *place, 0.03), "{echo:?} {place}");
        assert!(near(echo.amplitude / *height as f32, 1.0, 0.01), "{echo:?} {height}");
    }
    // Two in a row are lost in the noise: the fit stops.
    let faint: Vec<(f64, f64)> = multiples(131.3, 14_000.0, 0.12, 7);
    let outcome = read(&faint, &faint[..2], &rules());
    assert_eq!(outcome.train.expect("a train").echoes, 3);
}

/// A single echo: its distance from the start, and nothing about a scatter.
#[test]
fn lone_echo() {
    let echoes = multiples(401.6, 9_000.0, 0.5, 1);
    let train = read(&echoes, &echoes, &rules()).train.expect("a train");
    assert!(
        near(train.period, 401.6, 5e-3) && near(train.start_difference, 0.0, 1e-3),
        "{train:?}"
    );
    assert_eq!(
        (train.period_uncertainty, train.correlation, train.freedom),
        (None, 0.0, 0)
    );
    assert_eq!((train.echoes, train.first_multiple, train.unevenness), (1, 1, 0.0));
    assert!(train.support < 1.0, "{train:?}");
}

/// The first echo in the dead zone: the multiples count from the second, unless nothing says that there was one.
#[test]
fn first_echo_in_the_dead_zone() {
    let echoes = multiples(80.2, 12_000.0, 0.85, 7);
    let mut late = rules();
    late.visible_from = 220.0;
    // 100.25 + 80.2 is hidden, 260.65 is the first that can be seen.
    let train = read(&echoes, &echoes[1..], &late).train.expect("a train");
    assert_eq!((train.first_multiple, train.echoes), (2, 6), "{train:?}");
    assert!(
        near(train.period, 80.2, 5e-3) && near(train.first.as_samples(), START + 160.4, 5e-3),
        "{train:?}"
    );
    assert!(near(train.start_difference, 0.0, 2e-2), "{train:?}");
    // Every other echo alone: half the period would have its first tooth in the dead zone, and speaks for nothing.
    let wide = multiples(160.4, 12_000.0, 0.8, 5);
    let train = read(&wide, &wide, &late).train.expect("a train");
    assert!(near(train.period, 160.4, 5e-3), "{train:?}");
    assert_eq!(train.first_multiple, 1);
}

/// An echo stronger than the second multiple half-way to it: the wall may be half as thick.
#[test]
fn stronger_echo_half_way() {
    let mut echoes = multiples(160.0, 12_000.0, 0.6, 5);
    assert!(!read(&echoes, &echoes, &rules()).train.expect("a train").may_be_double);
    // Upside down, so that it is no multiple of the shorter wall.
    echoes.push((START + 240.0, -8_000.0));
    let train = read(&echoes, &echoes, &rules()).train.expect("a train");
    assert!(near(train.period, 160.0, 0.05) && train.may_be_double, "{train:?}");
    // Weaker than the second multiple, it says nothing.
    echoes[5].1 = -6_000.0;
    assert!(!read(&echoes, &echoes, &rules()).train.expect("a train").may_be_double);
    // Half-way is within three quarters of a cycle.
    for (off, half) in [(-6.5, true), (6.5, true), (-9.0, false), (9.0, false), (20.0, false)] {
        echoes[5] = (START + 240.0 + off, -8_000.0);
        let train = read(&echoes, &echoes, &rules()).train.expect("a train");
        assert_eq!(train.may_be_double, half, "{off}: {train:?}");
    }
}

/// Two trains from one start: the stronger is read, and the thinner wall is noticed.
#[test]
fn two_walls_under_one_probe() {
    let thick = multiples(301.0, 16_000.0, 0.7, 5);
    let mut both = thick.clone();
    both.extend(multiples(187.0, 5_000.0, 0.75, 3));
    let outcome = read(&both, &both, &rules());
    let train = outcome.train.expect("a train");
    assert!(
        near(train.period, 301.0, 0.02) && outcome.thinner,
        "{train:?} {}",
        outcome.thinner
    );
    assert!(!read(&thick, &thick, &rules()).thinner);
    // The thinner wall's echoes all before the thicker one's first.
    let mut early = thick.clone();
    early.extend(multiples(121.0, 5_000.0, 0.9, 2));
    let outcome = read(&early, &early, &rules());
    assert!(near(outcome.train.expect("a train").period, 301.0, 0.02) && outcome.thinner);
    // A single echo more is no second train, nor are two behind the first.
    for strangers in [
        vec![(START + 187.0, 5_000.0)],
        vec![(START + 374.0, 5_000.0), (START + 561.0, 4_000.0)],
    ] {
        let mut few = thick.clone();
        few.extend(strangers);
        assert!(!read(&few, &few, &rules()).thinner);
    }
    assert_eq!(read(&[], &[], &rules()).train.unwrap_err(), Undecided::NoTrain);
}

/// A strong echo and a weak one half its time behind it, where a first echo of half the period would be hidden: as the second
/// gets stronger it is one wall that may be half as thick, then either, then the thinner one.
///
/// Log-likelihood of an echo of unknown height in noise, ln(1 + A² / 3 σ²), and the losses stated in the module's
/// documentation, worked out by hand: 200 codes gain 1.0, 331 gain 2.0, 700 gain 3.5, and a hidden echo costs 1.1.
#[test]
fn half_the_wall_or_not() {
    let mut late = rules();
    late.visible_from = (START + 150.0) as f32;
    let read_with = |height: f64| {
        let echoes = [(START + 200.0, 3_000.0), (START + 300.0, height)];
        read(&echoes, &echoes, &late).train
    };
    let whole = read_with(200.0).expect("the thicker wall");
    assert!(near(whole.period, 200.0, 0.01) && whole.may_be_double, "{whole:?}");
    match read_with(331.0) {
        Err(Undecided::Ambiguous { candidates, best, next }) => {
            assert!(near(best, 100.0, 0.5) && near(next, 200.0, 0.5), "{best} {next}");
            assert_eq!(candidates, 2);
        }
        other => panic!("{other:?}"),
    }
    let half = read_with(700.0).expect("the thinner wall");
    assert!(near(half.period, 100.0, 0.1) && half.first_multiple == 2, "{half:?}");
}

/// Two faint echoes whose train would begin far from where the wall does: no train. Loud enough, they are one.
#[test]
fn trains_that_contradict_their_start() {
    // Nearer than the shortest period, so that the first one's distance from the start is no period.
    let echoes = |height: f64| [(START + 12.0, height), (START + 212.0, height)];
    assert_eq!(
        read(&echoes(136.0), &echoes(136.0), &rules()).train.unwrap_err(),
        Undecided::NoTrain
    );
    let train = read(&echoes(3_000.0), &echoes(3_000.0), &rules())
        .train
        .expect("a train");
    assert!(
        near(train.period, 200.0, 0.01) && near(train.start_difference, -188.0, 0.02),
        "{train:?}"
    );
}

/// A clipped first echo takes part with what its whole samples know.
///
/// Source: Cramér-Rao bound with all amplitudes free over the samples that are not clipped (`oracle::period_bound`).
#[test]
fn val_clipped_first_multiple() {
    for (height, decay) in [(48_000.0, 0.5), (42_000.0, 0.7)] {
        let echoes = multiples(133.6, height, decay, 4);
        let train = read(&echoes, &echoes, &rules()).train.expect("a train");
        assert!(near(train.period, 133.6, 0.02), "{train:?}");
        assert!(train.unevenness < 0.2, "{train:?}");
        let whole = |i: &usize| {
            let value: f64 = echoes
                .iter()
                .map(|(place, height)| height * pulse(*i as f64 - place))
                .sum();
            value.abs() < 32_767.0
        };
        let times: Vec<f64> = (0..SAMPLES).filter(whole).map(|i| i as f64).collect();
        let heights: Vec<f64> = echoes.iter().map(|echo| echo.1).collect();
        let bound = oracle::period_bound(pulse, &times, START, 133.6, &heights, NOISE);
        let stated = f64::from(train.period_uncertainty.expect("four echoes")) / bound;
        println!("{height}: stated {stated:.3} of the bound");
        assert!((stated - 1.0).abs() < 0.05, "{height}: {stated}");
    }
}

/// Multiples that lose their higher frequencies on the way count by what is left of their sharpness.
///
/// Source: amplitude and curvature of each correlation in double precision (second differences of the sum itself), and from
/// them weighted least squares: the place of a maximum scatters by noise sqrt(Σ s'²) over its curvature.
#[test]
fn val_multiples_that_grow_blunter() {
    let (period, frequencies) = (140.2, [5e6, 4.8e6, 4.6e6, 4.4e6, 4.2e6]);
    let sigma = oracle::gaussian_sigma(5e6, 0.6) * RATE;
    let shape = |t: f64, frequency: f64| {
        (-0.5 * (t / sigma).powi(2)).exp() * (std::f64::consts::TAU * frequency / RATE * t).cos()
    };
    let heights: Vec<f64> = (0..5).map(|n| 15_000.0 * 0.85f64.powi(n)).collect();
    let place = |n: usize| START + (n + 1) as f64 * period;
    let samples: Vec<f64> = (0..SAMPLES)
        .map(|i| {
            (0..5)
                .map(|n| heights[n] * shape(i as f64 - place(n), frequencies[n]))
                .sum()
        })
        .collect();
    let seen: Vec<(f64, f64)> = (0..5).map(|n| (place(n), heights[n])).collect();
    let train = read_codes(&oracle::codes(&samples, 16), &seen, &rules())
        .train
        .expect("a train");
    assert!(near(train.period, period, 1e-2) && train.echoes == 5, "{train:?}");
    let correlation = |shift: f64, frequency: f64| -> f64 {
        (-60..=60)
            .map(|k| pulse(f64::from(k)) * shape(f64::from(k) - shift, frequency))
            .sum()
    };
    // Noise over this is the standard deviation of a place.
    let slope_energy: f64 = (-60..=60)
        .map(|k| ((pulse(f64::from(k) + 1e-3) - pulse(f64::from(k) - 1e-3)) / 2e-3).powi(2))
        .sum();
    let weight = |n: usize| {
        let top = |shift| heights[n] * correlation(shift, frequencies[n]);
        let curvature = (2.0 * top(0.0) - top(0.05) - top(-0.05)) / 0.05f64.powi(2);
        curvature * curvature / slope_energy / (NOISE * NOISE)
    };
    let moment = |power: i32| -> f64 { (0..5).map(|n| weight(n) * (n as f64).powi(power)).sum() };
    let expected = (moment(0) / (moment(0) * moment(2) - moment(1).powi(2))).sqrt();
    let stated = f64::from(train.period_uncertainty.expect("five echoes"));
    assert!((stated / expected - 1.0).abs() < 0.01, "{stated} {expected}");
}

/// Along a V the echoes are not evenly spaced, and the straight period comes back.
///
/// Source: Pythagoras: the n-th echo comes after 2 sqrt((n d)² + p²) / c.
#[test]
fn val_train_along_a_v() {
    let (velocity, apart) = (5920.0, 5e-3);
    let path = VPath::new(
        ElementSeparation::new(Metres::new(apart as f32), Metres::ZERO),
        None,
        MetresPerSecond::new(velocity as f32),
    );
    let mut along = rules();
    along.law = PathLaw::V(path).scaled(RATE as f32);
    for wall in [4e-3, 7e-3, 12e-3] {
        let echoes: Vec<(f64, f64)> = (1..=4)
            .map(|n| {
                let way = 2.0 * f64::hypot(f64::from(n) * wall, 0.5 * apart);
                (START + RATE * way / velocity, 12_000.0 * 0.75f64.powi(n - 1))
            })
            .collect();
        let outcome = read(&echoes, &echoes, &along);
        let train = outcome.train.unwrap_or_else(|why| panic!("{wall} m: {why:?}"));
        let straight = RATE * 2.0 * wall / velocity;
        assert!(near(train.period, straight, 5e-3), "{wall} m: {train:?}");
        assert!(near(train.first.as_samples(), echoes[0].0, 1e-2), "{wall} m: {train:?}");
        assert!(near(train.start_difference, 0.0, 2e-2), "{wall} m: {train:?}");
        assert!(train.unevenness < 0.05 && train.echoes == 4, "{wall} m: {train:?}");
        // The bound, with the echoes where Pythagoras puts them: start and period free.
        let heights: Vec<f64> = echoes.iter().map(|echo| echo.1).collect();
        let lever = |n: usize| {
            let [slope] = oracle::gradient(
                |[t]| RATE * 2.0 * f64::hypot((n + 1) as f64 * t * velocity / (2.0 * RATE), 0.5 * apart) / velocity,
                [straight],
                1e-6,
            );
            slope
        };
        let moment = |power: i32| -> f64 { (0..4).map(|n| heights[n].powi(2) * lever(n).powi(power)).sum() };
        let template: Vec<f64> = (-40..=40).map(|k| pulse(f64::from(k))).collect();
        let spread = moment(0) / (moment(0) * moment(2) - moment(1).powi(2));
        let bound = oracle::delay_bound(&template, NOISE) * spread.sqrt();
        let stated = train.period_uncertainty.expect("four echoes");
        assert!(near(stated / bound as f32, 1.0, 0.01), "{wall} m: {stated} {bound}");
    }
}
