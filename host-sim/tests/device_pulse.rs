//! A calibrated set-up and its learned pulse over the link: whole, or refused with the reason.

#[path = "support/rig.rs"]
mod rig;

use rig::*;

/// Sends a message and takes the gauge's answer.
fn ask(rig: &mut Rig<'_, '_>, message: &Message) -> Option<Message> {
    rig.host.borrow_mut().send(message).unwrap();
    while rig.step() != Step::Idle {}
    rig.host.borrow_mut().next_answer().unwrap()
}

/// A pulse with a turned phase, as a block would teach it.
fn learned_pulse() -> (Vec<f32>, PulseQuality) {
    let pulse = (-40..=40).map(|i| {
        let t = i as f32 / 50.0;
        (-t * t / (2.0 * 0.125 * 0.125)).exp() * (std::f32::consts::TAU * 5.0 * t + 0.5).cos()
    });
    let quality = PulseQuality {
        noise: 0.002,
        mismatch: 0.02,
        learned_on: Some(halfpulse::Metres::from_mm(25.0)),
    };
    (pulse.collect(), quality)
}

fn take_pulse(pulse: &[f32], quality: PulseQuality) -> Message {
    Message::TakePulse(TakePulse {
        samples: pulse.len() as u16,
        noise: quality.noise,
        mismatch: quality.mismatch,
        learned_on: quality.learned_on.map(halfpulse::Metres::get),
        crc: crc_of_samples(pulse),
    })
}

/// Sends all parts; how many samples the gauge holds then.
fn send_parts(rig: &mut Rig<'_, '_>, pulse: &[f32]) -> u16 {
    let mut held = 0;
    for (number, part) in pulse.chunks(PART_SAMPLES).enumerate() {
        let answer = ask(
            rig,
            &Message::PulsePart(PulsePart {
                first: (number * PART_SAMPLES) as u16,
                samples: part.iter().copied().collect(),
            }),
        );
        let Some(Message::PulseHeld(now)) = answer else {
            panic!("{answer:?}");
        };
        held = now;
    }
    held
}

/// A calibrated set-up with signs, jitter, coating and curvature, and the pulse that it was calibrated with: the gauge's readings
/// are to the last bit those of a gauge that was set up here.
#[test]
fn a_calibrated_gauge_reads_over_the_link_as_here() {
    with_rig(9, |mut rig| {
        let mut setup = SETUP.with_trigger_jitter(Seconds::from_ns(2.0));
        setup.span = Span::TransmissionPulseToBackWall;
        setup.zero = Zero::new(Seconds::from_ns(15.0), Seconds::from_ns(1.0)).with_learned_on(halfpulse::Metres::ZERO);
        setup.probe = setup.probe.with_signs(EchoSign::AsPulse, EchoSign::Inverted);
        setup.surface = halfpulse::Surface::Convex(halfpulse::Metres::from_mm(20.0));
        let (pulse, quality) = learned_pulse();
        let set_up = Message::SetUp(SetUp::of(&setup));
        assert_eq!(ask(&mut rig, &set_up), Some(Message::SetUpTaken(0)));
        assert_eq!(send_parts(&mut rig, &pulse), pulse.len() as u16);
        assert_eq!(
            ask(&mut rig, &take_pulse(&pulse, quality)),
            Some(Message::PulseTaken(0))
        );
        let mut scratch = Box::new(Scratch::<SAMPLES>::ZERO);
        let mut direct = Gauge::new(setup, scratch.workspace()).unwrap();
        let mut bits = Vec::new();
        for with_pulse in [true, false] {
            if with_pulse {
                direct.learn_pulse_of_quality(&pulse, quality).unwrap();
            } else {
                // Back to the data sheet's pulse, at both ends.
                direct.forget_pulse().unwrap();
                let none = take_pulse(&[], PulseQuality::UNKNOWN);
                assert_eq!(ask(&mut rig, &none), Some(Message::PulseTaken(0)));
            }
            rig.host.borrow_mut().take_shots();
            let report = rig.take(1).unwrap();
            let fired = rig.host.borrow_mut().take_shots().pop().unwrap();
            let record = halfpulse::Record::new(&fired.codes, fired.fired.format, fired.fired.clock);
            let expected = Report {
                number: report.number,
                shots: 1,
                gain: Decibels::new(-6.0),
                outcome: direct.measure(&record).map_err(Shortfall::NoReading),
                findings: Some(direct.findings()),
            };
            assert_eq!(report, expected.to_link());
            bits.push(thickness(Some(report)).expect("a reading").to_bits());
        }
        assert_ne!(bits[0], bits[1], "the pulse makes no difference");
    });
}

/// Whatever is sent as a pulse: it is refused with its reason, the gauge goes on measuring, and a whole pulse is taken afterwards.
#[test]
fn parts_of_a_pulse_that_do_not_fit_together_are_refused() {
    with_rig(10, |mut rig| {
        let (pulse, quality) = learned_pulse();
        let part = |first: usize, samples: &[f32]| {
            Message::PulsePart(PulsePart {
                first: first as u16,
                samples: samples.iter().copied().collect(),
            })
        };
        let held = |rig: &mut Rig<'_, '_>, message: &Message| match ask(rig, message) {
            Some(Message::PulseHeld(held)) => held,
            other => panic!("{other:?}"),
        };
        let taken = |rig: &mut Rig<'_, '_>, message: &Message| match ask(rig, message) {
            Some(Message::PulseTaken(answer)) => answer,
            other => panic!("{other:?}"),
        };
        // A gap, a part twice, a part out of nowhere.
        assert_eq!(held(&mut rig, &part(32, &pulse[32..64])), 0);
        assert_eq!(held(&mut rig, &part(0, &pulse[..32])), 32);
        assert_eq!(held(&mut rig, &part(40, &pulse[40..64])), 32);
        assert_eq!(held(&mut rig, &part(32, &pulse[32..64])), 64);
        assert_eq!(held(&mut rig, &part(32, &pulse[32..64])), 64);
        assert_eq!(held(&mut rig, &part(usize::from(u16::MAX), &pulse[..32])), 64);
        // Not all of it; all of it with another check sum; a reading in between.
        assert_eq!(taken(&mut rig, &take_pulse(&pulse, quality)), PULSE_INCOMPLETE);
        assert_eq!(send_parts(&mut rig, &pulse), pulse.len() as u16);
        let Message::TakePulse(mut wrong) = take_pulse(&pulse, quality) else {
            unreachable!()
        };
        wrong.crc ^= 1;
        assert_eq!(taken(&mut rig, &Message::TakePulse(wrong)), PULSE_INCOMPLETE);
        send_parts(&mut rig, &pulse);
        is_well(&mut rig);
        assert_eq!(taken(&mut rig, &take_pulse(&pulse, quality)), PULSE_INCOMPLETE);
        // More than the gauge can hold: 512 samples, and not one more.
        let long: Vec<f32> = (0..600).map(|i| pulse[i % pulse.len()]).collect();
        assert_eq!(send_parts(&mut rig, &long), 512);
        // No pulse, no numbers, no quality.
        for (bad, quality, code) in [
            (vec![0.0; 64], quality, 3),
            (vec![f32::NAN; 64], quality, 3),
            (vec![1.0; 3], quality, 3),
            (pulse.clone(), PulseQuality { noise: 2.0, ..quality }, 2),
            (
                pulse.clone(),
                PulseQuality {
                    learned_on: Some(halfpulse::Metres::new(-1.0)),
                    ..quality
                },
                2,
            ),
        ] {
            send_parts(&mut rig, &bad);
            assert_eq!(taken(&mut rig, &take_pulse(&bad, quality)), code);
            is_well(&mut rig);
        }
        send_parts(&mut rig, &pulse);
        assert_eq!(taken(&mut rig, &take_pulse(&pulse, quality)), 0);
    });
}
