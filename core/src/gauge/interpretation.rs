//! What a set-up means for one record: where the wall begins, what its train may look like, which times
//! the thickness is made from, which echo shows the pulse best.

use crate::echo::correlation::Sign;
use crate::echo::scan::{Candidate, Detector, Scan};
use crate::echo::train::{Rules, Train};
use crate::echo::{Echo, EchoList, EchoRole, Signs, Surroundings};
use crate::math;
use crate::outcome::NoReading;
use crate::path::PathLaw;
use crate::record::{Record, SampleRange};
use crate::setup::{EchoSign, GaugeSetup, ProbeKind, Span};
use crate::units::Seconds;
use crate::wall::thickness::{self, Timed, TrainTimes};
use crate::wall::uncertainty;

/// An interface echo is the first one that reaches this share of the strongest.
const INTERFACE_SHARE: f32 = 0.35;

/// The signs that a set-up lets echoes be searched with. The interface echo is told by its height alone, as
/// [`start_of_wall`] does it.
#[must_use]
pub fn signs(setup: &GaugeSetup, candidates: &[Candidate]) -> Signs {
    let sign = |known: EchoSign| match known {
        EchoSign::Unknown => Sign::Either,
        EchoSign::AsPulse => Sign::Positive,
        EchoSign::Inverted => Sign::Negative,
    };
    let strongest = candidates.iter().map(|candidate| candidate.height).max().unwrap_or(0);
    let interface = candidates
        .iter()
        .position(|candidate| f32::from(candidate.height) >= INTERFACE_SHARE * f32::from(strongest));
    Signs {
        interface: match setup.probe.kind {
            ProbeKind::DelayLine => interface.map(|place| (place, sign(setup.probe.interface_sign))),
            ProbeKind::Contact | ProbeKind::DualElement => None,
        },
        others: sign(setup.probe.back_wall_sign),
    }
}

/// Where the wall begins, in samples from the record's first; marks the interface echo and the
/// coating's far side on the way.
///
/// # Errors
/// [`NoReading::NoInterfaceEcho`] where the span needs one.
pub fn start_of_wall(setup: &GaugeSetup, record: &Record<'_>, echoes: &mut EchoList) -> Result<f32, NoReading> {
    let clock = record.clock();
    if setup.probe.kind != ProbeKind::DelayLine {
        return if thickness::wall_span(setup) == Span::InterfaceToBackWall {
            Err(NoReading::NoInterfaceEcho)
        } else {
            Ok(clock.samples_at(setup.zero.offset))
        };
    }
    let strongest = echoes.iter().fold(0.0, |m, echo| math::larger(m, echo.amplitude));
    let main = echoes
        .iter()
        .position(|echo| echo.amplitude >= INTERFACE_SHARE * strongest);
    let Some(main) = main else {
        return Err(NoReading::NoInterfaceEcho);
    };
    let coated = setup.coating.is_some();
    let mut place = 0.0;
    for (number, echo) in echoes.iter_mut().enumerate().take(main + 1) {
        if number == main {
            // Behind a coating the strong echo is the coating's far side, if its front shows too.
            echo.role = if coated && main > 0 {
                EchoRole::Coating
            } else {
                EchoRole::Interface
            };
            place = echo.position.as_samples();
        } else if coated && number + 1 == main {
            echo.role = EchoRole::Interface;
        }
    }
    let offset = if thickness::wall_span(setup) == Span::InterfaceToBackWall {
        setup.zero.offset
    } else {
        Seconds::ZERO
    };
    Ok(place + offset.get() * clock.rate.get())
}

/// The time through a coating and back in samples, if the set-up names one and the echoes show it: between the echoes of its two
/// faces behind a delay line, elsewhere what lies between the zero and where the train begins.
#[must_use]
pub fn coating_trip(setup: &GaugeSetup, train: &Train, echoes: &[Echo]) -> Option<f32> {
    setup.coating?;
    if setup.probe.kind != ProbeKind::DelayLine {
        return Some(train.start_difference);
    }
    let place = |role: EchoRole| echoes.iter().find(|echo| echo.role == role).map(|echo| echo.position);
    Some(place(EchoRole::Coating)?.samples_after(place(EchoRole::Interface)?))
}

/// What the train may look like. The law counts in seconds.
#[must_use]
pub fn rules<'a>(
    setup: &GaugeSetup,
    law: &PathLaw<'a>,
    surroundings: &Surroundings<'_>,
    range: SampleRange,
    scan: &Scan,
    detector: &Detector,
    start: f32,
) -> Rules<'a> {
    let facts = &surroundings.pulse.facts;
    let format = surroundings.record.format();
    let shortest = thickness::SMALLEST_SPACING * facts.envelope_duration;
    // The pulse has to lie inside the window's record as a whole to be measured.
    let edge = range.start as f32 + if range.start == 0 { facts.origin } else { 0.0 };
    let mut visible_to = range.end as f32;
    let (visible_from, start_tolerance) = if setup.probe.kind == ProbeKind::DelayLine {
        // From the delay line's own second echo on, at twice the time of its first, two trains would mix.
        // Its zero is not known better than to a few per cent: stay clear of it.
        let trigger = surroundings.record.clock().samples_at(Seconds::ZERO);
        let second = trigger + 1.97 * (start - trigger);
        visible_to = math::smaller(visible_to, second - facts.envelope_duration);
        (
            math::larger(edge, start + shortest),
            0.6 * surroundings.samples_per_cycle,
        )
    } else {
        let zero = 3.0 * setup.zero.standard_uncertainty.get() * setup.sample_rate.get();
        // Through a coating of unknown thickness the train may begin anywhere.
        let tolerance = if setup.coating.is_some() { f32::INFINITY } else { zero };
        (edge, 0.6 * surroundings.samples_per_cycle + tolerance)
    };
    Rules {
        start,
        start_tolerance,
        shortest,
        visible_from,
        visible_to,
        threshold: scan.threshold / detector.counts_per_code(format) / surroundings.amplitude_noise(),
        law: law.scaled(surroundings.record.clock().rate.get()),
    }
}

/// The times that thickness and budget are made from, of straight ways.
#[must_use]
pub fn times(setup: &GaugeSetup, law: &PathLaw<'_>, record: &Record<'_>, train: &Train, echoes: &[Echo]) -> TrainTimes {
    let clock = record.clock();
    let seconds = |samples: f32| clock.rate.period() * samples;
    let role = |role: EchoRole| echoes.iter().find(|echo| echo.role == role);
    // A time far from the trigger has fewer digits behind the point: half a step of an `f32` belongs to
    // it (1 ps at 20 us, 0.1 ns at 1 ms).
    let timed = |echo: &Echo| {
        let digits = echo.arrival.abs() * f32::EPSILON * 0.5;
        let (a, b) = (echo.standard_uncertainty.get(), digits.get());
        Timed::new(echo.arrival, Seconds::new(math::sqrt(a * a + b * b)))
    };
    let period = train.period_uncertainty.map(|u| {
        // Arrivals that scatter more than noise explains widen the period's uncertainty (Birge's
        // ratio), once they do so beyond chance; but not by what the budget counts as phase between echoes.
        let limit = 1.0 + 3.0 * math::sqrt(2.0 / f32::from(train.freedom).max(1.0));
        let mut variance = u * u;
        if train.unevenness > limit {
            let phase = uncertainty::phase_of_echo(setup).get() * clock.rate.get() * train.contrast;
            variance = math::larger(variance, variance * train.unevenness - phase * phase);
        }
        Timed::new(seconds(train.period), seconds(math::sqrt(variance)))
    });
    let interface = role(EchoRole::Interface).map(timed);
    let start = match (interface, thickness::wall_span(setup)) {
        (Some(interface), Span::InterfaceToBackWall) => interface.time + setup.zero.offset,
        (Some(interface), _) => interface.time,
        (None, _) => setup.zero.offset,
    };
    let seen = role(EchoRole::BackWall(1)).map(|echo| TrainTimes::single(timed(echo)).straightened(law, start));
    let mut times = seen.unwrap_or_else(|| {
        // The first back wall lies in the dead zone: it follows from the others.
        let steps = f32::from(train.first_multiple) - 1.0;
        let earliest =
            TrainTimes::single(Timed::new(clock.time_of(train.first), Seconds::ZERO)).straightened(law, start);
        let number = f32::from(train.first_multiple);
        let u = match (period, role(EchoRole::BackWall(train.first_multiple))) {
            (Some(period), _) => period.standard_uncertainty * number,
            // A lone echo: its time after the start is divided, and its error with it.
            (None, Some(lone)) => lone.standard_uncertainty / number,
            (None, None) => seconds(train.period),
        };
        TrainTimes::single(Timed::new(
            earliest.first_back_wall.time - seconds(train.period) * steps,
            u,
        ))
    });
    if let Some(period) = period {
        times = times
            .with_period(period, train.correlation)
            .with_contrast(train.contrast);
    }
    if let Some(interface) = interface {
        times = times.with_interface(interface);
    }
    let shots = f32::from(record.format().shots.max(1));
    times.with_jitter(setup.trigger_jitter * (1.0 / math::sqrt(shots)))
}

/// The strongest echo that is not clipped, a back wall if there is one, and its distance in samples
/// to the nearest other.
#[must_use]
pub fn clearest(echoes: &[Echo]) -> Option<(Echo, f32)> {
    let is_wall = |echo: &Echo| matches!(echo.role, EchoRole::BackWall(_));
    let mut best: Option<Echo> = None;
    for echo in echoes.iter().filter(|echo| !echo.clipped) {
        let better = best.is_none_or(|b| (is_wall(echo), echo.amplitude) > (is_wall(&b), b.amplitude));
        if better {
            best = Some(*echo);
        }
    }
    let best = best?;
    let mut room = f32::INFINITY;
    for echo in echoes {
        let distance = echo.position.samples_after(best.position).abs();
        if distance > 0.0 && distance < room {
            room = distance;
        }
    }
    Some((best, room))
}
