//! Zero and velocity from blocks: uncertainties and their correlation, propagated by numerical derivatives and by chance.

use halfpulse::wall::calibration::{
    Block, CalibrationError, DriftState, drift_check, velocity_from_thickness, zero_and_velocity,
    zero_at_known_velocity,
};
use halfpulse::wall::thickness::{Timed, TrainTimes};
use halfpulse::wall::uncertainty::budget;
use halfpulse::{
    Doubt, Doubts, GaugeSetup, Hertz, Material, Metres, MetresPerSecond, Probe, Seconds, Span, Window, Zero,
};
use halfpulse_published::{Table, oracle};

/// Of thickness in metres, time in seconds, and their standard uncertainties.
fn block(thickness: f64, time: f64, thickness_uncertainty: f64, time_uncertainty: f64) -> Block {
    Block {
        thickness: Metres::new(thickness as f32),
        thickness_uncertainty: Metres::new(thickness_uncertainty as f32),
        time: Seconds::new(time as f32),
        time_uncertainty: Seconds::new(time_uncertainty as f32),
    }
}

fn near(found: f32, expected: f64, share: f64) -> bool {
    (f64::from(found) / expected - 1.0).abs() < share
}

/// c = 2 (d2 - d1) / (t2 - t1) and t0 = t1 - 2 d1 / c, of thicknesses and times of two blocks.
fn velocity([d1, t1, d2, t2]: [f64; 4]) -> f64 {
    2.0 * (d2 - d1) / (t2 - t1)
}

fn zero([d1, t1, d2, t2]: [f64; 4]) -> f64 {
    t1 - 2.0 * d1 / velocity([d1, t1, d2, t2])
}

/// Blocks that differ in every respect.
const BLOCKS: [([f64; 2], [f64; 2], [f64; 4]); 3] = [
    ([5e-3, 25e-3], [5920.0, 0.5e-6], [2e-6, 1e-9, 2e-6, 1e-9]),
    ([2e-3, 12e-3], [3200.0, 1.2e-6], [1e-6, 4e-9, 6e-6, 1e-9]),
    ([10e-3, 100e-3], [6320.0, -0.2e-6], [9e-6, 2e-9, 3e-6, 12e-9]),
];

/// Uncertainties of velocity and zero, and how their errors hang together.
///
/// Source: JCGM 100:2008, 5.1.2 and formula F.2 for the covariance, with numerical derivatives (`oracle::gradient`).
#[test]
fn val_two_blocks_by_derivatives() {
    for (thicknesses, [c, t0], u) in BLOCKS {
        let [t1, t2] = thicknesses.map(|d| t0 + 2.0 * d / c);
        let at = [thicknesses[0], t1, thicknesses[1], t2];
        let of_velocity = oracle::propagated(velocity, at, u, |_, _| 0.0);
        let of_zero = oracle::propagated(zero, at, u, |_, _| 0.0);
        let slopes = (oracle::gradient(velocity, at, 1e-5), oracle::gradient(zero, at, 1e-5));
        let covariance: f64 = (0..4).map(|i| slopes.0[i] * slopes.1[i] * u[i] * u[i]).sum();
        let (one, other) = (block(at[0], at[1], u[0], u[1]), block(at[2], at[3], u[2], u[3]));
        for (a, b) in [(one, other), (other, one)] {
            let (found, material) = zero_and_velocity(&a, &b).expect("two blocks");
            assert!(near(material.velocity.get(), c, 1e-6), "{material:?}");
            assert!((f64::from(found.offset.get()) - t0).abs() < 1e-11, "{found:?}");
            assert!(
                near(material.velocity_standard_uncertainty.get(), of_velocity, 1e-4),
                "{material:?}"
            );
            assert!(
                near(found.standard_uncertainty.get(), of_zero, 1e-4),
                "{found:?} {of_zero}"
            );
            let correlation = covariance / (of_velocity * of_zero);
            assert!(
                (f64::from(found.velocity_correlation) - correlation).abs() < 1e-4,
                "{found:?} {correlation}"
            );
        }
    }
}

/// The same by chance, where nothing is taken for linear.
///
/// Source: JCGM 101:2008, Monte Carlo of 20000 draws of blocks and times.
#[test]
fn val_two_blocks_by_monte_carlo() {
    const DRAWS: usize = 20_000;
    for (thicknesses, [c, t0], u) in BLOCKS {
        let [t1, t2] = thicknesses.map(|d| t0 + 2.0 * d / c);
        let at = [thicknesses[0], t1, thicknesses[1], t2];
        let mut random = oracle::Random::new(12);
        let (mut velocities, mut zeros) = (Vec::new(), Vec::new());
        for _ in 0..DRAWS {
            let drawn = std::array::from_fn(|i| at[i] + u[i] * random.normal());
            velocities.push(velocity(drawn));
            zeros.push(zero(drawn));
        }
        let (found, material) =
            zero_and_velocity(&block(at[0], at[1], u[0], u[1]), &block(at[2], at[3], u[2], u[3])).expect("two blocks");
        // 0.5 % is the standard deviation of a standard deviation of 20000.
        let ((_, of_velocity), (_, of_zero)) = (
            oracle::mean_and_deviation(&velocities),
            oracle::mean_and_deviation(&zeros),
        );
        assert!(
            near(material.velocity_standard_uncertainty.get(), of_velocity, 0.02),
            "{material:?} {of_velocity}"
        );
        assert!(
            near(found.standard_uncertainty.get(), of_zero, 0.02),
            "{found:?} {of_zero}"
        );
        let correlation = oracle::correlation(&velocities, &zeros);
        assert!(
            (f64::from(found.velocity_correlation) - correlation).abs() < 0.02,
            "{found:?} {correlation}"
        );
    }
}

/// A wall that is read with a two-block calibration, from far below the blocks to far above.
///
/// Source: `two_point_parameters.csv` and `two_point_uncertainty.csv`: JCGM 100:2008, 5.2, the PyPI package GTC 1.5.1.
#[test]
fn val_two_blocks_of_gtc() {
    let parameters = Table::read("physics/two_point_parameters.csv");
    let value = |name: &str| parameters.row_where("quantity", name).number("value");
    let at = |d: f64| block(d, value("t0") + 2.0 * d / value("c"), 2e-6, 1e-9);
    let (found, material) = zero_and_velocity(&at(5e-3), &at(25e-3)).expect("two blocks");
    assert!(near(material.velocity.get(), value("c"), 1e-6), "{material:?}");
    assert!(
        near(material.velocity_standard_uncertainty.get(), value("u_c"), 1e-5),
        "{material:?}"
    );
    assert!(near(found.offset.get(), value("t0"), 1e-5), "{found:?}");
    assert!(near(found.standard_uncertainty.get(), value("u_t0"), 1e-5), "{found:?}");
    assert!(
        (f64::from(found.velocity_correlation) - value("corr")).abs() < 1e-5,
        "{found:?}"
    );
    let setup = GaugeSetup::new(
        Hertz::from_mhz(50.0),
        Probe::contact(Hertz::from_mhz(5.0), 0.6).with_couplant_film(Metres::ZERO),
        material,
        found,
        Span::TransmissionPulseToBackWall,
        Window {
            from: Seconds::from_us(0.3),
            to: Seconds::from_us(60.0),
        },
    );
    for row in Table::read("physics/two_point_uncertainty.csv").rows() {
        let wall = row.number("estimate_m");
        let time = value("t0") + 2.0 * wall / value("c");
        let times = TrainTimes::single(Timed::new(Seconds::new(time as f32), Seconds::from_ns(1.0)));
        let combined = budget(&setup, &times, Metres::new(wall as f32)).combined();
        assert!(
            near(combined.get(), row.number("u_GTC_m"), 1e-4),
            "{row:?}: {combined:?}"
        );
        assert!(
            near(combined.get(), row.number("u_MC_m"), 5e-3),
            "{row:?}: {combined:?}"
        );
    }
}

/// The zero from one block with a velocity that is not exactly known, and the velocity from one block with a zero that is not.
///
/// Source: JCGM 100:2008, 5.1.2 and F.2, with numerical derivatives (`oracle::gradient`).
#[test]
fn val_one_block_by_derivatives() {
    for (d, c, t0, u_d, u_t, u_other) in [
        (10e-3, 5920.0, 0.5e-6, 2e-6, 1e-9, 17.0),
        (3e-3, 3200.0, 1.5e-6, 5e-6, 4e-9, 2.0),
        (40e-3, 6400.0, -0.1e-6, 1e-6, 2e-9, 60.0),
    ] {
        let t = t0 + 2.0 * d / c;
        let one = block(d, t, u_d, u_t);
        let offset = |[d, t, c]: [f64; 3]| t - 2.0 * d / c;
        let u = oracle::propagated(offset, [d, t, c], [u_d, u_t, u_other], |_, _| 0.0);
        let known = Material::new(MetresPerSecond::new(c as f32), MetresPerSecond::new(u_other as f32));
        let found = zero_at_known_velocity(&one, &known).expect("a block");
        assert!((f64::from(found.offset.get()) - t0).abs() < 1e-11, "{found:?}");
        assert!(near(found.standard_uncertainty.get(), u, 1e-4), "{found:?} {u}");
        let slope = oracle::gradient(offset, [d, t, c], 1e-5)[2];
        assert!(
            (f64::from(found.velocity_correlation) - slope * u_other / u).abs() < 1e-4,
            "{found:?}"
        );

        let u_zero = 3e-9;
        let speed = |[d, t, t0]: [f64; 3]| 2.0 * d / (t - t0);
        let at = [d, t, t0];
        let u = oracle::propagated(speed, at, [u_d, u_t, u_zero], |_, _| 0.0);
        let given = Zero::new(Seconds::new(t0 as f32), Seconds::new(u_zero as f32));
        let (found, material) = velocity_from_thickness(&one, &given).expect("a block");
        assert!(near(material.velocity.get(), c, 1e-6), "{material:?}");
        assert!(
            near(material.velocity_standard_uncertainty.get(), u, 1e-4),
            "{material:?} {u}"
        );
        // Zero's error is an input here, so their covariance is its own variance times the slope.
        let slope = oracle::gradient(speed, at, 1e-5)[2];
        let correlation = slope * u_zero / u;
        assert!(
            (f64::from(found.velocity_correlation) - correlation).abs() < 1e-4,
            "{found:?} {correlation}"
        );
    }
}

/// A reading of a block against its certificate.
///
/// Source: ISO/IEC 17043, E_n = (x - X) / sqrt(U_x² + U_X²) with expanded uncertainties (from memory), by hand.
#[test]
fn val_score_of_a_drift_check() {
    for (known_um, u_known, read_um, u_read, score) in [
        (10_000.0, 1.5, 10_006.0, 2.0, 6.0 / 5.0),
        (5_000.0, 0.3, 4_999.2, 0.4, -0.8),
        (25_000.0, 5.0, 24_987.0, 12.0, -0.5),
    ] {
        let um = |value: f64| Metres::new((value * 1e-6) as f32);
        let check = drift_check((um(known_um), um(u_known)), (um(read_um), um(u_read)), 2.0);
        // Metres of tens of millimetres are rounded to about a nanometre in f32.
        assert!(
            (f64::from(check.ratio()) - score).abs() < 2e-3,
            "{check:?}: {}",
            check.ratio()
        );
    }
}

/// What blocks do not determine to a tenth is refused, just beyond that and not just before.
#[test]
fn blocks_that_determine_too_little() {
    use CalibrationError as E;
    // 20 mm and 6.757 us between them: ten times the root of two squares.
    let of = |u_d: f64, u_t: f64| {
        let at = |d: f64| block(d, 0.5e-6 + 2.0 * d / 5920.0, u_d, u_t);
        zero_and_velocity(&at(5e-3), &at(25e-3))
    };
    assert!(of(1.40e-3, 0.0).is_ok() && of(0.0, 0.47e-6).is_ok());
    assert_eq!(of(1.43e-3, 0.0), Err(E::ThicknessesTooClose));
    assert_eq!(of(0.0, 0.49e-6), Err(E::TimesTooClose));
    // One block: 10 mm, 4 us behind the zero.
    let of = |u_d: f64, u_t: f64, u_zero: f64| {
        let zero = Zero::new(Seconds::from_us(1.0), Seconds::new(u_zero as f32));
        velocity_from_thickness(&block(10e-3, 5e-6, u_d, u_t), &zero)
    };
    assert!(of(0.99e-3, 0.0, 0.0).is_ok() && of(0.0, 0.39e-6, 0.0).is_ok() && of(0.0, 0.0, 0.39e-6).is_ok());
    assert!(of(0.0, 0.28e-6, 0.28e-6).is_ok());
    assert_eq!(of(1.01e-3, 0.0, 0.0), Err(E::ThicknessesTooClose));
    for (u_t, u_zero) in [(0.41e-6, 0.0), (0.0, 0.41e-6), (0.29e-6, 0.29e-6)] {
        assert_eq!(of(0.0, u_t, u_zero), Err(E::TimesTooClose), "{u_t} {u_zero}");
    }
    // Velocities that no wall has: below 300 m/s and above 20 km/s.
    for (velocity, possible) in [(299.0, false), (301.0, true), (19_900.0, true), (20_100.0, false)] {
        let one = block(10e-3, 20e-3 / velocity, 0.0, 0.0);
        let found = velocity_from_thickness(&one, &Zero::new(Seconds::ZERO, Seconds::ZERO));
        assert_eq!(found.is_ok(), possible, "{velocity}: {found:?}");
        let known = Material::new(MetresPerSecond::new(velocity as f32), MetresPerSecond::ZERO);
        assert_eq!(zero_at_known_velocity(&one, &known).is_ok(), possible, "{velocity}");
    }
    // Numbers that are none, and signs that cannot be.
    let steel = Material::new(MetresPerSecond::new(5920.0), MetresPerSecond::new(10.0));
    let refused = |d, t, u_d, u_t| zero_at_known_velocity(&block(d, t, u_d, u_t), &steel).unwrap_err();
    for broken in [f64::NAN, f64::INFINITY] {
        assert_eq!(refused(broken, 5e-6, 0.0, 0.0), E::NotANumber);
        assert_eq!(refused(5e-3, broken, 0.0, 0.0), E::NotANumber);
        assert_eq!(refused(5e-3, 5e-6, broken, 0.0), E::NotANumber);
        assert_eq!(refused(5e-3, 5e-6, 0.0, broken), E::NotANumber);
    }
    assert_eq!(refused(0.0, 5e-6, 0.0, 0.0), E::Thickness);
    assert_eq!(refused(5e-3, 5e-6, -1e-9, 0.0), E::Uncertainty);
    assert_eq!(refused(5e-3, 5e-6, 0.0, -1e-12), E::Uncertainty);
    let negative = Material::new(MetresPerSecond::new(5920.0), MetresPerSecond::new(-1.0));
    assert_eq!(
        zero_at_known_velocity(&block(5e-3, 5e-6, 0.0, 0.0), &negative),
        Err(E::Uncertainty)
    );
    let unsure = Zero::new(Seconds::ZERO, Seconds::from_ns(-1.0));
    assert_eq!(
        velocity_from_thickness(&block(5e-3, 5e-6, 0.0, 0.0), &unsure),
        Err(E::Uncertainty)
    );
    // Two blocks that contradict each other.
    let pair = |d1: f64, t1: f64, d2: f64, t2: f64| {
        zero_and_velocity(&block(d1, t1, 0.0, 0.0), &block(d2, t2, 0.0, 0.0)).unwrap_err()
    };
    assert_eq!(pair(5e-3, 2e-6, 5e-3, 3e-6), E::SameThickness);
    assert_eq!(pair(5e-3, 2e-6, 9e-3, 2e-6), E::SameTime);
    assert_eq!(pair(5e-3, 2e-6, 9e-3, 1e-6), E::ThickerIsEarlier);
    assert_eq!(pair(9e-3, 1e-6, 5e-3, 2e-6), E::ThickerIsEarlier);
}

/// Within, outside or undecided, with and without doubts.
#[test]
fn states_of_a_drift_check() {
    let um = |value: f64| Metres::new((value * 1e-6) as f32);
    let check = |read: f64| drift_check((um(5_000.0), um(3.0)), (um(read), um(4.0)), 2.0);
    let with = |doubts: &[Doubt]| {
        let mut all = Doubts::NONE;
        doubts.iter().for_each(|doubt| all.raise(*doubt));
        all
    };
    assert!((f64::from(check(5_000.0).expanded().get()) - 10e-6).abs() < 1e-10);
    for (read, clean, drift, other) in [
        (
            5_009.5,
            DriftState::Within,
            DriftState::Undecided,
            DriftState::Undecided,
        ),
        (
            4_990.5,
            DriftState::Within,
            DriftState::Undecided,
            DriftState::Undecided,
        ),
        (5_010.5, DriftState::Outside, DriftState::Outside, DriftState::Undecided),
        (4_989.5, DriftState::Outside, DriftState::Outside, DriftState::Undecided),
        (
            f64::NAN,
            DriftState::Undecided,
            DriftState::Undecided,
            DriftState::Undecided,
        ),
    ] {
        assert_eq!(check(read).state(Doubts::NONE), clean, "{read}");
        assert_eq!(check(read).state(with(&[Doubt::ZeroContradicted])), drift, "{read}");
        assert_eq!(check(read).state(with(&[Doubt::LowSignal])), other, "{read}");
        assert_eq!(
            check(read).state(with(&[Doubt::ZeroContradicted, Doubt::LowSignal])),
            other,
            "{read}"
        );
    }
}
