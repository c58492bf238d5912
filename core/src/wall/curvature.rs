//! A flat probe on a curved part: how far the gap between them opens, and from where on that could move a reading.
//!
//! Only a strip along the line of contact couples, and the couplant beside it is thicker than the film that the budget
//! knows of. Nothing here is corrected: a reading beyond the limit carries a doubt, because how couplant fills the gap is no
//! matter of geometry alone.

use crate::math;
use crate::setup::{GaugeSetup, Surface};
use crate::units::{Metres, MetresPerSecond};

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

/// Could the part's curvature move a wall by more than `limit` (a half-width: say, the expanded uncertainty)? Only beyond
/// [`smallest_radius`], and only if the gap, full of water, delays sound by as much at the rim; of an element that is not
/// known, the radius alone decides.
#[must_use]
pub fn matters(setup: &GaugeSetup, limit: Metres) -> bool {
    let (Surface::Convex(radius) | Surface::Concave(radius), Some(smallest)) = (setup.surface, smallest_radius(setup))
    else {
        return false;
    };
    let by_gap = |diameter| gap(radius, diameter) * (setup.velocity() / COUPLANT) > limit;
    radius < smallest && setup.probe.element_diameter.is_none_or(by_gap)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::setup::{Material, Probe, Span, Window, Zero};
    use crate::units::{Hertz, Seconds};

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
            (6.0, 10.0, 460.607_99),
            (6.0, 25.0, 180.652_71),
            (10.0, 25.0, 505.102_57),
            (10.0, 50.0, 250.628_14),
            (10.0, 100.0, 125.078_22f32),
        ] {
            let found = gap(Metres::from_mm(radius), Metres::from_mm(diameter)).get() * 1e6;
            assert!((found - um).abs() < 1e-4 * um, "{diameter} on {radius}: {found}");
        }
        assert_eq!(gap(Metres::from_mm(2.0), Metres::from_mm(6.0)), Metres::from_mm(2.0));
    }

    #[test]
    fn val_the_limit_is_the_technical_orders() {
        // US technical order 33B-1-1, 5.5.3.3.1: flat references down to 1 inch outside and 3 inches inside a curve.
        let limit = Metres::new(50e-6);
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
