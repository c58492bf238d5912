//! Records of trains of back walls whose places are known, for the checks of choosing and fitting.
//!
//! The records are made here, a Gaussian pulse of 5 MHz and 60 % at 50 MS/s (`oracle::gaussian_pulse`) without noise in 16 bits; the noise
//! that the steps are told is a number of its own, so that what they state of it can be compared to the last digits. Where only the
//! record's own truth is compared, no outside source speaks, and the check is not called `val_`.

use halfpulse::echo::arrival::{Estimator, Search, estimate};
use halfpulse::echo::correlation::Sign;
use halfpulse::echo::noise::TimingNoise;
use halfpulse::echo::pulse::{ReferencePulse, learn};
use halfpulse::echo::train::{Hypothesis, Rules, Train, Undecided, choose, fit, other_trains};
use halfpulse::echo::{Echo, EchoList, Surroundings, echo_at};
use halfpulse::path::PathLaw;
use halfpulse::setup::PULSE_CAPACITY;
use halfpulse::workspace::{ECHO_CAPACITY, TRAIN_LAGS};
use halfpulse::{AdcFormat, Hertz, Record, SampleClock};
use halfpulse_published::oracle;

pub const RATE: f64 = 50e6;
pub const SAMPLES: usize = 2000;
pub const NOISE: f64 = 60.0;
/// Where the wall begins.
pub const START: f64 = 100.25;

pub fn pulse(t: f64) -> f64 {
    oracle::gaussian_pulse(t / RATE, 5e6, 0.6)
}

/// The echo at a place known within two samples, at ten samples a cycle.
pub fn echo_near(surroundings: &Surroundings<'_>, place: f64) -> Echo {
    let search = Search {
        around: place.round() as u32,
        reach: 2.0,
        sign: Sign::Either,
        samples_per_cycle: 10.0,
    };
    let codes = surroundings.record.codes();
    let arrival = estimate(
        Estimator::LeastSquares,
        codes,
        &search,
        &surroundings.pulse,
        &mut [0.0; 512],
    );
    echo_at(surroundings, arrival.expect("an echo")).expect("inside")
}

/// A record with echoes of these places and amplitudes.
pub fn codes(echoes: &[(f64, f64)]) -> Vec<i16> {
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
pub fn multiples(period: f64, height: f64, decay: f64, count: i32) -> Vec<(f64, f64)> {
    (1..=count)
        .map(|n| (START + f64::from(n) * period, height * decay.powi(n - 1)))
        .collect()
}

pub fn rules<'a>() -> Rules<'a> {
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
pub struct Outcome {
    pub choice: Result<Hypothesis, Undecided>,
    pub train: Result<Train, Undecided>,
    pub echoes: EchoList,
    pub thinner: bool,
}

/// Finds those of `seen` in the record of all `echoes`, chooses and fits.
pub fn read(echoes: &[(f64, f64)], seen: &[(f64, f64)], rules: &Rules<'_>) -> Outcome {
    read_codes(&codes(echoes), seen, rules)
}

/// The same for any record.
pub fn read_codes(codes: &[i16], seen: &[(f64, f64)], rules: &Rules<'_>) -> Outcome {
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
        let echo = echo_near(&surroundings, place);
        found.push(echo).expect("room");
    }
    let mut lags = [0.0; ECHO_CAPACITY * TRAIN_LAGS];
    let choice = choose(&surroundings, &found, rules);
    let train = choice.and_then(|choice| fit(&surroundings, &mut found, rules, &choice, &mut lags));
    let thinner = train.is_ok_and(|train| other_trains(&surroundings, &found, rules, &train).0);
    Outcome {
        choice,
        train,
        echoes: found,
        thinner,
    }
}

pub fn near(found: f32, expected: f64, allowed: f64) -> bool {
    (f64::from(found) - expected).abs() < allowed
}
