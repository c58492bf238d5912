//! Are two neighbouring echoes two?
//!
//! **In**: two echoes and the record between them. **Out**: [`Separation`].
//!
//! The classical verdict needs both: a spacing of at least half the spatial pulse length (in time: of
//! at least the -20 dB envelope duration, since the sound travels there and back), and an envelope
//! valley at least 6 dB under the lower of the two. Closer pairs are "not resolved" here, although
//! each may have been found: what is read from them carries the neighbour's error.

use crate::echo::envelope::{squared_at, stride};
use crate::echo::{Echo, Surroundings};
use crate::math;
use crate::units::Seconds;

/// Squared ratio of amplitudes for 6 dB: 10^(-6/10).
const SQUARED_6DB: f32 = 0.251_188_64;

/// Whether the nearest pair of echoes can be told apart.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Verdict {
    /// Spacing of at least half the spatial pulse length and a valley of at least 6 dB.
    ResolvedClassically,
    /// Closer than that, but a model of two pulses explains the record and one of a single pulse
    /// does not.
    ResolvedByModel,
    /// Not to be told apart.
    NotResolved,
}

impl Verdict {
    /// One stable word for programs.
    #[must_use]
    pub const fn word(self) -> &'static str {
        match self {
            Self::ResolvedClassically => "resolved-classically",
            Self::ResolvedByModel => "resolved-by-model",
            Self::NotResolved => "not-resolved",
        }
    }
}

/// The verdict on the nearest pair of echoes in the window.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Separation {
    /// Time between the two.
    pub spacing: Seconds,
    /// Standard uncertainty of the spacing from noise.
    pub standard_uncertainty: Seconds,
    /// The verdict.
    pub verdict: Verdict,
    /// Natural logarithm of the odds for two echoes against one, where the model was asked.
    pub log_odds: Option<f32>,
}

/// The nearest two of a list of echoes in the order of their arrival; `None` with fewer than two.
#[must_use]
pub fn nearest_pair(echoes: &[Echo]) -> Option<(Echo, Echo)> {
    let mut nearest: Option<(Echo, Echo)> = None;
    for pair in echoes.windows(2) {
        if let [a, b] = pair {
            let spacing = b.position.samples_after(a.position);
            if nearest.is_none_or(|(p, q)| spacing < q.position.samples_after(p.position)) {
                nearest = Some((*a, *b));
            }
        }
    }
    nearest
}

/// The verdict on two echoes, `first` before `second`. `scratch` holds the stretch between them; where
/// it is too short, they are so far apart that the valley need not be looked at.
#[must_use]
pub fn judge(surroundings: &Surroundings<'_>, first: &Echo, second: &Echo, scratch: &mut [f32]) -> Separation {
    let spacing = second.position.samples_after(first.position);
    let duration = surroundings.pulse.facts.envelope_duration;
    let far = spacing >= duration && valley_is_deep(surroundings, first, second, scratch);
    let (u, v) = (first.standard_uncertainty.get(), second.standard_uncertainty.get());
    Separation {
        spacing: second.arrival - first.arrival,
        standard_uncertainty: Seconds::new(math::sqrt(u * u + v * v)),
        verdict: if far {
            Verdict::ResolvedClassically
        } else {
            Verdict::NotResolved
        },
        log_odds: None,
    }
}

/// Does the envelope between two echoes fall 6 dB below the lower one?
fn valley_is_deep(surroundings: &Surroundings<'_>, first: &Echo, second: &Echo, scratch: &mut [f32]) -> bool {
    let stride = stride(surroundings.samples_per_cycle);
    // The Hilbert filter reaches 15 strides to either side.
    let margin = 15 * stride;
    let (from, to) = (first.position.index as usize, second.position.index as usize);
    let start = from.saturating_sub(margin);
    let Some(codes) = surroundings.record.codes().get(start..) else {
        return false;
    };
    let length = (to + margin + 1).saturating_sub(start).min(codes.len());
    let Some(samples) = scratch.get_mut(..length) else {
        return true;
    };
    let mut mean = 0.0;
    for (sample, &code) in samples.iter_mut().zip(codes) {
        *sample = f32::from(code);
        mean += *sample;
    }
    mean /= length.max(1) as f32;
    for sample in samples.iter_mut() {
        *sample -= mean;
    }
    let lower = math::smaller(first.amplitude, second.amplitude);
    let level = lower * lower * SQUARED_6DB;
    (from - start..=to.saturating_sub(start)).any(|i| squared_at(samples, i, stride) <= level)
}
