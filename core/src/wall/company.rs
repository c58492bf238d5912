//! Does a back wall have company? Cheap signs of a second reflector close to it, where no echo of its own stands out before
//! the first back wall: a step, a pit or a lamination under a part of the beam.
//!
//! Two echoes that are one at the first back wall drift apart from multiple to multiple. First they beat: heights of
//! neighbouring multiples, which fall evenly behind a lone wall, sink and rise. Then they part: later multiples have an echo
//! before them, at n times a shorter period.

use crate::echo::train::Train;
use crate::echo::{Echo, EchoRole, Surroundings, UNRECOGNISED};
use crate::math;

/// How far the middle one of three neighbouring multiples may rise above an even fall, in nepers, beyond what noise explains. In
/// the near field a plane beam's spreading bends heights by up to 0.2 (Rogers & Van Buren 1974, formula from memory).
const RISE: f32 = 0.25;
/// How far it may sink below. In the far field heights go with 1 / n, and of the first three the second lies ln(4/3) = 0.29 low.
const SAG: f32 = 0.34;
/// Standard deviations that noise is allowed.
const CHANCE: f32 = 4.0;
/// Least height of an echo beside a multiple, as a share of the multiple's.
const SHARE: f32 = 0.15;
/// Cycles by which two places may differ that stand for one period.
const TOLERANCE: f32 = 0.15;

fn multiple(echoes: &[Echo], number: u8) -> Option<&Echo> {
    echoes.iter().find(|echo| echo.role == EchoRole::BackWall(number))
}

/// Do neighbouring multiples beat?
#[must_use]
#[inline(never)]
pub fn beats(surroundings: &Surroundings<'_>, echoes: &[Echo]) -> bool {
    let root = math::sqrt(surroundings.pulse.facts.energy);
    let relative = |echo: &Echo| surroundings.timing_noise.at(echo.position.as_samples()) / (root * echo.amplitude);
    echoes.iter().any(|middle| {
        let EchoRole::BackWall(number) = middle.role else {
            return false;
        };
        let neighbours = (
            multiple(echoes, number.saturating_sub(1)),
            multiple(echoes, number.saturating_add(1)),
        );
        let (Some(before), Some(after)) = neighbours else {
            return false;
        };
        if before.clipped || middle.clipped || after.clipped {
            return false;
        }
        let bend = math::ln(before.amplitude * after.amplitude / (middle.amplitude * middle.amplitude));
        let (a, b, c) = (relative(before), 2.0 * relative(middle), relative(after));
        let chance = CHANCE * math::sqrt(a * a + b * b + c * c);
        bend > SAG + chance || bend < -(RISE + chance)
    })
}

/// Do two multiples or more have an echo before them at the same share of a shorter period?
#[must_use]
#[inline(never)]
pub fn parts(surroundings: &Surroundings<'_>, echoes: &[Echo], train: &Train) -> bool {
    let zero = train.first.as_samples() - f32::from(train.first_multiple) * train.period;
    let tolerance = TOLERANCE * surroundings.samples_per_cycle;
    // Which multiple an echo precedes, and the period that it would stand for.
    let shorter = |echo: &Echo| {
        if echo.role != EchoRole::Other || !(echo.mismatch < UNRECOGNISED) {
            return None;
        }
        let place = echo.position.as_samples();
        let number = math::floor((place - zero) / train.period) + 1.0;
        if number < 2.0 {
            return None;
        }
        let of = multiple(echoes, u8::try_from(math::saturating_i32(number)).ok()?)?;
        let fits = echo.amplitude > SHARE * of.amplitude && surroundings.stands_out(echo.amplitude, place);
        fits.then_some((number, (place - zero) / number))
    };
    echoes.iter().any(|echo| {
        let Some((number, period)) = shorter(echo) else {
            return false;
        };
        let alike = |other: &Echo| {
            shorter(other).is_some_and(|(later, same)| later > number && (same - period).abs() * later < tolerance)
        };
        echoes.iter().any(alike)
    })
}
