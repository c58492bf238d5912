//! Times to thickness, and what their errors make of it, in double precision.

use halfpulse::path::{PathLaw, Spreading};
use halfpulse::wall::thickness::{
    SMALLEST_SPACING, Timed, TrainTimes, coating, excess, round_trip, thickest_wall, thinnest_wall, wall,
};
use halfpulse::wall::way::path_law;
use halfpulse::{
    Coating, DelayLine, ElementSeparation, GaugeSetup, Hertz, Material, Metres, MetresPerSecond, Probe, Seconds, Span,
    Window, Zero,
};
use halfpulse_published::{Table, oracle};

fn setup(probe: Probe, span: Span, velocity: f64, offset_us: f64) -> GaugeSetup {
    GaugeSetup::try_new(
        Hertz::from_mhz(50.0),
        probe,
        Material::new(MetresPerSecond::new(velocity as f32), MetresPerSecond::ZERO),
        Zero::new(Seconds::from_us(offset_us as f32), Seconds::ZERO),
        span,
        Window {
            from: Seconds::from_us(2.0),
            to: Seconds::from_us(60.0),
        },
    )
    .expect("a sound set-up")
}

fn contact() -> Probe {
    Probe::contact(Hertz::from_mhz(5.0), 0.6)
}

fn delay_line() -> Probe {
    Probe::delay_line(Hertz::from_mhz(5.0), 0.6)
}

fn timed(us: f64, u_ns: f64) -> Timed {
    Timed::new(Seconds::new((us * 1e-6) as f32), Seconds::from_ns(u_ns as f32))
}

/// Half the velocity times the time, whichever two events the time is between; with the velocities of several metals.
///
/// Source: ASTM E797/E797M and ISO 16809, T = V t / 2 after the zero's correction (from memory); velocities as in G. W. C. Kaye and
/// T. H. Laby, Tables of Physical and Chemical Constants (from memory), evaluated in double precision.
#[test]
fn val_thickness_of_the_standards() {
    for velocity in [6374.0, 5960.0, 4759.0, 2160.0] {
        for (zero, interface, wall_mm) in [(0.35, 7.8, 1.27), (0.0, 12.0, 6.35), (1.2, 4.0, 25.4)] {
            let trip = 2e3 * wall_mm / velocity;
            let read = |probe, span, times: &TrainTimes| {
                f64::from(wall(&setup(probe, span, velocity, zero), times).expect("times").as_mm())
            };
            // What the rounding of the times to f32 leaves: half a unit in the 24th place, twice, of the longest time.
            let allowed = 0.5e-3 * velocity * (zero + interface + trip) * 1.2e-7;
            let first = TrainTimes::single(timed(zero + trip, 1.0));
            let found = read(contact(), Span::TransmissionPulseToBackWall, &first);
            assert!(
                (found - wall_mm).abs() < allowed,
                "{velocity} m/s, {wall_mm} mm: {found}"
            );
            let behind = TrainTimes::single(timed(interface + zero + trip, 1.0)).with_interface(timed(interface, 1.0));
            let found = read(delay_line(), Span::InterfaceToBackWall, &behind);
            assert!(
                (found - wall_mm).abs() < allowed,
                "{velocity} m/s, {wall_mm} mm: {found}"
            );
            let train = TrainTimes::single(timed(interface, 1.0)).with_period(timed(trip, 1.0), -0.7);
            let found = read(contact(), Span::BackWallToBackWall, &train);
            assert!(
                (found - wall_mm).abs() < allowed,
                "{velocity} m/s, {wall_mm} mm: {found}"
            );
        }
    }
}

/// Uncertainty of the round trip and of what is left for a coating, from those of the arrivals and their correlation.
///
/// Source: JCGM 100:2008, 5.2.2, the whole double sum with numerical derivatives (`oracle::propagated`).
#[test]
fn val_uncertainty_of_differences_of_times() {
    let (first, period, interface) = (11.0, 2.0, 8.5);
    for (u, r) in [([1.0, 0.8, 2.0], -0.7), ([3.0, 5.0, 0.5], 0.4), ([2.0, 2.0, 1.0], -1.0)] {
        let times = TrainTimes::single(timed(first, u[0]))
            .with_period(timed(period, u[1]), r as f32)
            .with_interface(timed(interface, u[2]));
        let correlation = |i: usize, j: usize| if i + j == 1 { r } else { 0.0 };
        let behind = setup(delay_line(), Span::InterfaceToBackWall, 5920.0, 0.25);
        let at = [first, period, interface];
        let of_trip = oracle::propagated(|[f, _, i]| f - i, at, u, correlation);
        let trip = round_trip(&behind, &times).expect("an interface");
        assert!(
            (f64::from(trip.standard_uncertainty.as_ns()) / of_trip - 1.0).abs() < 1e-5,
            "{trip:?}"
        );
        let of_excess = oracle::propagated(|[f, p, i]| f - p - i, at, u, correlation);
        let left = excess(&behind, &times).expect("a period");
        assert!(
            (f64::from(left.standard_uncertainty.as_ns()) / of_excess - 1.0).abs() < 1e-5,
            "{left:?}"
        );
        assert!((left.time.as_us() - 0.25).abs() < 1e-5, "{left:?}");
        // A contact probe's excess counts from the trigger.
        let of_excess = oracle::propagated(|[f, p, _]| f - p, at, u, correlation);
        let left = excess(&setup(contact(), Span::BackWallToBackWall, 5920.0, 9.5), &times).expect("a period");
        assert!(
            (f64::from(left.standard_uncertainty.as_ns()) / of_excess - 1.0).abs() < 1e-5,
            "{left:?}"
        );
        assert!((left.time.as_us() + 0.5).abs() < 1e-5, "{left:?}");
    }
}

/// Jitter of the trigger in the first arrival: the correlation with the period follows from the covariance, which jitter
/// does not change.
///
/// Source: Monte Carlo of 40000 shots (JCGM 101:2008), two echoes of one shot with noise of their own and one jitter.
#[test]
fn val_jitter_against_monte_carlo() {
    let (noise, jitter) = (2.0, 3.0);
    let mut random = oracle::Random::new(8);
    let (mut firsts, mut periods) = (Vec::new(), Vec::new());
    for _ in 0..40_000 {
        let (a, b, j) = (
            noise * random.normal(),
            noise * random.normal(),
            jitter * random.normal(),
        );
        firsts.push(a + j);
        periods.push(b - a);
    }
    let without = TrainTimes::single(timed(4.0, noise)).with_period(timed(2.0, noise * 2f64.sqrt()), -0.5f32.sqrt());
    let with = without.with_jitter(Seconds::from_ns(jitter as f32));
    let (_, scatter) = oracle::mean_and_deviation(&firsts);
    let stated = f64::from(with.first_back_wall.standard_uncertainty.as_ns());
    assert!((stated / scatter - 1.0).abs() < 0.015, "{stated} {scatter}");
    let correlation = oracle::correlation(&firsts, &periods);
    assert!(
        (f64::from(with.first_period_correlation) - correlation).abs() < 0.015,
        "{with:?} {correlation}"
    );
    assert_eq!(with.period, without.period);
    let behind = without.with_interface(timed(1.0, 1.0));
    assert_eq!(behind.with_jitter(Seconds::from_ns(3.0)), behind);
}

/// Coating and wall of a painted part from one record.
///
/// Source: layer arithmetic in double precision: the echo from below the coating comes 2 a / c_a + 2 d / c after the front.
#[test]
fn val_coating_by_layer_arithmetic() {
    for (coat_mm, coat_velocity, wall_mm) in [(0.3, 2300.0, 4.0), (1.1, 2700.0, 12.0), (0.05, 2000.0, 3.0)] {
        let (zero, trip) = (0.6, 2e3 * wall_mm / 5920.0);
        let coat = Coating::new(MetresPerSecond::new(coat_velocity as f32), MetresPerSecond::new(50.0));
        let painted = setup(contact(), Span::TransmissionPulseToBackWall, 5920.0, zero).with_coating(coat);
        let first = zero + 2e3 * coat_mm / coat_velocity + trip;
        let times = TrainTimes::single(timed(first, 1.0)).with_period(timed(trip, 1.0), -0.7);
        let found = f64::from(wall(&painted, &times).expect("a period").as_mm());
        assert!((found - wall_mm).abs() < 1e-5, "{found}");
        let left = excess(&painted, &times).expect("a period");
        let found = f64::from(coating(&coat, left).expect("a velocity").0.as_mm());
        assert!((found - coat_mm).abs() < 1e-5, "{coat_mm} mm: {found}");
        // Without a velocity the time is all there is.
        assert!(
            (f64::from(left.time.as_us()) - 2e3 * coat_mm / coat_velocity).abs() < 1e-5,
            "{left:?}"
        );
        assert_eq!(coating(&Coating::UNKNOWN, left), None);
    }
}

/// The V of a dual-element probe without blocks: actual arrivals to the wall, and the arrival's uncertainty to that of the
/// straight time.
///
/// Source: `v_path.csv`, Pythagoras, t = 2 sqrt(d² + s²) / c (NumPy); the uncertainty by the derivative of
/// sqrt((c t / 2)² - s²) (`oracle::gradient`).
#[test]
fn val_straightened_v() {
    for row in Table::read("physics/v_path.csv").rows() {
        let (half, time) = (row.number("half_spacing_m"), row.number("tof_s"));
        let probe = Probe::dual_element(Hertz::from_mhz(5.0), 0.6)
            .with_separation(ElementSeparation::new(Metres::new(2.0 * half as f32), Metres::ZERO));
        let setup = setup(probe, Span::TransmissionPulseToBackWall, 5920.0, 0.5);
        let arrival = timed(0.5 + 1e6 * time, 1.0);
        let law = path_law(&setup, &Spreading::NONE);
        assert!(matches!(law, PathLaw::V(_)), "{law:?}");
        let straight = TrainTimes::single(arrival).straightened(&law, setup.zero.offset);
        let found = f64::from(wall(&setup, &straight).expect("a time").get());
        let [slope] = oracle::gradient(|[t]| ((2960.0 * t).powi(2) - half * half).sqrt(), [time], 1e-6);
        assert!(
            (found - row.number("d_m")).abs() < 2e-7 * slope / 2960.0 + 1e-8,
            "{row:?}: {found}"
        );
        let uncertainty = f64::from(straight.first_back_wall.standard_uncertainty.get()) * 2960.0;
        assert!(
            (uncertainty / (slope * 1e-9) - 1.0).abs() < 2e-3,
            "{row:?}: {uncertainty}"
        );
    }
}

/// The thinnest and thickest wall of a set-up.
///
/// Source: geometry by hand: echoes of T20 duration, the spacing that trains are read down to, a window from 2 to 60 µs.
#[test]
fn val_limits_of_the_wall_by_hand() {
    let duration = Seconds::from_us(0.5);
    let mm = |wall: Metres| f64::from(wall.as_mm());
    let spaced = 2.96 * 0.5 * f64::from(SMALLEST_SPACING);
    let between = setup(contact(), Span::BackWallToBackWall, 5920.0, 0.4);
    assert!((mm(thinnest_wall(&between, duration)) - spaced).abs() < 1e-5);
    // The second echo ends at 60 µs: two periods are 60 - 0.25 - 0.4 µs.
    assert!((mm(thickest_wall(&between, duration)) - 2.96 * 59.35 / 2.0).abs() < 1e-4);
    // From the pulse: 2 + 0.25 - 0.4 µs until the first echo stands in the window as a whole.
    let from_pulse = setup(contact(), Span::TransmissionPulseToBackWall, 5920.0, 0.4);
    assert!((mm(thinnest_wall(&from_pulse, duration)) - 2.96 * 1.85).abs() < 1e-5);
    assert!((mm(thickest_wall(&from_pulse, duration)) - 2.96 * 59.35).abs() < 1e-4);
    // Behind 10 mm at 2500 m/s: interface at 8 µs, its second echo begins at 15.75 µs, and the wall's must end before.
    let line = DelayLine {
        length: Metres::from_mm(10.0),
        velocity: MetresPerSecond::new(2500.0),
    };
    let behind = setup(
        delay_line().with_delay_line(line),
        Span::InterfaceToBackWall,
        5920.0,
        0.0,
    );
    assert!((mm(thinnest_wall(&behind, duration)) - spaced).abs() < 1e-5);
    assert!((mm(thickest_wall(&behind, duration)) - 2.96 * 7.5).abs() < 1e-4);
    // An end of the window before that counts, and no wall at all is nothing.
    let mut short = behind;
    short.window.to = Seconds::from_us(12.0);
    assert!((mm(thickest_wall(&short, duration)) - 2.96 * 3.75).abs() < 1e-4);
    short.window.to = Seconds::from_us(8.1);
    assert_eq!(thickest_wall(&short, duration), Metres::ZERO);
}
