//! What can be wrong with a set-up.

use core::fmt;

/// What is wrong with a set-up: the caller's fault, found at build or at start.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum SetupError {
    /// The sample rate is not a positive number.
    SampleRate,
    /// The sample rate is below twice the upper band limit.
    SampleRateBelowBand,
    /// The centre frequency is not a positive number.
    CentreFrequency,
    /// The relative bandwidth is not above 0 and up to 200 %.
    RelativeBandwidth,
    /// The element diameter is not a positive number.
    ElementDiameter,
    /// The uncertainty of the element diameter is not between 0 and 100 %.
    ElementDiameterUncertainty,
    /// The couplant film is negative or not a number.
    CouplantFilm,
    /// Length or velocity of the delay line is not a positive number.
    DelayLine,
    /// The distance of the elements or its uncertainty is negative or not a number, or the probe has one element.
    ElementSeparation,
    /// The velocity is not a positive number.
    Velocity,
    /// The velocity's uncertainty is negative or not a number.
    VelocityUncertainty,
    /// The part's share of the velocity's uncertainty is negative or not a number.
    PartVelocityUncertainty,
    /// The velocity's temperature coefficient is not a number, or no velocity is left at the part's temperature.
    TemperatureCoefficient,
    /// The temperature that the velocity holds at is none.
    ReferenceTemperature,
    /// The part's temperature is none, or its uncertainty is negative.
    PartTemperature,
    /// The phase between echoes is negative, above 180° or not a number.
    EchoPhase,
    /// The back wall's roughness is negative, above 100 mm or not a number.
    Roughness,
    /// The zero offset is not a number.
    ZeroOffset,
    /// The zero's uncertainty is negative or not a number.
    ZeroUncertainty,
    /// The correlation of velocity and zero is not between -1 and 1.
    ZeroCorrelation,
    /// The thickness of the block that the zero was learned on is negative or not a number.
    ZeroLearnedOn,
    /// The window's start does not lie before its end.
    Window,
    /// The trigger's jitter is negative, not a number or beyond a millisecond.
    TriggerJitter,
    /// The coverage factor is not a positive number.
    CoverageFactor,
    /// The coating's velocity is not a positive number, or its uncertainty is negative.
    CoatingVelocity,
    /// The part's radius is not a positive length.
    Surface,
    /// The calibrated range is empty, reversed or not positive.
    CalibratedRange,
    /// The reference pulse needs more than [`super::PULSE_CAPACITY`] samples.
    PulseTooLong,
    /// The reference pulse has no echo in it: too short, all zero, or not numbers.
    PulseEmpty,
    /// The reference pulse's noise or mismatch is not between 0 and 1, or what it was learned on is no thickness.
    PulseQuality,
    /// The caller's scratch memory is too small; the numbers are samples of a record.
    WorkspaceTooSmall {
        /// What is needed.
        needed: u32,
        /// What was given.
        got: u32,
    },
}

impl SetupError {
    /// The field and the remedy, in one sentence.
    #[must_use]
    pub const fn sentence(&self) -> &'static str {
        match self {
            Self::SampleRate => "sample rate must be a positive number of hertz, up to 1e12",
            Self::SampleRateBelowBand => {
                "sample rate must be at least twice the probe's upper -6 dB frequency: sample faster or use a lower probe"
            }
            Self::CentreFrequency => "centre frequency must be a positive number of hertz, up to 1e12",
            Self::RelativeBandwidth => "relative bandwidth must be above 0 and at most 200 %",
            Self::ElementDiameter => "element diameter must be a positive length up to 1 km, or left out if unknown",
            Self::ElementDiameterUncertainty => "relative uncertainty of the element diameter must be from 0 to 100 %",
            Self::CouplantFilm => "couplant film must be zero or a positive length up to 1 m",
            Self::DelayLine => {
                "delay line must have a positive length up to 1 km and a velocity from 1 to 1e6 m/s, or be left out"
            }
            Self::ElementSeparation => {
                "element separation and its uncertainty must be zero or positive, and the probe a dual-element one"
            }
            Self::Velocity => "velocity must be a positive number of metres per second, from 1 to 1e6",
            Self::VelocityUncertainty => "velocity standard uncertainty must be zero or positive, up to 1e6 m/s",
            Self::PartVelocityUncertainty => {
                "part velocity standard uncertainty must be zero or positive, up to 1e6 m/s"
            }
            Self::TemperatureCoefficient => {
                "temperature coefficient must be metres per second and kelvin that leave a velocity, from -1000 to 1000"
            }
            Self::ReferenceTemperature => "the velocity's temperature must be degrees Celsius, from -273.15 to 3000",
            Self::EchoPhase => "the phase between echoes must lie from 0 to 180 degrees",
            Self::Roughness => "the back wall's roughness must lie from 0 to 100 mm",
            Self::PartTemperature => {
                "the part's temperature must be degrees Celsius, from -273.15 to 3000, its standard uncertainty positive"
            }
            Self::ZeroOffset => "zero offset must be a number of seconds, less than 1",
            Self::ZeroUncertainty => "zero standard uncertainty must be zero or positive, less than 1 s",
            Self::ZeroCorrelation => "correlation of velocity and zero must lie between -1 and 1",
            Self::ZeroLearnedOn => {
                "the block that the zero was learned on must be zero or a positive length up to 1 km"
            }
            Self::Window => "the window must start before it ends",
            Self::TriggerJitter => "trigger jitter must be zero or positive, up to 1 ms",
            Self::CoverageFactor => "coverage factor must be a positive number up to 1000, normally 2",
            Self::CoatingVelocity => {
                "coating velocity must be metres per second from 1 to 1e6, its standard uncertainty zero or positive"
            }
            Self::Surface => "the part's radius must be a length from 0.1 mm to 10 km: leave it out for a flat part",
            Self::CalibratedRange => "calibrated range must go from a positive thickness to one not below it",
            Self::PulseTooLong => {
                "the reference pulse is longer than the gauge can hold: lower the sample rate or use a wider band"
            }
            Self::PulseEmpty => "the reference pulse holds no echo: learn it again on a block",
            Self::PulseQuality => {
                "the reference pulse's noise and mismatch must be shares from 0 to 1, its block a thickness: learn it again"
            }
            Self::WorkspaceTooSmall { .. } => "the scratch memory is smaller than the record",
        }
    }
}

impl fmt::Display for SetupError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(self.sentence())?;
        if let Self::WorkspaceTooSmall { needed, got } = self {
            write!(f, " (needed {needed} samples, got {got})")?;
        }
        Ok(())
    }
}

impl core::error::Error for SetupError {}
