//! What is known of the sound's way, and what is not: the law of a set-up's echoes, and how far it may be off.

use crate::math::{self, RECTANGULAR};
use crate::path::diffraction::{Beam, Diffraction, Spreading};
use crate::path::v_path::Ray;
use crate::path::{PathLaw, VPath};
use crate::setup::{CalibratedRange, GaugeSetup, ProbeKind, Span};
use crate::units::{Metres, Seconds};
use crate::wall::beam::normalised_distance;
use crate::wall::thickness::wall_span;
use core::f32::consts::TAU;

/// What is left of a corrected shift besides what the element's size is off by, as the half-width of a rectangle over the
/// shift: the paraxial form is 1.6 % off the exact integral, the pulse's spectrum is taken for a Gaussian one (1 %), and
/// a pulse that was learned through a path takes part of that path's shape with it (4 %).
const MODEL: f32 = 0.05;

/// The V of a dual-element probe, in seconds; `None` for any other probe, and where no distance is stated.
#[must_use]
pub fn v_path(setup: &GaugeSetup) -> Option<VPath> {
    match (setup.probe.kind, setup.probe.separation) {
        (ProbeKind::DualElement, Some(separation)) => {
            Some(VPath::new(separation, setup.probe.delay_line, setup.velocity()))
        }
        _ => None,
    }
}

/// How the times of this set-up's echoes follow from straight ways, in seconds: a V, or the spreading of a beam whose
/// element is known, behind a delay line only if that is known too.
#[must_use]
pub fn path_law<'a>(setup: &GaugeSetup, spreading: &'a Spreading) -> PathLaw<'a> {
    if let Some(path) = v_path(setup) {
        return PathLaw::V(path);
    }
    match Distances::of(setup) {
        Some(distances) => PathLaw::Beam(Beam {
            table: spreading,
            start: distances.start,
            rate: distances.of_wall * setup.velocity().get() * 0.5,
            cycle: setup.probe.centre_frequency.period().get(),
            held: distances.held(setup),
        }),
        None => PathLaw::Straight,
    }
}

/// Normalised distances of a set-up.
#[derive(Clone, Copy, Debug)]
struct Distances {
    /// Of the round trip through the delay line; 0 without.
    start: f32,
    /// Of the round trip through each metre of wall.
    of_wall: f32,
}

impl Distances {
    /// `None` if the element is not known, is one of two, or hides behind a delay line that is not known.
    fn of(setup: &GaugeSetup) -> Option<Self> {
        let (probe, diameter) = (&setup.probe, setup.probe.element_diameter?);
        let round_trip = |velocity| normalised_distance(diameter, velocity / probe.centre_frequency, Metres::new(2.0));
        let start = match probe.kind {
            ProbeKind::Contact => 0.0,
            ProbeKind::DelayLine => probe
                .delay_line
                .map(|line| line.length.get() * round_trip(line.velocity))?,
            ProbeKind::DualElement => return None,
        };
        Some(Self {
            start,
            of_wall: round_trip(setup.velocity()),
        })
    }

    /// The distance that a pulse from a block's first back wall has come; 0 if nobody knows.
    fn of_pulse(&self, learned_on: Option<Metres>) -> f32 {
        learned_on.map_or(0.0, |block| self.start + self.of_wall * block.get())
    }

    /// The distance whose advance the start of the wall holds: see [`Beam::held`].
    fn held(&self, setup: &GaugeSetup) -> Option<f32> {
        let rests_on_zero = match (setup.probe.kind, wall_span(setup)) {
            (ProbeKind::DelayLine, Span::InterfaceToBackWall) => setup.zero.offset != Seconds::ZERO,
            (kind, _) => kind != ProbeKind::DelayLine,
        };
        if rests_on_zero {
            Some(self.start + self.of_wall * setup.zero.learned_on?.get())
        } else {
            Some(self.start)
        }
    }
}

/// What the spreading of this set-up's beam does to arrivals by a pulse that was learned on a block of this thickness;
/// nothing if it is not known. A table that costs a third of a million instructions.
#[must_use]
pub fn spreading(setup: &GaugeSetup, pulse_learned_on: Option<Metres>) -> Spreading {
    match Distances::of(setup) {
        Some(distances) => {
            let reference = distances.of_pulse(pulse_learned_on);
            Spreading::relative_to(reference, setup.probe.relative_bandwidth)
        }
        None => Spreading::NONE,
    }
}

/// Would [`spreading`] give the same for both set-ups?
#[must_use]
pub fn same_spreading(one: &GaugeSetup, other: &GaugeSetup, pulse_learned_on: Option<Metres>) -> bool {
    let of = |setup: &GaugeSetup| {
        let distances = Distances::of(setup)?;
        Some((distances.of_pulse(pulse_learned_on), setup.probe.relative_bandwidth))
    };
    of(one) == of(other)
}

/// How much later than straight the first back wall of a wall comes: a block's time less this is what calibration needs.
///
/// To learn a zero, set [`crate::setup::Zero::learned_on`] to a thickness of 0 first: that is what the zero then holds. While
/// nobody knows what a zero holds, the beam's share is 0: a velocity learned against such a zero must leave it alone.
#[must_use]
pub fn path_deviation(setup: &GaugeSetup, spreading: &Spreading, wall: Metres) -> Seconds {
    match path_law(setup, spreading) {
        PathLaw::Beam(Beam { held: None, .. }) => Seconds::ZERO,
        law => Seconds::new(law.deviation((wall * 2.0 / setup.velocity()).get())),
    }
}

/// Is the beam's spreading known well enough to correct differences between echoes?
#[must_use]
pub fn corrects_beam(setup: &GaugeSetup) -> bool {
    Distances::of(setup).is_some()
}

/// How many times as much as straight down an error of a time counts where sound goes along a V: 1 / cos θ. 1 between
/// back walls, whose period is straight.
#[must_use]
pub fn gain(setup: &GaugeSetup, wall: Metres) -> f32 {
    match (wall_span(setup), ray(setup, wall)) {
        (Span::TransmissionPulseToBackWall, Some(ray)) => 1.0 / ray.cosine,
        _ => 1.0,
    }
}

/// The ray to a wall, where its way is a V.
fn ray(setup: &GaugeSetup, wall: Metres) -> Option<Ray> {
    v_path(setup).map(|path| path.at((wall * 2.0 / setup.velocity()).get()))
}

/// What the distance of the elements may be off by moves a wall, as a standard uncertainty.
///
/// With p half the distance, ∂t/∂p = 2 sin θ / c and ∂t/∂d = 2 cos θ / c: an error of p moves the wall by tan θ times as
/// much. A zero that was learned on blocks with the same distance has taken the part of the block with it, and what is
/// left goes with sin θ - sin θ of the block: the larger of that of thinnest and thickest block. Between back walls the
/// error of the second less that of the first counts, and no zero.
///
/// Zero for a probe without a stated distance: that is a doubt.
#[must_use]
pub fn v_path_uncertainty(setup: &GaugeSetup, wall: Metres) -> Metres {
    let (Some(separation), Some(here)) = (setup.probe.separation, ray(setup, wall)) else {
        return Metres::ZERO;
    };
    let sine_at = |wall: Metres| ray(setup, wall).map_or(0.0, |ray| ray.sine);
    let share = match (wall_span(setup), setup.calibrated) {
        (Span::BackWallToBackWall, _) => {
            let next = ray(setup, wall * 2.0).unwrap_or(here);
            // t2 - t1 against p and against d.
            (here.sine - next.sine) / math::larger(2.0 * next.cosine - here.cosine, 0.1)
        }
        (_, None) => here.sine / here.cosine,
        (_, Some(range)) => {
            let thin = (here.sine - sine_at(range.from)).abs();
            let thick = (here.sine - sine_at(range.to)).abs();
            math::larger(thin, thick) / here.cosine
        }
    };
    separation.standard_uncertainty * (0.5 * share)
}

/// Could the V-shaped way of a dual-element probe have moved this wall by more than `limit` beyond its budget? Without a
/// stated distance nothing is corrected, and it could; with one the budget holds its uncertainty as far as a straight
/// line does: what the line leaves over, U²(p) / (2 d cos² θ) for the expanded uncertainty U(p) of half the distance, is
/// judged here. So is a ray of more than 60° from the upright, where the width of the elements counts as much as their
/// distance.
#[must_use]
pub fn v_path_matters(setup: &GaugeSetup, wall: Metres, limit: Metres) -> bool {
    if setup.probe.kind != ProbeKind::DualElement {
        return false;
    }
    let (Some(separation), Some(ray)) = (setup.probe.separation, ray(setup, wall)) else {
        return true;
    };
    let half = separation.standard_uncertainty * (0.5 * setup.coverage_factor);
    let left = half * ((half / wall) / (2.0 * ray.cosine * ray.cosine));
    ray.cosine < 0.5 || left > limit
}

/// How far diffraction moves the round trip of the span if nothing is corrected, by the phase at the centre frequency.
///
/// * Between back walls: the largest shift between neighbours of the first four. A fitted period is a mean of such
///   differences, and they do not fall steadily: the phase can rise faster between the second and the third echo than
///   between the first two.
/// * From the interface: from the delay line's distance on. Behind a delay line that is not known, whatever the span, as
///   if the path in the part began at the element, see [`crate::wall::beam::uncorrected_shift`].
/// * From the transmission pulse: the first back wall's own shift. A zero that was learned on a block holds that of the
///   block; one of a calibration with its blocks, those of all of them (`remaining_shift`).
///
/// 0 without an element diameter; a dual-element probe counts as a single element of that diameter.
#[must_use]
pub fn beam_shift(setup: &GaugeSetup, wall: Metres) -> Seconds {
    let Some(diameter) = setup.probe.element_diameter else {
        return Seconds::ZERO;
    };
    let wavelength = setup.velocity() / setup.probe.centre_frequency;
    // Not known: as if the part began at the element.
    let (start, of_wall) = match Distances::of(setup) {
        Some(distances) => (distances.start, distances.of_wall),
        None => (0.0, normalised_distance(diameter, wavelength, Metres::new(2.0))),
    };
    let advance = |wall: Metres| Diffraction::at(start + of_wall * wall.get()).phase_advance;
    let time = |radians: f32| setup.probe.centre_frequency.period() * (radians.abs() / TAU);
    let shift = |from: Metres, to: Metres| time(advance(to) - advance(from));
    let hidden = setup.probe.kind == ProbeKind::DelayLine && setup.probe.delay_line.is_none();
    match wall_span(setup) {
        Span::BackWallToBackWall if !hidden => {
            let mut before = advance(wall);
            let mut largest = 0.0;
            for multiple in 2..=4u8 {
                let here = advance(wall * f32::from(multiple));
                largest = math::larger(largest, here - before);
                before = here;
            }
            time(largest)
        }
        Span::TransmissionPulseToBackWall if setup.probe.kind != ProbeKind::DelayLine => {
            match (setup.zero.learned_on, setup.calibrated) {
                (Some(block), _) if block > Metres::ZERO => shift(block, wall),
                (_, Some(range)) => remaining_shift(shift, range, wall),
                (_, None) => shift(Metres::ZERO, wall),
            }
        }
        Span::TransmissionPulseToBackWall | Span::InterfaceToBackWall => {
            // The zero may or may not have been learned on the blocks: take the longer way.
            let beyond = setup.calibrated.map_or(Metres::ZERO, |range| range.to - wall);
            shift(Metres::ZERO, if beyond > wall { beyond } else { wall })
        }
        Span::BackWallToBackWall => shift(Metres::ZERO, wall),
    }
}

/// Standard uncertainty (k = 1) that the spreading of the beam leaves in the round trip of the span.
///
/// Where it is corrected: what the shift changes by as the element's diameter does by its uncertainty, and five per
/// cent of the shift, as a rectangle, for the model. Where it is not (no delay line stated, a zero of which nobody
/// knows what it holds, a dual-element probe): the whole shift as the half-width of a rectangle. 0 if the element is not
/// known: that is a doubt.
#[must_use]
pub fn beam_uncertainty(setup: &GaugeSetup, wall: Metres) -> Seconds {
    let whole = beam_shift(setup, wall);
    let held = Distances::of(setup).and_then(|distances| distances.held(setup));
    let differences = Distances::of(setup).is_some() && wall_span(setup) == Span::BackWallToBackWall;
    if held.is_none() && !differences {
        return whole * RECTANGULAR;
    }
    let of_size = |factor: f32| {
        let mut other = *setup;
        other.probe.element_diameter = setup.probe.element_diameter.map(|diameter| diameter * factor);
        beam_shift(&other, wall)
    };
    let relative = math::smaller(setup.probe.element_diameter_uncertainty, 0.5);
    let size = ((of_size(1.0 + relative) - of_size(1.0 - relative)) * 0.5).get();
    let model = (whole * (MODEL * RECTANGULAR)).get();
    Seconds::new(math::sqrt(size * size + model * model))
}

/// What is left of a shift that a calibration on blocks has taken into zero and velocity: between the blocks at
/// most the larger of the differences to them; beyond them the difference to the nearer one, and what a straight line
/// through both adds. `shift` gives the difference between two walls.
fn remaining_shift(shift: impl Fn(Metres, Metres) -> Seconds, range: CalibratedRange, wall: Metres) -> Seconds {
    let (to_thin, to_thick) = (shift(range.from, wall), shift(range.to, wall));
    let (nearest, beyond) = if wall > range.to {
        (to_thick, wall - range.to)
    } else if wall < range.from {
        (to_thin, range.from - wall)
    } else {
        return to_thin.longer(to_thick);
    };
    let length = range.to - range.from;
    if length > Metres::ZERO {
        nearest + shift(range.from, range.to) * (beyond / length)
    } else {
        nearest
    }
}

/// Could the spreading of a beam whose element the set-up does not name move this wall by more than `limit` (a
/// half-width: say, the expanded uncertainty)? Judged with an element of two wavelengths, smaller than any usual one and
/// so with the largest shift. Always false if the element is known: then the shift stands in the budget.
#[must_use]
pub fn unknown_beam_matters(setup: &GaugeSetup, wall: Metres, limit: Metres) -> bool {
    if setup.probe.element_diameter.is_some() {
        return false;
    }
    let mut smallest = *setup;
    smallest.probe.element_diameter = Some(setup.velocity() / setup.probe.centre_frequency * 2.0);
    setup.velocity() * 0.5 * beam_shift(&smallest, wall) > limit
}
