//! What a fit of overlapping echoes says about the part: wall, budget and doubts of a thin wall behind a delay line.
//!
//! **In**: a [`ThinWall`]. The interface echo and the train are fitted at once, so that no arrival stands alone: the span is
//! the period, into which an error of the distance from interface to first back wall goes with a share.

use crate::echo::separation::thin_wall::{SHORTEST_PERIOD, ThinWall};
use crate::echo::{Echo, Surroundings};
use crate::math::{self, RECTANGULAR};
use crate::outcome::{Doubt, Doubts};
use crate::path::PathLaw;
use crate::setup::{GaugeSetup, ProbeKind, Span};
use crate::units::{Metres, Seconds};
use crate::wall::judgement::{WRONG_CYCLE_LIMIT, doubts_of_setup};
use crate::wall::thickness::{Timed, TrainTimes, wall_span};
use crate::wall::uncertainty::{self, Budget, Source};

/// A wall from overlapping echoes, before its doubts.
#[derive(Clone, Debug, PartialEq)]
pub struct Overlapping {
    /// The wall.
    pub wall: Metres,
    /// Where its uncertainty comes from.
    pub budget: Budget,
}

/// May walls of this set-up be read from echoes that overlap with the interface echo? Behind a delay line, on a bare part,
/// by a span that does not count from the transmission pulse.
#[must_use]
pub fn applies(setup: &GaugeSetup) -> bool {
    setup.probe.kind == ProbeKind::DelayLine
        && setup.coating.is_none()
        && wall_span(setup) != Span::TransmissionPulseToBackWall
}

/// How much later than one period after the interface the first back wall comes: the zero offset where the span counts
/// from the interface, else nothing. The couplant film moves both by the same (see [`crate::wall::coupling::half_width`]).
#[must_use]
pub fn offset(setup: &GaugeSetup) -> Seconds {
    match wall_span(setup) {
        Span::InterfaceToBackWall => setup.zero.offset,
        _ => Seconds::ZERO,
    }
}

/// The thinnest wall that is read from overlapping echoes with a learned pulse of this -20 dB envelope duration:
/// [`SHORTEST_PERIOD`] of it.
#[must_use]
pub fn thinnest(setup: &GaugeSetup, envelope_duration: Seconds) -> Metres {
    setup.velocity() * (envelope_duration * SHORTEST_PERIOD) * 0.5
}

/// The wall and its budget. `law` counts in seconds, `sample` is the time from one sample to the next.
///
/// | term | value |
/// |---|---|
/// | timing | c / 2 times what noise leaves of the period: the five fitted numbers' Fisher matrix |
/// | overlap | c / 2 times what the allowance for the pulse's shape adds to that, and what the beam does to later echoes beyond the first |
/// | zero, calibration | as for any wall, times the share of the interface's distance in the period |
/// | others | as for any wall ([`uncertainty::budget`]) |
#[must_use]
#[inline(never)]
pub fn read(setup: &GaugeSetup, law: &PathLaw<'_>, sample: Seconds, found: &ThinWall) -> Overlapping {
    let period = sample * found.period;
    let deviation = |straight: f32| law.deviation(straight);
    let straight = Seconds::new(law.straighten(period.get()));
    let wall = setup.velocity() * straight * 0.5;
    // The period is a mean over the first few echoes; the beam was taken off as from the first alone.
    let beam = (deviation(3.0 * straight.get()) / 3.0 - deviation(straight.get())).abs() * RECTANGULAR;
    let (noise, whole) = (found.period_noise, found.period_uncertainty);
    let by_shape = math::sqrt(math::larger(whole * whole - noise * noise, 0.0)) * sample.get();
    let overlap = Seconds::new(math::sqrt(by_shape * by_shape + beam * beam));
    let mut shared = *setup;
    shared.zero.standard_uncertainty = setup.zero.standard_uncertainty * found.offset_share.abs();
    if found.offset_share < 0.0 {
        shared.zero.velocity_correlation = -setup.zero.velocity_correlation;
    }
    // As the span wants them: noise of the period alone.
    let times = TrainTimes::single(Timed::new(straight, sample * noise))
        .with_period(Timed::new(straight, sample * noise), 0.0)
        .with_interface(Timed::default());
    let mut budget = uncertainty::budget(&shared, &times, wall);
    budget.add(Source::Overlap, setup.velocity() * overlap * 0.5);
    Overlapping { wall, budget }
}

/// So many other periods are held against the best one, and counted four times as wrong cycles are.
const RIVALS: f32 = 40.0;

/// Upper bound of the probability that another period, or no wall at all, is the truth: with equal odds beforehand, a
/// rival that explains the record by a factor Λ less is true with probability 1 / Λ, and there are up to ten of them. The
/// likelihoods carry the allowance for the pulse's shape.
#[must_use]
pub fn wrong_period_probability(found: &ThinWall) -> f32 {
    math::smaller(RIVALS * (math::exp(-found.log_lead) + math::exp(-found.log_odds)), 1.0)
}

/// Standard deviations above which the second back wall must stand for the echoes to be a train: two pulses alone may be
/// anything, a coating's two sides for one.
const SECOND: f32 = 6.0;
/// So many times as high as the train has them later echoes may be where they overlap.
const LATER: f32 = 4.0;
/// Echoes later than this share of the interface echo's time may be the delay line's second.
const OWN_SECOND: f32 = 1.9;

/// Did echoes come back later than the wall's, and higher than its train has them by then? Behind a coating that passes for a
/// thin wall, the part's own.
fn later_echoes(surroundings: &Surroundings<'_>, echoes: &[Echo], found: &ThinWall) -> bool {
    let clock = surroundings.record.clock();
    let end = clock.time_of(found.interface) * OWN_SECOND;
    echoes.iter().any(|echo| {
        let place = echo.position.as_samples();
        let behind = echo.position.samples_after(found.interface) / found.period;
        let height = found.wall_amplitude.abs() * math::exp((behind - 1.0) * math::ln(found.decay));
        behind > 2.0
            && echo.arrival < end
            && echo.amplitude > LATER * height
            && surroundings.stands_out(echo.amplitude, place)
    })
}

/// Every doubt that applies; `mismatch` is the share of its energy that the learned pulse leaves of an isolated echo, and
/// `wrong` [`wrong_period_probability`].
#[must_use]
#[inline(never)]
pub fn doubts(
    setup: &GaugeSetup,
    surroundings: &Surroundings<'_>,
    echoes: &[Echo],
    found: &ThinWall,
    read: &Overlapping,
    mismatch: f32,
    wrong: f32,
) -> Doubts {
    let expanded = read.budget.combined() * setup.coverage_factor;
    let mut doubts = doubts_of_setup(setup, read.wall, expanded, &read.budget);
    let facts = &surroundings.pulse.facts;
    let duration = facts.envelope_duration;
    // The noise carries the allowance for the pulse's shape here too.
    let noise = surroundings.amplitude_noise() * (found.period_uncertainty / found.period_noise);
    let second = found.wall_amplitude.abs() * found.decay;
    doubts.raise_if(!(second > SECOND * noise), Doubt::FewEchoes);
    doubts.raise_if(later_echoes(surroundings, echoes, found), Doubt::UnexplainedEchoes);
    doubts.raise_if(found.period < SHORTEST_PERIOD * duration, Doubt::NearMinimum);
    doubts.raise_if(wrong > WRONG_CYCLE_LIMIT, Doubt::LowSignal);
    // More is left over than a wrong shape explains: something else is there.
    doubts.raise_if(found.unexplained > mismatch, Doubt::OverlappingEcho);
    doubts
}
