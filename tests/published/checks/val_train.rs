//! What the joint fit makes of trains of known place, and what it states of its uncertainty (records: `train_records.rs`).

use crate::train_records::{NOISE, RATE, SAMPLES, START, multiples, near, pulse, read, read_codes, rules};
use halfpulse::echo::train::Rules;
use halfpulse::echo::{EchoRole, Polarity};
use halfpulse::path::{Beam, PathLaw, Spreading, VPath};
use halfpulse::{ElementSeparation, Metres, MetresPerSecond};
use halfpulse_published::oracle;

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
    // So that what stands where a later multiple would be does not become one.
    let mut later = faint.clone();
    later.push((START + 7.0 * 131.3, 2_000.0));
    assert_eq!(read(&later, &later[..2], &rules()).train.expect("a train").echoes, 3);
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
        assert!((stated - 1.0).abs() < 0.01, "{height}: {stated}");
        // A sample off the line it is as uncertain.
        let mut moved = echoes.clone();
        moved[0].0 += 0.9;
        let off = read(&moved, &moved, &rules()).train.expect("a train");
        let ratio = off.period_uncertainty.expect("four echoes") / train.period_uncertainty.expect("four echoes");
        assert!(near(ratio, 1.0, 0.1), "{height}: {ratio}");
        let mut second = multiples(133.6, height, 1.0, 3);
        second[1].0 += 0.9;
        let even = read(
            &multiples(133.6, height, 1.0, 3),
            &multiples(133.6, height, 1.0, 3),
            &rules(),
        )
        .train
        .expect("a train");
        let off = read(&second, &second, &rules()).train.expect("a train");
        let share = off.support / even.support;
        println!("{height}: {share}");
        assert!(near(share, 1.0, 0.15), "{height}: {share}");
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

/// Where the beam spreads, echoes come early by what the law says of their way; and an echo that was found half a cycle off, the
/// wrong way up, is put right by the train.
#[test]
fn trains_of_a_spreading_beam() {
    let table = Spreading::new(0.6);
    let period = 160.3;
    let law = PathLaw::Beam(Beam {
        table: &table,
        start: 0.0,
        rate: (1.5 / period) as f32,
        cycle: 10.0,
        held: Some(0.0),
    });
    let spread = Rules { law, ..rules() };
    let echoes: Vec<(f64, f64)> = (1..=5)
        .map(|n| {
            let straight = f64::from(n) * period;
            let place = START + straight + f64::from(law.deviation(straight as f32));
            (place, 14_000.0 * 0.8f64.powi(n - 1))
        })
        .collect();
    // By up to a quarter of a cycle, and not evenly.
    assert!(echoes[4].0 < START + 5.0 * period - 1.0);
    let mut seen = echoes.clone();
    for off in [0.0, 5.0, -5.0] {
        seen[2].0 = echoes[2].0 + off;
        let outcome = read(&echoes, &seen, &spread);
        let train = outcome.train.unwrap_or_else(|why| panic!("{off}: {why:?}"));
        assert!(
            near(train.period, period, 5e-3) && train.echoes == 5,
            "{off}: {train:?}"
        );
        assert!(
            near(train.start_difference, 0.0, 2e-2) && train.unevenness < 0.05,
            "{off}: {train:?}"
        );
        assert_eq!(outcome.echoes.len(), 5);
        for (n, (echo, (place, _))) in outcome.echoes.iter().zip(&echoes).enumerate() {
            assert_eq!(
                (echo.role, echo.polarity),
                (EchoRole::BackWall(n as u8 + 1), Polarity::Positive),
                "{off}"
            );
            assert!(
                near(echo.position.as_samples(), *place, 0.03),
                "{off}: {echo:?} {place}"
            );
        }
    }
}
