//! The probe as its data sheet describes it.

use crate::units::{Hertz, Metres};

/// How the probe meets the part.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum ProbeKind {
    /// The element sits on the part, with a wear plate and a couplant film between.
    Contact,
    /// A delay line or a water path stands between; its end gives an interface echo.
    DelayLine,
    /// A transmitter and a receiver under an angle: the sound path is a V.
    DualElement,
}

/// What touches the couplant: decides how much a film of it shifts the echo.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum ProbeFace {
    /// Ceramic wear plate, about 38.5 MRayl.
    Hard,
    /// Plastic (polystyrene or alike), about 2.5 MRayl.
    Plastic,
}

/// The probe as its data sheet describes it.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Probe {
    /// How it meets the part.
    pub kind: ProbeKind,
    /// Arithmetic middle of the -6 dB limits of the two-way spectrum.
    pub centre_frequency: Hertz,
    /// -6 dB width of the two-way spectrum over the centre frequency: 0.6 is 60 %. Above 0, up to 2.
    pub relative_bandwidth: f32,
    /// Diameter of the active element, if known: without it the budget has no term for the beam.
    pub element_diameter: Option<Metres>,
    /// What touches the couplant.
    pub face: ProbeFace,
    /// How far the couplant film may differ from the film that the zero was learned with. The
    /// uncertainty's coupling term follows from it; 0 leaves it out.
    pub couplant_film: Metres,
}

impl Probe {
    const fn of_kind(kind: ProbeKind, face: ProbeFace, centre_frequency: Hertz, relative_bandwidth: f32) -> Self {
        Self {
            kind,
            centre_frequency,
            relative_bandwidth,
            element_diameter: None,
            face,
            couplant_film: Metres::new(2e-6),
        }
    }

    /// A contact probe with a hard face and 2 µm of uncertain couplant film.
    #[must_use]
    pub const fn contact(centre_frequency: Hertz, relative_bandwidth: f32) -> Self {
        Self::of_kind(
            ProbeKind::Contact,
            ProbeFace::Hard,
            centre_frequency,
            relative_bandwidth,
        )
    }

    /// A probe with a plastic delay line (or a water path) and 2 µm of uncertain couplant film.
    #[must_use]
    pub const fn delay_line(centre_frequency: Hertz, relative_bandwidth: f32) -> Self {
        Self::of_kind(
            ProbeKind::DelayLine,
            ProbeFace::Plastic,
            centre_frequency,
            relative_bandwidth,
        )
    }

    /// A dual-element probe. Its V-shaped path is not corrected yet: every reading carries
    /// [`crate::outcome::Doubt::VPathUncorrected`].
    #[must_use]
    pub const fn dual_element(centre_frequency: Hertz, relative_bandwidth: f32) -> Self {
        Self::of_kind(
            ProbeKind::DualElement,
            ProbeFace::Plastic,
            centre_frequency,
            relative_bandwidth,
        )
    }

    /// The same probe with a known element diameter.
    #[must_use]
    pub const fn with_element_diameter(mut self, diameter: Metres) -> Self {
        self.element_diameter = Some(diameter);
        self
    }

    /// The same probe with another bound on the couplant film's change.
    #[must_use]
    pub const fn with_couplant_film(mut self, film: Metres) -> Self {
        self.couplant_film = film;
        self
    }

    /// The same probe with another face.
    #[must_use]
    pub const fn with_face(mut self, face: ProbeFace) -> Self {
        self.face = face;
        self
    }

    /// -6 dB width of the spectrum.
    #[must_use]
    pub const fn bandwidth(&self) -> Hertz {
        Hertz::new(self.centre_frequency.get() * self.relative_bandwidth)
    }

    /// Upper -6 dB limit of the spectrum.
    #[must_use]
    pub const fn upper_frequency(&self) -> Hertz {
        Hertz::new(self.centre_frequency.get() * (1.0 + 0.5 * self.relative_bandwidth))
    }
}
