//! Which echoes are those of a coating's own reverberation.
//!
//! **In**: the echoes with their roles and the time through the coating. **Out**: the role [`EchoRole::Coating`] for those that
//! lie a whole number of such times behind the start, or behind a back wall that is stronger.

use super::{Rules, Train, tolerance};
use crate::echo::{EchoList, EchoRole, Surroundings};
use crate::math;
use crate::workspace::ECHO_CAPACITY;
use heapless::Vec;

/// A coating's reverberation is followed this many times to and fro. At a fifth of the amplitude each, what comes
/// later is lost in the noise.
const LAST_ROUND: f32 = 6.0;
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
    let cycle = surroundings.samples_per_cycle;
    // Where rounds begin, and what they are weaker than: the start of the wall, and every back wall.
    let mut starts: Vec<(f32, f32), ECHO_CAPACITY> = Vec::new();
    let _ = starts.push((rules.start, f32::INFINITY));
    for echo in echoes.iter().filter(|echo| matches!(echo.role, EchoRole::BackWall(_))) {
        let _ = starts.push((echo.position.as_samples(), echo.amplitude));
    }
    for echo in echoes.iter_mut().filter(|echo| echo.role == EchoRole::Other) {
        let is_round = |&(from, height): &(f32, f32)| {
            let after = echo.position.as_samples() - from;
            if !(after > 0.0 && after < train.period + trip && echo.amplitude < height) {
                return false;
            }
            let round = math::round_to_i32(after / trip) as f32;
            let reach = tolerance(surroundings) + PER_ROUND * round * cycle;
            (1.0..=LAST_ROUND).contains(&round) && (after - round * trip).abs() < reach
        };
        if starts.iter().any(is_round) {
            echo.role = EchoRole::Coating;
        }
    }
}
