use super::*;
use crate::echo::pulse::{PulseFacts, model};
use crate::test_support::{Noise, setup};
use crate::units::Hertz;
use std::vec;
use std::vec::Vec as StdVec;

struct Bench {
    detector: Detector,
    skirt: [u16; PULSE_CAPACITY],
    pulse: StdVec<f32>,
    facts: PulseFacts,
    samples_per_cycle: f32,
}

fn bench(frequency_mhz: f32, bandwidth: f32, rate_mhz: f32) -> Bench {
    let mut setup = setup();
    setup.sample_rate = Hertz::from_mhz(rate_mhz);
    setup.probe.centre_frequency = Hertz::from_mhz(frequency_mhz);
    setup.probe.relative_bandwidth = bandwidth;
    let mut buffer = [0.0; PULSE_CAPACITY];
    let facts = model(&setup, &mut buffer).unwrap();
    let pulse = ReferencePulse::new(&buffer, facts);
    let mut skirt = [0; PULSE_CAPACITY];
    let samples_per_cycle = setup.samples_per_cycle();
    let detector = Detector::new(samples_per_cycle, &pulse, &mut skirt);
    Bench {
        detector,
        skirt,
        pulse: pulse.samples.to_vec(),
        facts,
        samples_per_cycle,
    }
}

impl Bench {
    fn scan(&self, codes: &[i16], bits: u8) -> Scan {
        let range = SampleRange {
            start: 0,
            end: codes.len() as u32,
        };
        let mut envelope = vec![0; codes.len()];
        scan(
            codes,
            AdcFormat::signed(bits),
            range,
            &self.detector,
            &self.skirt,
            &mut envelope,
        )
    }

    fn add(&self, signal: &mut [f32], origin: usize, amplitude: f32) {
        let start = origin - self.facts.origin as usize;
        for (x, s) in signal.get_mut(start..).unwrap().iter_mut().zip(&self.pulse) {
            *x += amplitude * s;
        }
    }
}

fn codes(signal: &[f32]) -> StdVec<i16> {
    signal.iter().map(|x| math::round_to_i32(*x) as i16).collect()
}

#[test]
fn val_false_alarm_rate() {
    // Truth: the stated probability, and binomial limits (6 standard deviations on the high side).
    for (frequency, bandwidth, rate) in [(5.0, 0.6, 50.0), (2.25, 1.0, 25.0), (10.0, 0.3, 100.0)] {
        let bench = bench(frequency, bandwidth, rate);
        let mut noise = Noise::new(7);
        let (mut false_alarms, mut spread) = (0, 0.0);
        let records = 4000;
        for _ in 0..records {
            let signal: StdVec<f32> = (0..4096).map(|_| 20.0 * noise.normal()).collect();
            let found = bench.scan(&codes(&signal), 12);
            false_alarms += usize::from(!found.candidates.is_empty());
            spread += found.noise / 20.0;
        }
        let rate = false_alarms as f32 / records as f32 * FALSE_ALARM_RECORDS;
        let bias = spread / records as f32;
        std::println!("{frequency} MHz {bandwidth}: {rate:.2} of the stated false alarms, noise estimate {bias:.3}");
        assert!(
            rate > 0.05 && rate < 2.5,
            "{frequency} MHz: {rate} times the stated false-alarm rate"
        );
        assert!((bias - 1.0).abs() < 0.05, "{frequency} MHz: noise off by {bias}");
    }
}

#[test]
fn echoes_well_above_the_noise_are_found_where_they_are() {
    let bench = bench(5.0, 0.6, 50.0);
    let mut noise = Noise::new(3);
    let mut missed = 0;
    for round in 0..200 {
        let mut signal: StdVec<f32> = (0..4096).map(|_| 10.0 * noise.normal()).collect();
        let origin = 400 + round * 17;
        bench.add(&mut signal, origin, 10.0 * 5.0); // 14 dB
        let found = bench.scan(&codes(&signal), 12);
        let near = found.candidates.iter().any(|c| c.index.abs_diff(origin as u32) <= 5);
        missed += usize::from(!near);
    }
    // A full matched filter would find nearly all at 14 dB; this one loses up to 2 dB.
    assert!(missed <= 6, "{missed} of 200 missed at 14 dB");
}

#[test]
fn a_strong_echo_has_no_children() {
    let bench = bench(5.0, 0.6, 50.0);
    let mut noise = Noise::new(5);
    let mut signal: StdVec<f32> = (0..4096).map(|_| noise.normal()).collect();
    bench.add(&mut signal, 1000, 2000.0);
    bench.add(&mut signal, 1200, 1500.0);
    let found = bench.scan(&codes(&signal), 12);
    let places: StdVec<u32> = found.candidates.iter().map(|c| c.index).collect();
    assert_eq!(places.len(), 2, "{places:?}");
    assert!(
        (found.noise - 1.04).abs() < 0.08,
        "noise beside strong echoes: {}",
        found.noise
    );
}

#[test]
fn silence_has_the_noise_of_rounding() {
    let bench = bench(5.0, 0.6, 50.0);
    let found = bench.scan(&[3; 4096], 12);
    assert!((found.noise - 0.2887).abs() < 1e-3 && found.candidates.is_empty());
}

#[test]
fn any_record_is_survived() {
    let bench = bench(10.0, 1.0, 50.0);
    for length in [0, 1, 9, 10, 11, 64] {
        let _ = bench.scan(&vec![i16::MIN; length], 16);
        let alternating: StdVec<i16> = (0..length)
            .map(|i| if i % 2 == 0 { i16::MIN } else { i16::MAX })
            .collect();
        let _ = bench.scan(&alternating, 16);
    }
    assert!(bench.samples_per_cycle > 4.9);
}
