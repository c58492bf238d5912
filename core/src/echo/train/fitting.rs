//! Start and period, fitted to all multiples at once.

use super::choosing::{Hypothesis, nearest};
use super::{Rules, Train};
use crate::echo::arrival::{Arrival, sharpness};
use crate::echo::clipping::fill_in;
use crate::echo::correlation::{correlate_into, curvature, slope};
use crate::echo::interpolate::{self, REACH};
use crate::echo::{Echo, EchoList, EchoRole, Polarity, Surroundings, echo_at};
use crate::math;
use crate::order;
use crate::path::PathLaw;
use crate::units::SamplePosition;
use crate::workspace::{ECHO_CAPACITY, TRAIN_LAGS};
use heapless::Vec;

/// Multiples above this many standard deviations of their amplitude are counted as seen.
const SEEN: f32 = 3.0;
/// From so many standard deviations on they take part in the fit between those that are seen, and as far behind them as they go on
/// without a gap. A long lever makes even a weak one tell of the period: with those above [`SEEN`] alone a train of 16 dB that falls by
/// 0.7 from multiple to multiple scatters by 1.2 of its bound, with these by 1.06 (campaign `timing`).
const FIT_MINIMUM: f32 = 1.0;

type Members = Vec<Member, ECHO_CAPACITY>;

/// Places of the multiples during the fit, relative to `base` so that `f32` keeps its digits.
struct Line<'a> {
    base: u32,
    first: f32,
    /// Straight time from multiple to multiple.
    period: f32,
    /// Number of the first multiple.
    number: u32,
    law: PathLaw<'a>,
    /// Sign of all multiples, 1 or -1.
    sign: f32,
}

impl Line<'_> {
    /// Place of the `step`-th multiple after the first, relative to the base.
    fn place(&self, step: u8) -> f32 {
        let straight = self.first + f32::from(step) * self.period;
        match self.law {
            PathLaw::Straight => straight,
            law => straight + law.deviation(self.straight(step)) - law.deviation(self.straight(0)),
        }
    }

    /// How far the place moves where the period grows by one.
    fn lever(&self, step: u8) -> f32 {
        let steps = f32::from(step);
        match self.law {
            PathLaw::Straight => steps,
            law => {
                let moved = |step: u8| (law.slope(self.straight(step)) - 1.0) * self.multiple(step);
                steps + moved(step) - moved(0)
            }
        }
    }

    fn multiple(&self, step: u8) -> f32 {
        self.number as f32 + f32::from(step)
    }

    /// Straight time from the start of the wall.
    fn straight(&self, step: u8) -> f32 {
        self.multiple(step) * self.period
    }

    /// Actual time from the start of the wall to the first multiple.
    fn before_first(&self) -> f32 {
        self.straight(0) + self.law.deviation(self.straight(0))
    }
}

/// One multiple in the fit.
#[derive(Clone, Copy, Debug)]
struct Member {
    /// Steps after the first multiple.
    step: u8,
    /// Stands clear of the noise.
    seen: bool,
    /// Lag (relative to the base, of the pulse's first sample) of its window's first entry.
    first_lag: i32,
    /// Fitted amplitude in codes, with sign.
    amplitude: f32,
    /// How sharp its correlation's top is over the pulse's own.
    sharpness: f32,
    /// Timing noise at its place over that at the first multiple: 1 in white noise, less where grain dies away.
    noise: f32,
    /// Share of the pulse's information that its whole samples carry: less than 1 for a clipped echo.
    information: f32,
    /// Root of its weight: the amplitude, less what its correlation's top is blunter than the pulse's, over the noise.
    weight: f32,
    /// Distance of its own arrival from the line, in samples.
    off: f32,
}

/// Joint least squares of start and period over all multiples; `None` if the first one, whose place everything
/// counts from, is lost in it.
#[inline(never)]
pub(super) fn fit(
    surroundings: &Surroundings<'_>,
    echoes: &mut EchoList,
    rules: &Rules<'_>,
    best: &Hypothesis,
    tolerance: f32,
    lags: &mut [f32; ECHO_CAPACITY * TRAIN_LAGS],
) -> Option<Train> {
    // Re-anchor at the first multiple's own echo: its position is exact where the hypothesis is rounded.
    let anchor = echoes
        .iter()
        .filter(|echo| echo.role == EchoRole::Other)
        .find(|echo| {
            let (number, off) = nearest(best, rules.straight_place(echo.position.as_samples()));
            number == i32::try_from(best.first).unwrap_or(1) && off.abs() < tolerance
        })
        .map_or_else(
            || {
                let straight = best.zero + best.first as f32 * best.period;
                SamplePosition::new(0, straight + rules.law.deviation(straight - rules.start))
            },
            |echo| echo.position,
        );
    let mut line = Line {
        base: anchor.index,
        first: anchor.fraction,
        period: best.period,
        number: best.first,
        law: rules.law,
        sign: sign_of_train(echoes, rules, best, tolerance),
    };
    let origin = surroundings.pulse.facts.origin;
    let mut members = Members::new();
    collect(surroundings, echoes, rules, best, &line, lags, &mut members);
    if members.first().is_none_or(|first| first.step > 0) {
        return None;
    }
    let seen = members.iter().filter(|member| member.seen).count();
    if seen < 2 {
        // A distance is not found in what may be noise.
        members.truncate(1);
    }
    let (mut s0, mut s1, mut s2) = (0.0, 0.0, 0.0);
    for _ in 0..3 {
        (s0, s1, s2) = (0.0, 0.0, 0.0);
        let (mut t0, mut t1) = (0.0, 0.0);
        for (member, window) in members.iter_mut().zip(lags.chunks_exact(TRAIN_LAGS)) {
            let place = line.place(member.step) - origin - member.first_lag as f32;
            let value = interpolate::at(window, place);
            member.amplitude = value / surroundings.pulse.facts.energy;
            member.sharpness = sharpness(curvature(window, place, value), member.amplitude, &surroundings.pulse);
            member.weight = member.amplitude.abs() * member.sharpness * math::sqrt(member.information) / member.noise;
            member.off = slope(window, place)
                / (member.amplitude * member.sharpness * surroundings.pulse.facts.derivative_energy);
            // Of a weak one noise may leave nothing where the line now goes: then it tells nothing.
            if !(member.weight > 0.0) {
                (member.weight, member.off) = (0.0, 0.0);
            }
            // A step beyond a tenth of a cycle is noise or another cycle: the line decides, not the echo.
            let limit = 0.1 * surroundings.samples_per_cycle;
            let off = math::clamp(member.off, -limit, limit);
            let (n, weight) = (line.lever(member.step), member.weight * member.weight);
            s0 += weight;
            s1 += weight * n;
            s2 += weight * n * n;
            t0 += weight * off;
            t1 += weight * n * off;
        }
        let determinant = s0 * s2 - s1 * s1;
        if members.len() < 2 || !(determinant > 0.0) {
            line.first += if s0 > 0.0 { t0 / s0 } else { 0.0 };
            continue;
        }
        line.first += (s2 * t0 - s1 * t1) / determinant;
        line.period += (s0 * t1 - s1 * t0) / determinant;
    }

    let first = SamplePosition::new(line.base, line.first);
    let lone = members.len() < 2;
    if lone {
        line.period = rules.law.straighten(first.as_samples() - rules.start) / best.first as f32;
    }
    // A lone echo before the start is no wall's; nor is a fit that has run away.
    if !(line.period > 0.0) {
        return None;
    }
    let noise_there = surroundings.timing_noise.at(first.as_samples());
    let variance = noise_there * noise_there / surroundings.pulse.facts.derivative_energy;
    let determinant = s0 * s2 - s1 * s1;
    let (mut scatter, mut strongest) = (0.0, 0.0);
    for member in &members {
        strongest = math::larger(strongest, member.weight * member.weight);
        scatter += member.off * member.off * member.weight * member.weight / variance;
    }
    // The period is Σ c t with c = w (S0 n - S1) / determinant.
    let mut contrast = 0.0;
    if !lone && determinant > 0.0 {
        for member in &members {
            let share = member.weight * member.weight * (s0 * line.lever(member.step) - s1) / determinant;
            contrast += share * share;
        }
    }
    let freedom = members.len().saturating_sub(2) as u8;
    let unevenness = if freedom > 0 { scatter / f32::from(freedom) } else { 0.0 };
    let period_uncertainty = if lone || !(determinant > 0.0) {
        None
    } else {
        Some(math::sqrt(variance * s0 / determinant))
    };
    give_roles(surroundings, echoes, best, &line, &members, tolerance);
    Some(Train {
        first_multiple: u8::try_from(best.first).unwrap_or(u8::MAX),
        echoes: seen.max(1) as u8,
        period: line.period,
        period_uncertainty,
        contrast: math::sqrt(contrast),
        correlation: if determinant > 0.0 {
            -s1 / math::sqrt(s0 * s2)
        } else {
            0.0
        },
        support: math::sqrt(s0 - strongest),
        first,
        start_difference: first.as_samples() - line.before_first() - rules.start,
        unevenness,
        freedom,
        unexplained: unexplained(surroundings, echoes, rules),
        thinner_too: false,
        other_too: false,
        may_be_double: best.hidden || is_halved(surroundings, echoes, first, line.period),
    })
}

/// Does an echo stronger than the second multiple stand half-way between the first and the second? A beam's spreading turns the
/// phase from multiple to multiple, so that every other one can look upside down and half a cycle off.
fn is_halved(surroundings: &Surroundings<'_>, echoes: &EchoList, first: SamplePosition, period: f32) -> bool {
    let second = echoes.iter().find(|echo| {
        matches!(echo.role, EchoRole::BackWall(_))
            && (echo.position.samples_after(first) - period).abs() < 0.5 * surroundings.samples_per_cycle
    });
    let Some(second) = second else {
        return false;
    };
    echoes.iter().any(|echo| {
        echo.role == EchoRole::Other
            && echo.amplitude > second.amplitude
            && (echo.position.samples_after(first) - 0.5 * period).abs() < 0.75 * surroundings.samples_per_cycle
    })
}

/// Energy of what stands between the multiples over theirs. What does not look like the pulse (the tail of a strong
/// interface echo) counts by the share of it that does.
#[must_use]
pub fn unexplained(surroundings: &Surroundings<'_>, echoes: &EchoList, rules: &Rules<'_>) -> f32 {
    let (mut explained, mut left) = (0.0, 0.0);
    for echo in echoes {
        let place = echo.position.as_samples();
        if !surroundings.stands_out(echo.amplitude, place) {
            continue;
        }
        let energy = echo.amplitude * echo.amplitude;
        match echo.role {
            EchoRole::BackWall(_) => explained += energy,
            EchoRole::Other if place > rules.start && place <= rules.visible_to => {
                left += energy / (1.0 + echo.mismatch * echo.mismatch);
            }
            _ => {}
        }
    }
    if explained > 0.0 { left / explained } else { 0.0 }
}

/// Sign of the strongest multiple: all back walls of one wall share it.
fn sign_of_train(echoes: &EchoList, rules: &Rules<'_>, best: &Hypothesis, tolerance: f32) -> f32 {
    let mut strongest: Option<&Echo> = None;
    for echo in echoes.iter().filter(|echo| echo.role == EchoRole::Other) {
        let (number, off) = nearest(best, rules.straight_place(echo.position.as_samples()));
        if number >= 1 && off.abs() < tolerance && strongest.is_none_or(|s| echo.amplitude > s.amplitude) {
            strongest = Some(echo);
        }
    }
    match strongest.map(|echo| echo.polarity) {
        Some(Polarity::Negative) => -1.0,
        _ => 1.0,
    }
}

/// Correlation windows of the multiples, from the first on until two in a row are lost in the noise.
fn collect(
    surroundings: &Surroundings<'_>,
    echoes: &EchoList,
    rules: &Rules<'_>,
    best: &Hypothesis,
    line: &Line<'_>,
    lags: &mut [f32; ECHO_CAPACITY * TRAIN_LAGS],
    members: &mut Members,
) {
    let codes = surroundings.record.codes();
    let minimum = FIT_MINIMUM * surroundings.amplitude_noise();
    let clear = SEEN * surroundings.amplitude_noise();
    let pulse = &surroundings.pulse;
    let middle = (TRAIN_LAGS / 2) as i32 - 1;
    let known = (best.last - best.first) as usize;
    let noise_at_first = surroundings.timing_noise.at(line.base as f32 + line.first);
    let mut lost = 0;
    for step in 0..=u8::MAX {
        let place = line.place(step);
        if line.base as f32 + place > rules.visible_to || members.is_full() {
            break;
        }
        let start = math::saturating_i32(math::floor(place - pulse.facts.origin));
        let first_lag = start - middle;
        let absolute = i32::try_from(line.base).unwrap_or(i32::MAX).saturating_add(start);
        // The pulse has to lie inside the record as a whole.
        let inside = usize::try_from(absolute)
            .ok()
            .and_then(|s| codes.get(s..s.checked_add(pulse.samples.len())?));
        if inside.is_none() {
            if step == 0 {
                continue;
            }
            break;
        }
        let Some(window) = lags.chunks_exact_mut(TRAIN_LAGS).nth(members.len()) else {
            break;
        };
        correlate_into(codes, absolute - middle, pulse, window);
        // A clipped echo as its whole samples say it was.
        let centre = SamplePosition::new(line.base, place);
        let cut = echoes.iter().find(|echo| {
            echo.clipped
                && echo.information > 0.0
                && echo.position.samples_after(centre).abs() < 0.5 * surroundings.samples_per_cycle
        });
        if let Some(echo) = cut {
            let format = surroundings.record.format();
            let amplitude = echo.signed_amplitude();
            fill_in(
                codes,
                &format,
                pulse,
                echo.position,
                amplitude,
                absolute - middle,
                window,
            );
        }
        let amplitude =
            line.sign * interpolate::at(window, place - pulse.facts.origin - first_lag as f32) / pulse.facts.energy;
        if amplitude > minimum {
            let _ = members.push(Member {
                step,
                seen: amplitude > clear,
                first_lag,
                amplitude: line.sign * amplitude,
                sharpness: 1.0,
                information: cut.map_or(1.0, |echo| echo.information),
                noise: surroundings.timing_noise.at(line.base as f32 + place) / noise_at_first,
                weight: amplitude,
                off: 0.0,
            });
        }
        if amplitude > clear {
            lost = 0;
        } else {
            lost += 1;
            if lost == 2 && usize::from(step) > known {
                break;
            }
        }
    }
}

/// Roles for the echoes of the train, and entries for weak multiples that only the fit found.
fn give_roles(
    surroundings: &Surroundings<'_>,
    echoes: &mut EchoList,
    best: &Hypothesis,
    line: &Line<'_>,
    members: &[Member],
    tolerance: f32,
) {
    let fitted = |member: &Member, place: SamplePosition, group_lag: f32| {
        echo_at(
            surroundings,
            Arrival {
                position: SamplePosition::new(place.index, place.fraction + member.off),
                amplitude: member.amplitude,
                group_lag,
                sharpness: member.sharpness,
            },
        )
    };
    for member in members.iter().filter(|member| member.seen) {
        let place = SamplePosition::new(line.base, line.place(member.step));
        let multiple = u8::try_from(best.first + u32::from(member.step)).unwrap_or(u8::MAX);
        let distance = |echo: &Echo| echo.position.samples_after(place);
        let mut nearest: Option<&mut Echo> = None;
        for echo in echoes.iter_mut().filter(|echo| echo.role == EchoRole::Other) {
            if nearest
                .as_ref()
                .is_none_or(|other| distance(echo).abs() < distance(other).abs())
            {
                nearest = Some(echo);
            }
        }
        // The beam turns the phase by up to a quarter of a cycle: then two half cycles fit an echo about as well, and
        // the train knows which it is.
        let reach = match line.law {
            PathLaw::Beam(_) => 0.6 * surroundings.samples_per_cycle,
            _ => tolerance,
        };
        let known = nearest.filter(|echo| distance(echo).abs() < reach);
        if let Some(echo) = known {
            let off = distance(echo);
            if off.abs() >= tolerance {
                let lag = echo.group_lag.get() * surroundings.record.clock().rate.get();
                if let Some(at_fit) = fitted(member, place, lag + off) {
                    *echo = at_fit;
                }
            }
            echo.role = EchoRole::BackWall(multiple);
        } else if let Some(mut echo) = fitted(member, place, 0.0) {
            // Its group lag is not known: the strong multiples speak for the train.
            echo.role = EchoRole::BackWall(multiple);
            if echoes.push(echo).is_ok() {
                order::sink_last(echoes, |a, b| a.position.samples_after(b.position) < 0.0);
            }
        }
    }
}

const _: () = assert!(
    TRAIN_LAGS >= 2 * REACH + 4,
    "a window must leave room for the interpolation and a shift"
);
