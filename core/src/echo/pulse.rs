//! The reference pulse, and what one echo tells about the pulse.

use crate::units::{Hertz, Metres, Seconds};

/// The pulse as one echo shows it. Frequencies are those of the two-way spectrum at -6 dB.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct PulseMetrics {
    /// Lower -6 dB frequency.
    pub lower_frequency: Hertz,
    /// Upper -6 dB frequency.
    pub upper_frequency: Hertz,
    /// -20 dB duration of the envelope.
    pub envelope_duration: Seconds,
    /// -20 dB duration of the rectified signal: shorter, and it moves in steps of half a cycle.
    pub rectified_duration: Seconds,
    /// Velocity times the envelope duration.
    pub spatial_pulse_length: Metres,
}

impl PulseMetrics {
    /// Arithmetic middle of the two limits.
    #[must_use]
    pub fn centre_frequency(&self) -> Hertz {
        (self.lower_frequency + self.upper_frequency) * 0.5
    }

    /// -6 dB width.
    #[must_use]
    pub fn bandwidth(&self) -> Hertz {
        self.upper_frequency - self.lower_frequency
    }

    /// Width over centre frequency.
    #[must_use]
    pub fn relative_bandwidth(&self) -> f32 {
        self.bandwidth() / self.centre_frequency()
    }

    /// Centre frequency over width.
    #[must_use]
    pub fn q(&self) -> f32 {
        self.centre_frequency() / self.bandwidth()
    }

    /// Half the spatial pulse length: walls and flaws closer than this merge.
    #[must_use]
    pub fn axial_resolution(&self) -> Metres {
        self.spatial_pulse_length * 0.5
    }
}
