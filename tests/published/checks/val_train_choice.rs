//! Which period is chosen for echoes of known place (records: `train_records.rs`).

use crate::train_records::{START, multiples, near, read, rules};
use halfpulse::echo::train::Undecided;

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
