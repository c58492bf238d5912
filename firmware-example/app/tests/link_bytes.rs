//! The link's specification against its code: every worked example of `LINK.md`, byte by byte.

use halfpulse::{
    Celsius, GaugeSetup, Hertz, Material, Metres, MetresPerSecond, Probe, Seconds, Span, VelocityTemperature, Window,
    Zero,
};
use halfpulse_app::link::frame::{read_frame, write_frame};
use halfpulse_app::link::{
    Done, EchoPlace, Fire, FrontEndFault, GainChoice, Hello, LinkReading, LinkReport, Message, NotFired, Outcome,
    Refusal, SetUp, Status, Take,
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
                protocol: 2,
                samples: 4096,
            }),
        ),
        ("set-up", Message::SetUp(SetUp::of(&SETUP))),
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
    for wrong in [
        SetUp { kind: 3, ..sent },
        SetUp { face: 2, ..sent },
        SetUp { span: 3, ..sent },
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
            coating: Some([1.5; 2]),
            wrong_cycle_probability: 1.5,
            doubts: u32::MAX,
        }),
        echoes: [place; 16].into_iter().collect(),
    });
    let bytes = bytes_of(&longest);
    assert!(bytes.len() <= 257, "{}", bytes.len());
}
