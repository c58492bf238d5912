//! A gauge and a bench at the two ends of one line, inside this program.

#![allow(dead_code, unused_imports)] // Each test binary uses a part of it, and takes its names from here.

pub use halfpulse::echo::pulse::PulseQuality;
pub use halfpulse::record::receiver::{PulseReceiver, Shot};
pub use halfpulse::{
    Decibels, EchoSign, Gauge, GaugeSetup, Hertz, Material, MetresPerSecond, NoReading, Probe, Scratch, Seconds, Span,
    Window, Zero,
};
pub use halfpulse_app::acquire::{FrontEnd, FrontEndPlan, ShotCounts};
pub use halfpulse_app::gauge_app::{App, RecordMemory, Step};
pub use halfpulse_app::link::{
    GainChoice, Hello, LinkReport, Message, Outcome, PART_SAMPLES, PROTOCOL, PULSE_INCOMPLETE, Port, PulsePart,
    Refusal, SetUp, SharedPort, Status, Take, TakePulse, crc_of_samples,
};
pub use halfpulse_app::remote::{RemoteFault, RemoteReceiver};
pub use halfpulse_app::report::{Fault, Report, ReportSink, Shortfall};
pub use halfpulse_sim::Scene;
pub use halfpulse_sim::device::{SharedSamples, SimulatedReceiver};
pub use halfpulse_sim::faults::{Behaviour, Damage, FaultyLine, FaultyReceiver, ReceiverFault};
pub use halfpulse_sim::link::{Conversation, MemoryLine, NoDelay, PromptingLine};
pub use std::cell::RefCell;
pub use std::rc::Rc;
pub use std::time::Duration;

pub const SAMPLES: usize = 2048;
pub const SETUP: GaugeSetup = GaugeSetup::new(
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
pub const STEPS: [Decibels; 5] = [
    Decibels::new(-12.0),
    Decibels::new(-6.0),
    Decibels::new(0.0),
    Decibels::new(6.0),
    Decibels::new(12.0),
];
/// Long enough for every answer, since waiting takes no time here; short enough for thousands of lost ones.
pub const PATIENCE_US: u32 = 2_000;
pub const A_MOMENT: Duration = Duration::from_millis(50);

pub type Host = Conversation<FaultyLine<MemoryLine>, SimulatedReceiver, SharedSamples>;
pub type GaugeLine = PromptingLine<FaultyLine<MemoryLine>, Box<dyn FnMut()>>;
pub type Remote<'p> = RemoteReceiver<'p, GaugeLine, SharedSamples, NoDelay>;

pub fn scene() -> Scene {
    let mut scene = Scene::contact(5.0, 60.0, "carbon steel", 10.0);
    // As the set-up has it.
    scene.probe.element_diameter_mm = Some(6.0);
    scene.probe.beam_diffraction = true;
    scene.noise.snr_db = Some(40.0);
    scene
}

/// Both ends; every random number depends on `seed`.
pub fn ends(seed: u64) -> (Rc<RefCell<Host>>, RefCell<Port<GaugeLine>>, SharedSamples) {
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
pub struct Words(pub Vec<String>);

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
pub struct Rig<'p, 'm> {
    pub host: Rc<RefCell<Host>>,
    pub port: &'p RefCell<Port<GaugeLine>>,
    pub app: App<'p, 'm, 'static, Remote<'p>, NoDelay, GaugeLine, Words>,
    pub number: u32,
}

impl Rig<'_, '_> {
    pub fn step(&mut self) -> Step {
        self.app.step()
    }

    /// Asks for one reading; `None` if request or report was lost.
    pub fn take(&mut self, shots: u16) -> Option<LinkReport> {
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

    pub fn status(&mut self) -> Status {
        self.app.status()
    }

    pub fn gauge_damage(&self, damage: Damage) {
        self.port.borrow_mut().line().line.damage = damage;
    }

    pub fn host_damage(&self, damage: Damage) {
        self.host.borrow_mut().line().damage = damage;
    }
}

pub fn with_rig(seed: u64, work: impl FnOnce(Rig<'_, '_>)) {
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

pub fn thickness(report: Option<LinkReport>) -> Option<f32> {
    match report?.outcome {
        Outcome::Reading(reading) => Some(reading.thickness),
        _ => None,
    }
}

pub fn fault(report: Option<LinkReport>) -> Option<Fault> {
    match report?.outcome {
        Outcome::Fault(code) => Fault::from_code(code),
        _ => None,
    }
}

/// The part is there again, and so is its thickness.
pub fn is_well(rig: &mut Rig<'_, '_>) {
    let read = thickness(rig.take(2)).expect("a reading once the fault has gone");
    assert!((read - 0.01).abs() < 1e-5, "{read}");
}
