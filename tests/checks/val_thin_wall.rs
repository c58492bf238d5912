//! Walls so thin that their echoes run into each other and into the interface echo (`separation::thin_wall`): share of right
//! periods, and their scatter over the Cramér-Rao bound (`thin_wall_bound.csv`: NumPy, numerical derivatives of the
//! model's five numbers).

use crate::val_separation_support::{PEAK, Pulse, RATE, gauge_with_pulse, share};
use halfpulse::echo::Surroundings;
use halfpulse::echo::noise::TimingNoise;
use halfpulse::echo::pulse::{ReferencePulse, learn};
use halfpulse::echo::separation::thin_wall::{Prior, ThinWall, thin_wall};
use halfpulse::echo::separation::{LEARNED_MISMATCH, Unresolved};
use halfpulse::setup::PULSE_CAPACITY;
use halfpulse::{AdcFormat, Hertz, Record, SampleClock, Scratch};
use halfpulse_sim::campaign::{Campaign, Shard, runner};
use halfpulse_tests::oracle::{self, Random};
use halfpulse_tests::page::Figures;
use halfpulse_tests::published::{Table, number_rows};
use halfpulse_tests::readme;
use std::path::Path;

/// -20 dB duration of the vectors' pulse in samples.
const DURATION: f64 = 26.25;
const ORIGIN: usize = 128;

/// Interface echo of amplitude 1 at a random place near sample 300, train of `wall` times `decay` every `period` samples.
fn codes(pulse: &Pulse, wall: f64, decay: f64, period: f64, snr: f64, random: &mut Random) -> Vec<i16> {
    let place = 300.0 + random.uniform();
    let mut samples = vec![0.0; 900];
    pulse.add(&mut samples, place, PEAK);
    let mut height = PEAK * wall;
    for multiple in 1..=60 {
        let at = place + f64::from(multiple) * period;
        if height.abs() < 1e-4 * PEAK || at > 800.0 {
            break;
        }
        pulse.add(&mut samples, at, height);
        height *= decay;
    }
    let noise = PEAK * 10f64.powf(-snr / 20.0);
    for sample in &mut samples {
        *sample += noise * random.normal();
    }
    oracle::codes(&samples, 12)
}

fn read(codes: &[i16], snr: f64) -> Result<ThinWall, Unresolved> {
    let reference: Vec<f32> = number_rows("vectors/pair_reference.csv")[0][ORIGIN - 40..ORIGIN + 60]
        .iter()
        .map(|&x| x as f32)
        .collect();
    let mut buffer = [0.0f32; PULSE_CAPACITY];
    let facts = learn(&reference, 10.0, &mut buffer).expect("a reference pulse");
    let noise = (PEAK * 10f64.powf(-snr / 20.0)).hypot(12f64.sqrt().recip()) as f32;
    let surroundings = Surroundings {
        record: Record::new(codes, AdcFormat::signed(12), SampleClock::new(Hertz::new(RATE as f32))),
        pulse: ReferencePulse::new(&buffer, facts),
        noise,
        timing_noise: TimingNoise::steady(noise),
        samples_per_cycle: 10.0,
    };
    // Where a gauge finds its interface echo: at the highest code.
    let highest = (0..codes.len())
        .max_by_key(|&i| codes[i].unsigned_abs())
        .expect("codes");
    thin_wall(
        &surroundings,
        &Prior {
            around: highest as f32,
            offset: 0.0,
            mismatch: LEARNED_MISMATCH,
        },
        &mut [0.0; 512],
        &mut [0.0; 416],
    )
}

/// From 0.3 of the pulse duration at 20 dB (0.47 mm of steel at 5 MHz, 60 %): at least 95 % right, that is within a quarter of
/// the period, which rules out half and double of it.
#[test]
fn val_thin_wall() {
    let mut figures = Figures::of("val_thin_wall");
    const SHOTS: usize = 150;
    let pulse = Pulse::of_the_vectors();
    let mut random = Random::new(41);
    for (wall, decay) in [(-0.6, 0.5), (-0.4, 0.85)] {
        for row in Table::read("vectors/thin_wall_bound.csv").rows() {
            let (snr, x) = (row.number("snr_db"), row.number("x"));
            let period = x * DURATION;
            let (mut errors, mut wrong, mut silent, mut covered) = (Vec::new(), 0, 0, 0);
            for _ in 0..SHOTS {
                match read(&codes(&pulse, wall, decay, period, snr, &mut random), snr) {
                    Ok(found) => {
                        let error = f64::from(found.period) - period;
                        if error.abs() < 0.25 * period {
                            errors.push(20.0 * error);
                            covered += usize::from(error.abs() < 2.0 * f64::from(found.period_uncertainty));
                        } else {
                            wrong += 1;
                        }
                    }
                    Err(_) => silent += 1,
                }
            }
            let (bias, deviation) = if errors.len() > 2 {
                oracle::mean_and_deviation(&errors)
            } else {
                (0.0, 0.0)
            };
            let bound = row.number("period_bound_ns");
            figures.line(&format!(
                "wall {wall}, decay {decay}, {snr} dB, x {x}: right {}, wrong {wrong}, silent {silent}; {deviation:.2} ns, bias \
                 {bias:+.2} ns, bound for decay 0.5: {bound} ns; within k = 2: {covered}",
                share(errors.len(), SHOTS)
            ));
            assert!(errors.len() * 100 >= 95 * SHOTS, "wall {wall}, {snr} dB, x {x}");
            assert!(
                covered * 100 >= 93 * errors.len(),
                "wall {wall}, {snr} dB, x {x}: {covered}"
            );
            if decay == 0.5 && snr == 20.0 && x == 0.3 {
                readme::figure(
                    "walls of 0.47 mm of steel behind a delay line (0.3 pulse durations at 5 MHz, 60 %), 20 dB: read right / wrong",
                    &format!("{} / {wrong} of {SHOTS}", errors.len()),
                    "val_thin_wall",
                );
            }
            if decay == 0.5 {
                // 6 % is the standard deviation of a standard deviation of 150.
                assert!(
                    deviation < 1.1 * 1.12 * bound,
                    "{snr} dB, x {x}: {deviation} ns, bound {bound} ns"
                );
            }
        }
    }
    figures.check();
}

/// An interface echo without a wall is none, and a clipped sample stops everything.
#[test]
fn val_no_thin_wall_where_there_is_none() {
    let pulse = Pulse::of_the_vectors();
    let mut random = Random::new(42);
    let (mut split, shots) = (0, 300);
    for number in 0..shots {
        let snr = [20.0, 30.0, 40.0][number % 3];
        let codes = codes(&pulse, 0.0, 0.5, 10.0, snr, &mut random);
        split += usize::from(read(&codes, snr).is_ok());
    }
    println!("interface echo alone: wall in {}", share(split, shots));
    assert!(split <= 3, "{split} of {shots}");
    let mut codes = codes(&pulse, -0.6, 0.5, 10.0, 40.0, &mut random);
    codes[310] = 2047;
    assert_eq!(read(&codes, 40.0), Err(Unresolved::Clipped));
}

/// Through the gauge: what it cannot read as a train it reads when asked, with a learned pulse only.
#[test]
fn val_thin_wall_through_the_gauge() {
    let pulse = Pulse::of_the_vectors();
    let mut random = Random::new(43);
    let mut scratch = Box::new(Scratch::<1024>::ZERO);
    let mut other = Box::new(Scratch::<1024>::ZERO);
    let mut gauge = gauge_with_pulse(&mut scratch, Some((&pulse, 16, 40.0)));
    let mut modelled = gauge_with_pulse(&mut other, None);
    let (mut right, shots) = (0, 60);
    for _ in 0..shots {
        let period = DURATION * (0.3 + 0.5 * random.uniform());
        let codes = codes(&pulse, -0.4, 0.8, period, 30.0, &mut random);
        let record = Record::new(&codes, AdcFormat::signed(12), SampleClock::new(Hertz::new(RATE as f32)));
        let _ = gauge.measure(&record);
        let found = gauge.thin_wall(&record);
        if let Ok(found) = found {
            let error = f64::from(found.period) - period;
            assert!(
                error.abs() < 6.0 * f64::from(found.period_uncertainty),
                "{found:?} for {period}"
            );
            assert!(
                (found.decay - 0.8).abs() < 0.1 && found.wall_amplitude < 0.0,
                "{found:?}"
            );
            right += 1;
        }
        let _ = modelled.measure(&record);
        assert_eq!(modelled.thin_wall(&record), Err(Unresolved::PulseUnknown));
    }
    println!("through the gauge: read {}", share(right, shots));
    assert!(right * 100 >= 95 * shots, "{right} of {shots}");
}

/// Through `measure`, the simulator's world and a campaign (`tests/campaigns/thin_walls.toml`: velocity, zero and couplant film drawn
/// as the set-up states them): from the documented smallest wall of 0.47 mm on all sound walls are read, nine in ten
/// without a doubt and within U; and in no world is one grossly wrong without a doubt.
#[test]
fn val_thin_walls_are_read_by_measure() {
    let file = Path::new(env!("CARGO_MANIFEST_DIR")).join("campaigns/thin_walls.toml");
    let campaign = Campaign::read(&file).expect("the campaign");
    // The first five cells are the sound walls by thickness, of which the third and fourth overlap and are long enough.
    let (mut walls, mut read, mut undoubted, mut inside, mut over, mut under) = (0, 0, 0, 0, 0, 0);
    let (mut runs, mut too_thick, mut too_thin) = (0, 0, 0);
    runner::run(&campaign, Shard::WHOLE, 0, 2, &mut |row| {
        runs += 1;
        let sound = row.cell == 2 || row.cell == 3;
        walls += usize::from(sound);
        let (Ok(reading), Some(truth)) = (&row.outcome, row.truth_mm) else {
            return Ok(());
        };
        read += usize::from(sound);
        if !reading.doubts.is_empty() {
            return Ok(());
        }
        let error = f64::from(reading.thickness_mm) - truth;
        let expanded = f64::from(reading.coverage_factor * reading.standard_uncertainty_mm);
        if sound {
            undoubted += 1;
            inside += usize::from(error.abs() <= expanded);
            over += usize::from(error > expanded);
            under += usize::from(error < -expanded);
        }
        too_thick += usize::from(error > expanded + row.quarter_mm);
        too_thin += usize::from(error < -expanded - row.quarter_mm);
        Ok(())
    })
    .expect("the campaign runs");
    println!(
        "sound walls of 0.47 to 1.2 mm: read {}, without a doubt {}, of those inside U {} (too thick {over}, too thin {under}); \
         all worlds, grossly wrong without a doubt: too thick {too_thick}, too thin {too_thin} of {runs}",
        share(read, walls),
        share(undoubted, walls),
        share(inside, undoubted)
    );
    assert!(read * 100 >= 95 * walls, "{read} of {walls} read");
    assert!(undoubted * 100 >= 90 * walls, "{undoubted} of {walls} without a doubt");
    assert!(inside * 100 >= 93 * undoubted, "{inside} of {undoubted} inside U");
    assert_eq!(too_thick + too_thin, 0, "grossly wrong without a doubt");
    readme::figure(
        "sound walls of 0.47 to 1.2 mm of steel behind a delay line, learned pulse, 20 to 40 dB: read / without a doubt / of those within U",
        &format!("{read} / {undoubted} / {inside} of {walls}"),
        "val_thin_wall",
    );
}
