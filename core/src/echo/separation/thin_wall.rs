//! A wall so thin that its echoes run into the interface echo and into each other: interface and train fitted at once.
//!
//! Behind a delay line the record is B s(t - t0) + A Σ r^(n-1) s(t - t0 - n T), n = 1, 2 ..: interface echo, first back
//! wall, period and decay. Five numbers explain what may be a dozen overlapping pulses, so a period of 0.3 pulse
//! durations is read where two echoes alone need twice as much, with the uncertainty of the five numbers' Fisher
//! matrix. The search goes over period, decay and start on a grid; the best are polished by Gauss-Newton steps
//! with Levenberg's damping in all five numbers (`overlapping.rs`), in tables of correlations (`dense.rs`).
//!
//! Needs a learned pulse: what a wrong shape leaves over looks like a wall. `val_thin_wall` prints what it reaches.

use super::Unresolved;
use super::dense::Dense;
use super::lags::Lags;
use super::model::LEFT_OVER;
use super::overlapping::{Fit, Overlap};
use crate::echo::Surroundings;
use crate::echo::interpolate::{Between, REACH};
use crate::math;
use crate::order;
use crate::units::SamplePosition;
use heapless::Vec;

/// Shortest and longest period that is looked for, in pulse durations.
const PERIODS: (f32, f32) = (0.2, 1.4);
/// Shortest period that is read, in pulse durations: at 20 dB, 0.47 mm of steel at 5 MHz and 60 %.
pub const SHORTEST_PERIOD: f32 = 0.3;
/// Decays of the grid.
const DECAYS: [f32; 4] = [0.25, 0.5, 0.75, 0.9];
/// How far the start is looked for to either side of the highest correlation, in cycles.
const START: f32 = 0.5;
/// Starts of the grid, a tenth of a cycle apart.
const START_STEPS: u8 = 10;
/// Starts of the polish.
const STARTS: usize = 4;
/// Least 2 ln Λ of a wall over none, and of the best period over any other.
const THRESHOLD: f32 = 20.0;
const LEAD: f32 = 4.0;
/// Pulse durations behind the interface that are looked at, and up to which a pulse looks like itself.
const WINDOW: f32 = 8.0;
const ALIKE: f32 = 1.6;

/// What is known before the record is looked at.
#[derive(Clone, Copy, Debug)]
pub struct Prior {
    /// Sample near which the origin of the interface echo lies.
    pub around: f32,
    /// How much later than one period after the interface the first back wall comes, in samples: the zero of the span from
    /// the interface, normally 0.
    pub offset: f32,
    /// Share of an echo's energy that the pulse leaves unexplained ([`super::PulseTrust`]).
    pub mismatch: f32,
}

/// A wall read from overlapping echoes.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct ThinWall {
    /// Origin of the interface echo.
    pub interface: SamplePosition,
    /// Period of the wall's echoes, in samples.
    pub period: f32,
    /// Standard uncertainty of the period, in samples, from noise alone.
    pub period_noise: f32,
    /// The same with the allowance for the pulse's shape.
    pub period_uncertainty: f32,
    /// Share of an error of [`Prior::offset`] that the period takes up.
    pub offset_share: f32,
    /// Fitted envelope peak of the interface echo, in codes, with its sign.
    pub interface_amplitude: f32,
    /// Likewise of the first back wall.
    pub wall_amplitude: f32,
    /// Amplitude of each multiple over the one before.
    pub decay: f32,
    /// Natural logarithm of the likelihood ratio of this wall over none.
    pub log_odds: f32,
    /// The same of this wall over the best one of another period.
    pub log_lead: f32,
    /// Energy that the fit leaves unexplained, beyond what noise explains with three standard deviations to spare, over what
    /// it explains.
    pub unexplained: f32,
}

/// Looks for a wall behind an interface echo. `memory` and `more` are scratch: 512 and 416 entries serve any pulse of up
/// to 60 % bandwidth or more, narrower ones see fewer multiples.
///
/// # Errors
/// Why no wall is told: [`Unresolved::OnePulse`] (no better than an interface alone), [`Unresolved::Ambiguous`] (another
/// period explains it about as well), [`Unresolved::TooClose`] (the best period is the shortest that is looked for),
/// [`Unresolved::Clipped`], [`Unresolved::NoRoom`].
#[inline(never)]
pub fn thin_wall(
    surroundings: &Surroundings<'_>,
    prior: &Prior,
    memory: &mut [f32],
    more: &mut [f32],
) -> Result<ThinWall, Unresolved> {
    let Surroundings { record, pulse, .. } = surroundings;
    let (facts, around) = (&pulse.facts, prior.around);
    let end = record.codes().len() as f32 - (f32::from(facts.length) - facts.origin);
    let from = around - START * surroundings.samples_per_cycle - facts.envelope_duration;
    let to = math::smaller(around + WINDOW * facts.envelope_duration, end);
    let from = math::larger(from, facts.origin);
    if !(to - around >= 2.0 * facts.envelope_duration) || !(around > from) {
        return Err(Unresolved::NoRoom);
    }
    let step = super::lags::step(surroundings.samples_per_cycle) as f32;
    let longest = usize::try_from(math::saturating_i32(ALIKE * facts.envelope_duration / step)).unwrap_or(0);
    let (likeness, correlation) = more
        .split_at_mut_checked(longest + 2 * REACH + 1)
        .ok_or(Unresolved::NoRoom)?;
    let lags = Lags::fill(surroundings, from, to, longest, correlation, likeness).ok_or(Unresolved::NoRoom)?;
    let tables = Dense::fill(&lags, longest, memory).ok_or(Unresolved::NoRoom)?;
    // A place of the fine tables in samples of the record.
    let fine = step / tables.divide as f32;
    let begin = lags.start.saturating_add(math::saturating_i32(REACH as f32 * step));
    let first = begin as f32 + facts.origin;
    let duration = facts.envelope_duration / fine;
    let noise = math::larger(surroundings.noise, record.format().rounding_noise(surroundings.noise));
    let overlap = Overlap {
        tables,
        shortest: PERIODS.0 * duration,
        longest: PERIODS.1 * duration,
        offset: prior.offset / fine,
        noise,
    };
    // The interface echo is the strongest; what overlaps with it moves it by less than half a cycle.
    let (one, best, runner) = candidates(&overlap, (around - first) / fine)?;
    let (upper, lower) = (record.format().upper_rail(), record.format().lower_rail());
    let whole = under(
        surroundings,
        begin,
        overlap.tables.last() * fine + f32::from(facts.length),
    );
    if whole.iter().any(|&code| code >= upper || code <= lower) {
        return Err(Unresolved::Clipped);
    }
    // What the first multiple beyond the window has put there is none of the model's faults.
    let next = math::larger(
        overlap.place(&best, overlap.multiples(&best) + 1),
        overlap.tables.last(),
    );
    let placed = Placed {
        fit: &best,
        overlap: &overlap,
        fine,
    };
    let unexplained = placed.unexplained(surroundings, under(surroundings, begin, next * fine), more);
    let variance = noise * noise + math::larger(prior.mismatch, LEFT_OVER * unexplained) * one;
    let gained = (best.explained - one) / variance;
    let lead = (best.explained - runner) / variance;
    if !(gained > THRESHOLD) {
        return Err(Unresolved::OnePulse);
    }
    if !(lead > LEAD) {
        return Err(Unresolved::Ambiguous);
    }
    if !(best.period > 1.01 * overlap.shortest && best.period < 0.99 * overlap.longest) {
        return Err(Unresolved::TooClose);
    }
    let unit = 1.0 / math::sqrt(facts.energy);
    let before = begin.min(0) as f32;
    let deviation = math::sqrt(best.period_variance) * fine;
    Ok(ThinWall {
        interface: SamplePosition::new(begin.max(0).unsigned_abs(), before + best.start * fine + facts.origin),
        period: best.period * fine,
        period_noise: deviation * noise,
        period_uncertainty: deviation * math::sqrt(variance),
        offset_share: best.offset_share,
        interface_amplitude: best.interface * unit,
        wall_amplitude: best.wall * unit,
        decay: best.decay,
        log_odds: 0.5 * gained,
        log_lead: 0.5 * lead,
        unexplained,
    })
}

/// What an interface alone explains, the best fit, and what the best one of another period explains.
#[inline(never)]
fn candidates(overlap: &Overlap<'_>, place: f32) -> Result<(f32, Fit, f32), Unresolved> {
    let one = alone(overlap, place);
    let starts = search(overlap, place);
    let mut best = Fit::default();
    let mut polished: Vec<(f32, f32), STARTS> = Vec::new();
    for start in &starts {
        if let Some(fit) = overlap.polish(*start) {
            if fit.explained > best.explained {
                best = fit;
            }
            let _ = polished.push((fit.period, fit.explained));
        }
    }
    let best = overlap.judged(&best).ok_or(Unresolved::OnePulse)?;
    if !(best.explained > 0.0 && best.period_variance > 0.0) {
        return Err(Unresolved::OnePulse);
    }
    let other = 0.1 * overlap.tables.points_per_cycle;
    let runner = polished
        .iter()
        .filter(|(period, _)| (period - best.period).abs() > other)
        .fold(0.0, |most, (_, explained)| math::larger(most, *explained));
    Ok((one, best, runner))
}

/// What one pulse near the place explains.
fn alone(overlap: &Overlap<'_>, place: f32) -> f32 {
    let reach = START * overlap.tables.points_per_cycle;
    let mut most = 0.0;
    for number in 0..=40 {
        let value = overlap
            .tables
            .around(place + reach * (number as f32 * 0.05 - 1.0))
            .value;
        most = math::larger(most, value * value);
    }
    most
}

/// The best of a grid over period, decay and start, one for each local maximum over the period.
#[inline(never)]
fn search(overlap: &Overlap<'_>, place: f32) -> Vec<Fit, STARTS> {
    let whole = |points: f32| usize::try_from(math::saturating_i32(points)).unwrap_or(0);
    let mut starts: Vec<Fit, STARTS> = Vec::new();
    let (mut before, mut middle) = (Fit::default(), Fit::default());
    for distance in whole(overlap.shortest)..=whole(overlap.longest) + 1 {
        let now = best_of_period(overlap, place, distance.max(1));
        if middle.explained > 0.0 && middle.explained >= before.explained && middle.explained > now.explained {
            let weaker = starts.last().is_some_and(|last| last.explained < middle.explained);
            if starts.is_full() && weaker {
                let _ = starts.pop();
            }
            // `insert` could panic, as far as the optimiser for size can tell.
            if starts.push(middle).is_ok() {
                order::sink_last(&mut starts, |a, b| a.explained > b.explained);
            }
        }
        (before, middle) = (middle, now);
    }
    starts
}

/// The best fit of the grid for a period of so many points.
#[inline(never)]
fn best_of_period(overlap: &Overlap<'_>, place: f32, distance: usize) -> Fit {
    let tables = &overlap.tables;
    let period = distance as f32;
    // Energy of each decay's train, and its likeness to the interface echo.
    let (mut own, mut with, mut power) = ([0.0; DECAYS.len()], [0.0; DECAYS.len()], [1.0; DECAYS.len()]);
    let mut multiple = 0u8;
    loop {
        let spacing = f32::from(multiple) * period;
        if spacing > tables.longest() || multiple == u8::MAX {
            break;
        }
        let alike = tables.alike(spacing).value;
        let shifted = if multiple == 0 || overlap.offset == 0.0 {
            alike
        } else {
            tables.alike(spacing + overlap.offset).value
        };
        for (((own, with), power), decay) in own.iter_mut().zip(&mut with).zip(&mut power).zip(DECAYS) {
            if multiple == 0 {
                *own = 1.0;
            } else {
                *with += *power * shifted;
                *power *= decay;
                *own += 2.0 * *power * alike;
            }
        }
        multiple += 1;
    }
    for (own, decay) in own.iter_mut().zip(DECAYS) {
        *own /= 1.0 - decay * decay;
    }
    let mut best = Fit::default();
    let reach = START * tables.points_per_cycle;
    let offset = math::saturating_i32(math::floor(overlap.offset + 0.5));
    for number in 0..=START_STEPS {
        let share = f32::from(number) * (2.0 / f32::from(START_STEPS)) - 1.0;
        let start = math::floor(place + reach * share + 0.5);
        let Ok(at) = usize::try_from(math::saturating_i32(start)) else {
            continue;
        };
        let Some((&interface, behind)) = tables.points().get(at..).and_then(<[f32]>::split_first) else {
            continue;
        };
        let skip = usize::try_from(distance as i32 - 1 + offset).unwrap_or(0);
        let (mut wall, mut weights) = ([0.0; DECAYS.len()], [1.0; DECAYS.len()]);
        for &value in behind.iter().skip(skip).step_by(distance) {
            for ((wall, weight), decay) in wall.iter_mut().zip(&mut weights).zip(DECAYS) {
                *wall += *weight * value;
                *weight *= decay;
            }
        }
        for (((wall, decay), own), with) in wall.iter().zip(DECAYS).zip(own).zip(with) {
            let determinant = own - with * with;
            if !(determinant > 1e-6) {
                continue;
            }
            let b = (own * interface - with * wall) / determinant;
            let a = (wall - with * interface) / determinant;
            let explained = b * interface + a * wall;
            if explained > best.explained {
                best = Fit {
                    interface: b,
                    wall: a,
                    start,
                    period,
                    decay,
                    explained,
                    ..Fit::default()
                };
            }
        }
    }
    best
}

/// So many samples of the record from `begin` on, as far as it goes.
fn under<'r>(surroundings: &Surroundings<'r>, begin: i32, samples: f32) -> &'r [i16] {
    let codes = surroundings.record.codes();
    let whole = |place: i32| usize::try_from(place).unwrap_or(0).min(codes.len());
    let end = begin.saturating_add(math::saturating_i32(samples));
    codes.get(whole(begin)..whole(end)).unwrap_or(&[])
}

/// A fit in samples.
struct Placed<'a> {
    fit: &'a Fit,
    overlap: &'a Overlap<'a>,
    /// Samples for a point of the tables.
    fine: f32,
}

impl Placed<'_> {
    /// Energy that the fit leaves of the codes, beyond noise, over what it explains. `model` is scratch; with less of it than
    /// the codes ask for, fewer of them are looked at.
    #[inline(never)]
    fn unexplained(&self, surroundings: &Surroundings<'_>, codes: &[i16], model: &mut [f32]) -> f32 {
        let Surroundings { pulse, .. } = surroundings;
        let stride = super::lags::step(surroundings.samples_per_cycle);
        let points = codes.len().div_ceil(stride).min(model.len());
        let model = model.get_mut(..points).unwrap_or(&mut []);
        model.fill(0.0);
        let unit = 1.0 / math::sqrt(pulse.facts.energy);
        let mut weight = self.fit.wall * unit;
        for multiple in 0..=self.overlap.multiples(self.fit) {
            let (place, height) = if multiple == 0 {
                (self.fit.start, self.fit.interface * unit)
            } else {
                (self.overlap.place(self.fit, multiple), weight)
            };
            if multiple > 0 {
                weight *= self.fit.decay;
            }
            // Where the pulse begins, in samples of the window.
            let place = place * self.fine;
            let between = Between::new(-place);
            let first = usize::try_from(math::saturating_i32(place) / stride as i32 - REACH as i32).unwrap_or(0);
            let length = pulse.samples.len() / stride + 2 * REACH + 2;
            for (number, value) in model.iter_mut().enumerate().skip(first).take(length) {
                *value += height * between.of(pulse.samples, (number * stride) as i32);
            }
        }
        let (mut sum, mut squares, mut explained) = (0.0, 0.0, 0.0);
        for (&code, model) in codes.iter().step_by(stride).zip(model.iter()) {
            let left = f32::from(code) - model;
            sum += left;
            squares += left * left;
            explained += model * model;
        }
        let count = math::larger(points as f32, 1.0);
        let left = squares - sum * (sum / count);
        let freedom = math::larger(count - 6.0, 1.0);
        let noise = self.overlap.noise * self.overlap.noise;
        let by_noise = noise * (freedom + 3.0 * math::sqrt(2.0 * freedom));
        math::larger(left - by_noise, 0.0) / math::larger(explained, noise)
    }
}
