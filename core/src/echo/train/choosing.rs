//! Which period explains the echoes?

use super::{Rules, Undecided};
use crate::echo::{Echo, EchoList, EchoRole, Polarity, Surroundings};
use crate::math;
use crate::order;
use crate::workspace::ECHO_CAPACITY;
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
/// How far the shadow of another train's echo reaches, over the shortest spacing of echoes: one duration of the envelope.
const SHADOW: f32 = 1.6;
/// Highest number of a multiple. A start so far off that more would fit before the first echo is a wrong one.
const LAST_MULTIPLE: u32 = 200;
/// Echoes of other origin that may stand between two multiples.
const STRANGERS: usize = 3;

/// One echo as the choice sees it.
#[derive(Clone, Copy, Debug)]
struct Tooth {
    place: f32,
    amplitude: f32,
    gain: f32,
    polarity: Polarity,
}

/// A period with its place, both of straight ways.
#[derive(Clone, Copy, Debug)]
pub struct Hypothesis {
    /// Place of the multiple with number 0: where the wall begins.
    pub(super) zero: f32,
    pub(super) period: f32,
    pub(super) score: f32,
    /// Some tooth lies in the dead zone.
    pub(super) hidden: bool,
    /// Multiples that have an echo.
    pub(super) echoes: u8,
    /// Number of the first and of the last multiple that has an echo.
    pub(super) first: u32,
    pub(super) last: u32,
}

impl Hypothesis {
    /// Does a multiple of this train lie within `tolerance` of a place of the straight way
    /// ([`Rules::straight_place`])? In samples.
    #[must_use]
    pub fn explains(&self, place: f32, tolerance: f32) -> bool {
        let (number, off) = nearest(self, place);
        number >= 1 && off.abs() < tolerance
    }

    /// Place of a multiple in samples from the record's first, were its way straight.
    #[must_use]
    pub fn place(&self, number: u32) -> f32 {
        self.zero + number as f32 * self.period
    }
}

type Teeth = Vec<Tooth, ECHO_CAPACITY>;

/// The best hypotheses, one a period, best first.
pub(super) type Ranked = Vec<Hypothesis, 8>;

/// Every hypothesis that the echoes propose, scored.
#[inline(never)]
pub(super) fn ranked(surroundings: &Surroundings<'_>, echoes: &EchoList, rules: &Rules<'_>, tolerance: f32) -> Ranked {
    let sigma = surroundings.amplitude_noise();
    let at_threshold = math::ln(1.0 + rules.threshold * rules.threshold / 3.0);
    let mut teeth: Teeth = Vec::new();
    // From here on every place is that of a straight way.
    let straight = Rules {
        shortest: rules.law.period_of_spacing(rules.shortest),
        visible_from: rules.straight_place(rules.visible_from),
        visible_to: rules.straight_place(rules.visible_to),
        ..*rules
    };
    let inside = |echo: &&Echo| echo.role == EchoRole::Other && echo.position.as_samples() <= rules.visible_to;
    for echo in echoes.iter().filter(inside) {
        let height = echo.amplitude / sigma;
        let gain = math::smaller(math::ln(1.0 + height * height / 3.0) - at_threshold, GAIN_LIMIT);
        let _ = teeth.push(Tooth {
            place: rules.straight_place(echo.position.as_samples()),
            amplitude: echo.amplitude,
            gain,
            polarity: echo.polarity,
        });
    }
    // Beside an echo that is somebody else's already, a weaker one does not show.
    let mut taken: Vec<f32, ECHO_CAPACITY> = Vec::new();
    for echo in echoes.iter().filter(|echo| matches!(echo.role, EchoRole::BackWall(_))) {
        let _ = taken.push(rules.straight_place(echo.position.as_samples()));
    }
    let rules = &straight;
    let mut ranked = Ranked::new();
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
            echoes: 0,
            first: 0,
            last: 0,
        };
        polish(&mut hypothesis, &teeth, tolerance);
        if !(hypothesis.period >= rules.shortest) {
            return;
        }
        score(&mut hypothesis, &teeth, &taken, rules, tolerance, at_threshold);
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
    ranked
}

/// The best hypothesis, if it leads.
pub(super) fn leader(ranked: &Ranked) -> Result<Hypothesis, Undecided> {
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
fn rank(ranked: &mut Ranked, hypothesis: Hypothesis, tolerance: f32) {
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

/// Number of the multiple nearest to a place of the straight way, and how far the place lies from it.
#[inline(never)]
pub(super) fn nearest(hypothesis: &Hypothesis, place: f32) -> (i32, f32) {
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
fn score(
    hypothesis: &mut Hypothesis,
    teeth: &Teeth,
    taken: &[f32],
    rules: &Rules<'_>,
    tolerance: f32,
    at_threshold: f32,
) {
    hypothesis.score = f32::NEG_INFINITY;
    let largest = teeth.iter().fold(0.0, |m, tooth| math::larger(m, tooth.amplitude));
    let last_place = teeth.last().map_or(0.0, |tooth| tooth.place);
    // What a tooth without echo says: an amplitude of one standard deviation.
    let missing = math::ln(1.0 + 1.0 / 3.0) - at_threshold - HOLE;
    let (mut sum, mut first, mut index, mut hits) = (0.0, None, 0usize, 0u8);
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
                hits += 1;
                if sum > hypothesis.score {
                    hypothesis.score = sum;
                    hypothesis.last = number;
                    hypothesis.echoes = hits;
                }
            }
            None if taken.iter().any(|t| (place - t).abs() < rules.shortest * SHADOW) => {}
            None => {
                sum += missing;
                // Not even all echoes that are left could still raise the score.
                let left = teeth.len().saturating_sub(index) as f32;
                if sum + left * GAIN_LIMIT < hypothesis.score {
                    break;
                }
            }
        }
        number += 1;
    }
    hypothesis.score -= penalty;
    hypothesis.first = first.unwrap_or(1);
}
