//! The probe as its data sheet describes it.

use crate::units::{Hertz, Metres, MetresPerSecond};

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

/// A delay line, or each of the two delay blocks of a dual-element probe.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct DelayLine {
    /// Length, once.
    pub length: Metres,
    /// Velocity of longitudinal waves in it.
    pub velocity: MetresPerSecond,
}

/// How far apart the elements of a dual-element probe sit.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct ElementSeparation {
    /// From centre to centre, where they sit.
    pub distance: Metres,
    /// Its standard uncertainty (k = 1): what is not known of the centres between which sound goes, and of the blocks.
    pub standard_uncertainty: Metres,
}

impl ElementSeparation {
    /// A distance with its standard uncertainty.
    #[must_use]
    pub const fn new(distance: Metres, standard_uncertainty: Metres) -> Self {
        Self {
            distance,
            standard_uncertainty,
        }
    }
}

/// The sign that echoes are known to have, relative to the reference pulse.
///
/// Knowing it saves 3 to 5 dB before half a cycle can be misread. A pulse learned on a block's back wall makes back walls in air
/// [`EchoSign::AsPulse`]; the interface echo of a plastic delay line on metal is then [`EchoSign::Inverted`]. With a
/// modelled pulse it is not known (its phase isn't).
#[derive(Clone, Copy, Debug, PartialEq, Eq, Default)]
pub enum EchoSign {
    /// Either: whichever fits better.
    #[default]
    Unknown,
    /// As the reference pulse.
    AsPulse,
    /// Upside down.
    Inverted,
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
    /// Relative standard uncertainty (k = 1) of the diameter that acts: 0.07 is 7 %. The one of the data sheet is the
    /// plate's; areas that act have been found up to 40 % smaller.
    pub element_diameter_uncertainty: f32,
    /// What touches the couplant.
    pub face: ProbeFace,
    /// How far the couplant film may differ from the film that the zero was learned with. The
    /// uncertainty's coupling term follows from it; 0 leaves it out.
    pub couplant_film: Metres,
    /// Standard uncertainty (k = 1) of the phase by which coupling turns one echo of a record against another, in degrees:
    /// see [`Probe::phase_between_echoes`]. `None`: the default of the face.
    pub echo_phase_degrees: Option<f32>,
    /// The delay line, or the blocks of a dual-element probe, if known.
    pub delay_line: Option<DelayLine>,
    /// Distance of a dual-element probe's elements, if known: without it every reading carries
    /// [`crate::outcome::Doubt::VPathUncorrected`]. Without blocks in [`Probe::delay_line`] the elements sit on the part.
    pub separation: Option<ElementSeparation>,
    /// Sign of the back-wall echoes.
    pub back_wall_sign: EchoSign,
    /// Sign of the interface echo behind a delay line.
    pub interface_sign: EchoSign,
}

impl Probe {
    const fn of_kind(kind: ProbeKind, face: ProbeFace, centre_frequency: Hertz, relative_bandwidth: f32) -> Self {
        Self {
            kind,
            centre_frequency,
            relative_bandwidth,
            element_diameter: None,
            element_diameter_uncertainty: 0.07,
            face,
            couplant_film: Metres::new(2e-6),
            echo_phase_degrees: None,
            delay_line: None,
            separation: None,
            back_wall_sign: EchoSign::Unknown,
            interface_sign: EchoSign::Unknown,
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

    /// A dual-element probe. Its V-shaped path is corrected once [`Probe::with_separation`] says how far apart the
    /// elements sit, and [`Probe::with_delay_line`] on what.
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

    /// The same probe with another relative uncertainty of the element's diameter.
    #[must_use]
    pub const fn with_element_diameter_uncertainty(mut self, relative: f32) -> Self {
        self.element_diameter_uncertainty = relative;
        self
    }

    /// The same probe with another bound on the couplant film's change.
    #[must_use]
    pub const fn with_couplant_film(mut self, film: Metres) -> Self {
        self.couplant_film = film;
        self
    }

    /// The same probe with another uncertainty of the phase between echoes, in degrees.
    #[must_use]
    pub const fn with_echo_phase_degrees(mut self, degrees: f32) -> Self {
        self.echo_phase_degrees = Some(degrees);
        self
    }

    /// Standard uncertainty (k = 1) of each echo's phase, in radians, beside what the film's mean thickness does
    /// ([`Probe::couplant_film`]): film that is wedged or in patches, tilt and roughness under the probe turn
    /// the echoes of one record by different amounts. A degree is 0.56 ns at 5 MHz, 1.6 µm of steel.
    ///
    /// What is stated; else 2° for a hard face, of which every reflection depends on the film, and half a degree for a
    /// plastic one, which steel hardly notices (both common practice); nothing where the set-up says that the film
    /// cannot differ. State your own if you have measured the scatter of a sound block's echoes from coupling to coupling.
    #[must_use]
    pub const fn phase_between_echoes(&self) -> f32 {
        let degrees = match (self.echo_phase_degrees, self.face) {
            (Some(stated), _) => stated,
            (None, _) if self.couplant_film.get() == 0.0 => 0.0,
            (None, ProbeFace::Hard) => 2.0,
            (None, ProbeFace::Plastic) => 0.5,
        };
        degrees * (core::f32::consts::PI / 180.0)
    }

    /// The same probe with known signs of the back-wall echoes and of the interface echo.
    #[must_use]
    pub const fn with_signs(mut self, back_wall: EchoSign, interface: EchoSign) -> Self {
        self.back_wall_sign = back_wall;
        self.interface_sign = interface;
        self
    }

    /// The same probe with another face.
    #[must_use]
    pub const fn with_face(mut self, face: ProbeFace) -> Self {
        self.face = face;
        self
    }

    /// The same probe with a known delay line, or blocks of a dual-element probe.
    #[must_use]
    pub const fn with_delay_line(mut self, delay_line: DelayLine) -> Self {
        self.delay_line = Some(delay_line);
        self
    }

    /// The same dual-element probe with a known distance of its elements.
    #[must_use]
    pub const fn with_separation(mut self, separation: ElementSeparation) -> Self {
        self.separation = Some(separation);
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
