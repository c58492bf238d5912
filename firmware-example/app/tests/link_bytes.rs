//! The link's specification against its code: every worked example of `LINK.md`, byte by byte.

use halfpulse::{
    Celsius, Coating, EchoSign, GaugeSetup, Hertz, Material, Metres, MetresPerSecond, Probe, Seconds, Span, Surface,
    VelocityTemperature, Window, Zero,
};
use halfpulse_app::link::frame::{read_frame, write_frame};
use halfpulse_app::link::{
    Done, EchoPlace, Fire, FrameError, FrontEndFault, GainChoice, Hello, LinkCoatingReading, LinkReading, LinkReport,
    Message, NotFired, Outcome, PART_SAMPLES, PROTOCOL, PulsePart, Refusal, SetUp, Status, Take, TakePulse,
    crc_of_bytes,
};

const SPECIFICATION: &str = include_str!("../../LINK.md");

const SETUP: GaugeSetup = GaugeSetup::new(
    Hertz::from_mhz(50.0),
    Probe::contact(Hertz::from_mhz(5.0), 0.6).with_element_diameter(Metres::from_mm(6.0)),
    Material::new(MetresPerSecond::new(5920.0), MetresPerSecond::new(17.0)),
    Zero::new(Seconds::ZERO, Seconds::from_ns(1.0)),
    Span::BackWallToBackWall,
    Window {
        from: Seconds::from_us(1.0),
        to: Seconds::from_us(80.0),
    },
);

/// What a calibration and a painted pipe add.
fn calibrated() -> GaugeSetup {
    let mut setup = SETUP
        .with_trigger_jitter(Seconds::from_ns(0.5))
        .with_coating(Coating::new(MetresPerSecond::new(2300.0), MetresPerSecond::new(115.0)))
        .with_surface(Surface::Convex(Metres::new(0.0625)));
    setup.probe = setup.probe.with_signs(EchoSign::AsPulse, EchoSign::Inverted);
    setup
}

fn examples() -> Vec<(&'static str, Message)> {
    let report = |outcome, echoes: &[EchoPlace]| {
        Message::Report(LinkReport {
            number: 7,
            shots: 16,
            gain: 34.0,
            noise: 0.5,
            outcome,
            echoes: echoes.iter().copied().collect(),
        })
    };
    vec![
        (
            "hello",
            Message::Hello(Hello {
                protocol: PROTOCOL,
                samples: 4096,
            }),
        ),
        ("set-up", Message::SetUp(SetUp::of(&SETUP))),
        ("set-up-calibrated", Message::SetUp(SetUp::of(&calibrated()))),
        ("set-up-taken", Message::SetUpTaken(0)),
        (
            "take",
            Message::Take(Take {
                number: 7,
                shots: 16,
                samples: 4096,
                gain: GainChoice::Automatic,
            }),
        ),
        (
            "take-fixed",
            Message::Take(Take {
                number: 300,
                shots: 1,
                samples: 2048,
                gain: GainChoice::Fixed(30.0),
            }),
        ),
        (
            "report-reading",
            report(
                Outcome::Reading(LinkReading {
                    thickness: 0.0078125,
                    standard_uncertainty: 1e-5,
                    coverage_factor: 2.0,
                    coating: None,
                    wrong_cycle_probability: 0.0,
                    doubts: 1,
                }),
                &[EchoPlace {
                    index: 132,
                    fraction: 0.25,
                }],
            ),
        ),
        (
            "report-refusal",
            report(
                Outcome::NoReading(Refusal {
                    code: 7,
                    evidence: [123, 0, 0],
                }),
                &[],
            ),
        ),
        ("report-fault", report(Outcome::Fault(1), &[])),
        (
            "fire",
            Message::Fire(Fire {
                sequence: 258,
                gain: 30.0,
                delay: 0.0,
                samples: 4096,
            }),
        ),
        (
            "done",
            Message::Done(Done {
                sequence: 258,
                gain: 30.0,
                samples: 4096,
                bits: 12,
                rate: 50e6,
                first_sample: 0.0,
                crc: 0xcbf4_3926,
            }),
        ),
        (
            "not-fired",
            Message::NotFired(NotFired {
                sequence: 258,
                fault: FrontEndFault::NoTrigger,
            }),
        ),
        ("query", Message::Query),
        (
            "status",
            Message::Status(Status {
                received: 1000,
                broken: 2,
                reports: 200,
                shots: 900,
                failed_shots: 3,
                stack: 3000,
                ..Status::default()
            }),
        ),
        ("bye", Message::Bye),
        (
            "pulse-part",
            Message::PulsePart(PulsePart {
                first: 32,
                samples: [0.5, -0.25, 1.0].into_iter().collect(),
            }),
        ),
        ("pulse-held", Message::PulseHeld(35)),
        (
            "take-pulse",
            Message::TakePulse(TakePulse {
                samples: 35,
                noise: 0.002,
                mismatch: 0.01,
                learned_on: Some(0.025),
                crc: 0xcbf4_3926,
            }),
        ),
        ("pulse-taken", Message::PulseTaken(0)),
    ]
}

fn bytes_of(message: &Message) -> Vec<u8> {
    let mut room = [0u8; 300];
    let mut rest = &mut room[..];
    write_frame(message, &mut rest).expect("fits").expect("is short enough");
    let left = rest.len();
    room[..300 - left].to_vec()
}

fn hex(bytes: &[u8]) -> String {
    bytes
        .iter()
        .map(|byte| format!("{byte:02x}"))
        .collect::<Vec<_>>()
        .join(" ")
}

/// The bytes that `LINK.md` gives for an example: the lines behind its name, up to an empty one or the
/// end of the block.
fn specified(name: &str) -> Option<String> {
    let heading = format!("example {name}\n");
    let (_, rest) = SPECIFICATION.split_once(&heading)?;
    let lines = rest
        .lines()
        .take_while(|line| !line.is_empty() && !line.starts_with("```") && !line.starts_with("example "));
    Some(lines.flat_map(str::split_whitespace).collect::<Vec<_>>().join(" "))
}

#[test]
fn every_worked_example_of_the_specification_is_what_the_code_writes() {
    let mut wrong = String::new();
    for (name, message) in examples() {
        let written = hex(&bytes_of(&message));
        if specified(name).as_deref() != Some(&written) {
            wrong += &format!("example {name}\n{written}\n\n");
        }
    }
    assert!(wrong.is_empty(), "LINK.md should say:\n{wrong}");
    assert_eq!(
        SPECIFICATION.matches("example ").count(),
        examples().len(),
        "an example that no test knows"
    );
}

#[test]
fn what_is_written_is_read_back() {
    for (name, message) in examples() {
        let bytes = bytes_of(&message);
        assert_eq!((bytes[0], bytes[bytes.len() - 1]), (0, 0), "{name}");
        let mut inside = bytes[1..bytes.len() - 1].to_vec();
        assert!(!inside.contains(&0), "{name}");
        assert_eq!(read_frame(&mut inside), Ok(message), "{name}");
    }
}

#[test]
fn a_set_up_comes_back_as_it_went() {
    let sent = SetUp::of(&SETUP);
    assert_eq!(sent.setup(), Some(SETUP));
    let follows = VelocityTemperature::new(-0.8, Celsius::new(21.0));
    for follows in [follows, follows.with_part(Celsius::new(60.0), Celsius::new(2.0))] {
        let mut warm = SETUP;
        warm.material = warm.material.with_temperature(follows);
        warm.material = warm.material.with_part_uncertainty(MetresPerSecond::new(9.0));
        assert_eq!(SetUp::of(&warm).setup(), Some(warm));
    }
    assert_eq!(SetUp::of(&calibrated()).setup(), Some(calibrated()));
    for surface in [
        Surface::Flat,
        Surface::Convex(Metres::new(0.05)),
        Surface::Concave(Metres::new(0.1)),
    ] {
        let mut other = SETUP.with_surface(surface).with_coating(Coating::UNKNOWN);
        for (back_wall, interface) in [
            (EchoSign::Unknown, EchoSign::AsPulse),
            (EchoSign::Inverted, EchoSign::Unknown),
        ] {
            other.probe = other.probe.with_signs(back_wall, interface);
            assert_eq!(SetUp::of(&other).setup(), Some(other));
        }
    }
    for wrong in [
        SetUp { kind: 3, ..sent },
        SetUp { face: 2, ..sent },
        SetUp { span: 3, ..sent },
        SetUp { signs: [3, 0], ..sent },
        SetUp { signs: [0, 3], ..sent },
    ] {
        assert_eq!(wrong.setup(), None);
    }
}

#[test]
fn the_longest_report_fits_a_frame() {
    let place = EchoPlace {
        index: u32::MAX,
        fraction: f32::from_bits(0x7f7f_7f7f),
    };
    let longest = Message::Report(LinkReport {
        number: u32::MAX,
        shots: u16::MAX,
        gain: 1.5,
        noise: 1.5,
        outcome: Outcome::Reading(LinkReading {
            thickness: 1.5,
            standard_uncertainty: 1.5,
            coverage_factor: 1.5,
            coating: Some(LinkCoatingReading {
                round_trip: [1.5; 2],
                thickness: Some([1.5; 2]),
            }),
            wrong_cycle_probability: 1.5,
            doubts: u32::MAX,
        }),
        echoes: [place; 16].into_iter().collect(),
    });
    let bytes = bytes_of(&longest);
    assert!(bytes.len() <= 257, "{}", bytes.len());
}

#[test]
fn the_longest_set_up_and_part_of_a_pulse_fit_a_frame() {
    let follows = VelocityTemperature::new(-0.8, Celsius::new(21.0)).with_part(Celsius::new(60.0), Celsius::new(2.0));
    let mut longest = calibrated();
    longest.material = longest.material.with_temperature(follows);
    longest.zero = longest.zero.with_learned_on(Metres::new(0.025));
    let sent = SetUp {
        calibrated: Some([1.5; 2]),
        delay_line: Some([1.5; 2]),
        separation: Some([1.5; 2]),
        ..SetUp::of(&longest)
    };
    let part = PulsePart {
        first: u16::MAX,
        samples: [f32::from_bits(0x7f7f_7f7f); PART_SAMPLES].into_iter().collect(),
    };
    for message in [Message::SetUp(sent), Message::PulsePart(part)] {
        let bytes = bytes_of(&message);
        assert!(bytes.len() <= 257, "{}", bytes.len());
    }
}

/// A set-up of the version before, which had no signs, no jitter and no radius, is no message any more: it is dropped and
/// counted, and never half read.
#[test]
fn a_set_up_of_the_version_before_is_dropped() {
    let mut payload = [0u8; 250];
    let whole = postcard::to_slice(&Message::SetUp(SetUp::of(&SETUP)), &mut payload)
        .expect("fits")
        .to_vec();
    // Two bytes of signs, twice four of numbers.
    let mut old = whole[..whole.len() - 10].to_vec();
    old.extend(crc_of_bytes(&old).to_le_bytes());
    let mut frame = Vec::new();
    for run in old.split(|&byte| byte == 0) {
        frame.push(u8::try_from(run.len() + 1).expect("short"));
        frame.extend(run);
    }
    assert_eq!(read_frame(&mut frame), Err(FrameError::Unknown));
    assert!(SPECIFICATION.contains(&format!("Version {PROTOCOL}. ")));
}
