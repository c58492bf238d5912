//! What the gauge must be told before it can measure: probe, material, zero, span, window.
//!
//! Everything here is `const`, so that a set-up written into firmware is checked by the compiler:
//! [`GaugeSetup::new`] in a `const` stops the build with the sentence that names the field, while
//! [`GaugeSetup::try_new`] returns a [`SetupError`] for a set-up that comes from a file or a menu.

mod error;
mod material;
mod part;
mod probe;

pub use error::SetupError;
pub use material::{Material, PartTemperature, UNKNOWN_TEMPERATURE, VelocityTemperature};
pub use part::{Coating, Surface};
pub use probe::{DelayLine, EchoSign, ElementSeparation, Probe, ProbeFace, ProbeKind};

use crate::units::{Celsius, Hertz, Metres, MetresPerSecond, Seconds};

/// Longest reference pulse, in samples. A pulse that needs more is refused with
/// [`SetupError::PulseTooLong`]: lower the sample rate or average neighbouring samples.
pub const PULSE_CAPACITY: usize = 512;

/// Is `value` a number from `low` to `high`? Limits far beyond anything real keep every result within what an
/// `f32` holds: the square of a wall's uncertainty must not overflow.
const fn within(value: f32, low: f32, high: f32) -> bool {
    value >= low && value <= high
}

/// From absolute zero to where no probe lives.
const fn is_temperature(temperature: Celsius) -> bool {
    within(temperature.get(), -273.15, 3000.0)
}

/// Which two events the thickness is read between.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Span {
    /// 2 d / c = first back wall - zero offset. Needs a zero learned on a block.
    TransmissionPulseToBackWall,
    /// 2 d / c = first back wall - interface echo - zero offset (normally 0).
    InterfaceToBackWall,
    /// 2 d / c = the period of the back-wall train; the zero offset is only used to check.
    BackWallToBackWall,
}

/// The probe's zero, as learned on a block. It belongs to the reference pulse it was learned with.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Zero {
    /// Where the part's front surface lies on the record's time axis: for a dual-element probe the time of the straight
    /// way through its blocks.
    pub offset: Seconds,
    /// Its standard uncertainty (k = 1).
    pub standard_uncertainty: Seconds,
    /// Correlation between the errors of velocity and offset, from -1 to 1. A two-block calibration
    /// makes it strongly positive; to leave it out would misstate every uncertainty.
    pub velocity_correlation: f32,
    /// Which block's beam spreading the offset holds: that of a block on which it was learned without correcting for the
    /// beam, or none (a thickness of 0) if the beam was corrected. Not known: what rests on the offset is not corrected
    /// for the beam either.
    pub learned_on: Option<Metres>,
}

impl Zero {
    /// A zero whose error has nothing to do with the velocity's.
    #[must_use]
    pub const fn new(offset: Seconds, standard_uncertainty: Seconds) -> Self {
        Self {
            offset,
            standard_uncertainty,
            velocity_correlation: 0.0,
            learned_on: None,
        }
    }

    /// The same zero, learned on a block of this thickness without correcting for the beam; a thickness of 0 if the beam
    /// was corrected.
    #[must_use]
    pub const fn with_learned_on(mut self, block: Metres) -> Self {
        self.learned_on = Some(block);
        self
    }
}

/// The part of the record in which echoes are looked for.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Window {
    /// Start: beyond the transmission pulse and its recovery (the dead zone).
    pub from: Seconds,
    /// End. A record that ends earlier is used as far as it goes.
    pub to: Seconds,
}

/// Thicknesses that a calibration has covered.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct CalibratedRange {
    /// Thinnest block.
    pub from: Metres,
    /// Thickest block.
    pub to: Metres,
}

/// The complete set-up of a gauge.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct GaugeSetup {
    /// Samples per second of every record that will be measured.
    pub sample_rate: Hertz,
    /// The probe.
    pub probe: Probe,
    /// The part's material.
    pub material: Material,
    /// The zero.
    pub zero: Zero,
    /// Between which events the thickness is read.
    pub span: Span,
    /// Where echoes are looked for.
    pub window: Window,
    /// k of the expanded uncertainty: 2 stands for about 95 %.
    pub coverage_factor: f32,
    /// A coating, if its thickness shall be read too.
    pub coating: Option<Coating>,
    /// What the calibration covered, if there was one.
    pub calibrated: Option<CalibratedRange>,
    /// Jitter of the pulser against the sample clock, root mean square from shot to shot ([`crate::ShotArrivals`] measures
    /// it): it moves arrivals that count from the trigger, divided by the root of n in an average of n shots.
    pub trigger_jitter: Seconds,
    /// Root mean square roughness of the back wall, for the budget: a reading gives the mean wall under the beam, and the
    /// least one is two to two and a half times the roughness thinner. 0 (the default) for a smooth one.
    pub roughness: Metres,
    /// The shape of the part under the probe; flat (the default) if nobody says otherwise.
    pub surface: Surface,
}

impl GaugeSetup {
    /// Checks everything and builds the set-up. k is 2; no coating; no calibrated range; no jitter.
    ///
    /// # Errors
    /// The first field that is wrong, as a [`SetupError`].
    pub const fn try_new(
        sample_rate: Hertz,
        probe: Probe,
        material: Material,
        zero: Zero,
        span: Span,
        window: Window,
    ) -> Result<Self, SetupError> {
        let setup = Self {
            sample_rate,
            probe,
            material,
            zero,
            span,
            window,
            coverage_factor: 2.0,
            coating: None,
            calibrated: None,
            trigger_jitter: Seconds::ZERO,
            roughness: Metres::ZERO,
            surface: Surface::Flat,
        };
        match setup.check() {
            None => Ok(setup),
            Some(error) => Err(error),
        }
    }

    /// The same for a `const`, where a wrong set-up stops the build with the sentence that names
    /// the field.
    ///
    /// # Panics
    /// On a wrong set-up. Meant for `const` only; at run time use [`GaugeSetup::try_new`].
    #[must_use]
    #[allow(clippy::panic)]
    pub const fn new(
        sample_rate: Hertz,
        probe: Probe,
        material: Material,
        zero: Zero,
        span: Span,
        window: Window,
    ) -> Self {
        match Self::try_new(sample_rate, probe, material, zero, span, window) {
            Ok(setup) => setup,
            Err(error) => panic!("{}", error.sentence()),
        }
    }

    /// The same set-up with another coverage factor.
    #[must_use]
    pub const fn with_coverage_factor(mut self, k: f32) -> Self {
        self.coverage_factor = k;
        self
    }

    /// The same set-up for a coated part.
    #[must_use]
    pub const fn with_coating(mut self, coating: Coating) -> Self {
        self.coating = Some(coating);
        self
    }

    /// The same set-up with the thicknesses that its calibration covered.
    #[must_use]
    pub const fn with_calibrated_range(mut self, range: CalibratedRange) -> Self {
        self.calibrated = Some(range);
        self
    }

    /// The same set-up for a pulser that jitters so much, root mean square from shot to shot.
    #[must_use]
    pub const fn with_trigger_jitter(mut self, jitter: Seconds) -> Self {
        self.trigger_jitter = jitter;
        self
    }

    /// The velocity that a thickness is made with: the material's, at the part's temperature where both are known.
    #[must_use]
    pub const fn velocity(&self) -> MetresPerSecond {
        self.material.velocity_in_part()
    }

    /// The same set-up for a back wall of this root mean square roughness.
    #[must_use]
    pub const fn with_roughness(mut self, roughness: Metres) -> Self {
        self.roughness = roughness;
        self
    }

    /// The same set-up for a part of this shape.
    #[must_use]
    pub const fn with_surface(mut self, surface: Surface) -> Self {
        self.surface = surface;
        self
    }

    /// Samples per cycle of the centre frequency.
    #[must_use]
    pub const fn samples_per_cycle(&self) -> f32 {
        self.sample_rate.get() / self.probe.centre_frequency.get()
    }

    /// The first thing that is wrong with this set-up; `None` if it can be used. Called by
    /// [`GaugeSetup::try_new`] and again when a gauge is made, because the fields are public.
    #[must_use]
    pub const fn check(&self) -> Option<SetupError> {
        let rate = self.sample_rate.get();
        let probe = &self.probe;
        // Each comparison is false for "not a number".
        if !within(rate, 1.0, 1e12) {
            return Some(SetupError::SampleRate);
        }
        if !within(probe.centre_frequency.get(), 1.0, 1e12) {
            return Some(SetupError::CentreFrequency);
        }
        if !(probe.relative_bandwidth > 0.0 && probe.relative_bandwidth <= 2.0) {
            return Some(SetupError::RelativeBandwidth);
        }
        if rate < 2.0 * probe.upper_frequency().get() {
            return Some(SetupError::SampleRateBelowBand);
        }
        if let Some(diameter) = probe.element_diameter
            && !within(diameter.get(), 1e-6, 1e3)
        {
            return Some(SetupError::ElementDiameter);
        }
        if !within(probe.element_diameter_uncertainty, 0.0, 1.0) {
            return Some(SetupError::ElementDiameterUncertainty);
        }
        if !within(probe.couplant_film.get(), 0.0, 1.0) {
            return Some(SetupError::CouplantFilm);
        }
        if let Some(degrees) = probe.echo_phase_degrees
            && !within(degrees, 0.0, 180.0)
        {
            return Some(SetupError::EchoPhase);
        }
        if let Some(line) = probe.delay_line
            && !(within(line.length.get(), 1e-6, 1e3) && within(line.velocity.get(), 1.0, 1e6))
        {
            return Some(SetupError::DelayLine);
        }
        if let Some(separation) = probe.separation
            && !(within(separation.distance.get(), 0.0, 1e3)
                && within(separation.standard_uncertainty.get(), 0.0, 1e3)
                && matches!(probe.kind, ProbeKind::DualElement))
        {
            return Some(SetupError::ElementSeparation);
        }
        if !within(self.material.velocity.get(), 1.0, 1e6) {
            return Some(SetupError::Velocity);
        }
        let velocity_uncertainty = self.material.velocity_standard_uncertainty;
        if !within(velocity_uncertainty.get(), 0.0, 1e6) {
            return Some(SetupError::VelocityUncertainty);
        }
        if !within(self.material.part_velocity_standard_uncertainty.get(), 0.0, 1e6) {
            return Some(SetupError::PartVelocityUncertainty);
        }
        if !within(self.roughness.get(), 0.0, 0.1) {
            return Some(SetupError::Roughness);
        }
        if let Some(follows) = &self.material.temperature {
            if !(within(follows.coefficient, -1e3, 1e3) && within(follows.coefficient_standard_uncertainty, 0.0, 1e3)) {
                return Some(SetupError::TemperatureCoefficient);
            }
            if !is_temperature(follows.reference) {
                return Some(SetupError::ReferenceTemperature);
            }
            if let Some(part) = &follows.part {
                if !(is_temperature(part.temperature) && within(part.standard_uncertainty.get(), 0.0, 1e3)) {
                    return Some(SetupError::PartTemperature);
                }
                // A straight line that was drawn out too far.
                if !within(self.velocity().get(), 1.0, 1e6) {
                    return Some(SetupError::TemperatureCoefficient);
                }
            }
        }
        if !within(self.zero.offset.get(), -1.0, 1.0) {
            return Some(SetupError::ZeroOffset);
        }
        if !within(self.zero.standard_uncertainty.get(), 0.0, 1.0) {
            return Some(SetupError::ZeroUncertainty);
        }
        if !(self.zero.velocity_correlation >= -1.0 && self.zero.velocity_correlation <= 1.0) {
            return Some(SetupError::ZeroCorrelation);
        }
        if let Some(block) = self.zero.learned_on
            && !within(block.get(), 0.0, 1e3)
        {
            return Some(SetupError::ZeroLearnedOn);
        }
        let window = &self.window;
        if !(within(window.from.get(), -1e3, 1e3)
            && within(window.to.get(), -1e3, 1e3)
            && window.from.get() < window.to.get())
        {
            return Some(SetupError::Window);
        }
        if !within(self.trigger_jitter.get(), 0.0, 1e-3) {
            return Some(SetupError::TriggerJitter);
        }
        if !within(self.coverage_factor, 1e-3, 1e3) {
            return Some(SetupError::CoverageFactor);
        }
        if let Some(coating) = self.coating
            && !coating.is_possible()
        {
            return Some(SetupError::CoatingVelocity);
        }
        if !self.surface.is_possible() {
            return Some(SetupError::Surface);
        }
        if let Some(range) = self.calibrated {
            let ordered = range.from.is_finite() && range.to.get() <= 1e3 && range.from.get() <= range.to.get();
            if !(ordered && range.from.get() > 0.0) {
                return Some(SetupError::CalibratedRange);
            }
        }
        None
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    const GOOD: GaugeSetup = GaugeSetup::new(
        Hertz::from_mhz(50.0),
        Probe::contact(Hertz::from_mhz(5.0), 0.6).with_element_diameter(Metres::from_mm(6.0)),
        Material::new(MetresPerSecond::new(5920.0), MetresPerSecond::new(17.0)),
        Zero::new(Seconds::ZERO, Seconds::from_ns(1.0)),
        Span::BackWallToBackWall,
        Window {
            from: Seconds::from_us(0.5),
            to: Seconds::from_us(60.0),
        },
    );

    /// Spoils one field and returns what the check says.
    fn spoilt(change: impl Fn(&mut GaugeSetup)) -> Option<SetupError> {
        let mut setup = GOOD;
        change(&mut setup);
        setup.check()
    }

    #[test]
    fn every_field_is_checked() {
        assert_eq!(GOOD.check(), None);
        assert_eq!(spoilt(|s| s.sample_rate = Hertz::ZERO), Some(SetupError::SampleRate));
        assert_eq!(
            spoilt(|s| s.sample_rate = Hertz::from_mhz(12.9)),
            Some(SetupError::SampleRateBelowBand)
        );
        assert_eq!(
            spoilt(|s| s.probe.centre_frequency = Hertz::new(f32::NAN)),
            Some(SetupError::CentreFrequency)
        );
        assert_eq!(
            spoilt(|s| s.probe.relative_bandwidth = 2.01),
            Some(SetupError::RelativeBandwidth)
        );
        assert_eq!(
            spoilt(|s| s.probe.element_diameter = Some(Metres::ZERO)),
            Some(SetupError::ElementDiameter)
        );
        assert_eq!(
            spoilt(|s| s.probe.couplant_film = Metres::new(-1e-6)),
            Some(SetupError::CouplantFilm)
        );
        assert_eq!(
            spoilt(|s| s.probe.echo_phase_degrees = Some(f32::NAN)),
            Some(SetupError::EchoPhase)
        );
        assert_eq!(
            spoilt(|s| s.probe.delay_line = Some(DelayLine {
                length: Metres::from_mm(8.0),
                velocity: MetresPerSecond::ZERO
            })),
            Some(SetupError::DelayLine)
        );
        let six = ElementSeparation::new(Metres::from_mm(6.0), Metres::ZERO);
        assert_eq!(
            spoilt(|s| s.probe.separation = Some(six)),
            Some(SetupError::ElementSeparation)
        );
        assert_eq!(
            spoilt(|s| {
                s.probe.kind = ProbeKind::DualElement;
                s.probe.separation = Some(ElementSeparation::new(Metres::new(-1e-3), Metres::ZERO));
            }),
            Some(SetupError::ElementSeparation)
        );
        assert_eq!(
            spoilt(|s| s.material.velocity = MetresPerSecond::new(-1.0)),
            Some(SetupError::Velocity)
        );
        assert_eq!(
            spoilt(|s| s.material.velocity_standard_uncertainty = MetresPerSecond::new(f32::NAN)),
            Some(SetupError::VelocityUncertainty)
        );
        assert_eq!(
            spoilt(|s| s.material.part_velocity_standard_uncertainty = MetresPerSecond::new(-1.0)),
            Some(SetupError::PartVelocityUncertainty)
        );
        let warm = |coefficient, reference, part, uncertainty| {
            let follows = VelocityTemperature::new(coefficient, Celsius::new(reference));
            let follows = follows.with_part(Celsius::new(part), Celsius::new(uncertainty));
            spoilt(|s| s.material.temperature = Some(follows))
        };
        assert_eq!(warm(-0.8, 20.0, 60.0, 1.0), None);
        assert_eq!(
            warm(f32::NAN, 20.0, 60.0, 1.0),
            Some(SetupError::TemperatureCoefficient)
        );
        assert_eq!(warm(-500.0, 20.0, 60.0, 1.0), Some(SetupError::TemperatureCoefficient));
        assert_eq!(warm(-0.8, -300.0, 60.0, 1.0), Some(SetupError::ReferenceTemperature));
        assert_eq!(warm(-0.8, 20.0, 1e5, 1.0), Some(SetupError::PartTemperature));
        assert_eq!(warm(-0.8, 20.0, 60.0, -1.0), Some(SetupError::PartTemperature));
        assert_eq!(
            spoilt(|s| s.zero.offset = Seconds::new(f32::INFINITY)),
            Some(SetupError::ZeroOffset)
        );
        assert_eq!(
            spoilt(|s| s.zero.standard_uncertainty = Seconds::new(-1.0)),
            Some(SetupError::ZeroUncertainty)
        );
        assert_eq!(
            spoilt(|s| s.zero.velocity_correlation = 1.1),
            Some(SetupError::ZeroCorrelation)
        );
        assert_eq!(
            spoilt(|s| s.zero.learned_on = Some(Metres::new(-1.0))),
            Some(SetupError::ZeroLearnedOn)
        );
        assert_eq!(
            spoilt(|s| s.probe.element_diameter_uncertainty = f32::NAN),
            Some(SetupError::ElementDiameterUncertainty)
        );
        assert_eq!(spoilt(|s| s.window.to = s.window.from), Some(SetupError::Window));
        assert_eq!(
            spoilt(|s| s.trigger_jitter = Seconds::new(-1e-9)),
            Some(SetupError::TriggerJitter)
        );
        assert_eq!(spoilt(|s| s.coverage_factor = 0.0), Some(SetupError::CoverageFactor));
        let coated = |velocity, u| {
            let coating = Coating::new(MetresPerSecond::new(velocity), MetresPerSecond::new(u));
            spoilt(|s| s.coating = Some(coating))
        };
        assert_eq!(coated(2300.0, 50.0), None);
        assert_eq!(coated(0.0, 50.0), Some(SetupError::CoatingVelocity));
        assert_eq!(coated(2300.0, -1.0), Some(SetupError::CoatingVelocity));
        assert_eq!(coated(2300.0, f32::NAN), Some(SetupError::CoatingVelocity));
        assert_eq!(spoilt(|s| s.coating = Some(Coating::UNKNOWN)), None);
        for radius in [0.0, -1.0, f32::NAN, f32::INFINITY] {
            for surface in [Surface::Convex, Surface::Concave] {
                assert_eq!(
                    spoilt(|s| s.surface = surface(Metres::new(radius))),
                    Some(SetupError::Surface)
                );
            }
        }
        assert_eq!(
            spoilt(|s| s.calibrated = Some(CalibratedRange {
                from: Metres::new(2.0),
                to: Metres::new(1.0)
            })),
            Some(SetupError::CalibratedRange)
        );
    }
}
