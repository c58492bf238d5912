//! What goes wrong between gauge and front end, on purpose, in the emulator: each fault is told in words,
//! gives no reading, and leaves nothing behind.

use super::emulated::EmulatedGauge;
use super::{PATIENCE, words};
use crate::Checks;
use halfpulse_app::link::{FrontEndFault, GainChoice, LinkReport, Message, Outcome, Status, Take};
use halfpulse_app::report::Fault;
use halfpulse_mps2::plan::FIRST_SETUP;
use halfpulse_sim::Scene;
use halfpulse_sim::device::SimulatedReceiver;
use halfpulse_sim::faults::{Behaviour, Damage};
use halfpulse_sim::link::ConversationError;
use std::time::{Duration, Instant};

/// Longer than the gauge waits for two shots.
const LOST: Duration = Duration::from_secs(6);
/// Readings through a line that damages one byte in a hundred.
const BAD_ROUNDS: u32 = 30;

const WALL: f32 = 0.01;

pub fn run(checks: &mut Checks, gauge: &mut EmulatedGauge) {
    let mut scene = Scene::contact(5.0, 60.0, "carbon steel", 10.0);
    scene.noise.snr_db = Some(40.0);
    *gauge.front_end() = SimulatedReceiver::new(scene, 1);
    let ready = gauge.conversation.set_up(&FIRST_SETUP, PATIENCE);
    checks.check(
        "faults_begin_well",
        ready.map_err(|e| e.to_string()).and_then(|()| is_well(gauge)),
    );

    for (name, behaviour, fault) in [
        ("dead_front_end", Behaviour::Dead, Fault::NoAnswer),
        ("late_front_end", Behaviour::Late, Fault::NoAnswer),
        ("samples_that_never_come", Behaviour::NoSamples, Fault::SamplesMissing),
    ] {
        checks.check(name, misbehaves(gauge, behaviour, fault));
    }
    checks.check("front_end_that_refuses", refuses(gauge));
    for (name, damage) in [
        ("broken_check_sum", Damage::BrokenSum),
        ("truncated_frame", Damage::Truncated(7)),
        ("oversized_frame", Damage::Oversized(400)),
        ("reordered_frames", Damage::Reordered),
    ] {
        checks.check(name, damaged(gauge, damage));
    }
    checks.check("one_byte_in_a_hundred", bad_line(gauge));
}

fn take(gauge: &mut EmulatedGauge, patience: Duration) -> Result<LinkReport, ConversationError> {
    static NUMBER: std::sync::atomic::AtomicU32 = std::sync::atomic::AtomicU32::new(10_000);
    let take = Take {
        number: NUMBER.fetch_add(1, std::sync::atomic::Ordering::Relaxed),
        shots: 1,
        samples: 2048,
        gain: GainChoice::Fixed(-6.0),
    };
    gauge.conversation.take(&take, patience)
}

/// The same through a line on which the request itself may be lost: then no shot is asked for, and nothing
/// need be waited for. (Only what this end writes is damaged.)
fn take_or_lose(gauge: &mut EmulatedGauge) -> Result<LinkReport, ConversationError> {
    gauge.conversation.take_shots();
    let report = take(gauge, Duration::from_millis(700));
    if report != Err(ConversationError::Silent) || gauge.conversation.take_shots().is_empty() {
        return report;
    }
    gauge.conversation.await_answer(LOST, |message| match message {
        Message::Report(report) => Some(report),
        _ => None,
    })
}

fn is_well(gauge: &mut EmulatedGauge) -> Result<String, String> {
    match take(gauge, PATIENCE).map_err(|error| error.to_string())?.outcome {
        Outcome::Reading(reading) if (reading.thickness - WALL).abs() < 2e-5 => Ok("it reads".to_owned()),
        other => Err(format!("no right reading although nothing is wrong: {other:?}")),
    }
}

fn misbehaves(gauge: &mut EmulatedGauge, behaviour: Behaviour, expected: Fault) -> Result<String, String> {
    let before = status(gauge)?;
    gauge.conversation.behaviour = behaviour;
    let start = Instant::now();
    let outcome = take(gauge, PATIENCE).map(|report| report.outcome);
    let took = start.elapsed();
    gauge.conversation.behaviour = Behaviour::Sound;
    if outcome != Ok(Outcome::Fault(expected.code())) {
        return Err(format!("{outcome:?}"));
    }
    is_well(gauge)?;
    let failed = status(gauge)?.failed_shots - before.failed_shots;
    Ok(format!(
        "\"{expected}\" after {:.1} s, {failed} failed shots counted; then it reads again",
        took.as_secs_f32()
    ))
}

/// A pulser that cannot set what is asked for.
fn refuses(gauge: &mut EmulatedGauge) -> Result<String, String> {
    let asked = Take {
        number: 9_999,
        shots: 1,
        samples: 2048,
        gain: GainChoice::Fixed(500.0),
    };
    let report = gauge
        .conversation
        .take(&asked, PATIENCE)
        .map_err(|error| error.to_string())?;
    let expected = Fault::NotFired(FrontEndFault::CannotSet);
    if report.outcome != Outcome::Fault(expected.code()) {
        return Err(format!("{:?}", report.outcome));
    }
    is_well(gauge)?;
    Ok(format!("\"{}\"; then it reads again", words(FrontEndFault::CannotSet)))
}

fn status(gauge: &mut EmulatedGauge) -> Result<Status, String> {
    gauge.conversation.query(PATIENCE).map_err(|error| error.to_string())
}

fn damaged(gauge: &mut EmulatedGauge, damage: Damage) -> Result<String, String> {
    let before = status(gauge)?;
    gauge.conversation.line().damage = damage;
    let outcome = take(gauge, Duration::from_millis(500)).map(|report| report.outcome);
    gauge.conversation.line().damage = Damage::None;
    if let Ok(Outcome::Reading(reading)) = outcome {
        return Err(format!("a reading came through: {reading:?}"));
    }
    // What was held back or cut short ends with the next frame, whose request may be lost with it.
    let _ = take_or_lose(gauge);
    is_well(gauge)?;
    let after = status(gauge)?;
    let counted = |count: fn(&Status) -> u32| count(&after) - count(&before);
    let (broken, oversized) = (counted(|s| s.broken), counted(|s| s.oversized));
    let unexpected = counted(|s| s.unexpected);
    let right = match damage {
        Damage::Oversized(_) => oversized > 0,
        Damage::Reordered => true,
        _ => broken > 0,
    };
    let text = format!(
        "no reading; {broken} broken, {oversized} oversized, {unexpected} unexpected counted; then it reads again"
    );
    if right { Ok(text) } else { Err(text) }
}

fn bad_line(gauge: &mut EmulatedGauge) -> Result<String, String> {
    let before = status(gauge)?;
    gauge.conversation.line().damage = Damage::Bytes(0.01);
    let (mut right, mut faults, mut lost) = (0, 0, 0);
    let mut wrong = None;
    for _ in 0..BAD_ROUNDS {
        match take_or_lose(gauge).map(|report| report.outcome) {
            Ok(Outcome::Reading(reading)) if (reading.thickness - WALL).abs() < 2e-5 => right += 1,
            Ok(Outcome::Fault(_)) => faults += 1,
            Err(ConversationError::Silent) => lost += 1,
            other => wrong = Some(format!("{other:?}")),
        }
        if wrong.is_some() {
            break;
        }
    }
    gauge.conversation.line().damage = Damage::None;
    if let Some(wrong) = wrong {
        return Err(wrong);
    }
    is_well(gauge)?;
    let broken = status(gauge)?.broken - before.broken;
    Ok(format!(
        "{BAD_ROUNDS} requests: {right} right readings, {faults} faults, {lost} requests lost; {broken} broken frames counted; then it reads again"
    ))
}
