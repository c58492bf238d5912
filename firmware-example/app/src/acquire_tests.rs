use super::*;
use halfpulse::{AdcFormat, Hertz, SampleClock};
use std::vec::Vec;

/// A receiver in which the echo's height follows the gain: 1 code at 0 dB, clipped at 12 bits.
#[derive(Default)]
struct Echo {
    /// Gains that were asked for.
    asked: Vec<f32>,
    /// Which calls fail, and how.
    failing: Vec<(usize, Fault)>,
    /// The gain in force drifts after so many shots.
    drifts_after: Option<usize>,
    short: bool,
    height: f32,
}

impl PulseReceiver for Echo {
    type Error = Fault;
    fn fire(&mut self, shot: &Shot, codes: &mut [i16]) -> Result<Fired, Fault> {
        let call = self.asked.len();
        self.asked.push(shot.gain.get());
        codes.fill(i16::MAX);
        if let Some((_, fault)) = self.failing.iter().find(|(at, _)| *at == call) {
            return Err(*fault);
        }
        let height = self.height * 10f32.powf(shot.gain.get() / 20.0);
        for (i, code) in codes.iter_mut().enumerate() {
            *code = if i == 60 {
                height.clamp(-2048.0, 2047.0) as i16
            } else {
                i as i16 % 7 - 3
            };
        }
        let drift = self.drifts_after.is_some_and(|after| call >= after);
        Ok(Fired {
            gain: if drift {
                Decibels::new(shot.gain.get() + 0.5)
            } else {
                shot.gain
            },
            samples: codes.len() - usize::from(self.short),
            format: AdcFormat::signed(12),
            clock: SampleClock::new(Hertz::from_mhz(50.0)),
        })
    }
}

/// A clock that only counts.
#[derive(Default)]
struct Pauses(u64);

impl DelayNs for Pauses {
    fn delay_ns(&mut self, ns: u32) {
        self.0 += u64::from(ns);
    }
}

const STEPS: [Decibels; 31] = {
    let mut steps = [Decibels::new(0.0); 31];
    let mut at = 0;
    while at < 31 {
        steps[at] = Decibels::new(2.0 * at as f32);
        at += 1;
    }
    steps
};

fn front_end(receiver: Echo) -> FrontEnd<'static, Echo, Pauses> {
    FrontEnd {
        receiver,
        delay: Pauses::default(),
        plan: FrontEndPlan {
            gain_steps: &STEPS,
            first_gain: Decibels::new(30.0),
            pause_us: 500,
            retries: 1,
        },
        counts: ShotCounts::default(),
    }
}

fn request(shots: u16, gain: GainChoice) -> Request {
    Request {
        shots,
        samples: 128,
        gain,
        window: Window {
            from: Seconds::from_us(0.5),
            to: Seconds::from_us(2.0),
        },
    }
}

#[test]
fn gain_comes_to_rest_where_the_echo_uses_the_converter() {
    for height in [0.8, 5.0, 40.0, 700.0, 1e5] {
        let mut front_end = front_end(Echo {
            height,
            ..Echo::default()
        });
        let (mut codes, mut sums) = ([0; 128], [0; 128]);
        let acquired = front_end
            .acquire(&request(1, GainChoice::Automatic), &mut codes, &mut sums)
            .unwrap();
        let peak = i32::from(*acquired.record.codes().iter().max().unwrap());
        assert!(front_end.receiver.asked.len() <= usize::from(MOST_GAIN_SHOTS));
        // The steps end at 0 and 60 dB: beyond them nothing can be done.
        if (2.0..2047.0).contains(&height) {
            assert!(
                (1229..=1639).contains(&peak),
                "{height}: {peak} at {} dB",
                acquired.gain.get()
            );
        }
        assert_eq!(front_end.delay.0, 500_000 * u64::from(front_end.counts.fired));
    }
}

#[test]
fn average_holds_all_shots_at_one_gain() {
    let mut front_end = front_end(Echo {
        height: 10.0,
        ..Echo::default()
    });
    let (mut codes, mut sums) = ([0; 128], [0; 128]);
    let acquired = front_end
        .acquire(&request(16, GainChoice::Fixed(20.0)), &mut codes, &mut sums)
        .unwrap();
    assert_eq!(acquired.record.format().shots, 16);
    // Sums of 12 bits fit 16 exactly.
    assert_eq!(acquired.record.codes()[60], 16 * 100);
    assert_eq!(front_end.receiver.asked, [20.0; 16]);
}

#[test]
fn one_failed_shot_is_repeated_and_two_are_a_fault() {
    let (mut codes, mut sums) = ([0; 128], [0; 128]);
    let failing = |calls: &[usize]| Echo {
        height: 10.0,
        failing: calls.iter().map(|&call| (call, Fault::NoAnswer)).collect(),
        ..Echo::default()
    };
    let asked = request(4, GainChoice::Fixed(20.0));
    let mut once = front_end(failing(&[2]));
    let acquired = once.acquire(&asked, &mut codes, &mut sums).unwrap();
    // What the failed shot left behind is in no sum.
    assert_eq!(acquired.record.codes()[60], 400);
    assert_eq!((once.counts.fired, once.counts.failed), (4, 1));
    let mut twice = front_end(failing(&[2, 3]));
    assert_eq!(
        twice.acquire(&asked, &mut codes, &mut sums).unwrap_err(),
        Fault::NoAnswer
    );
    assert!(
        twice.acquire(&asked, &mut codes, &mut sums).is_ok(),
        "the fault has gone"
    );
}

#[test]
fn contract_breaches_and_senseless_requests_are_faults() {
    let (mut codes, mut sums) = ([0; 128], [0; 128]);
    let mut drifting = front_end(Echo {
        height: 10.0,
        drifts_after: Some(2),
        ..Echo::default()
    });
    let fixed = GainChoice::Fixed(20.0);
    let drifted = drifting.acquire(&request(4, fixed), &mut codes, &mut sums).unwrap_err();
    assert_eq!(drifted, Fault::ShotsDiffer);
    let mut short = front_end(Echo {
        short: true,
        ..Echo::default()
    });
    let wrong = short.acquire(&request(1, fixed), &mut codes, &mut sums).unwrap_err();
    assert_eq!(wrong, Fault::WrongCount);
    let mut sound = front_end(Echo::default());
    for (shots, samples, gain) in [
        (0, 128, fixed),
        (257, 128, fixed),
        (1, 0, fixed),
        (1, 129, fixed),
        (1, 128, GainChoice::Fixed(f32::NAN)),
    ] {
        let asked = Request {
            samples,
            ..request(shots, gain)
        };
        let refused = sound.acquire(&asked, &mut codes, &mut sums).unwrap_err();
        assert_eq!(refused, Fault::Request, "{asked:?}");
    }
    let averaged = sound
        .acquire(&request(2, fixed), &mut codes, &mut sums[..100])
        .unwrap_err();
    assert_eq!(averaged, Fault::Request, "sums too short");
    assert!(sound.receiver.asked.is_empty());
}
