//! What is not known of the sound's way: V-shaped ways by Pythagoras, spreading beams by a piston's factor in double precision.

use halfpulse::path::{PathLaw, Spreading};
use halfpulse::wall::way::{
    beam_shift, beam_uncertainty, corrects_beam, gain, path_deviation, path_law, unknown_beam_matters, v_path_matters,
    v_path_uncertainty,
};
use halfpulse::{
    CalibratedRange, DelayLine, ElementSeparation, GaugeSetup, Hertz, Material, Metres, MetresPerSecond, Probe,
    Seconds, Span, Window, Zero,
};
use halfpulse_published::oracle;
use std::f64::consts::TAU;

const C: f64 = 5920.0;
const FIVE: Hertz = Hertz::from_mhz(5.0);
/// Nanoseconds of a cycle.
const CYCLE: f64 = 200.0;

fn setup(probe: Probe, span: Span) -> GaugeSetup {
    GaugeSetup::new(
        Hertz::from_mhz(50.0),
        probe,
        Material::new(MetresPerSecond::new(C as f32), MetresPerSecond::ZERO),
        Zero::new(Seconds::ZERO, Seconds::ZERO),
        span,
        Window {
            from: Seconds::from_us(0.5),
            to: Seconds::from_us(60.0),
        },
    )
}

fn mm(value: f64) -> Metres {
    Metres::from_mm(value as f32)
}

fn blocks(from: f64, to: f64) -> CalibratedRange {
    CalibratedRange {
        from: mm(from),
        to: mm(to),
    }
}

/// A dual-element probe whose elements are 6 mm apart, give or take 0.2 mm.
fn dual() -> Probe {
    Probe::dual_element(FIVE, 0.6).with_separation(ElementSeparation::new(mm(6.0), mm(0.2)))
}

/// The wall by a first echo at `t` (in mm of way over two), and between two echoes, with the elements half of `p` apart.
fn wall_from_first([t, p]: [f64; 2]) -> f64 {
    (t * t - 0.25 * p * p).sqrt()
}

/// How far an error of the elements' distance moves a wall.
///
/// Source: t = 2 sqrt(d² + p²) / c, Pythagoras (dual-element probes: Krautkrämer, from memory), JCGM 100:2008, 5.1.2 with
/// numerical derivatives (`oracle::gradient`).
#[test]
fn val_distance_of_the_elements_by_derivatives() {
    for d in [1.5, 4.0, 10.0, 40.0] {
        let t = f64::hypot(d, 3.0);
        let [by_time, by_distance] = oracle::gradient(wall_from_first, [t, 6.0], 1e-5);
        let first = setup(dual(), Span::TransmissionPulseToBackWall);
        let found = f64::from(v_path_uncertainty(&first, mm(d)).as_mm());
        assert!(
            (found / (0.2 * by_distance.abs()) - 1.0).abs() < 1e-3,
            "{d} mm: {found}"
        );
        assert!((f64::from(gain(&first, mm(d))) / by_time - 1.0).abs() < 1e-4, "{d} mm");

        // A zero from one block of 8 mm, learned with the wrong distance, has the block's share.
        let error = |p: f64| {
            let zero = f64::hypot(8.0, 3.0) - f64::hypot(8.0, 0.5 * p);
            wall_from_first([t - zero, p])
        };
        let [slope] = oracle::gradient(|[p]| error(p), [6.0], 1e-5);
        let found = f64::from(v_path_uncertainty(&first.with_calibrated_range(blocks(8.0, 8.0)), mm(d)).as_mm());
        assert!(
            (found - 0.2 * slope.abs()).abs() < 1e-3 * found + 1e-6,
            "{d} mm: {found} {slope}"
        );
        // Of two blocks the one that is further off.
        let found_both = f64::from(v_path_uncertainty(&first.with_calibrated_range(blocks(8.0, 30.0)), mm(d)).as_mm());
        let other = f64::from(v_path_uncertainty(&first.with_calibrated_range(blocks(30.0, 30.0)), mm(d)).as_mm());
        assert!((found_both - found.max(other)).abs() < 1e-6, "{d} mm: {found_both}");

        // Between the first and the second echo: solve for the wall by bisection.
        let spacing = f64::hypot(2.0 * d, 3.0) - f64::hypot(d, 3.0);
        let between = |[spacing, p]: [f64; 2]| {
            let (mut low, mut high) = (0.5 * d, 2.0 * d);
            for _ in 0..60 {
                let middle = 0.5 * (low + high);
                let there = f64::hypot(2.0 * middle, 0.5 * p) - f64::hypot(middle, 0.5 * p);
                if there < spacing { low = middle } else { high = middle }
            }
            0.5 * (low + high)
        };
        let [_, slope] = oracle::gradient(between, [spacing, 6.0], 1e-4);
        let train = setup(dual(), Span::BackWallToBackWall);
        let found = f64::from(v_path_uncertainty(&train, mm(d)).as_mm());
        assert!(
            (found / (0.2 * slope.abs()) - 1.0).abs() < 2e-3,
            "{d} mm: {found} {slope}"
        );
        assert_eq!(gain(&train, mm(d)), 1.0);
    }
}

/// When the V is no longer a matter of its budget: what a straight line leaves over, and rays that lie flat.
///
/// Source: second derivative of sqrt(t² - p² / 4) by numerical differences; 60 degrees by geometry.
#[test]
fn val_when_the_v_matters() {
    let first = setup(dual(), Span::TransmissionPulseToBackWall);
    for d in [2.5, 4.0, 10.0] {
        let t = f64::hypot(d, 3.0);
        // The expanded uncertainty of the distance is 0.4 mm.
        let left = |p: f64| wall_from_first([t, p]);
        let second = (left(6.001) - 2.0 * left(6.0) + left(5.999)) / 1e-6;
        let curved = 0.5 * second.abs() * 0.4 * 0.4;
        assert!(v_path_matters(&first, mm(d), mm(0.98 * curved)), "{d} mm: {curved}");
        assert!(!v_path_matters(&first, mm(d), mm(1.02 * curved)), "{d} mm: {curved}");
    }
    // tan 60° = 3 mm / 1.732 mm.
    assert!(v_path_matters(&first, mm(1.72), mm(10.0)) && !v_path_matters(&first, mm(1.75), mm(10.0)));
    assert!(v_path_matters(
        &setup(Probe::dual_element(FIVE, 0.6), Span::BackWallToBackWall),
        mm(9.0),
        mm(10.0)
    ));
    assert!(!v_path_matters(
        &setup(Probe::contact(FIVE, 0.6), Span::BackWallToBackWall),
        mm(1.0),
        mm(0.0)
    ));
}

/// Advance of an element of 6 mm on steel, in ns, after this many millimetres of way and `start` of normalised distance before.
fn advance(start: f64, way_mm: f64, diameter_mm: f64) -> f64 {
    let wavelength = C / 5e3;
    let s = start + 4.0 * way_mm * wavelength / (diameter_mm * diameter_mm);
    if s > 0.0 {
        CYCLE * oracle::piston_advance(s) / TAU
    } else {
        0.0
    }
}

fn near(found: Seconds, expected: f64) -> bool {
    (f64::from(found.as_ns()) - expected).abs() < 2e-4 * expected.abs() + 2e-3
}

/// What diffraction moves each span by, and what a calibration has already taken off.
///
/// Source: Rogers and Van Buren 1974 (from memory), the phase at 5 MHz in double precision with Bessel's integral
/// (`oracle::piston_advance`).
#[test]
fn val_beam_shift_of_every_span() {
    let element = |probe: Probe| {
        probe
            .with_element_diameter(mm(6.0))
            .with_element_diameter_uncertainty(0.1)
    };
    let contact = element(Probe::contact(FIVE, 0.6));
    let at = |way: f64| advance(0.0, way, 6.0);
    for d in [3.0, 10.0, 30.0] {
        let wall = mm(d);
        let from_pulse = setup(contact, Span::TransmissionPulseToBackWall);
        assert!(near(beam_shift(&from_pulse, wall), at(2.0 * d)), "{d} mm");
        let mut learned = from_pulse;
        learned.zero = learned.zero.with_learned_on(mm(12.5));
        assert!(
            near(beam_shift(&learned, wall), (at(2.0 * d) - at(25.0)).abs()),
            "{d} mm"
        );
        // Between back walls the largest of the first differences.
        let between = setup(contact, Span::BackWallToBackWall);
        let largest = (1..4)
            .map(|n| at(2.0 * d * f64::from(n + 1)) - at(2.0 * d * f64::from(n)))
            .fold(0.0, f64::max);
        assert!(near(beam_shift(&between, wall), largest), "{d} mm: {largest}");
        // Behind a delay line from its distance on: 8 mm at 2350 m/s.
        let line = DelayLine {
            length: mm(8.0),
            velocity: MetresPerSecond::new(2350.0),
        };
        let behind = setup(
            element(Probe::delay_line(FIVE, 0.6)).with_delay_line(line),
            Span::InterfaceToBackWall,
        );
        let start = 4.0 * 16.0 * (2350.0 / 5e3) / 36.0;
        let expected = (advance(start, 2.0 * d, 6.0) - advance(start, 0.0, 6.0)).abs();
        assert!(near(beam_shift(&behind, wall), expected), "{d} mm: {expected}");
        // Not known: as if the part began at the element, whatever the span.
        let hidden = setup(element(Probe::delay_line(FIVE, 0.6)), Span::BackWallToBackWall);
        assert!(near(beam_shift(&hidden, wall), at(2.0 * d)), "{d} mm");
        assert!(!corrects_beam(&hidden) && corrects_beam(&behind) && corrects_beam(&between));
    }
    // Blocks of 5 and 25 mm: between them the larger difference, beyond them the nearer one's and a straight line's slope.
    let calibrated = setup(contact, Span::TransmissionPulseToBackWall).with_calibrated_range(blocks(5.0, 25.0));
    let (thin, thick) = (at(10.0), at(50.0));
    for (d, expected) in [
        (10.0, (at(20.0) - thin).max(thick - at(20.0))),
        (40.0, at(80.0) - thick + (thick - thin) * 15.0 / 20.0),
        (2.0, thin - at(4.0) + (thick - thin) * 3.0 / 20.0),
    ] {
        assert!(near(beam_shift(&calibrated, mm(d)), expected), "{d} mm: {expected}");
    }
    let one_block = calibrated.with_calibrated_range(blocks(25.0, 25.0));
    assert!(near(beam_shift(&one_block, mm(40.0)), at(80.0) - thick));
    assert_eq!(
        beam_shift(&setup(Probe::contact(FIVE, 0.6), Span::BackWallToBackWall), mm(5.0)),
        Seconds::ZERO
    );
}

/// What is left of the beam after correction: the size of the element, and five per cent for the model; all of it, as a
/// rectangle, where nothing is corrected.
///
/// Source: JCGM 100:2008, 4.3.7 and 5.1.2: half of the difference between an element a tenth larger and a tenth smaller, by
/// `oracle::piston_advance`.
#[test]
fn val_beam_uncertainty_by_derivatives() {
    let root3 = 3f64.sqrt();
    let contact = Probe::contact(FIVE, 0.6)
        .with_element_diameter(mm(6.0))
        .with_element_diameter_uncertainty(0.1);
    let mut from_pulse = setup(contact, Span::TransmissionPulseToBackWall);
    for d in [3.0, 10.0, 30.0] {
        let whole = advance(0.0, 2.0 * d, 6.0);
        from_pulse.zero.learned_on = None;
        assert!(near(beam_uncertainty(&from_pulse, mm(d)), whole / root3), "{d} mm");
        from_pulse.zero = from_pulse.zero.with_learned_on(Metres::ZERO);
        let size = 0.5 * (advance(0.0, 2.0 * d, 6.6) - advance(0.0, 2.0 * d, 5.4));
        let expected = size.hypot(0.05 * whole / root3);
        assert!(
            near(beam_uncertainty(&from_pulse, mm(d)), expected),
            "{d} mm: {expected}"
        );
        let between = setup(contact, Span::BackWallToBackWall);
        let difference = |diameter: f64| {
            let at = |n: f64| advance(0.0, 2.0 * d * n, diameter);
            (at(2.0) - at(1.0)).max(at(3.0) - at(2.0)).max(at(4.0) - at(3.0))
        };
        let size = 0.5 * (difference(6.6) - difference(5.4));
        let expected = size.hypot(0.05 * difference(6.0) / root3);
        assert!(near(beam_uncertainty(&between, mm(d)), expected), "{d} mm: {expected}");
    }
}

/// What the start of the wall holds: behind a delay line the interface echo's own spreading, unless a zero is added whose block
/// nobody knows; then nothing is corrected, and all of it is a rectangle.
///
/// Source: Rogers and Van Buren 1974 (from memory), `oracle::piston_advance`; JCGM 100:2008, 4.3.7.
#[test]
fn val_what_a_start_holds() {
    let line = DelayLine {
        length: mm(8.0),
        velocity: MetresPerSecond::new(2350.0),
    };
    let probe = Probe::delay_line(FIVE, 0.6)
        .with_element_diameter(mm(6.0))
        .with_element_diameter_uncertainty(0.1)
        .with_delay_line(line);
    let at = |way: f64, diameter: f64| {
        let start = 4.0 * 16.0 * (2350.0 / 5e3) / (diameter * diameter);
        advance(start, way, diameter)
    };
    let behind = setup(probe, Span::InterfaceToBackWall);
    let mut with_zero = behind;
    with_zero.zero.offset = Seconds::from_ns(20.0);
    let mut of_a_block = with_zero;
    of_a_block.zero = of_a_block.zero.with_learned_on(mm(9.0));
    let spreading = Spreading::new(0.6);
    for d in [4.0, 15.0] {
        let shift = |diameter: f64| (at(2.0 * d, diameter) - at(0.0, diameter)).abs();
        let corrected = (0.5 * (shift(6.6) - shift(5.4))).hypot(0.05 * shift(6.0) / 3f64.sqrt());
        assert!(near(beam_uncertainty(&behind, mm(d)), corrected), "{d} mm: {corrected}");
        assert!(
            near(beam_uncertainty(&with_zero, mm(d)), shift(6.0) / 3f64.sqrt()),
            "{d} mm"
        );
        assert!(near(beam_uncertainty(&of_a_block, mm(d)), corrected), "{d} mm");
        // What is taken off: the difference to what is held, as far as a pulse's mean over its band follows the phase.
        let found = f64::from(path_deviation(&behind, &spreading, mm(d)).as_ns());
        let expected = at(0.0, 6.0) - at(2.0 * d, 6.0);
        assert!((0.7..1.35).contains(&(found / expected)), "{d} mm: {found} {expected}");
        assert_eq!(path_deviation(&with_zero, &spreading, mm(d)), Seconds::ZERO);
        let found = f64::from(path_deviation(&of_a_block, &spreading, mm(d)).as_ns());
        let expected = at(18.0, 6.0) - at(2.0 * d, 6.0);
        assert!((0.7..1.35).contains(&(found / expected)), "{d} mm: {found} {expected}");
    }
    // The zero may have been learned on the blocks: the longer way of wall and what is left to the thickest block.
    let calibrated = behind.with_calibrated_range(blocks(5.0, 25.0));
    for (d, way) in [(4.0, 42.0), (10.0, 30.0), (15.0, 30.0), (40.0, 80.0)] {
        assert!(
            near(beam_shift(&calibrated, mm(d)), (at(way, 6.0) - at(0.0, 6.0)).abs()),
            "{d} mm"
        );
    }
    // Between back walls a zero does not count.
    let mut train = with_zero;
    train.span = Span::BackWallToBackWall;
    assert_eq!(
        path_law(&train, &spreading),
        path_law(&setup(probe, Span::BackWallToBackWall), &spreading)
    );
}

/// How much later than straight a wall's first echo comes along a V, as calibration takes it off a block's time.
///
/// Source: Pythagoras, 2 (sqrt(d² + p²) - d) / c.
#[test]
fn val_deviation_of_a_v() {
    let v = setup(dual(), Span::TransmissionPulseToBackWall);
    assert!(matches!(path_law(&v, &Spreading::NONE), PathLaw::V(_)));
    for d in [1.0, 8.0, 50.0] {
        let expected = 2e6 / C * (f64::hypot(d, 3.0) - d);
        let found = f64::from(path_deviation(&v, &Spreading::NONE, mm(d)).as_ns());
        assert!((found / expected - 1.0).abs() < 1e-4, "{d} mm: {found} {expected}");
    }
    let plain = setup(Probe::contact(FIVE, 0.6), Span::TransmissionPulseToBackWall);
    assert_eq!(path_law(&plain, &Spreading::NONE), PathLaw::Straight);
}

/// An element that nobody stated is judged as one of two wavelengths.
///
/// Source: Rogers and Van Buren 1974 (from memory), `oracle::piston_advance`.
#[test]
fn val_when_an_unknown_beam_matters() {
    let plain = setup(Probe::contact(FIVE, 0.6), Span::TransmissionPulseToBackWall);
    let moved = 1e-6 * C / 2.0 * advance(0.0, 20.0, 2.0 * C / 5e3);
    assert!(unknown_beam_matters(&plain, mm(10.0), mm(0.99 * moved)));
    assert!(!unknown_beam_matters(&plain, mm(10.0), mm(1.01 * moved)));
    let known = setup(
        Probe::contact(FIVE, 0.6).with_element_diameter(mm(6.0)),
        Span::TransmissionPulseToBackWall,
    );
    assert!(!unknown_beam_matters(&known, mm(10.0), Metres::ZERO));
}
