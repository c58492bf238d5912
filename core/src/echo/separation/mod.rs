//! Are two neighbouring echoes two?
//!
//! **In**: two echoes and the record between them, or a stretch of the record. **Out**: [`Separation`].
//!
//! The classical verdict ([`judge`]) needs both: a spacing of at least half the spatial pulse length (in time: of
//! at least the -20 dB envelope duration, since the sound travels there and back), and an envelope
//! valley at least 6 dB under the lower of the two.
//!
//! Closer pairs, that one echo may hide, are a question of shape: [`model::decide`] fits one pulse and two, and says
//! by how much two explain more. That takes as long as half a reading, so it is done when asked for
//! ([`crate::Gauge::separate`]): tables of correlations ([`lags`]), the search over all pairs ([`pair`]), and for a pulse
//! that is only known from a data sheet the fit of its shape ([`shape`]).
//!
//! A wall whose echoes run into the interface echo of a delay line is more than two pulses: [`thin_wall`].
//!
//! What it reaches at 30 dB (5 MHz, 60 %, `val_separation*` print it): with a learned pulse 95 % right from 0.15 pulse
//! durations on, spacing at the Cramér-Rao bound; with a modelled one from 0.15 (equal echoes) or 0.25.
//!
//! When not to trust it: the two echoes are taken to have one shape (a phase between them of 10 degrees moves the spacing
//! by 5 to 7 ns at 5 MHz), and no more than two are looked for. A modelled pulse whose frequency, phase and
//! width are all off, or a probe whose pulse rises twice as fast as it decays, can give a spacing that is half a cycle off
//! below 0.4 pulse durations: learn the pulse.

mod dense;
mod equations;
pub mod lags;
pub mod model;
mod overlapping;
pub mod pair;
mod rough;
pub mod shape;
pub mod thin_wall;

use crate::echo::envelope::{squared_at, stride};
use crate::echo::pulse::PulseFacts;
use crate::echo::separation::model::{Answer, LEAST_SPACING, LONGEST, Stretch};
use crate::echo::{Echo, EchoRole, Surroundings};
use crate::math;
use crate::record::SampleClock;
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

/// How well the reference pulse's shape is known.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum PulseTrust {
    /// Modelled from the data sheet: phase, frequency, width and skewness may be off and are fitted too.
    Modelled,
    /// Learned from an isolated echo of this probe: the shape stands, up to a share of the energy.
    Learned {
        /// Energy that the pulse leaves unexplained of an isolated echo, over the echo's.
        mismatch: f32,
    },
}

/// Least energy that a learned pulse is taken to leave unexplained of another echo: -35 dB, a shift of the centre
/// frequency by less than 1 %.
pub const LEARNED_MISMATCH: f32 = 3.2e-4;

impl PulseTrust {
    /// Trust in a learned pulse: what it was found to leave unexplained of an isolated echo when it was learned and its own
    /// noise are allowed for, and at least [`LEARNED_MISMATCH`].
    #[must_use]
    pub fn learned(facts: &PulseFacts) -> Self {
        let noise = facts.noise * facts.noise * f32::from(facts.length) / facts.energy;
        Self::Learned {
            mismatch: math::larger(facts.mismatch * facts.mismatch + noise, LEARNED_MISMATCH),
        }
    }
}

/// Why two echoes are not told apart.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Unresolved {
    /// Two echoes were found, but they overlap, and the model was not asked.
    Overlap,
    /// One pulse explains the record about as well as two.
    OnePulse,
    /// Two pulses explain it better, but so close together that one attenuated echo would look the same.
    TooClose,
    /// Two pulses explain it better, but at more than one spacing.
    Ambiguous,
    /// With and without freedom of shape the answers differ.
    ModelsDisagree,
    /// Some sample is clipped: clipping forges second echoes.
    Clipped,
    /// The record ends here, or the pulse is too long for the scratch memory.
    NoRoom,
    /// The pulse is only known from a data sheet, and the question needs a learned one.
    PulseUnknown,
}

impl Unresolved {
    /// One stable word for programs.
    #[must_use]
    pub const fn word(self) -> &'static str {
        match self {
            Self::Overlap => "overlap",
            Self::OnePulse => "one-pulse",
            Self::TooClose => "too-close",
            Self::Ambiguous => "ambiguous-spacing",
            Self::ModelsDisagree => "models-disagree",
            Self::Clipped => "clipped",
            Self::NoRoom => "no-room",
            Self::PulseUnknown => "pulse-unknown",
        }
    }
}

/// Two echoes, as far as they have been told apart.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct EchoPair {
    /// When the first arrived, after the transmission trigger.
    pub first: Seconds,
    /// Time between the two.
    pub spacing: Seconds,
    /// Standard uncertainty of the spacing (k = 1) from noise, and from the allowance for the pulse's shape where the model
    /// was asked.
    pub standard_uncertainty: Seconds,
    /// Amplitude of the second over that of the first; negative if one is upside down.
    pub amplitude_ratio: f32,
}

/// The verdict on the nearest pair of echoes in the window.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Separation {
    /// The verdict.
    pub verdict: Verdict,
    /// The pair; `None` if there is one echo and no second was found in it.
    pub pair: Option<EchoPair>,
    /// Natural logarithm of the likelihood ratio of two echoes over one, where the model was asked: with equal odds
    /// beforehand, the logarithm of the odds. The noise carries the allowance for the pulse's shape.
    pub log_odds: Option<f32>,
    /// Why two are not told apart; `None` if they are.
    pub unresolved: Option<Unresolved>,
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
        verdict: if far {
            Verdict::ResolvedClassically
        } else {
            Verdict::NotResolved
        },
        pair: Some(EchoPair {
            first: first.arrival,
            spacing: second.arrival - first.arrival,
            standard_uncertainty: Seconds::new(math::sqrt(u * u + v * v)),
            amplitude_ratio: second.signed_amplitude() / first.signed_amplitude(),
        }),
        log_odds: None,
        unresolved: (!far).then_some(Unresolved::Overlap),
    }
}

/// Where a second echo would hide: the nearest pair if it overlaps, else the echo whose shape stands out most; and what the
/// classical verdict says of the nearest pair. `None` without echoes.
///
/// An echo's shape stands out by what the pulse leaves of it in codes; a fiftieth of the amplitude counts always, so
/// that of well-shaped echoes the strongest is taken.
#[must_use]
pub fn suspect(echoes: &[Echo], duration: f32) -> Option<(Echo, Echo)> {
    if let Some((first, second)) = nearest_pair(echoes)
        && second.position.samples_after(first.position) < LONGEST * duration
    {
        return Some((first, second));
    }
    let weight = |echo: &Echo| echo.amplitude * (echo.mismatch + 0.02);
    let mut most: Option<Echo> = None;
    for echo in echoes.iter().filter(|echo| echo.role != EchoRole::TransmissionPulse) {
        if most.is_none_or(|most| weight(echo) > weight(&most)) {
            most = Some(*echo);
        }
    }
    most.map(|echo| (echo, echo))
}

/// The stretch in which two echoes are looked for instead of those from `first` to `last` (which may be the same): 1.4
/// pulse durations to either side of one, less where the next echoes begin.
#[must_use]
pub fn stretch_around(first: &Echo, last: &Echo, echoes: &[Echo], duration: f32, trust: PulseTrust) -> Stretch {
    let span = last.position.samples_after(first.position);
    let reach = math::larger(1.4 * duration - 0.5 * span, 0.6 * duration);
    let (mut before, mut after) = (reach, reach);
    for echo in echoes {
        let ahead = first.position.samples_after(echo.position);
        let behind = echo.position.samples_after(last.position);
        // What lies a pulse's duration off its middle is the neighbour's own.
        let free = |distance: f32| math::larger(distance - 0.9 * duration, 0.2 * duration);
        if ahead > 0.0 {
            before = math::smaller(before, free(ahead));
        }
        if behind > 0.0 {
            after = math::smaller(after, free(behind));
        }
    }
    Stretch {
        from: first.position.as_samples() - before,
        to: last.position.as_samples() + after,
        least_spacing: LEAST_SPACING,
        trust,
    }
}

/// The model's answer as a verdict, beside the classical one on the nearest pair if there are two echoes.
#[must_use]
pub fn verdict(answer: &Answer, classical: Option<Separation>, clock: &SampleClock) -> Separation {
    match (answer.split, classical) {
        (Ok(split), _) => {
            let period = clock.rate.period();
            Separation {
                verdict: Verdict::ResolvedByModel,
                pair: Some(EchoPair {
                    first: clock.time_of(split.first),
                    spacing: period * split.spacing,
                    standard_uncertainty: period * split.spacing_uncertainty,
                    amplitude_ratio: split.second_amplitude / split.first_amplitude,
                }),
                log_odds: answer.log_odds,
                unresolved: None,
            }
        }
        (Err(_), Some(classical)) if classical.verdict == Verdict::ResolvedClassically => Separation {
            log_odds: answer.log_odds,
            ..classical
        },
        (Err(why), classical) => Separation {
            verdict: Verdict::NotResolved,
            pair: classical.and_then(|classical| classical.pair),
            log_odds: answer.log_odds,
            unresolved: Some(why),
        },
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
