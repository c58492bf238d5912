//! Where readings are taken: the scenes of the canned records, each with another wall, noise, gain and
//! number of shots. A place depends on its number alone.

use crate::records::scene_of;
use halfpulse::echo::pulse::PulseQuality;
use halfpulse::{EchoSign, GaugeSetup, Metres, Seconds, Span, Surface, math};
use halfpulse_app::link::frame::write_frame;
use halfpulse_app::link::{GainChoice, LinkReport, Message, Take};
use halfpulse_mps2::canned::{COSTLIEST, RECORDS};
use halfpulse_sim::Scene;
use halfpulse_sim::device::SimulatedReceiver;
use halfpulse_sim::front_end::{Purpose, Random};

/// Of the random numbers that make the places.
const SEED: u64 = 2026;

/// A scene with the set-up that belongs to it.
#[derive(Clone, Debug)]
pub struct Base {
    name: &'static str,
    scene: Scene,
    setup: GaugeSetup,
    pulse: Option<LearnedPulse>,
}

/// A learned pulse with its quality.
pub type LearnedPulse = (Vec<f32>, PulseQuality);

/// A calibrated gauge: signs, jitter, curvature, and a pulse that was learned on a block, here a skewed one of 5 MHz.
fn calibrated(base: &Base) -> Base {
    let pulse = (-40i8..=40).map(|place| {
        let t = f32::from(place) / 50.0;
        let spread = if t < 0.0 { 0.11 } else { 0.14 };
        math::exp(-t * t / (2.0 * spread * spread)) * math::cos(std::f32::consts::TAU * 5.0 * t + 0.4)
    });
    let quality = PulseQuality {
        noise: 0.002,
        mismatch: 0.02,
        learned_on: Some(Metres::from_mm(25.0)),
    };
    let mut setup = base
        .setup
        .with_trigger_jitter(Seconds::from_ns(1.0))
        .with_surface(Surface::Convex(Metres::from_mm(20.0)));
    setup.span = Span::TransmissionPulseToBackWall;
    setup.zero = setup.zero.with_learned_on(Metres::ZERO);
    setup.probe = setup.probe.with_signs(EchoSign::AsPulse, EchoSign::Unknown);
    Base {
        name: "calibrated-steel-10-mm",
        scene: base.scene.clone(),
        setup,
        pulse: Some((pulse.collect(), quality)),
    }
}

/// The scenes of the canned records, and the first once more with a calibrated gauge.
pub fn bases() -> Result<Vec<Base>, String> {
    let base = |record: &halfpulse_mps2::canned::Canned| {
        Ok(Base {
            name: record.name,
            scene: scene_of(record.name)?,
            setup: record.setup,
            pulse: None,
        })
    };
    // The costliest record's world has more disturbances than many shots of it may hold.
    let met = RECORDS.iter().filter(|record| record.name != COSTLIEST);
    let mut bases = met.map(base).collect::<Result<Vec<Base>, String>>()?;
    if let Some(first) = bases.first().map(calibrated) {
        bases.push(first);
    }
    Ok(bases)
}

/// One place with the request for its reading.
#[derive(Clone, Debug)]
pub struct Place {
    /// What it is, for people.
    pub name: String,
    /// The set-up of the gauge.
    pub setup: GaugeSetup,
    /// The pulse that it was calibrated with; the data sheet's without.
    pub pulse: Option<LearnedPulse>,
    /// The request.
    pub take: Take,
    scene: Scene,
    seed: u64,
}

impl Place {
    /// The place of this number.
    pub fn new(bases: &[Base], number: u32) -> Self {
        let mut random = Random::new(SEED, Purpose::Variation, u64::from(number));
        let mut between = |low: f64, high: f64| low + (high - low) * random.uniform();
        // Set-ups change now and then, not for every reading.
        let base = &bases[(number as usize / 4) % bases.len()];
        let mut scene = base.scene.clone();
        scene.wall.thickness_mm *= between(0.5, 2.0);
        if let Some(coating) = &mut scene.coating {
            coating.thickness_mm *= between(0.6, 1.6);
        }
        // From clean to hopeless.
        let has_echoes = scene.record.gain_db.is_none_or(|gain| gain > -100.0);
        if has_echoes {
            scene.noise.rms_steps = None;
            scene.noise.snr_db = Some(between(8.0, 50.0));
        }
        let gain = if !has_echoes {
            // The probe in the air: what reaches the receiver stays below its noise at any gain.
            scene.wall.thickness_mm = 5_000.0;
            GainChoice::Fixed(0.0)
        } else if between(0.0, 1.0) < 0.6 {
            GainChoice::Automatic
        } else {
            // Some of these clip, some are too low.
            GainChoice::Fixed((between(-10.0, 30.0) * 2.0).round() as f32 / 2.0)
        };
        let shots = [1, 1, 2, 3, 4, 8, 16, 64][(between(0.0, 8.0) as usize).min(7)];
        let samples = if between(0.0, 1.0) < 0.7 { 4096 } else { 2048 };
        Self {
            name: format!("{} {:.3} mm, {shots} shots", base.name, scene.wall.thickness_mm),
            setup: base.setup,
            pulse: base.pulse.clone(),
            take: Take {
                number,
                shots,
                samples,
                gain,
            },
            scene,
            seed: u64::from(number) + 1,
        }
    }

    /// A simulator in front of this place, at its first shot.
    pub fn receiver(&self) -> SimulatedReceiver {
        SimulatedReceiver::new(self.scene.clone(), self.seed)
    }
}

/// A report as it goes over the link.
pub fn bytes_of(report: &LinkReport) -> Vec<u8> {
    let mut room = [0u8; 300];
    let mut rest = &mut room[..];
    let message = Message::Report(report.clone());
    let written = matches!(write_frame(&message, &mut rest), Ok(Ok(())));
    let left = rest.len();
    if written {
        room[..300 - left].to_vec()
    } else {
        Vec::new()
    }
}
