//! Checks of the budget.

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
