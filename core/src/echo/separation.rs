//! Are two neighbouring echoes two?

use crate::units::Seconds;

/// Whether the nearest pair of echoes can be told apart.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Verdict {
    /// Spacing of at least half the spatial pulse length and a valley of at least 6 dB.
    ResolvedClassically,
    /// Closer than that, but a model of two pulses explains the record and one of a single pulse
    /// does not.
    ResolvedByModel,
    /// Not to be told apart.
    NotResolved,
}

/// The verdict on the nearest pair of echoes in the window.
#[derive(Clone, Copy, Debug, PartialEq)]
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
