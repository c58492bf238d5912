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
mod tests {
    use super::*;
    use crate::setup::{CalibratedRange, Coating, Material, Probe, Window, Zero};
    use crate::units::{Hertz, MetresPerSecond};
    use crate::wall::calibration::{Block, zero_and_velocity, zero_at_known_velocity};
    use proptest::prelude::*;

    const STEEL: MetresPerSecond = MetresPerSecond::new(5920.0);

    /// 5 MHz on steel, with neither element nor couplant film, so that those terms are nothing.
    fn bare(probe: Probe, span: Span, velocity_uncertainty: f32, zero: Zero) -> GaugeSetup {
        GaugeSetup::new(
            Hertz::from_mhz(50.0),
            probe.with_couplant_film(Metres::ZERO),
            Material::new(STEEL, MetresPerSecond::new(velocity_uncertainty)),
            zero,
            span,
            Window {
                from: Seconds::from_us(0.5),
                to: Seconds::from_us(60.0),
            },
        )
    }

    fn contact() -> Probe {
        Probe::contact(Hertz::from_mhz(5.0), 0.6)
    }

    fn single(u_ns: f32) -> TrainTimes {
        TrainTimes::single(Timed::new(Seconds::from_us(3.0), Seconds::from_ns(u_ns)))
    }

    fn term(budget: &Budget, source: Source) -> f32 {
        let found = budget.terms().iter().find(|term| term.source == source);
        found.map_or(0.0, |term| term.standard_uncertainty.get() * 1e6)
    }

    #[test]
    fn val_independent_terms() {
        // Root of the sum of squares by hand: velocity +- 0.5 % rectangular, time 0.5 ns, zero 2 ns, 5920 m/s; the
        // terms as an independent budget has them (NumPy): 1.48, 5.92 and, for 2 and 10 mm, 5.77350 and 28.86751 µm.
        let zero = Zero::new(Seconds::ZERO, Seconds::from_ns(2.0));
        let setup = bare(
            contact(),
            Span::TransmissionPulseToBackWall,
            5920.0 * 0.005 * RECTANGULAR,
            zero,
        );
        for (wall, velocity, combined) in [(2.0, 5.773_503, 8.400_626f32), (10.0, 28.867_514, 29.505_41)] {
            let budget = budget(&setup, &single(0.5), Metres::from_mm(wall));
            assert!((term(&budget, Source::Timing) - 1.48).abs() < 1e-5);
            assert!((term(&budget, Source::Zero) - 5.92).abs() < 1e-5);
            assert!((term(&budget, Source::Velocity) - velocity).abs() < 1e-5);
            assert!(
                (budget.combined().get() * 1e6 - combined).abs() < 2e-4,
                "{:?}",
                budget.combined()
            );
            assert_eq!(budget.terms().len(), 3);
        }
    }

    #[test]
    fn val_root_of_squares() {
        // JCGM 100:2008, 5.1.2: 5, 3 and 2 combine to sqrt(38) = 6.164414003.
        let mut budget = Budget::new();
        budget.add(Source::Timing, Metres::new(5.0));
        budget.add(Source::Velocity, Metres::new(3.0));
        budget.add(Source::Zero, Metres::new(2.0));
        budget.add(Source::Beam, Metres::new(f32::NAN));
        budget.add(Source::Coupling, Metres::ZERO);
        assert!((budget.combined().get() - 6.164_414).abs() < 1e-6);
        assert_eq!((budget.dominating(), budget.terms().len()), (Some(Source::Timing), 3));
        // The rectangle: JCGM 100:2008, 4.3.7.
        assert!((RECTANGULAR - 0.577_350_27).abs() < 1e-7);
    }

    #[test]
    fn val_two_block_calibration() {
        // Blocks of 5 and 25 mm (2 µm, 1 ns each), reading 1 ns: combined standard uncertainty by GTC (automatic
        // propagation with correlations), within 0.3 % of a Monte Carlo of 400 000 draws.
        let block = |mm: f32| Block {
            thickness: Metres::from_mm(mm),
            thickness_uncertainty: Metres::new(2e-6),
            time: Seconds::from_us(0.5) + Metres::from_mm(2.0 * mm) / STEEL,
            time_uncertainty: Seconds::from_ns(1.0),
        };
        let (zero, material) = zero_and_velocity(&block(5.0), &block(25.0)).unwrap();
        let mut setup = bare(contact(), Span::TransmissionPulseToBackWall, 0.0, zero);
        setup.material = material;
        for (wall, um) in [
            (1.0, 5.258_21),
            (5.0, 4.639_310_3),
            (10.0, 4.091_161),
            (15.0, 3.891_323_7),
            (25.0, 4.639_310_3),
            (50.0, 9.659_565),
            (100.0, 21.820_98),
        ] {
            let budget = budget(&setup, &single(1.0), Metres::from_mm(wall));
            let combined = budget.combined().get() * 1e6;
            assert!(
                (combined - um).abs() < 0.001 * um,
                "{wall} mm: {combined} µm, GTC {um} µm"
            );
            assert_eq!(term(&budget, Source::Velocity) + term(&budget, Source::Zero), 0.0);
        }
    }

    #[test]
    fn a_doubtful_velocity_cancels_at_the_block_that_set_the_zero() {
        let material = Material::new(STEEL, MetresPerSecond::new(17.0));
        let block = Block {
            thickness: Metres::from_mm(10.0),
            thickness_uncertainty: Metres::new(1e-6),
            time: Seconds::from_us(0.5) + Metres::from_mm(20.0) / STEEL,
            time_uncertainty: Seconds::ZERO,
        };
        let zero = zero_at_known_velocity(&block, &material).unwrap();
        let setup = bare(contact(), Span::TransmissionPulseToBackWall, 17.0, zero);
        let at = |mm| term(&budget(&setup, &single(0.0), Metres::from_mm(mm)), Source::Calibration);
        // At the block only the block's own error is left; elsewhere the velocity acts on the difference.
        assert!((at(10.0) - 1.0).abs() < 0.02, "{}", at(10.0));
        let expected = (1.0f32 + (10.0f32 / 5920.0 * 17.0 * 1e3).powi(2)).sqrt();
        assert!((at(20.0) - expected).abs() < 0.02 * expected, "{} {expected}", at(20.0));
    }

    #[test]
    fn between_back_walls_the_zero_does_not_count() {
        let zero = Zero {
            velocity_correlation: 0.8,
            ..Zero::new(Seconds::ZERO, Seconds::from_ns(50.0))
        };
        let setup = bare(contact(), Span::BackWallToBackWall, 17.0, zero);
        let times = single(9.0).with_period(Timed::new(Seconds::from_us(3.0), Seconds::from_ns(1.0)), 0.0);
        let budget = budget(&setup, &times, Metres::from_mm(10.0));
        assert!((term(&budget, Source::Timing) - 2.96).abs() < 1e-5);
        assert!((term(&budget, Source::Velocity) - 28.716_22).abs() < 1e-4);
        assert_eq!(budget.terms().len(), 2);
    }

    #[test]
    fn beam_and_coupling_stand_in_the_budget() {
        let probe = contact().with_element_diameter(Metres::from_mm(6.0));
        let mut setup = bare(
            probe,
            Span::TransmissionPulseToBackWall,
            0.0,
            Zero::new(Seconds::ZERO, Seconds::ZERO),
        );
        // Phase at 5 MHz of Rogers & Van Buren's factor, 10 mm of steel: 17.12837 ns, 50.69997 µm (SciPy 1.17).
        let at = |setup: &GaugeSetup, mm| term(&budget(setup, &single(0.0), Metres::from_mm(mm)), Source::Beam);
        assert!((at(&setup, 10.0) - 50.699_97 * RECTANGULAR).abs() < 0.01);
        // A zero learned on a block has the shift in it: nothing at the block, the difference (42.43498 - 17.12837 ns)
        // elsewhere.
        let ten = Metres::from_mm(10.0);
        setup = setup.with_calibrated_range(CalibratedRange { from: ten, to: ten });
        assert_eq!(at(&setup, 10.0), 0.0);
        assert!((at(&setup, 50.0) - 25.306_61 * 2.96 * RECTANGULAR).abs() < 0.02);
        assert!(at(&setup, 2.0) > 0.99 * (17.128_37 - 6.139_24) * 2.96 * RECTANGULAR);
        // Two blocks at 5 and 25 mm (11.22276 and 35.09290 ns): a straight line through them is 0.07 ns off at 10 mm and
        // says 64.92 ns for 50 mm, 22.49 ns too much; the budget's half-width holds both.
        let blocks = CalibratedRange {
            from: Metres::from_mm(5.0),
            to: Metres::from_mm(25.0),
        };
        setup = setup.with_calibrated_range(blocks);
        assert!(at(&setup, 10.0) > 0.07 * 2.96 * RECTANGULAR);
        let expected = 42.434_98 - 35.092_9 + 1.25 * (35.092_9 - 11.222_76);
        assert!((at(&setup, 50.0) - expected * 2.96 * RECTANGULAR).abs() < 0.02);
        assert!(expected > 22.49);
        // 2 µm of film under a hard face: 29.5 ns by exact layer matrices, two ways.
        setup.probe.couplant_film = Metres::new(2e-6);
        let film = term(&budget(&setup, &single(0.0), ten), Source::Coupling);
        assert!((film - 29.500_315 * 2.96 * RECTANGULAR).abs() < 0.03 * film);
    }

    #[test]
    fn phase_between_echoes_counts_as_the_echoes_do() {
        let wall = Metres::from_mm(10.0);
        let period = Timed::new(Seconds::from_us(3.378), Seconds::ZERO);
        let two = TrainTimes::single(period)
            .with_period(period, -0.7)
            .with_interface(period);
        let of = |setup: &GaugeSetup, times: &TrainTimes| term(&budget(setup, times, wall), Source::Phase);
        let zero = Zero::new(Seconds::ZERO, Seconds::ZERO);
        let with = |probe: Probe, span| {
            let mut setup = bare(probe, span, 0.0, zero);
            setup.probe.couplant_film = Metres::new(2e-6);
            setup
        };
        // Two degrees at 5 MHz are 1.111111 ns or 3.288889 µm of steel (by hand), sqrt(2) times that between two echoes.
        let two_degrees = 3.288_889;
        let hard = with(contact(), Span::BackWallToBackWall);
        assert!((of(&hard, &two) - two_degrees * core::f32::consts::SQRT_2).abs() < 1e-4);
        assert!((of(&hard, &two.with_contrast(0.5)) - two_degrees * 0.5).abs() < 1e-4);
        // Half a degree under plastic; nothing from the transmission pulse, and nothing where the film cannot differ.
        let delay_line = Probe::delay_line(Hertz::from_mhz(5.0), 0.6);
        let plastic = with(delay_line, Span::InterfaceToBackWall);
        assert!((of(&plastic, &two) - 0.25 * two_degrees * core::f32::consts::SQRT_2).abs() < 1e-4);
        assert_eq!(of(&with(contact(), Span::TransmissionPulseToBackWall), &two), 0.0);
        assert_eq!(of(&bare(contact(), Span::BackWallToBackWall, 0.0, zero), &two), 0.0);
        // What is stated counts, film or not.
        let stated = bare(
            contact().with_echo_phase_degrees(4.0),
            Span::BackWallToBackWall,
            0.0,
            zero,
        );
        assert!((of(&stated, &two) - 2.0 * two_degrees * core::f32::consts::SQRT_2).abs() < 1e-4);
    }

    #[test]
    fn val_reference_a_scan_lies_within_its_uncertainty() {
        // Independent numpy model of a delay-line A-scan with diffraction and 5 µm of couplant: 4.000 mm reads
        // 3.985901 mm from the interface and 3.980367 mm between back walls.
        let probe = Probe::delay_line(Hertz::from_mhz(5.0), 0.6)
            .with_element_diameter(Metres::from_mm(6.0))
            .with_couplant_film(Metres::new(5e-6));
        let noise_free = |us: f32| Timed::new(Seconds::from_us(us), Seconds::ZERO);
        let times = TrainTimes::single(noise_free(9.156_77))
            .with_period(noise_free(1.344_72), 0.0)
            .with_interface(noise_free(7.810_18));
        for (span, reads) in [
            (Span::InterfaceToBackWall, 3.985_901),
            (Span::BackWallToBackWall, 3.980_367),
        ] {
            let mut setup = bare(probe, span, 0.0, Zero::new(Seconds::ZERO, Seconds::ZERO));
            setup.probe.couplant_film = probe.couplant_film;
            let budget = budget(&setup, &times, Metres::from_mm(reads));
            let expanded = 2.0 * budget.combined().as_mm();
            assert!(4.0 - reads < expanded, "{span:?}: {expanded} mm");
            assert!(expanded < 0.04, "{span:?}: {expanded} mm says too little");
            assert_eq!(budget.dominating(), Some(Source::Beam));
        }
    }

    #[test]
    fn an_unknown_element_matters_only_above_the_limit() {
        let zero = Zero::new(Seconds::ZERO, Seconds::ZERO);
        let setup = bare(contact(), Span::BackWallToBackWall, 0.0, zero);
        let wall = Metres::from_mm(5.0);
        assert!(way::unknown_beam_matters(&setup, wall, Metres::new(10e-6)));
        assert!(!way::unknown_beam_matters(&setup, wall, Metres::new(200e-6)));
        let known = contact().with_element_diameter(Metres::from_mm(6.0));
        assert!(!way::unknown_beam_matters(
            &bare(known, Span::BackWallToBackWall, 0.0, zero),
            wall,
            Metres::ZERO
        ));
    }

    #[test]
    fn coating_has_an_uncertainty_of_its_own() {
        let zero = Zero::new(Seconds::from_us(0.5), Seconds::from_ns(1.0));
        let setup = bare(contact(), Span::TransmissionPulseToBackWall, 0.0, zero);
        let times = single(1.0).with_period(
            Timed::new(Seconds::from_us(2.0), Seconds::from_ns(core::f32::consts::SQRT_2)),
            -core::f32::consts::FRAC_1_SQRT_2,
        );
        let wall = Metres::from_mm(5.92);
        // Five squared nanoseconds of timing and one of the zero.
        let painted = setup.with_coating(Coating::UNKNOWN);
        let ns = excess_uncertainty(&painted, &times, wall).unwrap().as_ns();
        assert!((ns - 6f32.sqrt()).abs() < 1e-3, "{ns}");
        // Couplant: 29.5 ns on the way in and out and 31.1 ns at the reflection, added, as a rectangle.
        let mut wet = painted;
        wet.probe.couplant_film = Metres::new(2e-6);
        let ns = excess_uncertainty(&wet, &times, wall).unwrap().as_ns();
        assert!((ns - (29.5 + 31.1) * RECTANGULAR).abs() < 0.6, "{ns}");
    }

    proptest! {
        #[test]
        fn correlated_terms_stay_between_difference_and_sum(
            wall in 0.1f32..200.0, u in 0.0f32..100.0, zero_ns in 0.0f32..50.0, r in -1.0f32..=1.0,
        ) {
            let zero = Zero { velocity_correlation: r, ..Zero::new(Seconds::ZERO, Seconds::from_ns(zero_ns)) };
            let setup = bare(contact(), Span::TransmissionPulseToBackWall, u, zero);
            let combined = budget(&setup, &single(0.0), Metres::from_mm(wall)).combined().get();
            let (a, b) = (wall * 1e-3 * u / 5920.0, 2960.0 * zero_ns * 1e-9);
            prop_assert!(combined >= (a - b).abs() * 0.999 - 1e-12);
            prop_assert!(combined <= (a + b) * 1.001 + 1e-12);
        }

        #[test]
        fn a_wider_term_never_narrows_the_budget(wall in 0.5f32..100.0, film in 0.0f32..20.0, more in 0.0f32..20.0) {
            for span in [Span::TransmissionPulseToBackWall, Span::InterfaceToBackWall, Span::BackWallToBackWall] {
                let probe = contact().with_element_diameter(Metres::from_mm(6.0));
                let mut setup = bare(probe, span, 10.0, Zero::new(Seconds::ZERO, Seconds::from_ns(1.0)));
                setup.probe.couplant_film = Metres::new(film * 1e-6);
                let narrow = budget(&setup, &single(1.0), Metres::from_mm(wall)).combined();
                setup.probe.couplant_film = Metres::new((film + more) * 1e-6);
                prop_assert!(budget(&setup, &single(1.0), Metres::from_mm(wall)).combined().get() >= narrow.get() * 0.999_99);
            }
        }
    }
}
