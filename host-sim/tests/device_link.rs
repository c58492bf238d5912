//! Gauge and simulator at the two ends of one line, inside this program: the same code as on the board.
//! What goes wrong is said in words and counted, gives no reading, ends, and leaves nothing behind.

#[path = "support/rig.rs"]
mod rig;

use rig::*;

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
