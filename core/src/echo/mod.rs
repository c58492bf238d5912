//! What came back, and when.

pub mod arrival;
pub mod correlation;
pub mod envelope;
pub mod interpolate;
pub mod pulse;
pub mod separation;

use crate::units::{Decibels, SamplePosition, Seconds};
use crate::workspace::ECHO_CAPACITY;
use heapless::Vec;

/// Sign of an echo relative to the reference pulse.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Polarity {
    /// As the reference pulse.
    Positive,
    /// Upside down.
    Negative,
}

/// What an echo was found to be.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum EchoRole {
    /// The transmission pulse.
    TransmissionPulse,
    /// The end of the delay line, or the part's front surface behind a water path.
    Interface,
    /// The far side of a coating.
    Coating,
    /// A multiple of the wall; the number says which, from 1.
    BackWall(u8),
    /// An echo that travelled partly as a shear wave.
    ModeConverted,
    /// Anything else.
    Other,
}

/// One echo.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Echo {
    /// Place of the reference pulse's origin (its envelope's maximum) in the record.
    pub position: SamplePosition,
    /// The same as a time after the transmission trigger.
    pub arrival: Seconds,
    /// Standard uncertainty of the arrival from the record's noise alone.
    pub standard_uncertainty: Seconds,
    /// Fitted envelope peak in codes, positive.
    pub amplitude: f32,
    /// Sign relative to the reference pulse.
    pub polarity: Polarity,
    /// Envelope peak over the noise's root mean square per sample.
    pub snr: Decibels,
    /// Root of the energy that the fitted pulse leaves unexplained (beyond what noise explains) over
    /// the root of the pulse's energy: 0 for a perfect match.
    pub mismatch: f32,
    /// Some sample under the pulse is clipped.
    pub clipped: bool,
    /// What it was found to be.
    pub role: EchoRole,
}

/// The echoes of one record in the order of their arrival.
pub type EchoList = Vec<Echo, ECHO_CAPACITY>;
