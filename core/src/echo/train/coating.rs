//! Which echoes are those of a coating's own reverberation.
//!
//! **In**: the echoes with their roles and the time through the coating. **Out**: the role [`EchoRole::Coating`] for those that
//! lie a whole number of such times behind the start or behind a back wall, each weaker than the one before.

use super::{Rules, Train, tolerance};
use crate::echo::{EchoList, EchoRole, Surroundings};
use crate::math;

/// A coating's reverberation is followed this many times to and fro. At a fifth of the amplitude each, what comes
/// later is lost in the noise.
const LAST_ROUND: u8 = 6;
/// Of what the time through the coating is known, an echo of the n-th round may lie off by n times this, in cycles.
const PER_ROUND: f32 = 0.05;

/// Marks a coating's reverberations.
///
/// `trip` is the time through the coating and back in samples. Nothing is marked where it is shorter than the
/// shortest spacing that echoes are told apart at: there the rounds run into each other.
#[inline(never)]
pub fn mark_coating(
    surroundings: &Surroundings<'_>,
    echoes: &mut EchoList,
    rules: &Rules<'_>,
    train: &Train,
    trip: f32,
) {
    if !(trip >= rules.shortest) {
        return;
    }
    let tolerance = tolerance(surroundings);
    let period = train.period;
    for back_wall in 0..=train.first_multiple.saturating_add(train.echoes) {
        let base = if back_wall == 0 {
            Some((rules.start, f32::INFINITY))
        } else {
            let wall = echoes.iter().find(|echo| echo.role == EchoRole::BackWall(back_wall));
            wall.map(|echo| (echo.position.as_samples(), echo.amplitude))
        };
        let Some((place, mut before)) = base else { continue };
        for round in 1..=LAST_ROUND {
            let after = f32::from(round) * trip;
            if after > period + trip {
                break;
            }
            let reach = tolerance + PER_ROUND * f32::from(round) * surroundings.samples_per_cycle;
            let found = echoes.iter_mut().find(|echo| {
                matches!(echo.role, EchoRole::Other | EchoRole::Coating)
                    && (echo.position.as_samples() - place - after).abs() < reach
                    && echo.amplitude < before
            });
            if let Some(echo) = found {
                echo.role = EchoRole::Coating;
                before = math::smaller(before, echo.amplitude);
            }
        }
    }
}
