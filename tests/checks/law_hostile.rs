//! Whatever the gauge is given, nothing panics (overflow checks are on here), every number that comes out is finite
//! and possible, and the gauge stays usable afterwards.

use halfpulse::echo::separation::Verdict;
use halfpulse::wall::calibration::{velocity_from_thickness, zero_and_velocity, zero_at_known_velocity};
use halfpulse::{
    AdcFormat, Averager, Block, CalibratedRange, Celsius, Coating, Decibels, DelayLine, EchoRole, ElementSeparation,
    Gauge, GaugeSetup, Hertz, Interleaver, Material, Metres, MetresPerSecond, NoReading, PartTemperature, Probe,
    ProbeKind, Reading, Record, SampleClock, Scratch, Seconds, Span, Surface, TwoGains, TwoRounds, VelocityTemperature,
    Window, Zero, movement,
};
use halfpulse_tests::oracle::{self, Random};
use proptest::prelude::*;

const SAMPLES: usize = 2048;

/// Codes that no receiver should deliver, and some that one could.
fn hostile_codes(kind: u8, length: usize, frequency: f64, random: &mut Random) -> Vec<i16> {
    let high = (random.uniform() * 32_768.0) as i16;
    let low = -(random.uniform() * 32_768.0) as i16;
    let period = 1 + (random.uniform() * 80.0) as usize;
    let at = (random.uniform() * length as f64) as usize;
    let step = 1.0 + 200.0 * random.uniform();
    let noise = 10f64.powf(3.0 * random.uniform() - 1.0);
    let mut each = |f: &mut dyn FnMut(usize, &mut Random) -> f64| -> Vec<i16> {
        (0..length).map(|i| f(i, random).round() as i16).collect()
    };
    match kind {
        0 => vec![low; length],
        1 => vec![i16::MIN; length],
        2 => vec![i16::MAX; length],
        3 => each(&mut |i, _| if i % 2 == 0 { -32_768.0 } else { 32_767.0 }),
        4 => each(&mut |i, _| f64::from(if (i / period).is_multiple_of(2) { low } else { high })),
        5 => each(&mut |i, _| if i == at { 32_767.0 } else { 0.0 }),
        6 => each(&mut |i, _| if i == at { -32_768.0 } else { f64::from(high) }),
        7 => each(&mut |i, _| (i as f64 * step) % 65_536.0 - 32_768.0),
        8 => each(&mut |i, _| f64::from(if i < at { low } else { high })),
        9 => each(&mut |_, r| 65_536.0 * r.uniform() - 32_768.0),
        10 => each(&mut |_, r| noise * r.normal()),
        // A loud start, silence, a loud end: nothing in the middle of a record.
        11 => each(&mut |i, r| {
            if i > length / 8 && i < length - length / 8 {
                0.0
            } else {
                8000.0 * r.normal()
            }
        }),
        // A wave that just fills the range.
        12 => each(&mut |i, _| 32_767.0 * (std::f64::consts::TAU * frequency * i as f64).sin()),
        // Trains of pulses with noise, from clean to drowned and from closer than a pulse to beyond the record.
        _ => {
            let start = length as f64 * 0.5 * random.uniform();
            let spacing = (0.3 + 20.0 * random.uniform().powi(2)) / frequency;
            let peak = 10f64.powf(1.5 + 3.5 * random.uniform());
            let decay = 0.4 + 0.6 * random.uniform();
            let noise = peak * 10f64.powf(-2.5 * random.uniform());
            let flip = if random.uniform() < 0.3 { -1.0 } else { 1.0 };
            let mut samples: Vec<f64> = (0..length).map(|_| noise * random.normal()).collect();
            for multiple in 0..40 {
                let place = start + f64::from(multiple) * spacing;
                let reach = 2.0 / frequency;
                let from = (place - reach).max(0.0) as usize;
                let count = (2.0 * reach) as usize + 2;
                let height = peak * decay.powi(multiple) * if multiple == 0 { flip } else { 1.0 };
                for (i, x) in samples.iter_mut().enumerate().skip(from).take(count) {
                    *x += height * oracle::gaussian_pulse(i as f64 - place, frequency, 0.6);
                }
            }
            samples.iter().map(|x| x.round() as i16).collect()
        }
    }
}

/// A number of any size, with the sizes that matter.
fn any_size() -> impl Strategy<Value = f32> {
    prop_oneof![
        any::<f32>(),
        prop::sample::select(vec![
            0.0,
            -0.0,
            1.0,
            -1.0,
            1e-45,
            1e-38,
            3e38,
            -3e38,
            1e-9,
            1e-6,
            1e9,
            f32::NAN,
            f32::INFINITY,
            f32::NEG_INFINITY
        ]),
        (-12.0f32..12.0).prop_map(|x| 10f32.powf(x)),
    ]
}

/// A number around what is usual, one in a wide range, or any.
fn around(usual: f32) -> impl Strategy<Value = f32> {
    prop_oneof![
        4 => Just(usual),
        3 => (0.2f32..5.0).prop_map(move |x| usual * x),
        1 => (-6.0f32..6.0).prop_map(move |x| usual * 10f32.powf(x)),
        1 => any_size(),
    ]
}

prop_compose! {
    /// Any set-up, acceptable or not: mostly one or two absurd numbers among usual ones.
    fn any_setup()(
        rate in prop_oneof![3 => around(50e6), 1 => Just(f32::NAN)],
        frequency in around(5e6),
        bandwidth in prop_oneof![4 => 0.05f32..2.0, 1 => Just(2.0f32), 1 => Just(0.6f32), 1 => any_size()],
        kind in 0u8..3,
        span in 0u8..3,
        velocity in (around(5920.0), around(17.0)),
        zero in (around(1e-6), around(1e-9), -1.0f32..=1.0, any::<bool>()),
        window in (around(0.5e-6), around(60e-6), any::<bool>()),
        coverage in around(2.0),
        diameter in prop::option::of(around(6e-3)),
        film in around(2e-6),
        coating in prop::option::of((prop::option::of(around(2300.0)), around(100.0))),
        surface in (0u8..3, around(0.03)),
        calibrated in prop::option::of((around(2e-3), around(25e-3))),
        delay_line in prop::option::of((around(8e-3), around(2350.0))),
        separation in prop::option::of((around(6e-3), around(1e-4))),
        learned in (prop::option::of(around(5e-3)), around(0.07)),
        part in (around(9.0), prop::option::of((around(0.8), around(0.16), around(20.0), prop::option::of((around(60.0), around(1.0)))))),
    ) -> GaugeSetup {
        let frequency = Hertz::new(frequency);
        let mut probe = match kind {
            0 => Probe::contact(frequency, bandwidth),
            1 => Probe::delay_line(frequency, bandwidth),
            _ => Probe::dual_element(frequency, bandwidth),
        }
        .with_couplant_film(Metres::new(film));
        probe.element_diameter = diameter.map(Metres::new);
        probe.element_diameter_uncertainty = learned.1;
        probe.delay_line = delay_line
            .map(|(length, velocity)| DelayLine { length: Metres::new(length), velocity: MetresPerSecond::new(velocity) });
        if kind == 2 {
            probe.separation = separation.map(|(d, u)| ElementSeparation::new(Metres::new(d), Metres::new(u)));
        }
        GaugeSetup {
            // "Not a number" stands for the lowest rate that the probe allows.
            sample_rate: if rate.is_nan() { probe.upper_frequency() * 2.0 } else { Hertz::new(rate) },
            probe,
            material: Material {
                velocity: MetresPerSecond::new(velocity.0),
                velocity_standard_uncertainty: MetresPerSecond::new(velocity.1),
                part_velocity_standard_uncertainty: MetresPerSecond::new(part.0),
                temperature: part.1.map(|(slope, uncertainty, reference, part)| VelocityTemperature {
                    coefficient: -slope,
                    coefficient_standard_uncertainty: uncertainty,
                    reference: Celsius::new(reference),
                    part: part.map(|(temperature, uncertainty)| PartTemperature {
                        temperature: Celsius::new(temperature),
                        standard_uncertainty: Celsius::new(uncertainty),
                    }),
                }),
            },
            zero: Zero {
                offset: Seconds::new(if zero.3 { zero.0 } else { 0.0 }),
                standard_uncertainty: Seconds::new(zero.1),
                velocity_correlation: zero.2,
                learned_on: learned.0.map(Metres::new),
            },
            span: [Span::TransmissionPulseToBackWall, Span::InterfaceToBackWall, Span::BackWallToBackWall][usize::from(span)],
            window: Window {
                from: Seconds::new(if window.2 { window.0 } else { -1.0 }),
                to: Seconds::new(window.1),
            },
            coverage_factor: coverage,
            coating: coating.map(|(velocity, u)| Coating {
                velocity: velocity.map(MetresPerSecond::new),
                velocity_standard_uncertainty: MetresPerSecond::new(u),
            }),
            surface: match surface.0 {
                0 => Surface::Flat,
                1 => Surface::Convex(Metres::new(surface.1)),
                _ => Surface::Concave(Metres::new(surface.1)),
            },
            calibrated: calibrated.map(|(from, to)| CalibratedRange { from: Metres::new(from), to: Metres::new(to) }),
            trigger_jitter: Seconds::new(zero.1),
            roughness: Metres::ZERO,
        }
    }
}

prop_compose! {
    fn any_format()(
        bits in prop_oneof![3 => Just(16u8), 2 => Just(12u8), 1 => any::<u8>()],
        codes_per_step in prop_oneof![4 => Just(1.0f32), 1 => any_size()],
        shots in prop_oneof![2 => Just(1u16), 1 => any::<u16>()],
    ) -> AdcFormat {
        AdcFormat { bits, codes_per_step, shots }
    }
}

fn finite(name: &str, value: f32) -> Result<(), TestCaseError> {
    prop_assert!(value.is_finite(), "{} is {}", name, value);
    Ok(())
}

fn not_negative(name: &str, value: f32) -> Result<(), TestCaseError> {
    prop_assert!(value.is_finite() && value >= 0.0, "{} is {}", name, value);
    Ok(())
}

fn positive(name: &str, value: f32) -> Result<(), TestCaseError> {
    prop_assert!(value.is_finite() && value > 0.0, "{} is {}", name, value);
    Ok(())
}

/// Everything that came out is finite, possible and in order.
fn check(gauge: &Gauge<'_>, codes: &[i16], outcome: &Result<Reading, NoReading>) -> Result<(), TestCaseError> {
    let findings = gauge.findings();
    not_negative("noise", findings.noise)?;
    let mut last = None;
    for echo in &findings.echoes {
        prop_assert!(
            (echo.position.index as usize) < codes.len(),
            "an echo outside the record: {:?}",
            echo
        );
        let place = f64::from(echo.position.index) + f64::from(echo.position.fraction);
        prop_assert!(
            last.is_none_or(|last| place >= last),
            "echoes out of order: {:?}",
            findings.echoes
        );
        last = Some(place);
        finite("arrival", echo.arrival.get())?;
        not_negative("an arrival's uncertainty", echo.standard_uncertainty.get())?;
        positive("amplitude", echo.amplitude)?;
        finite("signal-to-noise ratio", echo.snr.get())?;
        not_negative("mismatch", echo.mismatch)?;
        finite("group lag", echo.group_lag.get())?;
        prop_assert!(echo.role != EchoRole::BackWall(0), "there is no multiple 0");
    }
    if let Some(train) = &findings.train {
        positive("period", train.period)?;
        not_negative("a period's uncertainty", train.period_uncertainty.unwrap_or(0.0))?;
        prop_assert!(train.correlation.abs() <= 1.0, "correlation {}", train.correlation);
        not_negative("unevenness", train.unevenness)?;
        not_negative("unexplained", train.unexplained)?;
        not_negative("support", train.support)?;
        prop_assert!(train.echoes >= 1 && train.first_multiple >= 1);
    }
    if let Some(pulse) = &findings.pulse {
        positive("lower frequency", pulse.lower_frequency.get())?;
        prop_assert!(pulse.upper_frequency > pulse.lower_frequency, "{:?}", pulse);
        positive("upper frequency", pulse.upper_frequency.get())?;
        positive("envelope duration", pulse.envelope_duration.get())?;
        positive("rectified duration", pulse.rectified_duration.get())?;
        positive("spatial pulse length", pulse.spatial_pulse_length.get())?;
        positive("q", pulse.q())?;
    }
    if let Some(separation) = &findings.separation {
        if let Some(pair) = &separation.pair {
            not_negative("spacing", pair.spacing.get())?;
            not_negative("a spacing's uncertainty", pair.standard_uncertainty.get())?;
            prop_assert!(pair.amplitude_ratio.is_finite(), "{}", pair.amplitude_ratio);
        }
        let resolved = separation.verdict != Verdict::NotResolved;
        prop_assert_eq!(separation.unresolved.is_none(), resolved, "{:?}", separation);
        prop_assert!(!resolved || separation.pair.is_some(), "{:?}", separation);
        prop_assert!(separation.log_odds.is_none_or(f32::is_finite), "{:?}", separation);
    }
    match outcome {
        Ok(reading) => {
            positive("thickness", reading.thickness.get())?;
            not_negative("standard uncertainty", reading.standard_uncertainty.get())?;
            not_negative("expanded uncertainty", reading.expanded().get())?;
            prop_assert!(
                (0.0..=1.0).contains(&reading.wrong_cycle_probability),
                "{}",
                reading.wrong_cycle_probability
            );
            for term in reading.budget.terms() {
                positive(term.source.word(), term.standard_uncertainty.get())?;
            }
            if let Some(coating) = reading.coating {
                positive("coating's time", coating.round_trip.time.get())?;
                not_negative("its uncertainty", coating.round_trip.standard_uncertainty.get())?;
            }
            if let Some(coating) = reading.coating.and_then(|coating| coating.thickness) {
                positive("coating", coating.thickness.get())?;
                not_negative("a coating's uncertainty", coating.standard_uncertainty.get())?;
            }
            let _ = format!("{} {} {}", reading.thickness, reading.expanded(), reading.doubts);
        }
        Err(why) => {
            match why {
                NoReading::NoEcho { noise } => not_negative("noise", *noise)?,
                NoReading::OneEchoWhereTwoAreNeeded { at } => finite("the lone echo", at.get())?,
                NoReading::Ambiguous { best, next, .. } => {
                    positive("the best wall", best.get())?;
                    positive("the next wall", next.get())?;
                }
                NoReading::BelowMinimum { minimum } => finite("the minimum", minimum.get())?,
                NoReading::Unsteady { moved, .. } => not_negative("the movement", moved.get())?,
                _ => {}
            }
            prop_assert!(!why.to_string().is_empty() && !why.word().is_empty());
        }
    }
    Ok(())
}

/// A sound set-up.
fn usual() -> GaugeSetup {
    GaugeSetup::new(
        Hertz::from_mhz(50.0),
        Probe::contact(Hertz::from_mhz(5.0), 0.6).with_element_diameter(Metres::from_mm(6.0)),
        Material::new(MetresPerSecond::new(5920.0), MetresPerSecond::new(17.0)),
        Zero::new(Seconds::ZERO, Seconds::from_ns(1.0)),
        Span::BackWallToBackWall,
        Window {
            from: Seconds::from_us(1.0),
            to: Seconds::from_us(60.0),
        },
    )
}

/// A record that [`usual`] reads: 10 mm.
fn easy() -> Vec<i16> {
    (0..SAMPLES)
        .map(|i| {
            let echo = |n: i32| {
                1500.0
                    * 0.7f64.powi(n)
                    * oracle::gaussian_pulse(i as f64 / 50e6 - f64::from(n) * 20.0 / 5.92e6, 5e6, 0.6)
            };
            ((1..8).map(echo).sum::<f64>() + (i * 7919 % 13) as f64 - 6.0).round() as i16
        })
        .collect()
}

fn reads_the_easy_record(gauge: &mut Gauge<'_>) -> Result<(), TestCaseError> {
    let outcome = gauge.measure(&Record::new(
        &easy(),
        AdcFormat::signed(12),
        SampleClock::new(Hertz::from_mhz(50.0)),
    ));
    let thickness = outcome.as_ref().map(|reading| reading.thickness.as_mm());
    prop_assert!(
        thickness.is_ok_and(|mm| (mm - 10.0).abs() < 0.02),
        "the gauge is spoilt: {:?}",
        outcome
    );
    Ok(())
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 4000, max_global_rejects: 1_000_000, failure_persistence: None, ..ProptestConfig::default() })]

    /// Any codes under any set-up that is accepted, any clock, any format.
    #[test]
    fn law_any_record_gives_possible_numbers_or_a_refusal(
        setup in any_setup(),
        format in any_format(),
        kind in 0u8..26,
        length in prop_oneof![1 => 0usize..12, 1 => 12usize..300, 4 => 300usize..=SAMPLES, 1 => Just(SAMPLES + 1)],
        first_sample in prop_oneof![4 => Just(0.0f32), 2 => -20e-6f32..20e-6, 1 => any_size()],
        clock_rate in prop_oneof![8 => Just(None), 1 => any_size().prop_map(Some)],
        seed: u64,
    ) {
        let mut scratch = Box::new(Scratch::<SAMPLES>::ZERO);
        let Ok(mut gauge) = Gauge::new(setup, scratch.workspace()) else {
            return Ok(());
        };
        let frequency = f64::from(1.0 / setup.samples_per_cycle());
        let codes = hostile_codes(kind, length, frequency, &mut Random::new(seed));
        let clock = SampleClock {
            rate: clock_rate.map_or(setup.sample_rate, Hertz::new),
            first_sample: Seconds::new(first_sample),
        };
        let record = Record::new(&codes, format, clock);
        let outcome = gauge.measure(&record);
        check(&gauge, &codes, &outcome)?;
        let separation = gauge.separate(&record);
        prop_assert_eq!(separation.is_some(), !gauge.findings().echoes.is_empty());
        check(&gauge, &codes, &outcome)?;
    }

    /// Any set-up and any pulse after one another: errors leave a gauge that works, and so does going back.
    #[test]
    fn law_a_gauge_survives_changes(
        first in any_setup(),
        second in any_setup(),
        pulse in prop_oneof![
            prop::collection::vec(any_size(), 0..40),
            prop::collection::vec(-1.0f32..1.0, 0..600),
            (0usize..600, any_size()).prop_map(|(length, value)| vec![value; length]),
        ],
        seed: u64,
    ) {
        let mut scratch = Box::new(Scratch::<SAMPLES>::ZERO);
        let mut gauge = Gauge::new(usual(), scratch.workspace()).expect("a sound set-up");
        for setup in [first, second] {
            let before = *gauge.setup();
            match gauge.change_setup(setup) {
                Ok(()) => prop_assert_eq!(gauge.setup().sample_rate, setup.sample_rate),
                Err(error) => {
                    prop_assert!(!error.to_string().is_empty());
                    prop_assert_eq!(*gauge.setup(), before);
                }
            }
            let _ = gauge.learn_pulse(&pulse);
            prop_assert!(!gauge.pulse().samples.is_empty());
            prop_assert!(gauge.pulse().samples.iter().all(|x| x.is_finite()));
            let setup = *gauge.setup();
            let frequency = f64::from(1.0 / setup.samples_per_cycle());
            let codes = hostile_codes(20, SAMPLES, frequency, &mut Random::new(seed));
            let record = Record::new(&codes, AdcFormat::signed(16), SampleClock::new(setup.sample_rate));
            let outcome = gauge.measure(&record);
            let _ = gauge.separate(&record);
            if let Ok(wall) = gauge.thin_wall(&record) {
                positive("a thin wall's period", wall.period)?;
                not_negative("its uncertainty", wall.period_uncertainty)?;
                finite("its decay", wall.decay)?;
                finite("its amplitudes", wall.interface_amplitude + wall.wall_amplitude)?;
            }
            check(&gauge, &codes, &outcome)?;
        }
        gauge.change_setup(usual()).expect("back to a sound set-up");
        if gauge.learn_pulse(&[]).is_ok() {
            return Err(TestCaseError::fail("an empty pulse was learned"));
        }
        reads_the_easy_record(&mut gauge)?;
    }

    /// Any numbers into the calibration: possible results or a refusal.
    #[test]
    fn law_calibration_of_anything(a in prop::array::uniform4(around(1e-3)), b in prop::array::uniform4(around(1e-3)), c in (around(5920.0), around(17.0)), z in (around(1e-6), around(1e-9))) {
        let block = |v: [f32; 4]| Block {
            thickness: Metres::new(v[0]),
            thickness_uncertainty: Metres::new(v[1] * 1e-3),
            time: Seconds::new(v[2] * 1e-3),
            time_uncertainty: Seconds::new(v[3] * 1e-6),
        };
        let material = Material::new(MetresPerSecond::new(c.0), MetresPerSecond::new(c.1));
        let zero = Zero::new(Seconds::new(z.0), Seconds::new(z.1));
        let sound = |zero: Zero, material: Option<Material>| {
            finite("offset", zero.offset.get())?;
            not_negative("a zero's uncertainty", zero.standard_uncertainty.get())?;
            prop_assert!(zero.velocity_correlation.abs() <= 1.0);
            if let Some(material) = material {
                positive("velocity", material.velocity.get())?;
                not_negative("a velocity's uncertainty", material.velocity_standard_uncertainty.get())?;
            }
            Ok(())
        };
        if let Ok(zero) = zero_at_known_velocity(&block(a), &material) {
            sound(zero, None)?;
        }
        if let Ok((zero, material)) = zero_and_velocity(&block(a), &block(b)) {
            sound(zero, Some(material))?;
        }
        if let Ok((zero, material)) = velocity_from_thickness(&block(a), &zero) {
            sound(zero, Some(material))?;
        }
    }

    /// Any shots into averages and dense records, and what comes out into the gauge.
    #[test]
    fn law_averages_of_anything(
        format in any_format(), kinds in prop::collection::vec(0u8..26, 1..6), length in 0usize..400, room in 0usize..800,
        phases: u8, first_sample in prop_oneof![Just(0.0f32), any_size()], rate in around(50e6), seed: u64,
    ) {
        let mut random = Random::new(seed);
        let (mut sums, mut codes, mut dense) = (vec![7; room], vec![7; room], vec![7; room]);
        let clock = SampleClock { rate: Hertz::new(rate), first_sample: Seconds::new(first_sample) };
        let mut averager = Averager::new(&mut sums);
        let mut interleaver = Interleaver::new(&mut dense, clock, phases).ok();
        let mut shots = Vec::new();
        for kind in kinds {
            let shot = hostile_codes(kind, length, 0.1, &mut random);
            shots.push(shot.clone());
            let record = Record::new(&shot, format, clock);
            let _ = averager.add(&record);
            if let Some(interleaver) = &mut interleaver {
                let _ = interleaver.add(&record);
                let _ = interleaver.again(&record);
            }
            let _ = movement(&record, &record);
        }
        let mut scratch = Box::new(Scratch::<SAMPLES>::ZERO);
        let mut gauge = Gauge::new(usual(), scratch.workspace()).expect("a sound set-up");
        if let Ok(record) = averager.finish(&mut codes) {
            let outcome = gauge.measure(&Record::new(record.codes(), record.format(), SampleClock::new(Hertz::from_mhz(50.0))));
            check(&gauge, record.codes(), &outcome)?;
        }
        let _ = interleaver.map(Interleaver::finish);
        let (mut earlier, mut later) = (shots.first().cloned().unwrap_or_default(), shots.last().cloned().unwrap_or_default());
        let rate = SampleClock::new(Hertz::from_mhz(50.0));
        if let Ok(rounds) = TwoRounds::new(&mut earlier, &mut later, format, rate) {
            let outcome = gauge.measure_two_rounds(&rounds);
            check(&gauge, rounds.mean().codes(), &outcome)?;
        }
        reads_the_easy_record(&mut gauge)?;
        let mut behind = usual();
        (behind.probe.kind, behind.span) = (ProbeKind::DelayLine, Span::InterfaceToBackWall);
        gauge.change_setup(behind).expect("a sound set-up");
        for two in shots.windows(2) {
            let record = |codes| Record::new(codes, format, SampleClock::new(Hertz::from_mhz(50.0)));
            if let Ok(pair) = TwoGains::new(record(&two[0]), record(&two[1]), Decibels::new(40.0)) {
                let outcome = gauge.measure_two_gains(&pair);
                check(&gauge, &two[1], &outcome)?;
            }
        }
    }
}
