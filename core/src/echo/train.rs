//! Which echoes are the multiples of one wall, and their common period.
//!
//! **In**: the echoes of a record and what is known of the start (zero or interface). **Out**: a
//! [`Train`], or the refusal to choose between two walls.
//!
//! *Choosing.* Every distance between two near echoes, and every echo's distance from the start divided by 1
//! to 4, is a hypothesis for the period. Its teeth are scored against the echoes: a tooth gains what its
//! echo's height says against noise, ln(1 + A²/3σ²) less the same at the detection threshold, at most
//! 4.5; a tooth without echo loses; a tooth hidden in the dead zone loses a little; an unexplained echo
//! above 35 % of the largest loses its own gain; a first tooth below 22 % of the largest makes it
//! unlikely. The best score wins, if it leads the best *different* period by [`MARGIN`].
//!
//! *Fitting.* Start and period are fitted to the correlations of all multiples at once (all amplitudes
//! free): the joint least squares that two arrivals alone fall short of by 1.6 to 4 times. Weak
//! multiples are read only where the strong ones predict them. For white noise the standard uncertainty is the
//! Cramér-Rao bound: with weights A², moments S0, S1, S2 of the multiple's number,
//! u²(period) = noise² / Σs'² · S0 / (S0 S2 - S1²).
//!
//! Fails, and says so only by [`Train::may_be_double`]: first echo inside the dead zone and fewer than
//! two visible ones.

use crate::echo::arrival::{Arrival, sharpness};
use crate::echo::correlation::{correlate_into, curvature, slope};
use crate::echo::interpolate::{self, REACH};
use crate::echo::{Echo, EchoList, EchoRole, Polarity, Surroundings, echo_at};
use crate::math;
use crate::order;
use crate::units::SamplePosition;
use crate::workspace::{ECHO_CAPACITY, TRAIN_LAGS};
use heapless::Vec;

/// Lead in score that the chosen period needs over the best different one.
pub const MARGIN: f32 = 1.0;
/// Most that one tooth can gain.
const GAIN_LIMIT: f32 = 4.5;
/// Loss for a hole inside the train, besides the missing tooth's own.
const HOLE: f32 = 2.0;
/// Loss for a tooth in the dead zone. Above [`MARGIN`], so that a shorter wall that nothing speaks
/// for does not veto a reading: it becomes a doubt.
const HIDDEN: f32 = 1.1;
/// Loss for a first tooth far below the largest.
const WEAK_FIRST: f32 = 6.0;
/// Loss for a train whose start contradicts the zero or the interface.
const START_CONTRADICTED: f32 = 1.0;
/// Highest number of a multiple. A start so far off that more would fit before the first echo is a wrong one.
const LAST_MULTIPLE: u32 = 200;
/// Echoes of other origin that may stand between two multiples.
const STRANGERS: usize = 3;
/// Multiples above this many standard deviations of their amplitude take part in the fit.
const FIT_MINIMUM: f32 = 3.0;

/// What is known before the echoes are looked at. Places are in samples from the record's first.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Rules {
    /// Where the wall begins: zero offset or interface echo.
    pub start: f32,
    /// How far from a whole number of periods after the start the train may lie without objection.
    pub start_tolerance: f32,
    /// Shortest period that can be read.
    pub shortest: f32,
    /// First sample at which an echo could have been seen.
    pub visible_from: f32,
    /// Last such sample.
    pub visible_to: f32,
    /// Detection threshold in standard deviations of a fitted amplitude.
    pub threshold: f32,
}

/// The multiples of one wall.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Train {
    /// Number of the first multiple that was seen.
    pub first_multiple: u8,
    /// Echoes that took part.
    pub echoes: u8,
    /// The period in samples: fitted from two echoes on, else the lone echo's distance from the start.
    pub period: f32,
    /// Its standard uncertainty in samples from noise; `None` for a lone echo.
    pub period_uncertainty: Option<f32>,
    /// Correlation of the errors of period and first place: -S1 / sqrt(S0 S2). 0 for a lone echo.
    pub correlation: f32,
    /// Root of the sum of squared amplitudes (codes) of all multiples but the strongest: what a wrong
    /// cycle of the period would have to overcome.
    pub support: f32,
    /// Fitted place of the first multiple that was seen.
    pub first: SamplePosition,
    /// How far the start lies from where the train begins, in samples: first - first_multiple · period - start.
    pub start_difference: f32,
    /// Scatter of the arrivals about the fit over what noise explains (chi-square per degree of
    /// freedom); 0 without a degree of freedom.
    pub unevenness: f32,
    /// Degrees of freedom of that scatter.
    pub freedom: u8,
    /// Energy of the echoes inside the window, behind the start, that no multiple explains, over that of the multiples.
    pub unexplained: f32,
    /// A wall of half or a third of this thickness would have its first echo in the dead zone and is not excluded by
    /// the others.
    pub may_be_double: bool,
}

impl Train {
    /// Do the arrivals scatter about the fit by more than noise and chance (five standard deviations
    /// of chi-square) explain?
    #[must_use]
    pub fn is_uneven(&self) -> bool {
        self.freedom > 0 && self.unevenness > 1.0 + 5.0 * math::sqrt(2.0 / f32::from(self.freedom))
    }
}

/// No period stands out.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Undecided {
    /// No hypothesis scores above noise.
    NoTrain,
    /// Two different periods explain the echoes about as well.
    Ambiguous {
        /// How many are within the margin, the best included.
        candidates: u8,
        /// The best period in samples.
        best: f32,
        /// The best different one.
        next: f32,
    },
}

/// One echo as the choice sees it.
#[derive(Clone, Copy, Debug)]
struct Tooth {
    place: f32,
    amplitude: f32,
    gain: f32,
    polarity: Polarity,
}

/// A period with its place.
#[derive(Clone, Copy, Debug)]
struct Hypothesis {
    /// Place of the multiple with number 0: where the wall begins.
    zero: f32,
    period: f32,
    score: f32,
    /// Some tooth lies in the dead zone.
    hidden: bool,
    /// Number of the first and of the last multiple that has an echo.
    first: u32,
    last: u32,
}

type Teeth = Vec<Tooth, ECHO_CAPACITY>;
type Members = Vec<Member, ECHO_CAPACITY>;

/// Finds the train among `echoes`, gives them their roles, adds weak multiples that only the fit could find, and fits.
///
/// Echoes that already have a role other than [`EchoRole::Other`] (an interface echo) take no part.
///
/// # Errors
/// [`Undecided`].
#[inline(never)]
pub fn find_train(
    surroundings: &Surroundings<'_>,
    echoes: &mut EchoList,
    rules: &Rules,
    lags: &mut [f32; ECHO_CAPACITY * TRAIN_LAGS],
) -> Result<Train, Undecided> {
    let tolerance = 0.2 * surroundings.samples_per_cycle;
    let best = choose(surroundings, echoes, rules, tolerance)?;
    fit(surroundings, echoes, rules, &best, tolerance, lags).ok_or(Undecided::NoTrain)
}

/// The best hypothesis, if it leads.
#[inline(never)]
fn choose(
    surroundings: &Surroundings<'_>,
    echoes: &EchoList,
    rules: &Rules,
    tolerance: f32,
) -> Result<Hypothesis, Undecided> {
    let sigma = surroundings.amplitude_noise();
    let at_threshold = math::ln(1.0 + rules.threshold * rules.threshold / 3.0);
    let mut teeth: Teeth = Vec::new();
    let inside = |echo: &&Echo| echo.role == EchoRole::Other && echo.position.as_samples() <= rules.visible_to;
    for echo in echoes.iter().filter(inside) {
        let height = echo.amplitude / sigma;
        let gain = math::smaller(math::ln(1.0 + height * height / 3.0) - at_threshold, GAIN_LIMIT);
        let _ = teeth.push(Tooth {
            place: echo.position.as_samples(),
            amplitude: echo.amplitude,
            gain,
            polarity: echo.polarity,
        });
    }
    let mut ranked: Vec<Hypothesis, 8> = Vec::new();
    let mut consider = |anchor: f32, number: u32, period: f32| {
        if !(period >= rules.shortest) {
            return;
        }
        let zero = anchor - number as f32 * period;
        // The pairs of one train all propose the same: once is enough.
        let known = |h: &Hypothesis| (h.period - period).abs() < 0.5 * tolerance && (h.zero - zero).abs() < tolerance;
        if ranked.iter().any(known) {
            return;
        }
        let mut hypothesis = Hypothesis {
            zero,
            period,
            score: 0.0,
            hidden: false,
            first: 0,
            last: 0,
        };
        polish(&mut hypothesis, &teeth, tolerance);
        if !(hypothesis.period >= rules.shortest) {
            return;
        }
        score(&mut hypothesis, &teeth, rules, tolerance, at_threshold);
        rank(&mut ranked, hypothesis, tolerance);
    };
    for (i, tooth) in teeth.iter().enumerate() {
        for divisor in 1..=4u8 {
            consider(
                tooth.place,
                u32::from(divisor),
                (tooth.place - rules.start) / f32::from(divisor),
            );
        }
        // Neighbouring multiples have at most a few strangers between them.
        for later in teeth.iter().skip(i + 1).take(STRANGERS + 1) {
            let period = later.place - tooth.place;
            let number = math::round_to_i32((tooth.place - rules.start) / math::larger(period, 1.0)).max(1);
            consider(tooth.place, number.unsigned_abs(), period);
        }
    }
    let Some(best) = ranked.first().copied().filter(|best| best.score > 0.0) else {
        return Err(Undecided::NoTrain);
    };
    let mut hidden_rival = false;
    let (mut close, mut next) = (1u8, None);
    for rival in ranked.iter().skip(1) {
        let lead = best.score - rival.score;
        // A shorter wall whose only merit is to hide: a doubt, not a veto.
        if rival.hidden && rival.period < best.period && lead < 2.5 {
            hidden_rival = true;
        } else if lead < MARGIN {
            close += 1;
            next = next.or(Some(rival.period));
        }
    }
    match next {
        Some(next) => Err(Undecided::Ambiguous {
            candidates: close,
            best: best.period,
            next,
        }),
        None => Ok(Hypothesis {
            hidden: hidden_rival,
            ..best
        }),
    }
}

/// Keeps the list sorted by score, one entry a period.
#[inline(never)]
fn rank(ranked: &mut Vec<Hypothesis, 8>, hypothesis: Hypothesis, tolerance: f32) {
    let same = |h: &&mut Hypothesis| (h.period - hypothesis.period).abs() < tolerance;
    if let Some(known) = ranked.iter_mut().find(same) {
        if hypothesis.score > known.score {
            *known = hypothesis;
        }
    } else if ranked.is_full() {
        match ranked.last_mut() {
            Some(last) if hypothesis.score > last.score => *last = hypothesis,
            _ => return,
        }
    } else {
        let _ = ranked.push(hypothesis);
    }
    // An improved entry only moves up.
    order::sort(ranked, |a, b| a.score > b.score);
}

/// Number of the multiple nearest to a place, and how far the place lies from it.
#[inline(never)]
fn nearest(hypothesis: &Hypothesis, place: f32) -> (i32, f32) {
    let number = math::round_to_i32((place - hypothesis.zero) / hypothesis.period);
    (number, place - hypothesis.zero - number as f32 * hypothesis.period)
}

/// Weighted least squares of the echoes near the teeth; a lone one leaves the hypothesis as it is.
#[inline(never)]
fn polish(hypothesis: &mut Hypothesis, teeth: &Teeth, tolerance: f32) {
    for _ in 0..2 {
        let (mut s0, mut s1, mut s2, mut t0, mut t1) = (0.0, 0.0, 0.0, 0.0, 0.0);
        for tooth in teeth {
            let (number, off) = nearest(hypothesis, tooth.place);
            if number >= 1 && off.abs() < tolerance {
                let (n, weight) = (number as f32, tooth.amplitude * tooth.amplitude);
                s0 += weight;
                s1 += weight * n;
                s2 += weight * n * n;
                t0 += weight * off;
                t1 += weight * n * off;
            }
        }
        let determinant = s0 * s2 - s1 * s1;
        if !(determinant > 1e-4 * s0 * s2) {
            return;
        }
        hypothesis.zero += (s2 * t0 - s1 * t1) / determinant;
        hypothesis.period += (s0 * t1 - s1 * t0) / determinant;
    }
}

/// Scores a hypothesis against the echoes, and notes which multiples it found.
#[inline(never)]
fn score(hypothesis: &mut Hypothesis, teeth: &Teeth, rules: &Rules, tolerance: f32, at_threshold: f32) {
    hypothesis.score = f32::NEG_INFINITY;
    let largest = teeth.iter().fold(0.0, |m, tooth| math::larger(m, tooth.amplitude));
    let last_place = teeth.last().map_or(0.0, |tooth| tooth.place);
    // What a tooth without echo says: an amplitude of one standard deviation.
    let missing = math::ln(1.0 + 1.0 / 3.0) - at_threshold - HOLE;
    let (mut sum, mut first, mut index) = (0.0, None, 0usize);
    let mut polarity = None;
    let mut penalty = 0.0;
    if (hypothesis.zero - rules.start).abs() > rules.start_tolerance {
        penalty += START_CONTRADICTED;
    }
    let mut number = 1u32;
    loop {
        let place = hypothesis.zero + number as f32 * hypothesis.period;
        // Written so that "not a number" ends it too.
        if !(place <= last_place + tolerance && place <= rules.visible_to) || number > LAST_MULTIPLE {
            break;
        }
        if place < rules.visible_from {
            sum -= HIDDEN;
            hypothesis.hidden = true;
            number += 1;
            continue;
        }
        // Echoes passed on the way that no tooth explains.
        let mut hit: Option<Tooth> = None;
        while let Some(tooth) = teeth.get(index).filter(|tooth| tooth.place < place + tolerance) {
            // All back walls of one wall are upright, or all upside down.
            if tooth.place > place - tolerance && polarity.is_none_or(|p| p == tooth.polarity) {
                hit = Some(hit.filter(|h| h.amplitude > tooth.amplitude).unwrap_or(*tooth));
            } else if tooth.amplitude > 0.35 * largest {
                sum -= math::larger(tooth.gain, 0.0);
            }
            index += 1;
        }
        match hit {
            Some(tooth) => {
                sum += tooth.gain;
                if first.is_none() {
                    first = Some(number);
                    polarity = Some(tooth.polarity);
                    if tooth.amplitude < 0.22 * largest {
                        penalty += WEAK_FIRST;
                    }
                }
                if sum > hypothesis.score {
                    hypothesis.score = sum;
                    hypothesis.last = number;
                }
            }
            None => sum += missing,
        }
        number += 1;
    }
    hypothesis.score -= penalty;
    hypothesis.first = first.unwrap_or(1);
}

/// Places of the multiples during the fit, relative to `base` so that `f32` keeps its digits.
struct Line {
    base: u32,
    first: f32,
    period: f32,
}

impl Line {
    /// Place of the `step`-th multiple after the first, relative to the base.
    fn place(&self, step: usize) -> f32 {
        self.first + step as f32 * self.period
    }
}

/// One multiple in the fit.
#[derive(Clone, Copy, Debug)]
struct Member {
    /// Steps after the first multiple.
    step: u8,
    /// Lag (relative to the base, of the pulse's first sample) of its window's first entry.
    first_lag: i32,
    /// Fitted amplitude in codes, with sign.
    amplitude: f32,
    /// Root of its weight: the amplitude, less what its correlation's top is blunter than the pulse's.
    weight: f32,
    /// Distance of its own arrival from the line, in samples.
    off: f32,
}

/// Joint least squares of start and period over all multiples; `None` if the first one, whose place everything
/// counts from, is lost in it.
#[inline(never)]
fn fit(
    surroundings: &Surroundings<'_>,
    echoes: &mut EchoList,
    rules: &Rules,
    best: &Hypothesis,
    tolerance: f32,
    lags: &mut [f32; ECHO_CAPACITY * TRAIN_LAGS],
) -> Option<Train> {
    let sign = sign_of_train(echoes, best, tolerance);
    // Re-anchor at the first multiple's own echo: its position is exact where the hypothesis is rounded.
    let anchor = echoes
        .iter()
        .filter(|echo| echo.role == EchoRole::Other)
        .find(|echo| {
            let (number, off) = nearest(best, echo.position.as_samples());
            number == i32::try_from(best.first).unwrap_or(1) && off.abs() < tolerance
        })
        .map_or(
            SamplePosition::new(0, best.zero + best.first as f32 * best.period),
            |echo| echo.position,
        );
    let mut line = Line {
        base: anchor.index,
        first: anchor.fraction,
        period: best.period,
    };
    let origin = surroundings.pulse.facts.origin;
    let mut members = Members::new();
    collect(surroundings, rules, best, &line, sign, lags, &mut members);
    if members.first().is_none_or(|first| first.step > 0) {
        return None;
    }
    let (mut s0, mut s1, mut s2) = (0.0, 0.0, 0.0);
    for _ in 0..3 {
        (s0, s1, s2) = (0.0, 0.0, 0.0);
        let (mut t0, mut t1) = (0.0, 0.0);
        for (member, window) in members.iter_mut().zip(lags.chunks_exact(TRAIN_LAGS)) {
            let place = line.place(usize::from(member.step)) - origin - member.first_lag as f32;
            let value = interpolate::at(window, place);
            member.amplitude = value / surroundings.pulse.facts.energy;
            let sharp = sharpness(curvature(window, place, value), member.amplitude, &surroundings.pulse);
            member.weight = member.amplitude.abs() * sharp;
            member.off = slope(window, place) / (member.amplitude * sharp * surroundings.pulse.facts.derivative_energy);
            // A step beyond a tenth of a cycle is noise or another cycle: the line decides, not the echo.
            let limit = 0.1 * surroundings.samples_per_cycle;
            let off = math::clamp(member.off, -limit, limit);
            let (n, weight) = (f32::from(member.step), member.weight * member.weight);
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
        line.period = (first.as_samples() - rules.start) / best.first as f32;
    }
    // A lone echo before the start is no wall's; nor is a fit that has run away.
    if !(line.period > 0.0) {
        return None;
    }
    let variance = surroundings.noise * surroundings.noise / surroundings.pulse.facts.derivative_energy;
    let determinant = s0 * s2 - s1 * s1;
    let (mut scatter, mut strongest) = (0.0, 0.0);
    for member in &members {
        strongest = math::larger(strongest, member.weight * member.weight);
        scatter += member.off * member.off * member.weight * member.weight / variance;
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
        echoes: members.len() as u8,
        period: line.period,
        period_uncertainty,
        correlation: if lone { 0.0 } else { -s1 / math::sqrt(s0 * s2) },
        support: math::sqrt(s0 - strongest),
        first,
        start_difference: first.as_samples() - best.first as f32 * line.period - rules.start,
        unevenness,
        freedom,
        unexplained: unexplained(echoes, rules),
        may_be_double: best.hidden,
    })
}

/// Energy of what stands between the multiples over theirs. What does not look like the pulse (the tail of a strong
/// interface echo) counts by the share of it that does.
fn unexplained(echoes: &EchoList, rules: &Rules) -> f32 {
    let (mut explained, mut left) = (0.0, 0.0);
    for echo in echoes {
        let place = echo.position.as_samples();
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
fn sign_of_train(echoes: &EchoList, best: &Hypothesis, tolerance: f32) -> f32 {
    let mut strongest: Option<&Echo> = None;
    for echo in echoes.iter().filter(|echo| echo.role == EchoRole::Other) {
        let (number, off) = nearest(best, echo.position.as_samples());
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
    rules: &Rules,
    best: &Hypothesis,
    line: &Line,
    sign: f32,
    lags: &mut [f32; ECHO_CAPACITY * TRAIN_LAGS],
    members: &mut Members,
) {
    let codes = surroundings.record.codes();
    let minimum = FIT_MINIMUM * surroundings.amplitude_noise();
    let pulse = &surroundings.pulse;
    let middle = (TRAIN_LAGS / 2) as i32 - 1;
    let known = (best.last - best.first) as usize;
    let mut lost = 0;
    for step in 0..=u8::MAX {
        let place = line.place(usize::from(step));
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
        let amplitude =
            sign * interpolate::at(window, place - pulse.facts.origin - first_lag as f32) / pulse.facts.energy;
        if amplitude > minimum {
            lost = 0;
            let _ = members.push(Member {
                step,
                first_lag,
                amplitude: sign * amplitude,
                weight: amplitude,
                off: 0.0,
            });
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
    line: &Line,
    members: &[Member],
    tolerance: f32,
) {
    for member in members {
        let place = SamplePosition::new(line.base, line.place(usize::from(member.step)));
        let multiple = u8::try_from(best.first + u32::from(member.step)).unwrap_or(u8::MAX);
        let known = echoes
            .iter_mut()
            .find(|echo| echo.role == EchoRole::Other && echo.position.samples_after(place).abs() < tolerance);
        if let Some(echo) = known {
            echo.role = EchoRole::BackWall(multiple);
        } else if let Some(mut echo) = echo_at(
            surroundings,
            Arrival {
                position: SamplePosition::new(place.index, place.fraction + member.off),
                amplitude: member.amplitude,
                // The fit has not looked: the strong multiples speak for the train.
                group_lag: 0.0,
                sharpness: member.weight / member.amplitude.abs(),
            },
        ) {
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
