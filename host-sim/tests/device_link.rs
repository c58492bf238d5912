//! Gauge and simulator at the two ends of one line, inside this program: the same code as on the board.
//! What goes wrong is said in words and counted, gives no reading, ends, and leaves nothing behind.

use halfpulse::echo::pulse::PulseQuality;
use halfpulse::record::receiver::{PulseReceiver, Shot};
use halfpulse::{
    Decibels, EchoSign, Gauge, GaugeSetup, Hertz, Material, MetresPerSecond, NoReading, Probe, Scratch, Seconds, Span,
    Window, Zero,
};
use halfpulse_app::acquire::{FrontEnd, FrontEndPlan, ShotCounts};
use halfpulse_app::gauge_app::{App, RecordMemory, Step};
use halfpulse_app::link::{
    GainChoice, Hello, LinkReport, Message, Outcome, PART_SAMPLES, PROTOCOL, PULSE_INCOMPLETE, Port, PulsePart,
    Refusal, SetUp, SharedPort, Status, Take, TakePulse, crc_of_samples,
};
use halfpulse_app::remote::{RemoteFault, RemoteReceiver};
use halfpulse_app::report::{Fault, Report, ReportSink, Shortfall};
use halfpulse_sim::Scene;
use halfpulse_sim::device::{SharedSamples, SimulatedReceiver};
use halfpulse_sim::faults::{Behaviour, Damage, FaultyLine, FaultyReceiver, ReceiverFault};
use halfpulse_sim::link::{Conversation, MemoryLine, NoDelay, PromptingLine};
use std::cell::RefCell;
use std::rc::Rc;
use std::time::Duration;

const SAMPLES: usize = 2048;
const SETUP: GaugeSetup = GaugeSetup::new(
    Hertz::from_mhz(50.0),
    Probe::contact(Hertz::from_mhz(5.0), 0.6).with_element_diameter(halfpulse::Metres::from_mm(6.0)),
    Material::new(MetresPerSecond::new(5920.0), MetresPerSecond::new(17.0)),
    Zero::new(Seconds::ZERO, Seconds::from_ns(1.0)),
    Span::BackWallToBackWall,
    Window {
        from: Seconds::from_us(0.5),
        to: Seconds::from_us(40.0),
    },
);
const STEPS: [Decibels; 5] = [
    Decibels::new(-12.0),
    Decibels::new(-6.0),
    Decibels::new(0.0),
    Decibels::new(6.0),
    Decibels::new(12.0),
];
/// Long enough for every answer, since waiting takes no time here; short enough for thousands of lost ones.
const PATIENCE_US: u32 = 2_000;
const A_MOMENT: Duration = Duration::from_millis(50);

type Host = Conversation<FaultyLine<MemoryLine>, SimulatedReceiver, SharedSamples>;
type GaugeLine = PromptingLine<FaultyLine<MemoryLine>, Box<dyn FnMut()>>;
type Remote<'p> = RemoteReceiver<'p, GaugeLine, SharedSamples, NoDelay>;

fn scene() -> Scene {
    let mut scene = Scene::contact(5.0, 60.0, "carbon steel", 10.0);
    // As the set-up has it.
    scene.probe.element_diameter_mm = Some(6.0);
    scene.probe.beam_diffraction = true;
    scene.noise.snr_db = Some(40.0);
    scene
}

/// Both ends; every random number depends on `seed`.
fn ends(seed: u64) -> (Rc<RefCell<Host>>, RefCell<Port<GaugeLine>>, SharedSamples) {
    let (host_line, gauge_line) = MemoryLine::pair();
    let memory = SharedSamples::default();
    let receiver = SimulatedReceiver::new(scene(), seed);
    let host = Conversation::new(FaultyLine::new(host_line, 2 * seed), receiver, memory.clone());
    let host = Rc::new(RefCell::new(host));
    let prompted = host.clone();
    let prompt: Box<dyn FnMut()> = Box::new(move || {
        // While the host itself waits for the gauge, it is at work already.
        if let Ok(mut host) = prompted.try_borrow_mut() {
            host.pump().expect("a line in memory");
        }
    });
    let line = PromptingLine::new(FaultyLine::new(gauge_line, 2 * seed + 1), prompt);
    (host, RefCell::new(Port::new(line)), memory)
}

#[derive(Default)]
struct Words(Vec<String>);

impl ReportSink for Words {
    fn report(&mut self, report: &Report<'_>) {
        self.0.push(match &report.outcome {
            Ok(reading) => reading.thickness.to_string(),
            Err(Shortfall::NoReading(refusal)) => refusal.to_string(),
            Err(Shortfall::Fault(fault)) => fault.to_string(),
        });
    }
}

/// A gauge at one end, a bench at the other.
struct Rig<'p, 'm> {
    host: Rc<RefCell<Host>>,
    port: &'p RefCell<Port<GaugeLine>>,
    app: App<'p, 'm, 'static, Remote<'p>, NoDelay, GaugeLine, Words>,
    number: u32,
}

impl Rig<'_, '_> {
    fn step(&mut self) -> Step {
        self.app.step()
    }

    /// Asks for one reading; `None` if request or report was lost.
    fn take(&mut self, shots: u16) -> Option<LinkReport> {
        self.number += 1;
        let take = Take {
            number: self.number,
            shots,
            samples: SAMPLES as u16,
            gain: GainChoice::Fixed(-6.0),
        };
        self.host.borrow_mut().send(&Message::Take(take)).unwrap();
        while self.step() != Step::Idle {}
        let mut host = self.host.borrow_mut();
        while let Some(message) = host.next_answer().unwrap() {
            // A request that came late is answered late.
            if let Message::Report(report) = message
                && report.number == self.number
            {
                return Some(report);
            }
        }
        None
    }

    fn status(&mut self) -> Status {
        self.app.status()
    }

    fn gauge_damage(&self, damage: Damage) {
        self.port.borrow_mut().line().line.damage = damage;
    }

    fn host_damage(&self, damage: Damage) {
        self.host.borrow_mut().line().damage = damage;
    }
}

fn with_rig(seed: u64, work: impl FnOnce(Rig<'_, '_>)) {
    let (host, port, memory) = ends(seed);
    let shared = SharedPort::new(&port);
    let mut scratch = Box::new(Scratch::<SAMPLES>::ZERO);
    let (mut codes, mut sums) = (vec![0; SAMPLES], vec![0; SAMPLES]);
    let front_end = FrontEnd {
        receiver: RemoteReceiver::new(shared, memory, NoDelay, PATIENCE_US),
        delay: NoDelay,
        plan: FrontEndPlan {
            gain_steps: &STEPS,
            first_gain: Decibels::new(0.0),
            pause_us: 0,
            retries: 1,
        },
        counts: ShotCounts::default(),
    };
    let memory = RecordMemory {
        codes: &mut codes,
        sums: &mut sums,
    };
    let mut gauge = Gauge::new(SETUP, scratch.workspace()).unwrap();
    let app = App::new(shared, front_end, &mut gauge, memory, Words::default(), || 0);
    let mut rig = Rig {
        host: host.clone(),
        port: &port,
        app,
        number: 0,
    };
    let hello = Message::Hello(Hello {
        protocol: PROTOCOL,
        samples: 0,
    });
    host.borrow_mut().send(&hello).unwrap();
    assert_eq!(rig.step(), Step::Served);
    let answer = host.borrow_mut().next_answer().unwrap();
    assert_eq!(
        answer,
        Some(Message::Hello(Hello {
            protocol: PROTOCOL,
            samples: SAMPLES as u16
        }))
    );
    work(rig);
}

fn thickness(report: Option<LinkReport>) -> Option<f32> {
    match report?.outcome {
        Outcome::Reading(reading) => Some(reading.thickness),
        _ => None,
    }
}

fn fault(report: Option<LinkReport>) -> Option<Fault> {
    match report?.outcome {
        Outcome::Fault(code) => Fault::from_code(code),
        _ => None,
    }
}

/// The part is there again, and so is its thickness.
fn is_well(rig: &mut Rig<'_, '_>) {
    let read = thickness(rig.take(2)).expect("a reading once the fault has gone");
    assert!((read - 0.01).abs() < 1e-5, "{read}");
}

#[test]
fn readings_over_the_link_are_those_of_the_same_codes() {
    with_rig(1, |mut rig| {
        let mut scratch = Box::new(Scratch::<SAMPLES>::ZERO);
        let mut direct = Gauge::new(SETUP, scratch.workspace()).unwrap();
        for shots in [1u16, 2, 16, 40] {
            rig.host.borrow_mut().take_shots();
            let report = rig.take(shots).unwrap();
            let fired = rig.host.borrow_mut().take_shots();
            assert_eq!(fired.len(), usize::from(shots));
            let (mut sums, mut codes) = (vec![0; SAMPLES], vec![0; SAMPLES]);
            let mut average = halfpulse::Averager::new(&mut sums);
            for shot in &fired {
                let record = halfpulse::Record::new(&shot.codes, shot.fired.format, shot.fired.clock);
                average.add(&record).unwrap();
            }
            let record = average.finish(&mut codes).unwrap();
            let expected = Report {
                number: report.number,
                shots,
                gain: Decibels::new(-6.0),
                outcome: direct.measure(&record).map_err(Shortfall::NoReading),
                findings: Some(direct.findings()),
            };
            assert_eq!(report, expected.to_link());
            assert!(thickness(Some(report)).is_some());
        }
    });
}

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

/// Ten thousand shots with one byte in a hundred replaced, both ways: exactly those rounds fail of which a
/// frame was hit, and every other one brings its samples.
#[test]
fn ten_thousand_rounds_lose_nothing_but_the_frames_that_were_hit() {
    let (host, port, memory) = ends(7);
    let mut remote = RemoteReceiver::new(SharedPort::new(&port), memory, NoDelay, PATIENCE_US);
    let damage = Damage::Bytes(0.01);
    host.borrow_mut().line().damage = damage;
    port.borrow_mut().line().line.damage = damage;
    let (mut lost, mut frames_hit) = (0, 0);
    for round in 0..10_000u32 {
        let gain = Decibels::new(-12.0 + 6.0 * (round % 4) as f32);
        let mut codes = [0; 64];
        let shot = Shot {
            gain,
            delay: Seconds::ZERO,
        };
        let outcome = remote.fire(&shot, &mut codes);
        let hits: Vec<bool> = {
            let mut port = port.borrow_mut();
            let mut host = host.borrow_mut();
            let asked = std::mem::take(&mut port.line().line.hits);
            let answered = std::mem::take(&mut host.line().hits);
            asked.into_iter().chain(answered).collect()
        };
        frames_hit += hits.iter().filter(|&&hit| hit).count();
        let was_hit = hits.contains(&true);
        match outcome {
            Ok(fired) => {
                assert!(!was_hit, "round {round}: a damaged frame was believed");
                assert_eq!((fired.gain, fired.samples), (gain, 64));
                let sent = host.borrow_mut().take_shots().pop().expect("a shot");
                assert_eq!(sent.codes, codes, "round {round}");
            }
            Err(fault) => {
                assert!(
                    was_hit,
                    "round {round} failed although no frame of it was hit: {fault:?}"
                );
                assert_eq!(fault, RemoteFault::NoAnswer);
                host.borrow_mut().take_shots();
                lost += 1;
            }
        }
    }
    let (at_gauge, at_host) = (port.borrow().counts(), host.borrow().counts());
    println!(
        "10000 rounds, 1 % of the bytes damaged: {lost} lost, {frames_hit} frames hit; broken {} and {}, oversized {}",
        at_gauge.broken, at_host.broken, at_gauge.oversized
    );
    // About 14 and 32 bytes a frame: a third of the rounds.
    assert!((2_000..5_000).contains(&lost), "{lost}");
    assert_eq!(at_gauge.received, 10_000 - lost);
}

/// The same for whole readings, where a lost shot is tried once more: reports come, and are right, or say why.
#[test]
fn readings_through_a_bad_line_are_right_or_faults() {
    with_rig(3, |mut rig| {
        let damage = Damage::Bytes(0.003);
        rig.gauge_damage(damage);
        rig.host_damage(damage);
        let (mut right, mut faults, mut lost) = (0, 0, 0);
        for _ in 0..300 {
            match rig.take(2) {
                None => lost += 1,
                Some(report) => match report.outcome {
                    Outcome::Reading(reading) => {
                        assert!((reading.thickness - 0.01).abs() < 1e-5);
                        right += 1;
                    }
                    Outcome::Fault(code) => {
                        assert_eq!(Fault::from_code(code), Some(Fault::NoAnswer));
                        faults += 1;
                    }
                    Outcome::NoReading(_) => panic!("a bad line is no refusal"),
                },
            }
        }
        println!("300 readings, 0.3 % of the bytes damaged: {right} right, {faults} faults, {lost} reports lost");
        assert!(right > 100 && faults > 0 && lost > 0);
        rig.gauge_damage(Damage::None);
        rig.host_damage(Damage::None);
        is_well(&mut rig);
    });
}

#[test]
fn a_front_end_that_misbehaves_is_a_fault_and_then_well_again() {
    for (behaviour, expected, words) in [
        (Behaviour::Dead, Fault::NoAnswer, "does not answer"),
        (Behaviour::Late, Fault::NoAnswer, "does not answer"),
        (Behaviour::NoSamples, Fault::SamplesMissing, "samples are missing"),
    ] {
        with_rig(4, |mut rig| {
            is_well(&mut rig);
            rig.host.borrow_mut().behaviour = behaviour;
            for _ in 0..3 {
                assert_eq!(fault(rig.take(2)), Some(expected), "{behaviour:?}");
                assert!(rig.app.sink().0.last().unwrap().contains(words));
            }
            assert!(rig.status().failed_shots >= 6);
            rig.host.borrow_mut().behaviour = Behaviour::Sound;
            is_well(&mut rig);
            if behaviour == Behaviour::Late {
                assert!(rig.status().unexpected > 0, "late answers are counted");
            }
        });
    }
}

#[test]
fn doubled_answers_are_dropped_and_counted() {
    with_rig(5, |mut rig| {
        rig.host.borrow_mut().behaviour = Behaviour::Doubled;
        is_well(&mut rig);
        is_well(&mut rig);
        assert!(rig.status().unexpected >= 2);
    });
}

#[test]
fn damaged_frames_are_counted_by_kind_and_then_all_is_well() {
    type Count = fn(&Status) -> u32;
    let kinds: [(Damage, Count); 4] = [
        (Damage::BrokenSum, |status| status.broken),
        (Damage::Truncated(7), |status| status.broken),
        (Damage::Oversized(400), |status| status.oversized),
        (Damage::Reordered, |status| status.unexpected),
    ];
    for (damage, count) in kinds {
        with_rig(6, |mut rig| {
            is_well(&mut rig);
            let before = rig.status();
            rig.host_damage(damage);
            for _ in 0..4 {
                // The request is lost on its way, or the answers of the front end are. Out of order, the
                // answer to a repeated shot may still come in time.
                let read = thickness(rig.take(1));
                let right = read.is_some_and(|read| (read - 0.01).abs() < 1e-5);
                assert!(
                    read.is_none() || (damage == Damage::Reordered && right),
                    "{damage:?}: {read:?}"
                );
            }
            rig.host_damage(Damage::None);
            // A frame that was cut short ends where the next one begins.
            let _ = rig.take(1);
            let after = rig.status();
            assert!(count(&after) > count(&before), "{damage:?}: {before:?} {after:?}");
            is_well(&mut rig);
        });
    }
}

#[test]
fn who_has_not_introduced_itself_is_not_listened_to() {
    with_rig(8, |mut rig| {
        let other = Message::Hello(Hello {
            protocol: PROTOCOL - 1,
            samples: 0,
        });
        rig.host.borrow_mut().send(&other).unwrap();
        assert_eq!(rig.step(), Step::Served);
        assert_eq!(rig.take(1), None);
        assert_eq!(rig.status().unexpected, 1);
        let ours = Message::Hello(Hello {
            protocol: PROTOCOL,
            samples: 0,
        });
        rig.host.borrow_mut().send(&ours).unwrap();
        assert_eq!(rig.step(), Step::Served);
        is_well(&mut rig);
        rig.host.borrow_mut().send(&Message::Bye).unwrap();
        assert_eq!(rig.step(), Step::Finished);
    });
}

#[test]
fn the_automatic_gain_finds_the_step_that_fits() {
    with_rig(9, |mut rig| {
        let take = Take {
            number: 1,
            shots: 4,
            samples: SAMPLES as u16,
            gain: GainChoice::Automatic,
        };
        let report = rig.app.take(&take);
        let gain = report.gain.get();
        assert!(
            report.outcome.is_ok() && STEPS.iter().any(|step| step.get() == gain),
            "{gain}"
        );
        let health = report.findings.unwrap().health;
        let highest = f32::from(health.highest.max(-health.lowest)) / (4.0 * 2048.0);
        assert!((0.3..=0.85).contains(&highest), "{highest} of full scale at {gain} dB");
    });
}

#[test]
fn a_gauge_that_does_not_answer_is_silent_and_not_waited_for() {
    let (host, _port, _memory) = ends(10);
    let silent = host.borrow_mut().query(A_MOMENT).unwrap_err();
    assert!(silent.to_string().contains("does not answer"), "{silent}");
}

#[test]
fn a_receiver_that_fails_gives_faults_or_refusals_and_never_a_wrong_reading() {
    type Expected = fn(&Result<halfpulse::Reading, Shortfall>) -> bool;
    let cases: [(ReceiverFault, Expected); 6] = [
        (ReceiverFault::Fails(Fault::Line), |o| {
            *o == Err(Shortfall::Fault(Fault::Line))
        }),
        (ReceiverFault::Short(1), |o| {
            *o == Err(Shortfall::Fault(Fault::WrongCount))
        }),
        (ReceiverFault::GainOff(0.5), |o| {
            *o == Err(Shortfall::Fault(Fault::ShotsDiffer))
        }),
        (ReceiverFault::ClockOff(1.1), |o| {
            *o == Err(Shortfall::Fault(Fault::ShotsDiffer))
        }),
        (ReceiverFault::DeadConverter, |o| {
            *o == Err(Shortfall::NoReading(NoReading::DeadReceiver))
        }),
        (ReceiverFault::StuckBit(3), |o| {
            matches!(o, Err(Shortfall::NoReading(NoReading::StuckBits { mask: 8 })))
        }),
    ];
    for (wrong, expected) in cases {
        let port = RefCell::new(Port::new(MemoryLine::pair().0));
        let mut scratch = Box::new(Scratch::<SAMPLES>::ZERO);
        let (mut codes, mut sums) = (vec![0; SAMPLES], vec![0; SAMPLES]);
        let front_end = FrontEnd {
            receiver: FaultyReceiver::new(SimulatedReceiver::new(scene(), 1)),
            delay: NoDelay,
            plan: FrontEndPlan {
                gain_steps: &STEPS,
                first_gain: Decibels::new(0.0),
                pause_us: 0,
                retries: 1,
            },
            counts: ShotCounts::default(),
        };
        let memory = RecordMemory {
            codes: &mut codes,
            sums: &mut sums,
        };
        let mut gauge = Gauge::new(SETUP, scratch.workspace()).unwrap();
        let mut app = App::new(SharedPort::new(&port), front_end, &mut gauge, memory, (), || 0);
        let take = Take {
            number: 1,
            shots: 4,
            samples: SAMPLES as u16,
            gain: GainChoice::Fixed(-6.0),
        };
        assert!(app.take(&take).outcome.is_ok());
        // A clock that changes between the shots of one average; all else in every shot.
        let shots = if matches!(wrong, ReceiverFault::ClockOff(_)) {
            1
        } else {
            u32::MAX
        };
        app.front_end().receiver.plan(wrong, shots);
        let outcome = app.take(&take).outcome;
        assert!(expected(&outcome), "{wrong:?}: {outcome:?}");
        app.front_end().receiver.fault = None;
        assert!(app.take(&take).outcome.is_ok(), "{wrong:?} has gone");
    }
}

#[test]
fn a_refusal_keeps_its_evidence_over_the_link() {
    with_rig(11, |mut rig| {
        *rig.host.borrow_mut().front_end() = {
            let mut nothing = Scene::contact(5.0, 60.0, "carbon steel", 400.0);
            nothing.noise.rms_steps = Some(3.0);
            SimulatedReceiver::new(nothing, 1)
        };
        let report = rig.take(1).unwrap();
        let Outcome::NoReading(refusal) = report.outcome else {
            panic!("{report:?}")
        };
        let Some(NoReading::NoEcho { noise }) = refusal.refusal() else {
            panic!("{refusal:?}")
        };
        assert!((2.0..4.0).contains(&noise), "{noise}");
        assert_eq!(Refusal::of(&NoReading::NoEcho { noise }), refusal);
    });
}
