//! The uncertainty budget: named terms, combined as JCGM 100:2008 (5.1.2) says.

use crate::echo::pulse::PulseFacts;
use crate::math::{self, RECTANGULAR};
use crate::setup::{GaugeSetup, ProbeKind, Span, UNKNOWN_TEMPERATURE};
use crate::units::{Metres, MetresPerSecond, Seconds};
use crate::wall::thickness::{Timed, TrainTimes, excess, round_trip, wall_span};
use crate::wall::{coupling, way};
use heapless::Vec;

/// Where a share of the uncertainty comes from.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Source {
    /// Noise moves the echoes' arrivals, and the trigger's jitter those that count from it.
    Timing,
    /// The part's velocity.
    Velocity,
    /// The probe's zero.
    Zero,
    /// Velocity and zero together, where a calibration has tied their errors to each other.
    Calibration,
    /// The beam's spreading moves echoes (piston diffraction): what the correction leaves over, or all of it where
    /// nothing can be corrected.
    Beam,
    /// The couplant film differs from the one at calibration.
    Coupling,
    /// Coupling turns one echo of the record against another.
    Phase,
    /// The part is warmer or colder than its velocity holds for.
    Temperature,
    /// The noise that the reference pulse itself was learned with.
    ReferencePulse,
    /// What is not known of the pulse's shape moves echoes that overlap: see [`crate::wall::thin`].
    Overlap,
    /// The distance of a dual-element probe's elements.
    VPath,
    /// The back wall is rough: its least place lies before its mean, which is what a reading gives.
    Roughness,
}

impl Source {
    /// One stable word for programs.
    #[must_use]
    pub const fn word(self) -> &'static str {
        match self {
            Self::Timing => "timing",
            Self::Velocity => "velocity",
            Self::Zero => "zero",
            Self::Calibration => "calibration",
            Self::Beam => "beam",
            Self::Coupling => "coupling",
            Self::Phase => "phase",
            Self::Temperature => "temperature",
            Self::ReferencePulse => "reference-pulse",
            Self::Overlap => "overlap",
            Self::VPath => "v-path",
            Self::Roughness => "roughness",
        }
    }
}

/// One line of the budget.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Term {
    /// Where it comes from.
    pub source: Source,
    /// Its contribution to the thickness's standard uncertainty (k = 1).
    pub standard_uncertainty: Metres,
}

/// The uncertainty budget of one reading. Terms are independent of each other.
#[derive(Clone, Debug, PartialEq, Default)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Budget {
    terms: Vec<Term, 10>,
}

impl Budget {
    /// An empty budget.
    #[must_use]
    pub const fn new() -> Self {
        Self { terms: Vec::new() }
    }

    /// Adds a term; one that is zero, negative or not a number is left out.
    pub fn add(&mut self, source: Source, standard_uncertainty: Metres) {
        if standard_uncertainty.get() > 0.0 {
            // Ten places for twelve sources, of which calibration takes the place of zero, and no probe has both a V and
            // overlapping echoes: a full list cannot happen.
            let _ = self.terms.push(Term {
                source,
                standard_uncertainty,
            });
        }
    }

    /// Adds to a term that may be there, as the root of the sum of squares, what is `more` metres (k = 1).
    pub(crate) fn widen(&mut self, source: Source, more: f32) {
        match self.terms.iter_mut().find(|term| term.source == source) {
            Some(term) => {
                let known = term.standard_uncertainty.get();
                term.standard_uncertainty = Metres::new(math::sqrt(known * known + more * more));
            }
            None => self.add(source, Metres::new(more)),
        }
    }

    /// The lines, in the order in which they were added.
    #[must_use]
    pub fn terms(&self) -> &[Term] {
        &self.terms
    }

    /// Root of the sum of squares.
    #[must_use]
    pub fn combined(&self) -> Metres {
        let mut sum = 0.0;
        for term in &self.terms {
            sum += term.standard_uncertainty.get() * term.standard_uncertainty.get();
        }
        Metres::new(math::sqrt(sum))
    }

    /// The source of the largest term.
    #[must_use]
    pub fn dominating(&self) -> Option<Source> {
        let mut largest: Option<Term> = None;
        for &term in &self.terms {
            if largest.is_none_or(|l| term.standard_uncertainty.get() > l.standard_uncertainty.get()) {
                largest = Some(term);
            }
        }
        largest.map(|term| term.source)
    }
}

/// How far a rough back wall reaches before its mean under the beam, over its root mean square: about 2 among the few
/// correlation lengths that a beam covers, and seldom more than 2.5 (common practice).
const DEEPEST: f32 = 2.5;

/// The budget of a wall that was read with [`crate::wall::thickness::wall`].
///
/// | term | value |
/// |---|---|
/// | timing | c / 2 times the uncertainty of the round trip from noise, and from the trigger's jitter over the root of the shots |
/// | velocity | d / c times the velocity's uncertainty: that of the blocks, and what the part may differ from them |
/// | zero | c / 2 times the zero's uncertainty; not between back walls |
/// | calibration | instead of the two before, where the set-up says that their errors are correlated; only what the part may differ from the blocks stays apart, as velocity |
/// | beam | c / 2 times what is left of the diffraction shift, see [`way::beam_uncertainty`]; only if the element is known |
/// | coupling | c / 2 times the shift by the couplant film, likewise |
/// | phase | c / 2 times what coupling turns echoes of one record against each other by, see [`phase`]; only between two echoes |
/// | temperature | d / c times what temperature does to the velocity, [`crate::setup::Material::temperature_uncertainty`] |
/// | v-path | what the distance of a dual-element probe's elements may be off by moves the wall, see [`way::v_path_uncertainty`] |
///
/// The noise of the reference pulse stands apart, because it is a matter of the pulse: [`reference_pulse`].
///
/// Where sound goes along a V, a time counts 1 / cos θ as much as straight down, θ being the ray's angle in the part:
/// the terms of timing, zero, beam and coupling grow with it, that of velocity with its square.
///
/// Nothing but timing depends on noise and shots, so a budget that timing does not dominate is not made smaller by averaging.
/// A span without its times (see [`round_trip`]) has no timing term: there is no reading then.
#[must_use]
pub fn budget(setup: &GaugeSetup, times: &TrainTimes, wall: Metres) -> Budget {
    let mut budget = Budget::new();
    let half_velocity = setup.velocity() * 0.5;
    if let Some(trip) = round_trip(setup, times) {
        budget.add(Source::Timing, half_velocity * trip.standard_uncertainty);
    }
    add_calibration(&mut budget, setup, wall);
    let moved = half_velocity * way::gain(setup, wall);
    budget.add(Source::Beam, moved * way::beam_uncertainty(setup, wall));
    let coupling = moved * coupling::half_width(&setup.probe, wall_span(setup));
    budget.add(Source::Coupling, coupling * RECTANGULAR);
    budget.add(Source::Phase, moved * phase(setup, times));
    let temperature = setup.material.temperature_uncertainty() / setup.velocity();
    let by_velocity = way::gain(setup, wall) * way::gain(setup, wall);
    budget.add(Source::Temperature, (wall * temperature).abs() * by_velocity);
    budget.add(Source::VPath, way::v_path_uncertainty(setup, wall));
    budget.add(Source::Roughness, setup.roughness * (DEEPEST * RECTANGULAR));
    budget
}

/// What the phase between echoes ([`crate::setup::Probe::phase_between_echoes`]) does to a round trip that is read between echoes, as a standard
/// uncertainty (k = 1): φ / ω for each echo, independent of the others', counted as the echoes count in the round trip.
/// That is sqrt(2) φ / ω from interface to back wall, and [`TrainTimes::period_contrast`] times φ / ω between back walls. Nothing from the
/// transmission pulse: there the zero's block had the like.
#[must_use]
pub fn phase(setup: &GaugeSetup, times: &TrainTimes) -> Seconds {
    let contrast = match wall_span(setup) {
        Span::TransmissionPulseToBackWall => return Seconds::ZERO,
        Span::InterfaceToBackWall => core::f32::consts::SQRT_2,
        Span::BackWallToBackWall => times.period_contrast,
    };
    phase_of_echo(setup) * contrast
}

/// What the phase between echoes does to the arrival of one, φ / ω, as a standard uncertainty (k = 1).
#[must_use]
pub fn phase_of_echo(setup: &GaugeSetup) -> Seconds {
    setup.probe.centre_frequency.period() * (setup.probe.phase_between_echoes() / core::f32::consts::TAU)
}

/// What the noise in the reference pulse adds to a reading, as a standard uncertainty (k = 1).
///
/// A pulse with noise of σ a sample is found σ / sqrt(Σ s'²) away from where the true one would be, and its own
/// origin, the envelope's maximum through three samples, lies off by σ σt² / sqrt(2), with σt = T20 / 4.292 samples
/// as a Gaussian envelope has it. Both move every echo of the pulse's shape by the same amount. So they cancel between two
/// echoes of one record, and in a zero that was learned with this very pulse (where the noise of the block's arrival,
/// which stands in the zero's uncertainty, is the pulse's own). What is left:
///
/// * from the transmission pulse with a zero that no calibration in the set-up vouches for
///   ([`GaugeSetup::calibrated`]): all of it;
/// * else, of the first part, the share by which echoes differ in shape from the pulse, for which the pulse's
///   measured mismatch stands.
///
/// 0 for a modelled pulse and for one whose noise nobody stated.
#[must_use]
pub fn reference_pulse(setup: &GaugeSetup, facts: &PulseFacts) -> Metres {
    let found = facts.noise / math::sqrt(facts.derivative_energy);
    let zero_by_itself = matches!(wall_span(setup), Span::TransmissionPulseToBackWall) && setup.calibrated.is_none();
    let samples = if zero_by_itself {
        let spread = facts.envelope_duration / 4.292;
        let origin = facts.noise * spread * spread * core::f32::consts::FRAC_1_SQRT_2;
        math::sqrt(found * found + origin * origin)
    } else {
        found * facts.mismatch
    };
    setup.velocity() * 0.5 * (setup.sample_rate.period() * samples)
}

/// Does the reading's uncertainty rest on the guess that a part of unknown temperature is no further than
/// [`crate::setup::UNKNOWN_TEMPERATURE`] off? Yes if those kelvins move it by more than `k` times everything else in the
/// budget: then a part that is further off leaves the stated interval. Never if the temperature is stated or left out.
#[must_use]
pub fn unknown_temperature_matters(setup: &GaugeSetup, wall: Metres, budget: &Budget) -> bool {
    let Some(follows) = setup.material.temperature else {
        return false;
    };
    let mut others = 0.0;
    for term in budget.terms() {
        if term.source != Source::Temperature {
            others += term.standard_uncertainty.get() * term.standard_uncertainty.get();
        }
    }
    let half_width = wall * (follows.coefficient * UNKNOWN_TEMPERATURE.get() / setup.material.velocity.get());
    follows.part.is_none() && half_width.abs().get() > setup.coverage_factor * math::sqrt(others)
}

/// Velocity and zero: apart, or as one term if their errors hang together.
///
/// d = c (t - t0) / 2, so that ∂d/∂c = d / c and ∂d/∂t0 = -c / 2, and with A = (d / c) u(c), B = (c / 2) u(t0):
/// u² = A² + B² - 2 r A B = (A - B)² + 2 (1 - r) A B (JCGM 100:2008, 5.2.2). The second form cannot turn negative
/// by rounding where both cancel, which is at the thickness of the block.
///
/// Along a V ∂d/∂c = d / (c cos² θ) and ∂d/∂t0 = -c / (2 cos θ).
fn add_calibration(budget: &mut Budget, setup: &GaugeSetup, wall: Metres) {
    let material = &setup.material;
    let gain = way::gain(setup, wall);
    let of_velocity = |uncertainty: MetresPerSecond| (wall * (uncertainty / setup.velocity())).abs() * (gain * gain);
    let velocity = of_velocity(material.velocity_standard_uncertainty);
    // What the part differs from the blocks by knows nothing of the blocks' zero.
    let part = of_velocity(material.part_velocity_standard_uncertainty);
    let (a, p) = (velocity.get(), part.get());
    let both = Metres::new(math::sqrt(a * a + p * p));
    if matches!(wall_span(setup), Span::BackWallToBackWall) {
        budget.add(Source::Velocity, both);
        return;
    }
    let zero = setup.velocity() * 0.5 * setup.zero.standard_uncertainty * gain;
    let correlation = setup.zero.velocity_correlation;
    if correlation == 0.0 {
        budget.add(Source::Velocity, both);
        budget.add(Source::Zero, zero);
    } else {
        let b = zero.get();
        let variance = (a - b) * (a - b) + 2.0 * (1.0 - correlation) * a * b;
        budget.add(Source::Calibration, Metres::new(math::sqrt(variance)));
        budget.add(Source::Velocity, part);
    }
}

/// [`excess`] with its whole uncertainty, [`excess_uncertainty`].
#[must_use]
pub fn whole_excess(setup: &GaugeSetup, times: &TrainTimes, wall: Metres) -> Option<Timed> {
    let excess = excess(setup, times)?;
    Some(Timed::new(excess.time, excess_uncertainty(setup, times, wall)?))
}

/// Standard uncertainty (k = 1) of [`excess`] as a whole: timing of first back wall, start and period; the zero; beam,
/// V-path and couplant of the first back wall and of the period together. An excess far beyond it on a part that is
/// said to be bare contradicts the zero. `None` where there is no excess.
#[must_use]
pub fn excess_uncertainty(setup: &GaugeSetup, times: &TrainTimes, wall: Metres) -> Option<Seconds> {
    let timing = excess(setup, times)?.standard_uncertainty.get();
    let mut first = *setup;
    first.coating = None;
    first.span = match setup.probe.kind {
        ProbeKind::DelayLine => Span::InterfaceToBackWall,
        ProbeKind::Contact | ProbeKind::DualElement => Span::TransmissionPulseToBackWall,
    };
    let mut period = first;
    period.span = Span::BackWallToBackWall;
    let zero = setup.zero.standard_uncertainty.get() * way::gain(&first, wall);
    let beam = (way::beam_uncertainty(&first, wall) + way::beam_uncertainty(&period, wall)).get();
    let v_path = way::v_path_uncertainty(&first, wall) + way::v_path_uncertainty(&period, wall);
    let v_path = (v_path * 2.0 / setup.velocity()).get();
    let film = coupling::half_width(&setup.probe, first.span) + coupling::half_width(&setup.probe, period.span);
    let film = film.get() * RECTANGULAR;
    let phase = (phase(&first, times) + phase(&period, times)).get();
    let variance = timing * timing + zero * zero + beam * beam + film * film + v_path * v_path + phase * phase;
    Some(Seconds::new(math::sqrt(variance)))
}

#[cfg(test)]
#[path = "uncertainty_tests.rs"]
mod tests;
