use super::*;
use crate::record::SampleRange;
use proptest::prelude::*;
use std::string::ToString;
use std::vec;
use std::vec::Vec;

const CLOCK: SampleClock = SampleClock::new(Hertz::from_mhz(50.0));

fn record(codes: &[i16], bits: u8) -> Record<'_> {
    Record::new(codes, AdcFormat::signed(bits), CLOCK)
}

/// Averages shots and gives the codes with their format.
fn average(shots: &[Vec<i16>], bits: u8) -> (Vec<i16>, AdcFormat) {
    let mut sums = vec![77; shots[0].len()];
    let mut averager = Averager::new(&mut sums);
    for shot in shots {
        averager.add(&record(shot, bits)).unwrap();
    }
    let mut codes = vec![0; shots[0].len()];
    let format = averager.finish(&mut codes).unwrap().format();
    (codes, format)
}

#[test]
fn sums_that_fit_are_exact() {
    let (codes, format) = average(&[vec![100, -5, 2046], vec![101, -5, 2046], vec![103, -6, 2046]], 12);
    assert_eq!(codes, [304, -16, 6138]);
    assert_eq!((format.codes_per_step, format.shots, format.bits), (3.0, 3, 12));
    // One shot is itself.
    assert_eq!(average(&[vec![7, -2048, 2047]], 12).0, [7, -2048, 2047]);
}

#[test]
fn sums_that_do_not_fit_fill_sixteen_bits() {
    // 64 shots of 12 bits: 131 072 at full scale, scaled by a quarter to 32 768.
    let shots: Vec<_> = (0..64).map(|i| vec![1000 + i % 2, -2047, 2046]).collect();
    let (codes, format) = average(&shots, 12);
    assert_eq!(format.codes_per_step, 16.0);
    assert_eq!(codes, [16_008, -32_752, 32_736]);
    // 17 shots are no power of two and fill 16 bits all the same.
    let (codes, format) = average(&shots[..17], 12);
    assert!((format.full_scale() - 32_768.0).abs() < 0.01, "{format:?}");
    assert_eq!(codes, [16_008, -32_752, 32_736]);
}

#[test]
fn a_sample_clipped_once_stands_at_the_rail() {
    for (bits, shots) in [(12u8, 3usize), (12, 64), (16, 2), (16, 3), (16, 255), (8, 200)] {
        let top = ((1i32 << (bits - 1)) - 1) as i16;
        let mut all = vec![vec![0, 0, 5, top - 1, -top]; shots];
        all[0][0] = top;
        all[shots / 2][1] = -top - 1;
        let (codes, format) = average(&all, bits);
        assert_eq!(codes[0], format.upper_rail(), "{bits} bits, {shots} shots");
        assert_eq!(codes[1], format.lower_rail());
        let health = Record::new(&codes, format, CLOCK).health(SampleRange { start: 0, end: 5 });
        assert_eq!(health.clipped, 2, "{bits} bits, {shots} shots: {codes:?} {format:?}");
    }
}

#[test]
fn averaging_gains_the_root_of_the_shots() {
    // Gaussian noise of 2 steps (sum of twelve uniform numbers) from a fixed generator: 64 shots leave an eighth.
    let mut state = 1u64;
    let mut noise = || {
        let mut sum = 0.0f64;
        for _ in 0..12 {
            state = state
                .wrapping_mul(6_364_136_223_846_793_005)
                .wrapping_add(1_442_695_040_888_963_407);
            sum += (state >> 33) as f64 / f64::from(1u32 << 31);
        }
        ((sum - 6.0) * 2.0).round() as i16
    };
    let shots: Vec<Vec<i16>> = (0..64).map(|_| (0..4000).map(|_| noise()).collect()).collect();
    let spread = |codes: &[i16], step: f32| {
        let squares: f64 = codes.iter().map(|&c| f64::from(c).powi(2)).sum();
        (squares / codes.len() as f64).sqrt() / f64::from(step)
    };
    let (codes, format) = average(&shots, 12);
    let gain = spread(&shots[0], 1.0) / spread(&codes, format.codes_per_step);
    assert!((gain / 8.0 - 1.0).abs() < 0.05, "noise fell by {gain}");
}

#[test]
fn what_does_not_belong_together_is_refused() {
    let mut sums = [0; 4];
    let mut averager = Averager::new(&mut sums);
    let mut out = [0; 4];
    assert_eq!(averager.finish(&mut out).unwrap_err(), AverageError::Nothing);
    assert_eq!(averager.add(&record(&[], 12)), Err(AverageError::Nothing));
    let too_long = AverageError::TooLittleRoom { needed: 5, got: 4 };
    assert_eq!(averager.add(&record(&[0; 5], 12)), Err(too_long));
    averager.add(&record(&[1, 2, 3], 12)).unwrap();
    assert_eq!(
        averager.add(&record(&[1, 2], 12)),
        Err(AverageError::LengthChanged { expected: 3, got: 2 })
    );
    assert_eq!(averager.add(&record(&[1, 2, 3], 14)), Err(AverageError::FormatChanged));
    let late = SampleClock {
        first_sample: Seconds::from_ns(20.0),
        ..CLOCK
    };
    let shifted = Record::new(&[1, 2, 3], AdcFormat::signed(12), late);
    assert_eq!(averager.add(&shifted), Err(AverageError::ClockChanged));
    assert_eq!(averager.finish(&mut out[..3]).unwrap().codes(), [1, 2, 3]);
    assert!(averager.finish(&mut out[..2]).is_err());
    for _ in 1..MOST_SHOTS {
        averager.add(&record(&[1, 2, 3], 12)).unwrap();
    }
    assert_eq!(averager.add(&record(&[1, 2, 3], 12)), Err(AverageError::TooManyShots));
    assert_eq!(averager.shots(), 256);
    averager.clear();
    averager.add(&record(&[9; 4], 12)).unwrap();
    assert_eq!(averager.finish(&mut out).unwrap().codes(), [9; 4]);
    assert!(too_long.to_string().ends_with("(needed 5 samples, got 4)"));
}

/// A 3 MHz tone of 1500 codes at a time after the trigger, riding on an offset.
fn tone(t: f64, offset: f64) -> i16 {
    (1500.0 * (std::f64::consts::TAU * 3e6 * t).sin() + offset).round() as i16
}

#[test]
fn delayed_shots_become_one_dense_record() {
    // Ten phases of 5 MS/s make 50 MS/s; each has an offset of its own. 250 samples are whole cycles.
    const PHASES: u8 = 10;
    let base = SampleClock {
        rate: Hertz::from_mhz(5.0),
        first_sample: Seconds::from_us(1.0),
    };
    let mut dense = [0i16; 260];
    let mut interleaver = Interleaver::new(&mut dense, base, PHASES).unwrap();
    for number in [3, 0, 9, 1, 2, 8, 7, 4, 6, 5u8] {
        let delay = shot_delay(base.rate, PHASES, number);
        let clock = SampleClock {
            first_sample: base.first_sample - delay,
            ..base
        };
        let first = 1e-6 - f64::from(number) * 20e-9;
        let codes: Vec<i16> = (0..25)
            .map(|i| tone(first + f64::from(i) * 200e-9, f64::from(number) * 11.0))
            .collect();
        interleaver
            .add(&Record::new(&codes, AdcFormat::signed(12), clock))
            .unwrap();
        let again = Record::new(&codes, AdcFormat::signed(12), clock);
        assert_eq!(
            interleaver.add(&again),
            Err(AverageError::PhaseTwice { phase: 9 - number })
        );
    }
    let record = interleaver.finish_unwatched().unwrap();
    assert_eq!(record.codes().len(), 250);
    assert!((record.clock().rate.as_mhz() - 50.0).abs() < 1e-4);
    assert!((record.clock().first_sample.as_ns() - 820.0).abs() < 1e-3);
    for (i, &code) in record.codes().iter().enumerate() {
        let expected = tone(820e-9 + i as f64 * 20e-9, 0.0);
        assert!((code - expected).abs() <= 1, "sample {i}: {code}, not {expected}");
    }
}

#[test]
fn interleaving_refuses_what_does_not_fit() {
    let mut dense = [0i16; 6];
    assert!(matches!(
        Interleaver::new(&mut dense, CLOCK, 0),
        Err(AverageError::Phases)
    ));
    assert!(matches!(
        Interleaver::new(&mut dense, CLOCK, 65),
        Err(AverageError::Phases)
    ));
    let still = SampleClock::new(Hertz::ZERO);
    assert!(matches!(
        Interleaver::new(&mut dense, still, 2),
        Err(AverageError::ClockChanged)
    ));
    let mut interleaver = Interleaver::new(&mut dense, CLOCK, 2).unwrap();
    let at = |ns: f32| SampleClock {
        first_sample: Seconds::from_ns(ns),
        ..CLOCK
    };
    let shot = |codes, clock| Record::new(codes, AdcFormat::signed(12), clock);
    for ns in [-5.0, 10.0, -20.0, f32::NAN] {
        assert_eq!(
            interleaver.add(&shot(&[0; 3], at(ns))),
            Err(AverageError::ClockChanged),
            "{ns}"
        );
    }
    assert!(matches!(
        interleaver.add(&shot(&[0; 4], at(0.0))),
        Err(AverageError::TooLittleRoom { needed: 8, got: 6 })
    ));
    // A clipped sample stays at the rail although the offset is taken off; others do not reach it.
    interleaver.add(&shot(&[2047, 2046, -1000], at(0.0))).unwrap();
    assert!(interleaver.add(&shot(&[0; 2], at(-10.0))).is_err());
    interleaver.add(&shot(&[-2048, -2047, -1001], at(-10.0))).unwrap();
    let record = interleaver.finish_unwatched().unwrap();
    assert_eq!(record.codes(), [-2048, 2047, 0, -1, 1046, -2047]);
    let mut short = [0; 6];
    let mut half = Interleaver::new(&mut short, CLOCK, 2).unwrap();
    half.add(&shot(&[1; 3], at(0.0))).unwrap();
    assert_eq!(half.finish().unwrap_err(), AverageError::PhasesMissing { missing: 1 });
    // Nobody has looked whether anything moved; a single phase cannot.
    let mut two = [0; 6];
    let mut interleaver = Interleaver::new(&mut two, CLOCK, 2).unwrap();
    interleaver.add(&shot(&[1, 2, 3], at(0.0))).unwrap();
    interleaver.add(&shot(&[1, 2, 3], at(-10.0))).unwrap();
    assert_eq!(interleaver.finish().unwrap_err(), AverageError::NotRepeated);
    let mut interleaver = Interleaver::new(&mut two, CLOCK, 1).unwrap();
    interleaver.add(&shot(&[1, 2, 3], at(0.0))).unwrap();
    assert_eq!(interleaver.finish().unwrap().codes().len(), 3);
}

/// What a 12-bit converter says of a peak of this height (in codes at 0 dB) at a gain.
fn look(height: f32, gain: Decibels) -> RecordHealth {
    let code = (height * gain.as_amplitude_ratio()).round().min(2047.0) as i16;
    record(&[code, 0, -code / 2], 12).health(SampleRange { start: 0, end: 3 })
}

#[test]
fn gain_steps() {
    let steps: Vec<_> = (0..=80).map(|i| Decibels::new(i as f32)).collect();
    let format = AdcFormat::signed(12);
    let now = Decibels::new(40.0);
    let next = |peak: i16| {
        let health = record(&[peak, 0], 12).health(SampleRange { start: 0, end: 2 });
        next_gain(&health, format, now, &steps).get()
    };
    assert_eq!(next(1434), 40.0);
    // 10 % of full scale: 18.06 dB to 80 %.
    assert_eq!(next(205), 58.0);
    assert_eq!(next(1), 60.0);
    assert_eq!(next(0), 60.0);
    assert_eq!(next(1900), 38.0);
    assert_eq!(next(2047), 28.0);
    assert_eq!(next(-2048), 28.0);
    let empty = RecordHealth::default();
    assert_eq!(next_gain(&empty, format, now, &steps), now);
    assert_eq!(next_gain(&look(2047.0, Decibels::ZERO), format, now, &[]), now);
    // Below the lowest step there is only the lowest.
    assert_eq!(
        next_gain(&look(2047.0, Decibels::ZERO), format, Decibels::new(3.0), &steps[2..]).get(),
        2.0
    );
}

proptest! {
    #[test]
    fn an_average_is_the_mean(shots in prop::collection::vec(prop::collection::vec(-2047i16..=2046, 5), 1..256)) {
        let (codes, format) = average(&shots, 12);
        for (i, &code) in codes.iter().enumerate() {
            let mean = shots.iter().map(|s| f64::from(s[i])).sum::<f64>() / shots.len() as f64;
            let got = f64::from(code) / f64::from(format.codes_per_step);
            // Half a code of rounding, and the rail that belongs to clipped samples.
            prop_assert!((got - mean).abs() * f64::from(format.codes_per_step) <= 0.51, "{got} {mean}");
        }
    }

    #[test]
    fn any_format_and_codes_are_survived(
        codes in prop::collection::vec(any::<i16>(), 1..20), bits: u8, step: f32, shots: u16, times in 1usize..20,
    ) {
        let format = AdcFormat { bits, codes_per_step: step, shots };
        let mut sums = vec![0; 20];
        let mut averager = Averager::new(&mut sums);
        for _ in 0..times {
            let _ = averager.add(&Record::new(&codes, format, CLOCK));
        }
        let mut out = vec![0; 20];
        prop_assert_eq!(averager.finish(&mut out).unwrap().codes().len(), codes.len());
    }

    #[test]
    fn gain_comes_to_rest_with_the_echo_inside(height in 1.0f32..4000.0, start in 0usize..40, spacing in 1.0f32..6.0) {
        let steps: Vec<_> = (0..40).map(|i| Decibels::new(i as f32 * spacing - 30.0)).collect();
        let format = AdcFormat::signed(12);
        let mut gain = steps[start];
        for _ in 0..40 {
            gain = next_gain(&look(height, gain), format, gain, &steps);
        }
        let health = look(height, gain);
        prop_assert_eq!(next_gain(&health, format, gain, &steps), gain);
        let share = f32::from(health.highest) / 2048.0;
        prop_assert!(health.clipped == 0 && share < 0.81, "{share}");
        // Not lower than a step (and the rounding of a code) allows, unless the steps end.
        let reachable = 0.8 * Decibels::new(-spacing).as_amplitude_ratio() - 0.01;
        prop_assert!(share > math::smaller(0.59, reachable) || gain == steps[39], "{share}");
    }
}

/// Sparse echoes whose frequency is the base rate: each phase has samples of one sign only, a fifth of all. Nothing of
/// them may end up between the echoes.
#[test]
fn echoes_at_the_base_rate_are_no_offset() {
    const PHASES: u8 = 10;
    let base = SampleClock::new(Hertz::from_mhz(5.0));
    let mut dense = [0i16; 1000];
    let mut interleaver = Interleaver::new(&mut dense, base, PHASES).unwrap();
    // 5 MHz bursts of 4 us in every 20 us, on offsets that differ from phase to phase.
    let burst = |place: usize| {
        let inside = place % 1000 < 200;
        let cycle = std::f64::consts::TAU * place as f64 / 10.0;
        if inside {
            (1000.0 * (cycle + 0.4).sin()).round() as i16
        } else {
            0
        }
    };
    for number in 0..PHASES {
        let clock = SampleClock {
            first_sample: Seconds::ZERO - shot_delay(base.rate, PHASES, number),
            ..base
        };
        let codes: Vec<i16> = (0..100)
            .map(|i| burst(10 * i + usize::from(PHASES - 1 - number)) + i16::from(number) * 7 - 20)
            .collect();
        interleaver
            .add(&Record::new(&codes, AdcFormat::signed(12), clock))
            .unwrap();
    }
    let record = interleaver.finish_unwatched().unwrap();
    for (place, &code) in record.codes().iter().enumerate() {
        assert_eq!(code, burst(place), "{place}");
    }
}
