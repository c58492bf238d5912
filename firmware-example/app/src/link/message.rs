//! What is said over the link. The order of variants and fields is the format: see `LINK.md` before
//! changing anything, and raise [`PROTOCOL`] with any change.

use crate::link::refusal::Refusal;
use halfpulse::setup::{EchoSign, ProbeFace, ProbeKind};
use halfpulse::workspace::ECHO_CAPACITY;
use halfpulse::{
    CalibratedRange, Celsius, Coating, DelayLine, ElementSeparation, GaugeSetup, Hertz, Material, Metres,
    MetresPerSecond, PartTemperature, Probe, Seconds, SetupError, Span, Surface, VelocityTemperature, Window, Zero,
};
use heapless::Vec;
use serde::{Deserialize, Serialize};

/// Version of this protocol. Both ends must speak the same.
pub const PROTOCOL: u8 = 4;
/// Most samples of a learned pulse in one [`PulsePart`].
pub const PART_SAMPLES: usize = 32;

/// Everything that can be said. Numbers are in SI units unless their name says otherwise.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[allow(clippy::large_enum_variant)] // one exists at a time, and there is no heap to put it on
pub enum Message {
    /// Either way: who speaks which version. First message of a conversation; keeps its place and its
    /// first field in all versions.
    Hello(Hello),
    /// To the gauge: measure with this set-up from now on.
    SetUp(SetUp),
    /// From the gauge: 0 if the set-up is in force, else why the old one stays: [`setup_error_code`].
    SetUpTaken(u8),
    /// To the gauge: take one reading.
    Take(Take),
    /// From the gauge: what came of it.
    Report(LinkReport),
    /// To the front end: fire one shot.
    Fire(Fire),
    /// From the front end: the samples are in the shared memory.
    Done(Done),
    /// From the front end: no shot, and why.
    NotFired(NotFired),
    /// To the gauge: say how you are.
    Query,
    /// From the gauge: its counters.
    Status(Status),
    /// To the gauge: the conversation is over.
    Bye,
    /// To the gauge: some samples of a learned pulse.
    PulsePart(PulsePart),
    /// From the gauge: how many of them it holds, from the first and without a gap.
    PulseHeld(u16),
    /// To the gauge: measure with the pulse whose samples it holds.
    TakePulse(TakePulse),
    /// From the gauge: 0 if the pulse is in force, else why not: [`pulse_error_code`], [`PULSE_INCOMPLETE`].
    PulseTaken(u8),
}

/// Introduces one end.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct Hello {
    /// The version it speaks.
    pub protocol: u8,
    /// Longest record it can hold, in samples.
    pub samples: u16,
}

/// A set-up, field by field as [`GaugeSetup`] has it.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct SetUp {
    /// Samples per second.
    pub sample_rate: f32,
    /// 0 contact, 1 delay line, 2 dual element.
    pub kind: u8,
    /// Middle of the probe's band.
    pub centre_frequency: f32,
    /// Width of the band over its middle.
    pub relative_bandwidth: f32,
    /// Diameter of the element, if known.
    pub element_diameter: Option<f32>,
    /// 0 hard, 1 plastic.
    pub face: u8,
    /// Variation of the couplant film.
    pub couplant_film: f32,
    /// Velocity in the part and its standard uncertainty.
    pub velocity: [f32; 2],
    /// Zero offset, its standard uncertainty, its correlation with the velocity.
    pub zero: [f32; 3],
    /// 0 transmission pulse to back wall, 1 interface to back wall, 2 back wall to back wall.
    pub span: u8,
    /// Start and end of the window.
    pub window: [f32; 2],
    /// k of the expanded uncertainty.
    pub coverage_factor: f32,
    /// The coating, if there is one.
    pub coating: Option<LinkCoating>,
    /// Thinnest and thickest block of the calibration, if there was one.
    pub calibrated: Option<[f32; 2]>,
    /// Root mean square roughness of the back wall.
    pub roughness: f32,
    /// Relative standard uncertainty of the element's diameter.
    pub element_diameter_uncertainty: f32,
    /// Length and velocity of the delay line or the delay blocks, if known.
    pub delay_line: Option<[f32; 2]>,
    /// Distance of a dual-element probe's elements and its standard uncertainty, if known.
    pub separation: Option<[f32; 2]>,
    /// Block whose beam shift the zero holds, if known.
    pub zero_learned_on: Option<f32>,
    /// How far the part's velocity may differ from the blocks', as a standard uncertainty.
    pub part_velocity_uncertainty: f32,
    /// Temperature coefficient of the velocity, its standard uncertainty, and the temperature that the velocity holds at.
    pub velocity_temperature: Option<[f32; 3]>,
    /// Temperature of the part and its standard uncertainty, if known.
    pub part_temperature: Option<[f32; 2]>,
    /// Sign of back walls and of the interface echo: 0 unknown, 1 as the pulse, 2 inverted.
    pub signs: [u8; 2],
    /// Jitter of the trigger, root mean square.
    pub trigger_jitter: f32,
    /// Radius of the part under the probe: 0 flat, positive on the outside of a pipe, negative inside.
    pub radius: f32,
}

/// A coating of the set-up.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct LinkCoating {
    /// Velocity in it, if known.
    pub velocity: Option<f32>,
    /// The velocity's standard uncertainty.
    pub velocity_uncertainty: f32,
}

/// Some samples of a learned pulse, in their order: the first part begins at 0, each other where the one before ended.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct PulsePart {
    /// Number of the first of them.
    pub first: u16,
    /// The samples, at the set-up's sample rate.
    pub samples: Vec<f32, PART_SAMPLES>,
}

/// Puts the pulse in force whose samples were sent.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct TakePulse {
    /// How many samples it has; 0: back to the pulse of the probe's data sheet.
    pub samples: u16,
    /// Its own noise over its peak.
    pub noise: f32,
    /// How far other shots' echoes differ from it.
    pub mismatch: f32,
    /// Thickness of the block that it was learned on, if known.
    pub learned_on: Option<f32>,
    /// [`crate::link::crc_of_samples`] of them.
    pub crc: u32,
}

impl SetUp {
    /// A set-up as the link carries it.
    #[must_use]
    pub fn of(setup: &GaugeSetup) -> Self {
        Self {
            sample_rate: setup.sample_rate.get(),
            kind: match setup.probe.kind {
                ProbeKind::Contact => 0,
                ProbeKind::DelayLine => 1,
                ProbeKind::DualElement => 2,
            },
            centre_frequency: setup.probe.centre_frequency.get(),
            relative_bandwidth: setup.probe.relative_bandwidth,
            element_diameter: setup.probe.element_diameter.map(Metres::get),
            face: match setup.probe.face {
                ProbeFace::Hard => 0,
                ProbeFace::Plastic => 1,
            },
            couplant_film: setup.probe.couplant_film.get(),
            velocity: [
                setup.material.velocity.get(),
                setup.material.velocity_standard_uncertainty.get(),
            ],
            zero: [
                setup.zero.offset.get(),
                setup.zero.standard_uncertainty.get(),
                setup.zero.velocity_correlation,
            ],
            span: match setup.span {
                Span::TransmissionPulseToBackWall => 0,
                Span::InterfaceToBackWall => 1,
                Span::BackWallToBackWall => 2,
            },
            window: [setup.window.from.get(), setup.window.to.get()],
            coverage_factor: setup.coverage_factor,
            coating: setup.coating.map(|coating| LinkCoating {
                velocity: coating.velocity.map(MetresPerSecond::get),
                velocity_uncertainty: coating.velocity_standard_uncertainty.get(),
            }),
            roughness: setup.roughness.get(),
            calibrated: setup.calibrated.map(|range| [range.from.get(), range.to.get()]),
            element_diameter_uncertainty: setup.probe.element_diameter_uncertainty,
            delay_line: (setup.probe.delay_line).map(|line| [line.length.get(), line.velocity.get()]),
            separation: (setup.probe.separation).map(|s| [s.distance.get(), s.standard_uncertainty.get()]),
            zero_learned_on: setup.zero.learned_on.map(Metres::get),
            part_velocity_uncertainty: setup.material.part_velocity_standard_uncertainty.get(),
            velocity_temperature: setup.material.temperature.map(|follows| {
                let (slope, uncertainty) = (follows.coefficient, follows.coefficient_standard_uncertainty);
                [slope, uncertainty, follows.reference.get()]
            }),
            part_temperature: (setup.material.temperature)
                .and_then(|follows| follows.part)
                .map(|part| [part.temperature.get(), part.standard_uncertainty.get()]),
            signs: [
                number_of(setup.probe.back_wall_sign),
                number_of(setup.probe.interface_sign),
            ],
            trigger_jitter: setup.trigger_jitter.get(),
            radius: match setup.surface {
                Surface::Flat => 0.0,
                Surface::Convex(radius) => radius.get(),
                Surface::Concave(radius) => -radius.get(),
            },
        }
    }

    /// The set-up it stands for; `None` for a kind, face, span or sign that does not exist. Values are not
    /// checked: making or changing a gauge does that.
    #[must_use]
    pub fn setup(&self) -> Option<GaugeSetup> {
        let kind = match self.kind {
            0 => ProbeKind::Contact,
            1 => ProbeKind::DelayLine,
            2 => ProbeKind::DualElement,
            _ => return None,
        };
        let face = match self.face {
            0 => ProbeFace::Hard,
            1 => ProbeFace::Plastic,
            _ => return None,
        };
        let span = match self.span {
            0 => Span::TransmissionPulseToBackWall,
            1 => Span::InterfaceToBackWall,
            2 => Span::BackWallToBackWall,
            _ => return None,
        };
        let [back_wall_sign, interface_sign] = self.signs;
        let [velocity, velocity_uncertainty] = self.velocity;
        let [offset, offset_uncertainty, correlation] = self.zero;
        let [from, to] = self.window;
        Some(GaugeSetup {
            sample_rate: Hertz::new(self.sample_rate),
            probe: Probe {
                kind,
                centre_frequency: Hertz::new(self.centre_frequency),
                relative_bandwidth: self.relative_bandwidth,
                element_diameter: self.element_diameter.map(Metres::new),
                face,
                couplant_film: Metres::new(self.couplant_film),
                echo_phase_degrees: None,
                element_diameter_uncertainty: self.element_diameter_uncertainty,
                delay_line: self.delay_line.map(|[length, velocity]| DelayLine {
                    length: Metres::new(length),
                    velocity: MetresPerSecond::new(velocity),
                }),
                separation: (self.separation)
                    .map(|[distance, u]| ElementSeparation::new(Metres::new(distance), Metres::new(u))),
                back_wall_sign: sign_of(back_wall_sign)?,
                interface_sign: sign_of(interface_sign)?,
            },
            material: Material {
                velocity: MetresPerSecond::new(velocity),
                velocity_standard_uncertainty: MetresPerSecond::new(velocity_uncertainty),
                part_velocity_standard_uncertainty: MetresPerSecond::new(self.part_velocity_uncertainty),
                temperature: (self.velocity_temperature).map(|[coefficient, uncertainty, reference]| {
                    VelocityTemperature {
                        coefficient,
                        coefficient_standard_uncertainty: uncertainty,
                        reference: Celsius::new(reference),
                        part: self.part_temperature.map(|[temperature, uncertainty]| PartTemperature {
                            temperature: Celsius::new(temperature),
                            standard_uncertainty: Celsius::new(uncertainty),
                        }),
                    }
                }),
            },
            zero: Zero {
                offset: Seconds::new(offset),
                standard_uncertainty: Seconds::new(offset_uncertainty),
                velocity_correlation: correlation,
                learned_on: self.zero_learned_on.map(Metres::new),
            },
            span,
            window: Window {
                from: Seconds::new(from),
                to: Seconds::new(to),
            },
            coverage_factor: self.coverage_factor,
            coating: self.coating.map(|coating| Coating {
                velocity: coating.velocity.map(MetresPerSecond::new),
                velocity_standard_uncertainty: MetresPerSecond::new(coating.velocity_uncertainty),
            }),
            roughness: Metres::new(self.roughness),
            calibrated: self.calibrated.map(|[from, to]| CalibratedRange {
                from: Metres::new(from),
                to: Metres::new(to),
            }),
            trigger_jitter: Seconds::new(self.trigger_jitter),
            surface: if self.radius == 0.0 {
                Surface::Flat
            } else if self.radius < 0.0 {
                Surface::Concave(Metres::new(-self.radius))
            } else {
                Surface::Convex(Metres::new(self.radius))
            },
        })
    }
}

const fn number_of(sign: EchoSign) -> u8 {
    match sign {
        EchoSign::Unknown => 0,
        EchoSign::AsPulse => 1,
        EchoSign::Inverted => 2,
    }
}

const fn sign_of(number: u8) -> Option<EchoSign> {
    match number {
        0 => Some(EchoSign::Unknown),
        1 => Some(EchoSign::AsPulse),
        2 => Some(EchoSign::Inverted),
        _ => None,
    }
}

/// [`Message::PulseTaken`] where parts are missing, where a reading came between them, or where the check sum is not theirs.
pub const PULSE_INCOMPLETE: u8 = 5;

/// What [`Message::PulseTaken`] says about a pulse that the core refused: 2 a wrong value, 3 a pulse that does not fit, or that
/// holds no echo. After a 3 the pulse of the probe's data sheet is in force.
#[must_use]
pub const fn pulse_error_code(error: &SetupError) -> u8 {
    setup_error_code(error)
}

/// [`Message::SetUpTaken`] for a kind, face, span or sign that does not exist.
pub const UNKNOWN_CHOICE: u8 = 1;

/// What [`Message::SetUpTaken`] says about a set-up that the core refused: 2 a wrong value, 3 a pulse
/// that does not fit (probe too slow for the sample rate), 4 too little scratch memory.
#[must_use]
pub const fn setup_error_code(error: &SetupError) -> u8 {
    match error {
        SetupError::PulseTooLong | SetupError::PulseEmpty => 3,
        SetupError::WorkspaceTooSmall { .. } => 4,
        _ => 2,
    }
}

/// The gain of a reading.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub enum GainChoice {
    /// Stepped until the echoes use 60 to 80 % of the converter.
    Automatic,
    /// As given, in dB.
    Fixed(f32),
}

/// Asks for one reading.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct Take {
    /// Comes back in the report.
    pub number: u32,
    /// Shots to average, 1 to 256.
    pub shots: u16,
    /// Samples of each shot.
    pub samples: u16,
    /// The gain.
    pub gain: GainChoice,
}

/// What came of one [`Take`].
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct LinkReport {
    /// The number that was asked for.
    pub number: u32,
    /// Shots that were averaged.
    pub shots: u16,
    /// Gain in force, in dB.
    pub gain: f32,
    /// Root mean square of the noise, in codes of the record.
    pub noise: f32,
    /// A reading, a refusal, or a fault.
    pub outcome: Outcome,
    /// Where the echoes are.
    pub echoes: Vec<EchoPlace, ECHO_CAPACITY>,
}

/// The three ways it can end.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub enum Outcome {
    /// A reading.
    Reading(LinkReading),
    /// The core refused to read: a normal outcome.
    NoReading(Refusal),
    /// There was no record to read: [`crate::report::Fault::code`].
    Fault(u8),
}

/// A reading.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct LinkReading {
    /// The wall.
    pub thickness: f32,
    /// Its standard uncertainty.
    pub standard_uncertainty: f32,
    /// k of the expanded uncertainty.
    pub coverage_factor: f32,
    /// What is shown of the coating.
    pub coating: Option<LinkCoatingReading>,
    /// Probability that another cycle was read.
    pub wrong_cycle_probability: f32,
    /// The doubts, as [`halfpulse::Doubts::bits`].
    pub doubts: u32,
}

/// A coating that was read.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct LinkCoatingReading {
    /// The time down and up through it, with its standard uncertainty.
    pub round_trip: [f32; 2],
    /// Its thickness with its standard uncertainty, if its velocity is known.
    pub thickness: Option<[f32; 2]>,
}

/// Where one echo is.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct EchoPlace {
    /// Sample of the record.
    pub index: u32,
    /// Part of a sample beyond it.
    pub fraction: f32,
}

/// Asks for one shot.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct Fire {
    /// Comes back in the answer; an answer with another number is late, and dropped.
    pub sequence: u16,
    /// Gain in dB.
    pub gain: f32,
    /// How much later than usual the pulser shall fire.
    pub delay: f32,
    /// How many samples are wanted.
    pub samples: u16,
}

/// One shot was fired.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct Done {
    /// Number of the request.
    pub sequence: u16,
    /// Gain in force, in dB.
    pub gain: f32,
    /// Samples in the shared memory.
    pub samples: u16,
    /// Bits of the converter.
    pub bits: u8,
    /// Samples per second.
    pub rate: f32,
    /// When the first sample was taken, after the trigger.
    pub first_sample: f32,
    /// [`crate::link::crc_of_codes`] of the samples.
    pub crc: u32,
}

/// A shot was not fired.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct NotFired {
    /// Number of the request.
    pub sequence: u16,
    /// Why.
    pub fault: FrontEndFault,
}

/// What keeps a front end from firing.
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub enum FrontEndFault {
    /// The pulser did not charge.
    NoHighVoltage,
    /// The trigger came, the converter did not start.
    NoTrigger,
    /// More samples than it can take.
    TooManySamples,
    /// The gain or the delay cannot be set.
    CannotSet,
}

/// The gauge's counters since its start.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Default, Serialize, Deserialize)]
pub struct Status {
    /// Frames that were messages.
    pub received: u32,
    /// Frames with a wrong check sum, cut short or damaged.
    pub broken: u32,
    /// Frames longer than any message.
    pub oversized: u32,
    /// Frames with a right check sum that are no message of this protocol.
    pub unknown: u32,
    /// Messages that came when nobody waited for them: late, doubled or out of order.
    pub unexpected: u32,
    /// Shots that gave a record.
    pub shots: u32,
    /// Shots that ended in an error.
    pub failed_shots: u32,
    /// Reports that were sent.
    pub reports: u32,
    /// Most bytes of stack that were ever in use; 0 where that is not known.
    pub stack: u32,
}
