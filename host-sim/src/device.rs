//! The simulator as a device: a pulser and receiver that fires at a scene, and the memory in which its
//! samples arrive.

#[cfg(unix)]
mod mapped;

use crate::front_end::gain::GainLag;
use crate::link::SampleStore;
use crate::scene::{Scene, SceneError};
use crate::synthesise::{Synthesiser, Variation};
use halfpulse::record::receiver::{Fired, PulseReceiver, Shot};
use halfpulse::{Decibels, SampleClock, Seconds};
use halfpulse_app::link::FrontEndFault;
use halfpulse_app::remote::SampleMemory;
use halfpulse_app::report::Fault;
use std::cell::RefCell;
use std::collections::VecDeque;
use std::rc::Rc;

#[cfg(unix)]
pub use mapped::MappedFile;

/// Longest delay of the pulser: what the simulator can shift a record by.
const LONGEST_DELAY: f64 = 1e-6;
/// Gains whose signals are kept.
const KEPT: usize = 4;

/// A pulser and receiver in front of a scene. Its gain goes in whole half decibels from -60 to 120 dB,
/// and each shot has noise of its own: the n-th shot after [`SimulatedReceiver::new`] is always the same.
#[derive(Clone, Debug)]
pub struct SimulatedReceiver {
    scene: Scene,
    seed: u64,
    shot: u64,
    lag: GainLag,
    made: VecDeque<Made>,
}

/// A signal at one gain and length.
#[derive(Clone, Debug)]
struct Made {
    half_decibels: i32,
    samples: usize,
    synthesiser: Synthesiser,
}

impl SimulatedReceiver {
    /// Stands in front of a scene, whose own gain and length do not matter.
    #[must_use]
    pub const fn new(scene: Scene, seed: u64) -> Self {
        Self {
            scene,
            seed,
            shot: 0,
            lag: GainLag::new(),
            made: VecDeque::new(),
        }
    }

    fn signal(&mut self, half_decibels: i32, samples: usize) -> Result<&mut Synthesiser, SceneError> {
        let place = self
            .made
            .iter()
            .position(|made| made.half_decibels == half_decibels && made.samples == samples);
        let made = match place.and_then(|place| self.made.remove(place)) {
            Some(made) => made,
            None => {
                let mut scene = self.scene.clone();
                scene.record.gain_db = Some(f64::from(half_decibels) / 2.0);
                scene.record.first_back_wall_percent = None;
                scene.record.samples = samples;
                Made {
                    half_decibels,
                    samples,
                    synthesiser: Synthesiser::new(&scene)?,
                }
            }
        };
        self.made.truncate(KEPT - 1);
        self.made.push_front(made);
        Ok(&mut self.made[0].synthesiser)
    }
}

/// What the simulator cannot do.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum SimulatorFault {
    /// The gain or the delay is not a number, or out of reach.
    CannotSet,
    /// The scene cannot be used, or not with so many samples.
    Scene(SceneError),
}

impl std::fmt::Display for SimulatorFault {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        match self {
            Self::CannotSet => f.write_str("gain or delay out of reach; ask for -60 to 120 dB and for 0 to 1 us"),
            Self::Scene(error) => error.fmt(f),
        }
    }
}

impl std::error::Error for SimulatorFault {}

impl From<SimulatorFault> for FrontEndFault {
    fn from(fault: SimulatorFault) -> Self {
        match fault {
            SimulatorFault::CannotSet => Self::CannotSet,
            SimulatorFault::Scene(_) => Self::TooManySamples,
        }
    }
}

impl From<SimulatorFault> for Fault {
    fn from(fault: SimulatorFault) -> Self {
        Self::NotFired(fault.into())
    }
}

impl PulseReceiver for SimulatedReceiver {
    type Error = SimulatorFault;

    fn fire(&mut self, shot: &Shot, codes: &mut [i16]) -> Result<Fired, SimulatorFault> {
        let (gain, delay) = (f64::from(shot.gain.get()), f64::from(shot.delay.get()));
        // Written so that "not a number" is refused.
        if !((-60.0..=120.0).contains(&gain) && (0.0..=LONGEST_DELAY).contains(&delay)) {
            return Err(SimulatorFault::CannotSet);
        }
        let receiver = &self.scene.receiver;
        let half_decibels = (receiver.nominal_gain(gain) * 2.0).round() as i32;
        let nominal = f64::from(half_decibels) / 2.0;
        let behind = self.lag.next(nominal, receiver.gain_lag_shots) - nominal;
        let (seed, number) = (self.seed, self.shot);
        let signal = self.signal(half_decibels, codes.len()).map_err(SimulatorFault::Scene)?;
        let made = if delay > 0.0 || behind != 0.0 {
            let varied = Variation {
                time_shift: delay,
                gain_change: behind,
                ..Variation::default()
            };
            signal.varied_shot(seed, number, varied)
        } else {
            signal.shot(seed, number)
        };
        self.shot += 1;
        for (code, &value) in codes.iter_mut().zip(&made.codes) {
            *code = value;
        }
        Ok(Fired {
            gain: Decibels::new(half_decibels as f32 / 2.0),
            samples: made.codes.len(),
            format: made.format,
            clock: SampleClock {
                first_sample: made.clock.first_sample - Seconds::new(delay as f32),
                ..made.clock
            },
        })
    }
}

/// Memory that both ends see, inside this program.
#[derive(Clone, Debug, Default)]
pub struct SharedSamples(Rc<RefCell<Vec<i16>>>);

impl SampleStore for SharedSamples {
    fn store(&mut self, codes: &[i16]) -> std::io::Result<()> {
        let mut memory = self.0.borrow_mut();
        let longer = memory.len().max(codes.len());
        memory.resize(longer, 0);
        memory[..codes.len()].copy_from_slice(codes);
        Ok(())
    }
}

impl SampleMemory for SharedSamples {
    fn copy(&mut self, codes: &mut [i16]) {
        for (code, &value) in codes.iter_mut().zip(self.0.borrow().iter()) {
            *code = value;
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn shot(gain: f32, delay_ns: f32) -> Shot {
        Shot {
            gain: Decibels::new(gain),
            delay: Seconds::from_ns(delay_ns),
        }
    }

    #[test]
    fn gain_is_what_it_says() {
        let mut receiver = SimulatedReceiver::new(Scene::contact(5.0, 60.0, "carbon steel", 10.0), 1);
        let (mut low, mut high) = ([0; 1024], [0; 1024]);
        let fired = receiver.fire(&shot(-12.1, 0.0), &mut low).unwrap();
        assert_eq!((fired.gain.get(), fired.samples), (-12.0, 1024));
        receiver.fire(&shot(-6.0, 0.0), &mut high).unwrap();
        let peak = |codes: &[i16]| f64::from(codes.iter().map(|code| code.abs()).max().unwrap());
        let ratio = 20.0 * (peak(&high) / peak(&low)).log10();
        assert!((ratio - 6.0).abs() < 0.1, "{ratio}");
    }

    #[test]
    fn a_delayed_pulser_moves_the_clock_and_not_the_echo() {
        let mut receiver = SimulatedReceiver::new(Scene::contact(5.0, 60.0, "carbon steel", 10.0), 1);
        let (mut now, mut later) = ([0; 1024], [0; 1024]);
        let undelayed = receiver.fire(&shot(-6.0, 0.0), &mut now).unwrap();
        // Two whole samples: the record moves by two samples, and each sample's time does not.
        let delayed = receiver.fire(&shot(-6.0, 40.0), &mut later).unwrap();
        let apart = (undelayed.clock.first_sample - delayed.clock.first_sample).get();
        assert!((apart - 40e-9).abs() < 1e-12);
        let worst = now.iter().zip(&later[2..]).map(|(a, b)| (a - b).abs()).max().unwrap();
        assert!(worst <= 1, "{worst}");
        assert!(now.iter().zip(&later).any(|(a, b)| (a - b).abs() > 100));
    }

    #[test]
    fn the_same_seed_gives_the_same_shots_and_each_its_own_noise() {
        let mut scene = Scene::contact(5.0, 60.0, "carbon steel", 10.0);
        scene.noise.snr_db = Some(30.0);
        let series = || {
            let mut receiver = SimulatedReceiver::new(scene.clone(), 5);
            [0.0, 3.0, 0.0].map(|gain| {
                let mut codes = [0; 512];
                receiver.fire(&shot(gain, 0.0), &mut codes).unwrap();
                codes
            })
        };
        let (one, two) = (series(), series());
        assert_eq!(one, two);
        assert_ne!(one[0], one[2]);
    }

    /// The receiver believes its nominal step; the signal has the step's error, and follows a change late.
    #[test]
    fn gain_lags_and_errs_without_the_receiver_knowing() {
        let mut scene = Scene::contact(5.0, 60.0, "carbon steel", 10.0);
        scene.record.bits = 16;
        scene.receiver.gain_lag_shots = 2.0;
        scene.receiver.gain_step_db = 2.0;
        scene.receiver.gain_error_db = 0.5;
        let error = |gain| scene.receiver.gain_error(gain);
        assert!(error(-12.0) != error(-6.0) && error(-6.0) != 0.0);
        let mut receiver = SimulatedReceiver::new(scene.clone(), 1);
        let mut peak_after = |gain: f32| {
            let mut codes = [0i16; 1024];
            let fired = receiver.fire(&shot(gain, 0.0), &mut codes).unwrap();
            let peak = codes.iter().map(|code| code.unsigned_abs()).max().unwrap();
            (fired.gain.get(), 20.0 * f64::from(peak).log10())
        };
        let (nominal, settled) = peak_after(-11.4);
        assert_eq!(nominal, -12.0);
        for n in 1..5 {
            let (nominal, level) = peak_after(-6.0);
            assert_eq!(nominal, -6.0);
            let expected = 6.0 + error(-6.0) - error(-12.0) - 6.0 * (-0.5 * f64::from(n)).exp();
            assert!(
                (level - settled - expected).abs() < 0.02,
                "{n}: {} {expected}",
                level - settled
            );
        }
    }

    #[test]
    fn what_cannot_be_done_is_a_fault_in_words() {
        let mut receiver = SimulatedReceiver::new(Scene::contact(5.0, 60.0, "carbon steel", 10.0), 1);
        for wrong in [
            shot(f32::NAN, 0.0),
            shot(1000.0, 0.0),
            shot(0.0, -1.0),
            shot(0.0, f32::INFINITY),
        ] {
            assert_eq!(receiver.fire(&wrong, &mut [0; 64]), Err(SimulatorFault::CannotSet));
        }
        let fault = receiver.fire(&shot(0.0, 0.0), &mut [0; 3]).unwrap_err();
        assert!(fault.to_string().contains("record.samples"), "{fault}");
    }
}
