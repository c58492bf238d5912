//! The uncertainty budget against the examples of the guides, and term by term against numerical derivatives.

use halfpulse::echo::pulse::PulseFacts;
use halfpulse::path::Spreading;
use halfpulse::wall::coupling::{STEEL_IMPEDANCE, half_width, transmission_delay};
use halfpulse::wall::thickness::{Timed, TrainTimes, coating};
use halfpulse::wall::uncertainty::{
    Budget, Source, budget, excess_uncertainty, reference_pulse, unknown_temperature_matters, whole_excess,
};
use halfpulse::wall::way::{beam_uncertainty, gain, path_law, v_path_uncertainty};
use halfpulse::{
    CalibratedRange, Celsius, Coating, DriftState, ElementSeparation, GaugeSetup, Guard, Hertz, LimitState, Limits,
    Material, Metres, MetresPerSecond, Probe, Seconds, Span, VelocityTemperature, Window, Zero,
};
use halfpulse_published::oracle;

const C: f64 = 5920.0;

/// A probe of 5 MHz on steel without couplant film and element, so that those terms are nothing.
fn setup(span: Span, velocity_uncertainty: f64, zero_ns: f64, correlation: f64) -> GaugeSetup {
    let zero = Zero {
        velocity_correlation: correlation as f32,
        ..Zero::new(Seconds::from_us(0.5), Seconds::from_ns(zero_ns as f32))
    };
    let five = Hertz::from_mhz(5.0);
    let probe = match span {
        Span::InterfaceToBackWall => Probe::delay_line(five, 0.6),
        _ => Probe::contact(five, 0.6),
    };
    GaugeSetup::new(
        Hertz::from_mhz(50.0),
        probe.with_couplant_film(Metres::ZERO),
        Material::new(
            MetresPerSecond::new(C as f32),
            MetresPerSecond::new(velocity_uncertainty as f32),
        ),
        zero,
        span,
        Window {
            from: Seconds::from_us(0.5),
            to: Seconds::from_us(60.0),
        },
    )
}

fn timed(us: f64, u_ns: f64) -> Timed {
    Timed::new(Seconds::from_us(us as f32), Seconds::from_ns(u_ns as f32))
}

fn term(budget: &Budget, source: Source) -> f64 {
    let found = budget.terms().iter().find(|term| term.source == source);
    found.map_or(0.0, |term| f64::from(term.standard_uncertainty.get()))
}

/// A budget of these independent terms.
fn combined(terms: &[f64]) -> f64 {
    let sources = [Source::Timing, Source::Velocity, Source::Zero, Source::Beam];
    let mut budget = Budget::new();
    for (&source, &value) in sources.iter().zip(terms) {
        budget.add(source, Metres::new(value as f32));
    }
    f64::from(budget.combined().get())
}

/// Combined uncertainties of the guides' own examples.
///
/// Source: JCGM 100:2008, H.1 (end gauge: 25, 9.7, 2.9 and 16.6 nm give 32 nm) and JCGM 101:2008, 9.2 (four independent
/// quantities of standard deviation 1 give 2.0), from memory.
#[test]
fn val_examples_of_the_guides() {
    assert!((combined(&[25.0, 9.7, 2.9, 16.6]) - 32.0).abs() < 0.5);
    assert!((combined(&[1.0, 1.0, 1.0, 1.0]) - 2.0).abs() < 1e-6);
    assert!((combined(&[3.0, 4.0]) - 5.0).abs() < 1e-6);
    for (terms, largest) in [
        ([3.0, 4.0, 2.0], Source::Velocity),
        ([5.0, 4.0, 2.0], Source::Timing),
        ([3.0, 3.5, 4.0], Source::Zero),
    ] {
        let mut budget = Budget::new();
        for (source, value) in [Source::Timing, Source::Velocity, Source::Zero].into_iter().zip(terms) {
            budget.add(source, Metres::new(value));
        }
        assert_eq!(budget.dominating(), Some(largest));
    }
    assert_eq!(Budget::new().dominating(), None);
}

/// Standard uncertainty of a rectangle.
///
/// Source: JCGM 100:2008, 4.3.7: the expansion coefficient of copper, 0.40e-6 per kelvin as the half-width of a rectangle, has
/// a standard uncertainty of 0.23e-6 (from memory); and Monte Carlo of 20000 draws.
#[test]
fn val_rectangle_of_the_guide() {
    // A coefficient of 0.04 per kelvin and the ±10 K of an unknown temperature have that half-width.
    let follows = VelocityTemperature {
        coefficient_standard_uncertainty: 0.0,
        ..VelocityTemperature::new(0.04, Celsius::new(20.0))
    };
    let steel = Material::new(MetresPerSecond::new(C as f32), MetresPerSecond::ZERO).with_temperature(follows);
    let found = f64::from(steel.temperature_uncertainty().get());
    assert!((found - 0.23).abs() < 0.005, "{found}");
    let mut random = oracle::Random::new(5);
    let draws: Vec<f64> = (0..20_000).map(|_| 0.40 * (2.0 * random.uniform() - 1.0)).collect();
    let (_, deviation) = oracle::mean_and_deviation(&draws);
    assert!((found / deviation - 1.0).abs() < 0.01, "{found} {deviation}");
}

/// Inputs that are wholly correlated add up or cancel.
///
/// Source: JCGM 100:2008, 5.2.2, note 1 (ten resistors that were calibrated with the same one): for r = 1 the terms add
/// linearly with their signs; from memory.
#[test]
fn val_wholly_correlated_inputs() {
    let wall = 10e-3;
    let (of_velocity, of_zero) = (wall / C * 12.0, 0.5 * C * 3e-9);
    for (r, expected) in [(1.0, (of_velocity - of_zero).abs()), (-1.0, of_velocity + of_zero)] {
        let setup = setup(Span::TransmissionPulseToBackWall, 12.0, 3.0, r);
        let found = budget(&setup, &TrainTimes::single(timed(3.9, 0.0)), Metres::new(wall as f32));
        assert!(
            (term(&found, Source::Calibration) / expected - 1.0).abs() < 1e-4,
            "{r}: {found:?}"
        );
        assert_eq!(found.terms().len(), 1);
    }
}

/// Timing, velocity and zero, correlated or not, and what the part differs by from the blocks, for all spans.
///
/// Source: JCGM 100:2008, 5.2.2, the whole double sum over d = c (t - t0) / 2 with numerical derivatives
/// (`oracle::propagated`).
#[test]
fn val_budget_by_derivatives() {
    for span in [
        Span::TransmissionPulseToBackWall,
        Span::InterfaceToBackWall,
        Span::BackWallToBackWall,
    ] {
        for (wall, u_c, u_zero, r, u_part, u_time) in [
            (4e-3, 10.0, 2.0, 0.0, 0.0, 1.0),
            (4e-3, 10.0, 2.0, 0.8, 7.0, 0.5),
            (50e-3, 3.0, 4.0, 0.6, 0.0, 2.0),
            (50e-3, 3.0, 4.0, -0.3, 5.0, 2.0),
        ] {
            let mut setup = setup(span, u_c, u_zero, r);
            setup.material = setup
                .material
                .with_part_uncertainty(MetresPerSecond::new(u_part as f32));
            let trip = 2.0 * wall / C;
            // Both ends of the span with noise of their own.
            let times = TrainTimes::single(timed(0.5 + 1e6 * trip, u_time))
                .with_period(timed(1e6 * trip, u_time), -0.5)
                .with_interface(timed(0.5, u_time));
            let zero_counts = span != Span::BackWallToBackWall;
            let two_ends = if span == Span::InterfaceToBackWall { 1.0 } else { 0.0 };
            let expected = oracle::propagated(
                |[c, part, zero, time, other]| {
                    let zero = if zero_counts { zero } else { 0.0 };
                    0.5 * (c + part) * (trip + 1e-9 * (time - two_ends * other - zero))
                },
                [C, 0.0, 0.0, 0.0, 0.0],
                [u_c, u_part, u_zero, u_time, u_time],
                |i, j| if i + j == 2 && i != j { r } else { 0.0 },
            );
            let found = budget(&setup, &times, Metres::new(wall as f32));
            let ratio = f64::from(found.combined().get()) / expected;
            assert!(
                (ratio - 1.0).abs() < 1e-4,
                "{span:?}, {wall} m, r {r}: {ratio}, {found:?}"
            );
        }
    }
}

/// Along a V every error of a time counts more than straight down, and every error of the velocity more again.
///
/// Source: JCGM 100:2008, 5.1.2 over d = sqrt((c (t - t0) / 2)² - (p / 2)²) with numerical derivatives (`oracle::propagated`);
/// the velocity's error from its calibration and, as a rectangle, from a temperature that nobody knows.
#[test]
fn val_budget_along_a_v() {
    let span = Span::TransmissionPulseToBackWall;
    for wall in [1.5e-3, 4e-3, 15e-3] {
        let mut dual = setup(span, 10.0, 2.0, 0.0);
        dual.probe = Probe::dual_element(Hertz::from_mhz(5.0), 0.6)
            .with_couplant_film(Metres::ZERO)
            .with_separation(ElementSeparation::new(Metres::from_mm(5.0), Metres::from_mm(0.1)));
        dual.material = dual
            .material
            .with_temperature(VelocityTemperature::new(-0.8, Celsius::new(20.0)));
        let time = 0.5 + 2e6 * f64::hypot(wall, 2.5e-3) / C;
        let times =
            TrainTimes::single(timed(time, 1.0)).straightened(&path_law(&dual, &Spreading::NONE), dual.zero.offset);
        let by_temperature = 0.8f64.hypot(0.16) * 10.0 / 3f64.sqrt();
        let distance = |[c, warm, zero, time, apart]: [f64; 5]| {
            let way = 0.5 * (c + warm) * 1e-6 * (time - zero);
            (way * way - 0.25 * apart * apart).sqrt()
        };
        let at = [C, 0.0, 0.5, time, 5e-3];
        let expected = oracle::propagated(distance, at, [10.0, by_temperature, 2e-3, 1e-3, 1e-4], |_, _| 0.0);
        let found = budget(&dual, &times, Metres::new(wall as f32));
        let ratio = f64::from(found.combined().get()) / expected;
        assert!((ratio - 1.0).abs() < 2e-3, "{wall} m: {ratio}, {found:?}");
        for (source, number, uncertainty) in [
            (Source::Velocity, 0, 10.0),
            (Source::Temperature, 1, by_temperature),
            (Source::Zero, 2, 2e-3),
            (Source::Timing, 3, 1e-3),
            (Source::VPath, 4, 1e-4),
        ] {
            let slope = oracle::gradient(distance, at, 1e-5)[number].abs();
            let ratio = term(&found, source) / (slope * uncertainty);
            assert!((ratio - 1.0).abs() < 3e-3, "{wall} m, {source:?}: {ratio}");
        }
        // A film counts as the zero does.
        let mut wet = dual;
        wet.probe.couplant_film = Metres::new(3e-6);
        let film = term(&budget(&wet, &times, Metres::new(wall as f32)), Source::Coupling);
        let half_width = transmission_delay(
            wet.probe.face,
            STEEL_IMPEDANCE,
            wet.probe.centre_frequency,
            Metres::new(3e-6),
        );
        let slope = oracle::gradient(distance, at, 1e-5)[2].abs();
        let ratio = film / (slope * 1e6 * f64::from(half_width.get()) / 3f64.sqrt());
        assert!((ratio - 1.0).abs() < 3e-3, "{wall} m: film {ratio}");
    }
}

/// The temperature's term, stated and unknown, and when it rests on a guess.
///
/// Source: JCGM 100:2008, 5.1.2 over c = c0 + β (T - T0), numerical derivatives; an unknown temperature is a rectangle of
/// ±10 K (4.3.7).
#[test]
fn val_temperature_by_derivatives() {
    let wall = 20e-3;
    let times = TrainTimes::single(timed(7.3, 0.0));
    let velocity = |[slope, warmer]: [f64; 2]| C + slope * warmer;
    let follows = VelocityTemperature::new(-0.8, Celsius::new(20.0));
    let mut setup = setup(Span::TransmissionPulseToBackWall, 0.0, 0.0, 0.0);

    let stated = follows.with_part(Celsius::new(80.0), Celsius::new(3.0));
    setup.material = setup.material.with_temperature(stated);
    let there = [-0.8, 60.0];
    let expected = wall / velocity(there) * oracle::propagated(velocity, there, [0.16, 3.0], |_, _| 0.0);
    let found = budget(&setup, &times, Metres::new(wall as f32));
    let ratio = term(&found, Source::Temperature) / expected;
    assert!((ratio - 1.0).abs() < 1e-4, "{ratio}");
    assert!(!unknown_temperature_matters(&setup, Metres::new(wall as f32), &found));

    setup.material = setup.material.with_temperature(follows);
    let spread = 10.0 / 3f64.sqrt();
    let expected = wall / C * (0.8f64.hypot(0.16) * spread);
    let found = budget(&setup, &times, Metres::new(wall as f32));
    let ratio = term(&found, Source::Temperature) / expected;
    assert!((ratio - 1.0).abs() < 1e-4, "{ratio}");
    assert!(unknown_temperature_matters(&setup, Metres::new(wall as f32), &found));
    // A velocity that does not follow temperature rests on no guess, even where nothing else is in the budget.
    let mut still = setup;
    still.material = still
        .material
        .with_temperature(VelocityTemperature::new(0.0, Celsius::new(20.0)));
    assert!(!unknown_temperature_matters(
        &still,
        Metres::new(wall as f32),
        &Budget::new()
    ));
    // 8 m/s of 5920 on 20 mm are 27.03 µm: the guess is held by the rest from half of that on, k being 2.
    for (others_um, matters) in [(13.4, true), (13.6, false)] {
        let mut rest = Budget::new();
        rest.add(Source::Temperature, Metres::new(1.0));
        rest.add(Source::Zero, Metres::new((others_um * 0.6e-6) as f32));
        rest.add(Source::Beam, Metres::new((others_um * 0.8e-6) as f32));
        assert_eq!(
            unknown_temperature_matters(&setup, Metres::new(wall as f32), &rest),
            matters,
            "{others_um}"
        );
    }
}

/// What a learned pulse's noise adds: all of it from the trigger with a zero that no calibration vouches for, else the share
/// by which echoes differ from the pulse.
///
/// Source: closed forms of a Gaussian pulse by hand: noise over sqrt(Σ s'²), and of the envelope's maximum σ σt² / √2 with
/// 2 sqrt(2 ln 10) σt the -20 dB duration; 2.96 µm per ns. (Monte Carlo of the term: `val_calibration`.)
#[test]
fn val_noise_of_a_learned_pulse_by_hand() {
    let sigma = 6.24;
    let facts = PulseFacts {
        length: 49,
        origin: 24.0,
        derivative_energy: 2.25,
        energy: 5.5,
        envelope_duration: (2.0 * (2.0 * 10f64.ln()).sqrt() * sigma) as f32,
        noise: 0.004,
        mismatch: 0.03,
        ..PulseFacts::default()
    };
    let found = 0.004f64 / 1.5;
    let origin = 0.004 * sigma * sigma / 2f64.sqrt();
    let metres = |samples: f64| 2960.0 * 20e-9 * samples;
    let mut from_pulse = setup(Span::TransmissionPulseToBackWall, 0.0, 0.0, 0.0);
    let read = |setup: &GaugeSetup| f64::from(reference_pulse(setup, &facts).get());
    assert!((read(&from_pulse) / metres(found.hypot(origin)) - 1.0).abs() < 1e-3);
    from_pulse.calibrated = Some(CalibratedRange {
        from: Metres::from_mm(5.0),
        to: Metres::from_mm(25.0),
    });
    assert!((read(&from_pulse) / metres(0.03 * found) - 1.0).abs() < 1e-3);
    let between = setup(Span::BackWallToBackWall, 0.0, 0.0, 0.0);
    assert!((read(&between) / metres(0.03 * found) - 1.0).abs() < 1e-3);
}

/// The excess before the train as a whole, and the coating that it is.
///
/// Source: JCGM 100:2008, 5.2.2, over a = c_a (t1 - t0 - T) / 2 with numerical derivatives.
#[test]
fn val_coating_by_derivatives() {
    let wall = Metres::from_mm(5.92);
    let (u_first, u_period, u_zero, r) = (1.5, 1.1, 2.5, -0.6);
    let paint = Coating::new(MetresPerSecond::new(2300.0), MetresPerSecond::new(60.0));
    let painted = setup(Span::TransmissionPulseToBackWall, 5.0, u_zero, 0.0).with_coating(paint);
    let times = TrainTimes::single(timed(2.8, u_first)).with_period(timed(2.0, u_period), r as f32);
    let expected = oracle::propagated(
        |[first, period, zero]| first - period - zero,
        [0.0; 3],
        [u_first, u_period, u_zero],
        |i, j| if i + j == 1 { r } else { 0.0 },
    );
    let found = f64::from(excess_uncertainty(&painted, &times, wall).expect("a period").as_ns());
    assert!((found / expected - 1.0).abs() < 1e-4, "{found} {expected}");
    let left = whole_excess(&painted, &times, wall).expect("a period");
    let in_coating = oracle::propagated(
        |[velocity, ns]| velocity * ns * 1e-9 / 2.0,
        [2300.0, f64::from(left.time.as_ns())],
        [60.0, expected],
        |_, _| 0.0,
    );
    let (_, coat) = coating(&paint, left).expect("a velocity");
    assert!(
        (f64::from(coat.get()) / in_coating - 1.0).abs() < 1e-4,
        "{coat:?} {in_coating}"
    );
    // Beam, film and V of the first back wall and of the period hang together: they add up before they are squared. Their
    // sizes are checked elsewhere (`val_way`, `val_beam_and_film`).
    let (pulse, train) = (Span::TransmissionPulseToBackWall, Span::BackWallToBackWall);
    let of = |setup: &GaugeSetup, span: Span| {
        let mut setup = *setup;
        (setup.span, setup.coating) = (span, None);
        setup
    };
    let mut spread = painted;
    spread.probe = spread.probe.with_element_diameter(Metres::from_mm(6.0));
    let both = beam_uncertainty(&of(&spread, pulse), wall) + beam_uncertainty(&of(&spread, train), wall);
    let found = f64::from(excess_uncertainty(&spread, &times, wall).expect("a period").as_ns());
    let with_beam = expected.hypot(f64::from(both.as_ns()));
    assert!((found / with_beam - 1.0).abs() < 1e-4, "beam: {found} {with_beam}");
    let mut wet = painted;
    wet.probe.couplant_film = Metres::new(2e-6);
    let both = half_width(&wet.probe, pulse) + half_width(&wet.probe, train);
    let found = f64::from(excess_uncertainty(&wet, &times, wall).expect("a period").as_ns());
    // The film brings its phase between echoes: two degrees at 5 MHz in either of the period's two.
    let phase = 2f64.sqrt() * 2.0 / 360.0 * 200.0;
    let with_film = expected.hypot(f64::from(both.as_ns()) / 3f64.sqrt()).hypot(phase);
    assert!((found / with_film - 1.0).abs() < 1e-4, "film: {found} {with_film}");
    let mut dual = painted;
    dual.probe = Probe::dual_element(Hertz::from_mhz(5.0), 0.6)
        .with_couplant_film(Metres::ZERO)
        .with_separation(ElementSeparation::new(Metres::from_mm(6.0), Metres::from_mm(0.2)));
    let both = v_path_uncertainty(&of(&dual, pulse), wall) + v_path_uncertainty(&of(&dual, train), wall);
    let found = f64::from(excess_uncertainty(&dual, &times, wall).expect("a period").as_ns());
    // The zero counts 1 / cos θ as much.
    let slanted = f64::from(gain(&of(&dual, pulse), wall));
    let timing = (expected * expected - u_zero * u_zero).sqrt();
    let with_v = timing.hypot(u_zero * slanted).hypot(f64::from(both.get()) * 2e9 / C);
    assert!((found / with_v - 1.0).abs() < 1e-4, "V: {found} {with_v}");
    let without_period = TrainTimes::single(timed(2.8, u_first));
    assert_eq!(excess_uncertainty(&painted, &without_period, wall), None);
}

/// Guard bands that leave a stated probability of a wrong decision, and the probability that a wall keeps to its limits.
///
/// Source: JCGM 106:2012, 7.4 and 8.3 (from memory): a guard band of 1.645 u leaves 5 %; with SciPy's `norm.cdf`.
#[test]
fn val_guard_bands_of_jcgm_106() {
    let um = |um: f64| Metres::new((1e-6 * um) as f32);
    let limits = Limits::minimum(um(5000.0)).with_guard(Guard::WrongDecision(0.05));
    let band = f64::from(limits.guard_band(um(10.0), 2.0).get()) * 1e6;
    assert!((band - 16.448_536).abs() < 1e-3, "{band}");
    for (read, state, probability) in [
        (5_016.6, LimitState::Above, 0.951_543),
        (5_016.2, LimitState::Undecided, 0.947_384),
        (5_000.0, LimitState::Undecided, 0.5),
        (4_983.4, LimitState::Below, 0.048_457),
    ] {
        let verdict = limits.judge(um(read), um(10.0), 2.0, halfpulse::Doubts::NONE);
        assert_eq!(verdict.minimum, state, "{read}");
        assert!(
            (f64::from(verdict.conformance_probability) - probability).abs() < 2e-4,
            "{read}: {verdict:?}"
        );
    }
    // Between two limits, three standard uncertainties from one and one from the other: 0.998650 - 0.158655.
    let both = Limits::minimum(um(4_970.0)).with_maximum(um(5_010.0));
    let verdict = both.judge(um(5_000.0), um(10.0), 2.0, halfpulse::Doubts::NONE);
    assert!(
        (f64::from(verdict.conformance_probability) - 0.839_995).abs() < 2e-4,
        "{verdict:?}"
    );
}

/// The deepest place of a rough back wall lies up to 2.5 times its root mean square before the mean (common practice), as the
/// half-width of a rectangle.
#[test]
fn roughness_by_hand() {
    let rough = setup(Span::BackWallToBackWall, 0.0, 0.0, 0.0).with_roughness(Metres::new(10e-6));
    let found = budget(&rough, &TrainTimes::single(timed(3.0, 0.0)), Metres::from_mm(5.0));
    assert!(
        (term(&found, Source::Roughness) / (25e-6 / 3f64.sqrt()) - 1.0).abs() < 1e-5,
        "{found:?}"
    );
}

/// Every source has a word of its own, and every state of a drift check a word and an advice.
#[test]
fn words_are_distinct() {
    let sources = [
        Source::Timing,
        Source::Velocity,
        Source::Zero,
        Source::Calibration,
        Source::Beam,
        Source::Coupling,
        Source::Temperature,
        Source::ReferencePulse,
        Source::VPath,
        Source::Roughness,
    ];
    let states = [DriftState::Within, DriftState::Outside, DriftState::Undecided];
    let mut words: Vec<&str> = sources.iter().map(|source| source.word()).collect();
    words.extend(states.iter().flat_map(|state| [state.word(), state.advice()]));
    assert!(words.iter().all(|word| word.len() > 3), "{words:?}");
    words.sort_unstable();
    words.dedup();
    assert_eq!(words.len(), 16, "{words:?}");
}
