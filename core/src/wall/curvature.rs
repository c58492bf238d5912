//! A flat probe on a curved part: how far the gap between them opens, and from where on that could move a reading.
//!
//! Only a strip along the line of contact couples, and the couplant beside it is thicker than the film that the budget
//! knows of: [`shift`] says by how much that moves an echo, as if each strip were a plane film of oil. Nothing here is
//! corrected: a reading that this could have moved carries a doubt, because how couplant fills the gap is no matter of geometry
//! alone. Beyond the radius on which flat references serve, the doubt stands whatever the film does.

use crate::math;
use crate::setup::{GaugeSetup, Span, Surface};
use crate::units::{Metres, MetresPerSecond, Seconds};
use crate::wall::coupling::{self, STEEL_IMPEDANCE};
use crate::wall::thickness::wall_span;
use core::f32::consts::TAU;

/// Smallest outer radius on which a flat reference serves, one inch: US technical order 33B-1-1, 5.5.3.3.1.
const SMALLEST_CONVEX: Metres = Metres::from_mm(25.4);
/// Smallest inner radius, three inches: the same.
const SMALLEST_CONCAVE: Metres = Metres::from_mm(76.2);
/// Or so many element diameters: a pipe ten times as thick as the probe (common practice).
const ELEMENTS: f32 = 5.0;
/// Velocity in water, the slowest of the usual couplants: a gap counts the more, the slower what fills it.
const COUPLANT: MetresPerSecond = MetresPerSecond::new(1480.0);

/// The gap at the rim of a flat, round element on the outside of a cylinder, R - sqrt(R² - D²/4); inside one it is the
/// gap under the middle. The radius itself where the element is wider than the cylinder.
#[must_use]
#[inline(never)]
pub fn gap(radius: Metres, diameter: Metres) -> Metres {
    let half = diameter * 0.5;
    if !(half < radius) {
        return radius;
    }
    let (half, radius) = (half.get(), radius.get());
    // Without the difference of near numbers.
    Metres::new(half * half / (radius + math::sqrt((radius - half) * (radius + half))))
}

/// The smallest radius on which this set-up's probe reads as on a flat part; `None` for a flat one.
#[must_use]
pub fn smallest_radius(setup: &GaugeSetup) -> Option<Metres> {
    let by_practice = match setup.surface {
        Surface::Flat => return None,
        Surface::Convex(_) => SMALLEST_CONVEX,
        Surface::Concave(_) => SMALLEST_CONCAVE,
    };
    let by_element = setup
        .probe
        .element_diameter
        .map_or(Metres::ZERO, |diameter| diameter * ELEMENTS);
    Some(if by_element > by_practice {
        by_element
    } else {
        by_practice
    })
}

/// Places along half the element at which the gap is taken; closer together towards the middle, where it couples.
const PLACES: u8 = 16;

/// How far the gap under the probe moves the time that the span reads against a film that is `least` thick everywhere: the
/// phase, at the centre frequency, of the mean of passages (from the transmission pulse) or reflections (any other span)
/// over the element, each place as if it were plane. For a part of steel under oil, as [`crate::wall::coupling`] has it. 0 for
/// a flat part, or if the element is not known.
#[must_use]
#[inline(never)]
pub fn shift(setup: &GaugeSetup, least: Metres) -> Seconds {
    let (Surface::Convex(radius) | Surface::Concave(radius), Some(diameter)) =
        (setup.surface, setup.probe.element_diameter)
    else {
        return Seconds::ZERO;
    };
    let concave = matches!(setup.surface, Surface::Concave(_));
    let passes = matches!(wall_span(setup), Span::TransmissionPulseToBackWall);
    let rim = gap(radius, diameter);
    let (mut re, mut im) = (0.0, 0.0);
    for place in 0..PLACES {
        let u = (f32::from(place) + 0.5) / f32::from(PLACES);
        // A chord at y = a u² of a disc, with dy = 2 a u du.
        let across = u * u;
        let share = math::sqrt(1.0 - across * across) * u;
        let here = gap(radius, diameter * across);
        let (a, b) = of_film(setup, passes, least + if concave { rim - here } else { here });
        re += share * a;
        im += share * b;
    }
    let (flat_re, flat_im) = of_film(setup, passes, least);
    // The mean's phase against that of the plain film.
    let turned = math::atan2(im * flat_re - re * flat_im, re * flat_re + im * flat_im);
    Seconds::new(turned.abs() / (TAU * setup.probe.centre_frequency.get()))
}

/// What a film of this thickness does to an echo, as a complex factor.
#[inline(never)]
fn of_film(setup: &GaugeSetup, passes: bool, film: Metres) -> (f32, f32) {
    let omega = TAU * setup.probe.centre_frequency.get();
    let face = coupling::face_impedance(setup.probe.face);
    if passes {
        passage(face, omega, film)
    } else {
        reflection(face, omega, film)
    }
}

/// In and out through a film once, as a complex factor: 1 / ((Z0 + Zs) cos θ + j (Z0 Zs / Zf + Zf) sin θ) squared, but for
/// its scale, θ = ω h / c.
fn passage(face: f32, omega: f32, film: Metres) -> (f32, f32) {
    let angle = omega * film.get() / coupling::FILM_VELOCITY;
    let stiff = face * STEEL_IMPEDANCE / coupling::FILM_IMPEDANCE + coupling::FILM_IMPEDANCE;
    let a = math::cos(angle);
    let b = stiff / (face + STEEL_IMPEDANCE) * math::sin(angle);
    let square = a * a + b * b;
    ((a * a - b * b) / (square * square), -2.0 * a * b / (square * square))
}

/// Reflected inside the part by the film under the face: (Zs y - 1) / (Zs y + 1), y = 1 / Z0 + j ω h / (Zf c).
fn reflection(face: f32, omega: f32, film: Metres) -> (f32, f32) {
    let (mismatch, spring) = (STEEL_IMPEDANCE / face, coupling::spring(STEEL_IMPEDANCE, omega, film));
    let (above, below) = (mismatch - 1.0, mismatch + 1.0);
    let square = below * below + spring * spring;
    (
        (above * below + spring * spring) / square,
        (spring * below - above * spring) / square,
    )
}

/// Could the part's curvature move a wall by more than `limit` (a half-width: say, the expanded uncertainty)? By its
/// [`shift`], for the thinnest and the thickest film that the set-up speaks of. Or beyond [`smallest_radius`], if the gap,
/// full of water, delays sound by as much at the rim; of an element that is not known, the radius alone decides.
#[must_use]
#[inline(never)]
pub fn matters(setup: &GaugeSetup, limit: Metres) -> bool {
    let (Surface::Convex(radius) | Surface::Concave(radius), Some(smallest)) = (setup.surface, smallest_radius(setup))
    else {
        return false;
    };
    let by_gap = |diameter| gap(radius, diameter) * (setup.velocity() / COUPLANT) > limit;
    let mut films = [Metres::ZERO, setup.probe.couplant_film].into_iter();
    (radius < smallest && setup.probe.element_diameter.is_none_or(by_gap))
        || films.any(|least| setup.velocity() * 0.5 * shift(setup, least) > limit)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::setup::{Material, Probe, ProbeFace, Window, Zero};
    use crate::units::Hertz;

    const SETUP: GaugeSetup = GaugeSetup::new(
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

    #[test]
    fn val_gap_under_a_flat_probe() {
        // Made with NumPy: R - sqrt(R² - D²/4) in double precision, in µm.
        for (diameter, radius, um) in [
            (6.0, 10.0, 460.608),
            (6.0, 25.0, 180.652_7),
            (10.0, 25.0, 505.102_6),
            (10.0, 50.0, 250.628_1),
            (10.0, 100.0, 125.078_2f32),
        ] {
            let found = gap(Metres::from_mm(radius), Metres::from_mm(diameter)).get() * 1e6;
            assert!((found - um).abs() < 1e-4 * um, "{diameter} on {radius}: {found}");
        }
        assert_eq!(gap(Metres::from_mm(2.0), Metres::from_mm(6.0)), Metres::from_mm(2.0));
    }

    #[test]
    fn a_shallow_gap_moves_an_echo_like_its_mean() {
        // The mean of y² over a disc is a² / 4: a film of a² / (8 R), 0.0225 µm for 6 mm on 50 m, and a plastic face's film counts
        // in proportion while it is thin.
        let mut setup = SETUP.with_surface(Surface::Convex(Metres::new(50.0)));
        setup.span = Span::TransmissionPulseToBackWall;
        setup.probe.face = ProbeFace::Plastic;
        let found = shift(&setup, Metres::ZERO).as_ns();
        let five = setup.probe.centre_frequency;
        let film = coupling::transmission_delay(ProbeFace::Plastic, STEEL_IMPEDANCE, five, Metres::new(22.5e-9));
        assert!((found / film.as_ns() - 1.0).abs() < 0.02, "{found} {film}");
        // Inside a pipe the gap is deepest under the middle: three times the mean.
        setup.surface = Surface::Concave(Metres::new(50.0));
        let inside = shift(&setup, Metres::ZERO).as_ns();
        assert!((inside / film.as_ns() - 3.0).abs() < 0.1, "{inside} {film}");
        setup.probe.element_diameter = None;
        assert_eq!(shift(&setup, Metres::ZERO), Seconds::ZERO);
    }

    #[test]
    fn val_the_limit_is_the_technical_orders() {
        // US technical order 33B-1-1, 5.5.3.3.1: flat references down to 1 inch outside and 3 inches inside a curve.
        let limit = Metres::new(150e-6);
        let inch = 25.4;
        let at = |surface| matters(&SETUP.with_surface(surface), limit);
        assert!(at(Surface::Convex(Metres::from_mm(0.99 * inch))) && !at(Surface::Convex(Metres::from_mm(inch * 1.2))));
        assert!(
            at(Surface::Concave(Metres::from_mm(2.97 * inch))) && !at(Surface::Concave(Metres::from_mm(3.01 * inch)))
        );
        assert!(!matters(&SETUP, Metres::ZERO));
        // Ten times the probe (common practice): 10 mm want a pipe of 100 mm.
        let mut wide = SETUP.with_surface(Surface::Convex(Metres::from_mm(49.0)));
        wide.probe.element_diameter = Some(Metres::from_mm(10.0));
        assert!((smallest_radius(&wide).unwrap().as_mm() - 50.0).abs() < 1e-4);
        assert!(matters(&wide, limit));
        // 6 mm on 20 mm open a gap of 226 µm, 0.9 mm of steel: no matter for a reading that is worse than that.
        let narrow = SETUP.with_surface(Surface::Convex(Metres::from_mm(20.0)));
        assert!(matters(&narrow, Metres::from_mm(0.8)) && !matters(&narrow, Metres::from_mm(1.0)));
    }
}
