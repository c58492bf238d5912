//! Where a second echo is looked for: which echoes are suspected, and how far around them. Rules of the core's own, by hand.

use crate::train_records::echo_near;
use crate::val_overlapping::{gaussian, with_record};
use halfpulse::SamplePosition;
use halfpulse::echo::separation::{PulseTrust, stretch_around, suspect};
use halfpulse::echo::{Echo, EchoRole};

const DURATION: f32 = 20.0;

/// Echoes at these places with these amplitudes and mismatches.
fn echoes(list: &[(f32, f32, f32)]) -> Vec<Echo> {
    let template: Vec<f32> = (-35..=35)
        .map(|k| gaussian(f64::from(k), 0.1, 0.6, 0.0) as f32)
        .collect();
    let samples: Vec<f64> = (0..400)
        .map(|i| 9_000.0 * gaussian(f64::from(i) - 200.0, 0.1, 0.6, 0.0))
        .collect();
    let any = with_record(&samples, &template, 10.0, |surroundings| echo_near(surroundings, 200.0));
    list.iter()
        .map(|&(place, amplitude, mismatch)| Echo {
            position: SamplePosition::new(place as u32, place.fract()),
            amplitude,
            mismatch,
            ..any
        })
        .collect()
}

fn places((first, last): (Echo, Echo)) -> (f32, f32) {
    (first.position.as_samples(), last.position.as_samples())
}

/// The nearest pair if it overlaps, else the echo that looks least like the pulse for its size.
#[test]
fn suspects() {
    let of = |list: &[(f32, f32, f32)]| suspect(&echoes(list), DURATION).map(places);
    assert_eq!(of(&[]), None);
    // 1.6 durations are the limit.
    assert_eq!(
        of(&[(100.0, 5.0, 0.0), (131.5, 4.0, 0.0), (300.0, 9.0, 0.5)]),
        Some((100.0, 131.5))
    );
    assert_eq!(
        of(&[(100.0, 5.0, 0.0), (132.5, 4.0, 0.0), (300.0, 9.0, 0.5)]),
        Some((300.0, 300.0))
    );
    // What the pulse leaves in codes, a fiftieth of the amplitude at least: 0.12 x 5, 0.04 x 16, 0.02 x 25.
    assert_eq!(
        of(&[(100.0, 5.0, 0.1), (200.0, 16.0, 0.02), (300.0, 25.0, 0.0)]),
        Some((200.0, 200.0))
    );
    assert_eq!(
        of(&[(100.0, 6.0, 0.1), (200.0, 16.0, 0.02), (300.0, 25.0, 0.0)]),
        Some((100.0, 100.0))
    );
    // A transmission pulse is none.
    let mut list = echoes(&[(100.0, 50.0, 0.3), (200.0, 5.0, 0.1)]);
    list[0].role = EchoRole::TransmissionPulse;
    assert_eq!(suspect(&list, DURATION).map(places), Some((200.0, 200.0)));
}

/// 1.4 durations to either side of the middle, at least 0.6 beyond the pair; and not into what is a neighbour's own.
#[test]
fn stretches() {
    let of = |list: &[(f32, f32, f32)], first: usize, last: usize| {
        let list = echoes(list);
        let stretch = stretch_around(&list[first], &list[last], &list, DURATION, PulseTrust::Modelled);
        assert_eq!(stretch.trust, PulseTrust::Modelled);
        (stretch.from, stretch.to)
    };
    let near = |found: (f32, f32), expected: (f32, f32)| {
        assert!(
            (found.0 - expected.0).abs() < 1e-3 && (found.1 - expected.1).abs() < 1e-3,
            "{found:?} {expected:?}"
        );
    };
    // Alone: 28 samples.
    near(of(&[(200.5, 5.0, 0.0)], 0, 0), (172.5, 228.5));
    // A pair 20 apart: 18 beyond each; 36 apart: 12, the least.
    near(of(&[(200.0, 5.0, 0.0), (220.0, 5.0, 0.0)], 0, 1), (182.0, 238.0));
    near(of(&[(200.0, 5.0, 0.0), (236.0, 5.0, 0.0)], 0, 1), (188.0, 248.0));
    // A neighbour 40 before leaves 22, one 30 behind leaves 12; one 19 behind leaves the least, 4.
    near(of(&[(160.0, 5.0, 0.0), (200.0, 5.0, 0.0)], 1, 1), (178.0, 228.0));
    near(of(&[(200.0, 5.0, 0.0), (230.0, 5.0, 0.0)], 0, 0), (172.0, 212.0));
    near(of(&[(200.0, 5.0, 0.0), (219.0, 5.0, 0.0)], 0, 0), (172.0, 204.0));
}
