//! A wall so thin that its echoes run into the interface echo and into each other: interface and train fitted at once.
//!
//! Behind a delay line the record is B s(t - t0) + A Σ r^(n-1) s(t - t0 - n T), n = 1, 2 ..: interface echo, first back
//! wall, period and decay. Five numbers explain what may be a dozen overlapping pulses, so a period of 0.3 pulse
//! durations is read where two echoes alone need twice as much, with the uncertainty of the five numbers' Fisher
//! matrix. The search goes over period, decay and start on a grid; the best are polished by Gauss-Newton steps
//! with Levenberg's damping in all five numbers. All of it happens in the tables of [`super::lags`].
//!
//! Needs a learned pulse: what a wrong shape leaves over looks like a wall. `val_thin_wall` prints what it reaches.

use super::Unresolved;
use super::equations::solve;
use super::lags::Lags;
use super::model::LEFT_OVER;
use crate::echo::Surroundings;
use crate::echo::correlation::energy;
use crate::echo::interpolate::REACH;
use crate::math;
use crate::units::SamplePosition;
use heapless::Vec;

/// Most multiples of the wall that are modelled.
const MULTIPLES: usize = 24;
/// Pulses of the model: the interface's too.
const PULSES: usize = MULTIPLES + 1;
/// Numbers that are fitted: interface amplitude, wall amplitude, start, period, decay.
const COUNT: usize = 5;
/// Shortest and longest period that is looked for, in pulse durations.
const PERIODS: (f32, f32) = (0.2, 1.3);
/// Grid points a cycle.
const GRID: f32 = 20.0;
/// Decays of the grid.
const DECAYS: [f32; 4] = [0.25, 0.5, 0.75, 0.9];
/// Multiples below this share of the first are left out.
const FAINT: f32 = 0.01;
/// How far the start is looked for to either side of the highest correlation, in cycles.
const START: f32 = 0.5;
/// Starts of the polish.
const STARTS: usize = 4;
/// Most steps of a polish.
const STEPS: u8 = 20;
/// Least 2 ln Λ of a wall over none, and of the best period over any other.
const THRESHOLD: f32 = 20.0;
const LEAD: f32 = 4.0;
/// Pulse durations behind the interface that are looked at.
const WINDOW: f32 = 8.0;

/// A wall read from overlapping echoes.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct ThinWall {
    /// Origin of the interface echo.
    pub interface: SamplePosition,
    /// Period of the wall's echoes, in samples.
    pub period: f32,
    /// Standard uncertainty of the period, in samples: noise, with the allowance for the pulse's shape.
    pub period_uncertainty: f32,
    /// Fitted envelope peak of the interface echo, in codes, with its sign.
    pub interface_amplitude: f32,
    /// Likewise of the first back wall.
    pub wall_amplitude: f32,
    /// Amplitude of each multiple over the one before.
    pub decay: f32,
    /// Natural logarithm of the likelihood ratio of this wall over none.
    pub log_odds: f32,
}

/// One set of the five numbers, in the units of the tables.
#[derive(Clone, Copy, Debug, Default)]
struct Fit {
    interface: f32,
    wall: f32,
    start: f32,
    period: f32,
    decay: f32,
    explained: f32,
    period_variance: f32,
}

/// Looks for a wall behind the interface echo whose origin lies near the sample `around`. `mismatch` is the share of an echo's
/// energy that the pulse leaves unexplained ([`super::PulseTrust`]); `memory` and `more` are scratch: 512 and 416
/// entries serve any pulse of up to 60 % bandwidth or more, narrower ones see fewer multiples.
///
/// # Errors
/// Why no wall is told: [`Unresolved::OnePulse`] (no better than an interface alone), [`Unresolved::Ambiguous`] (another
/// period explains it about as well), [`Unresolved::Clipped`], [`Unresolved::NoRoom`].
#[inline(never)]
pub fn thin_wall(
    surroundings: &Surroundings<'_>,
    around: f32,
    mismatch: f32,
    memory: &mut [f32],
    more: &mut [f32],
) -> Result<ThinWall, Unresolved> {
    let Surroundings { record, pulse, .. } = surroundings;
    let facts = &pulse.facts;
    let end = record.codes().len() as f32 - (f32::from(facts.length) - facts.origin);
    let from = around - START * surroundings.samples_per_cycle - facts.envelope_duration;
    let to = math::smaller(around + WINDOW * facts.envelope_duration, end);
    let from = math::larger(from, facts.origin);
    if !(to - around >= 2.0 * facts.envelope_duration) || !(around > from) {
        return Err(Unresolved::NoRoom);
    }
    let step = super::lags::step(surroundings.samples_per_cycle) as f32;
    let duration = facts.envelope_duration / step;
    let longest = usize::try_from(math::saturating_i32(2.2 * duration)).unwrap_or(0);
    let (likeness, grid) = memory
        .split_at_mut_checked(longest + 2 * REACH + 1)
        .ok_or(Unresolved::NoRoom)?;
    let lags = Lags::fill(surroundings, from, to, longest, more, likeness).ok_or(Unresolved::NoRoom)?;
    let last = lags.start as f32 + lags.last() * step + facts.origin;
    let codes = super::model::under(surroundings, from, last);
    let (upper, lower) = (record.format().upper_rail(), record.format().lower_rail());
    if codes.iter().any(|&code| code >= upper || code <= lower) {
        return Err(Unresolved::Clipped);
    }
    let noise = math::larger(surroundings.noise, record.format().rounding_noise(surroundings.noise));
    let train = Train {
        lags,
        shortest: PERIODS.0 * duration,
        longest: PERIODS.1 * duration,
        noise,
    };
    // The interface echo is the strongest; what overlaps with it moves it by less than half a cycle.
    let place = (around - facts.origin - lags.start as f32) / step;
    let starts = train.search(place, grid);
    let mut best = Fit::default();
    let mut polished: Vec<Fit, STARTS> = Vec::new();
    for start in &starts {
        if let Some(fit) = train.polish(*start) {
            if fit.explained > best.explained {
                best = fit;
            }
            let _ = polished.push(fit);
        }
    }
    let one = train.alone(place);
    if !(best.explained > 0.0 && best.period_variance > 0.0) {
        return Err(Unresolved::OnePulse);
    }
    let freedom = math::larger(codes.len() as f32 - 6.0, 1.0);
    let by_noise = noise * noise * (freedom + 3.0 * math::sqrt(2.0 * freedom));
    let left = math::larger(energy(codes) - best.explained - by_noise, 0.0) / best.explained;
    let variance = noise * noise + math::larger(mismatch, LEFT_OVER * left) * one;
    let gained = (best.explained - one) / variance;
    if !(gained > THRESHOLD) {
        return Err(Unresolved::OnePulse);
    }
    let other = 0.1 * lags.points_per_cycle;
    let runner = polished
        .iter()
        .filter(|fit| (fit.period - best.period).abs() > other)
        .fold(0.0, |most, fit| math::larger(most, fit.explained));
    if !((best.explained - runner) / variance > LEAD) {
        return Err(Unresolved::Ambiguous);
    }
    let unit = 1.0 / math::sqrt(facts.energy);
    let before = lags.start.min(0) as f32;
    let origin = before + best.start * step + facts.origin;
    Ok(ThinWall {
        interface: SamplePosition::new(lags.start.max(0).unsigned_abs(), origin),
        period: best.period * step,
        period_uncertainty: math::sqrt(best.period_variance * variance) * step,
        interface_amplitude: best.interface * unit,
        wall_amplitude: best.wall * unit,
        decay: best.decay,
        log_odds: 0.5 * gained,
    })
}

/// Autocorrelation, slope and downward curvature at every multiple of a period.
struct Alike {
    value: [f32; PULSES],
    slope: [f32; PULSES],
    down: [f32; PULSES],
    /// Multiples of the period at which pulses still look alike.
    reach: usize,
}

/// Shares of every pulse and of its derivative (by its delay) in one of the five numbers' slopes.
#[derive(Clone, Copy)]
struct Column {
    pulse: [f32; PULSES],
    derivative: [f32; PULSES],
}

struct Train<'a> {
    lags: Lags<'a>,
    /// Shortest period, in points.
    shortest: f32,
    longest: f32,
    noise: f32,
}

impl Train<'_> {
    /// What one pulse near the place explains.
    fn alone(&self, place: f32) -> f32 {
        let reach = START * self.lags.points_per_cycle;
        let mut most = 0.0;
        for number in 0..=40 {
            let value = self.lags.at(place + reach * (number as f32 * 0.05 - 1.0));
            most = math::larger(most, value * value);
        }
        most
    }

    /// The best of a grid over period, decay and start, one for each local maximum over the period.
    #[inline(never)]
    fn search(&self, place: f32, grid: &mut [f32]) -> Vec<Fit, STARTS> {
        let fine = self.lags.points_per_cycle / GRID;
        let first = place - START * self.lags.points_per_cycle;
        let mut filled = 0;
        for (number, value) in grid.iter_mut().enumerate() {
            let at = first + number as f32 * fine;
            if at > self.lags.last() {
                break;
            }
            *value = self.lags.at(at);
            filled = number + 1;
        }
        let grid = grid.get(..filled).unwrap_or(&[]);
        let whole = |points: f32| usize::try_from(math::saturating_i32(points / fine)).unwrap_or(0);
        let mut starts: Vec<Fit, STARTS> = Vec::new();
        let (mut before, mut middle) = (Fit::default(), Fit::default());
        for distance in whole(self.shortest)..=whole(self.longest) + 1 {
            let now = self.best_of_period(grid, first, fine, distance.max(1));
            if middle.explained > 0.0 && middle.explained >= before.explained && middle.explained > now.explained {
                let at = starts.iter().position(|other| other.explained < middle.explained);
                let at = at.unwrap_or(starts.len());
                if starts.is_full() && at < starts.len() {
                    let _ = starts.pop();
                }
                let _ = starts.insert(at, middle);
            }
            (before, middle) = (middle, now);
        }
        starts
    }

    fn best_of_period(&self, grid: &[f32], first: f32, fine: f32, distance: usize) -> Fit {
        let period = distance as f32 * fine;
        let mut alike = [0.0; PULSES];
        for (number, value) in alike.iter_mut().enumerate() {
            *value = if number as f32 * period <= self.lags.longest() {
                self.lags.alike(number as f32 * period)
            } else {
                0.0
            };
        }
        let mut best = Fit::default();
        for decay in DECAYS {
            // Energy of the train, and its likeness to the interface echo.
            let (mut own, mut with, mut weight) = (0.0, 0.0, 1.0);
            let mut weights = [0.0; PULSES];
            for (number, value) in weights.iter_mut().enumerate().skip(1) {
                *value = weight;
                with += weight * alike.get(number).copied().unwrap_or(0.0);
                weight *= decay;
            }
            // Pulses `apart` multiples from each other: their weights' products, both ways round.
            for (apart, alike) in alike.iter().enumerate().take_while(|(_, alike)| **alike != 0.0) {
                let mut products = 0.0;
                for (a, b) in weights.iter().zip(weights.iter().skip(apart)) {
                    products += a * b;
                }
                own += if apart == 0 { 1.0 } else { 2.0 } * alike * products;
            }
            let determinant = own - with * with;
            if !(determinant > 1e-6) {
                continue;
            }
            // The starts of the grid, half a cycle to either side.
            for start in 0..=GRID as usize {
                let interface = grid.get(start).copied().unwrap_or(0.0);
                let (mut wall, mut at) = (0.0, start);
                for weight in weights.iter().skip(1) {
                    at += distance;
                    wall += weight * grid.get(at).copied().unwrap_or(0.0);
                }
                let b = (own * interface - with * wall) / determinant;
                let a = (wall - with * interface) / determinant;
                let explained = b * interface + a * wall;
                if explained > best.explained {
                    best = Fit {
                        interface: b,
                        wall: a,
                        start: first + start as f32 * fine,
                        period,
                        decay,
                        explained,
                        period_variance: 0.0,
                    };
                }
            }
        }
        best
    }

    /// How many pulses of a fit lie in the window and matter.
    fn pulses(&self, fit: &Fit) -> usize {
        let (mut count, mut weight) = (1, 1.0);
        while count < PULSES && weight > FAINT && fit.start + count as f32 * fit.period <= self.lags.last() {
            weight *= fit.decay;
            count += 1;
        }
        count
    }

    #[inline(never)]
    fn polish(&self, start: Fit) -> Option<Fit> {
        let mut here = start;
        let (mut rows, explained) = self.normal(&here)?;
        here.explained = explained;
        let mut damping = 1e-2;
        let limit = 0.1 * self.lags.points_per_cycle;
        for _ in 0..STEPS {
            let mut damped = rows;
            for (number, row) in damped.iter_mut().enumerate() {
                *row.get_mut(number)? *= 1.0 + damping;
            }
            let Some([interface, wall, place, period, decay]) = solve(&mut damped) else {
                break;
            };
            let next = Fit {
                interface: here.interface + interface,
                wall: here.wall + wall,
                start: here.start + math::clamp(place, -limit, limit),
                period: math::clamp(
                    here.period + math::clamp(period, -limit, limit),
                    self.shortest,
                    self.longest,
                ),
                decay: math::clamp(here.decay + math::clamp(decay, -0.2, 0.2), 0.02, 0.97),
                ..here
            };
            match self.normal(&next) {
                Some((renewed, explained)) if explained > here.explained => {
                    let gained = explained - here.explained;
                    rows = renewed;
                    here = Fit { explained, ..next };
                    damping *= 0.2;
                    if gained < 0.01 * self.noise * self.noise {
                        break;
                    }
                }
                _ => {
                    damping = math::larger(damping, 1e-3) * 8.0;
                    if damping > 1e4 {
                        break;
                    }
                }
            }
        }
        // The period's variance for noise of variance 1 is its diagonal entry of the inverse.
        for (number, row) in rows.iter_mut().enumerate() {
            *row.last_mut()? = if number == 3 { 1.0 } else { 0.0 };
        }
        let [_, _, _, variance, _] = solve(&mut rows)?;
        here.period_variance = variance;
        Some(here)
    }

    /// Normal equations of the five numbers at a fit, and what it explains.
    fn normal(&self, fit: &Fit) -> Option<([[f32; COUNT + 1]; COUNT], f32)> {
        let count = self.pulses(fit);
        let alike = self.alike(fit.period, count);
        let seen = self.seen(fit, count);
        let columns = columns(fit, count);
        // The model itself: both amplitudes' columns.
        let mut model = Column::EMPTY;
        let [interface, wall, ..] = &columns;
        for ((value, b), a) in model.pulse.iter_mut().zip(&interface.pulse).zip(&wall.pulse) {
            *value = fit.interface * b + fit.wall * a;
        }
        let of_model = alike.seen_by_each(&model, count);
        let explained = 2.0 * model.times(&seen, count) - model.times(&of_model, count);
        let mut rows = [[0.0; COUNT + 1]; COUNT];
        for (number, other) in columns.iter().enumerate() {
            let of_other = alike.seen_by_each(other, count);
            for (row, column) in rows.iter_mut().zip(&columns) {
                *row.get_mut(number)? = column.times(&of_other, count);
            }
        }
        for (row, column) in rows.iter_mut().zip(&columns) {
            *row.last_mut()? = column.times(&seen, count) - column.times(&of_model, count);
        }
        Some((rows, explained))
    }

    fn alike(&self, period: f32, count: usize) -> Alike {
        let mut alike = Alike {
            value: [0.0; PULSES],
            slope: [0.0; PULSES],
            down: [0.0; PULSES],
            reach: usize::try_from(math::saturating_i32(self.lags.longest() / period)).unwrap_or(0),
        };
        for (number, ((value, slope), down)) in alike
            .value
            .iter_mut()
            .zip(&mut alike.slope)
            .zip(&mut alike.down)
            .enumerate()
            .take(count)
        {
            let spacing = number as f32 * period;
            if spacing <= self.lags.longest() {
                let local = self.lags.alike_around(spacing);
                (*value, *slope, *down) = (local.value, local.slope, -local.curvature);
            }
        }
        alike
    }

    /// The window's correlation at every pulse of the model, and its slope.
    fn seen(&self, fit: &Fit, count: usize) -> Column {
        let mut seen = Column::EMPTY;
        let Column { pulse, derivative } = &mut seen;
        for (number, (value, slope)) in pulse.iter_mut().zip(derivative).enumerate().take(count) {
            let local = self.lags.around(fit.start + number as f32 * fit.period);
            (*value, *slope) = (local.value, local.slope);
        }
        seen
    }
}

impl Alike {
    /// What a sum of pulses and derivatives looks like to every pulse and to every derivative: inner products with a
    /// second sum are then plain sums of products.
    fn seen_by_each(&self, column: &Column, count: usize) -> Column {
        let mut seen = Column::EMPTY;
        for (i, (pulse, derivative)) in seen.pulse.iter_mut().zip(&mut seen.derivative).enumerate().take(count) {
            let near = column.pulse.iter().zip(&column.derivative).enumerate().take(count);
            for (j, (p, q)) in near.skip(i.saturating_sub(self.reach)).take(2 * self.reach + 1) {
                let apart = i.abs_diff(j);
                let get = |table: &[f32; PULSES]| table.get(apart).copied().unwrap_or(0.0);
                // The derivative of the likeness by the second delay is odd in their distance.
                let slope = if j >= i { get(&self.slope) } else { -get(&self.slope) };
                *pulse += p * get(&self.value) + q * slope;
                *derivative += q * get(&self.down) - p * slope;
            }
        }
        seen
    }
}

impl Column {
    const EMPTY: Self = Self {
        pulse: [0.0; PULSES],
        derivative: [0.0; PULSES],
    };

    /// Sum of products with what [`Alike::seen_by_each`] or the record gives.
    fn times(&self, seen: &Self, count: usize) -> f32 {
        let mut sum = 0.0;
        for (a, b) in self.pulse.iter().zip(&seen.pulse).take(count) {
            sum += a * b;
        }
        for (a, b) in self.derivative.iter().zip(&seen.derivative).take(count) {
            sum += a * b;
        }
        sum
    }
}

/// The slopes of the model by its five numbers.
fn columns(fit: &Fit, count: usize) -> [Column; COUNT] {
    let empty = Column::EMPTY;
    let (mut interface, mut wall, mut start, mut period, mut decay) = (empty, empty, empty, empty, empty);
    if let (Some(pulse), Some(derivative)) = (interface.pulse.first_mut(), start.derivative.first_mut()) {
        (*pulse, *derivative) = (1.0, fit.interface);
    }
    let (mut weight, mut weaker) = (1.0, 0.0);
    for (number, ((((a, t), later), r), _)) in wall
        .pulse
        .iter_mut()
        .zip(&mut start.derivative)
        .zip(&mut period.derivative)
        .zip(&mut decay.pulse)
        .zip(0..count)
        .enumerate()
        .skip(1)
    {
        let order = number as f32;
        (*a, *t, *later) = (weight, fit.wall * weight, fit.wall * order * weight);
        *r = fit.wall * (order - 1.0) * weaker;
        weaker = weight;
        weight *= fit.decay;
    }
    [interface, wall, start, period, decay]
}
