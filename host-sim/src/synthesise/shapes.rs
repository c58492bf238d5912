//! Shapes of echoes: what losses, border, beam, roughness and tilt make of the pulse's spectrum.

use crate::fourier::{Complex, Rotation};
use crate::propagation::beam::{self, Diffraction};
use crate::propagation::border::{BorderBand, rough_reflection};
use crate::propagation::{self, Path, Role, Stack};
use crate::scene::Scene;
use crate::transducer::BandPulse;
use std::f64::consts::TAU;

/// What the element's size does.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) struct Element {
    /// Its diameter in millimetres, where anything depends on it.
    diameter: f64,
    /// Whether the beam spreads.
    pub(super) spreads: bool,
}

impl Element {
    /// Of the scene's probe.
    pub(super) fn of(scene: &Scene) -> Self {
        let diameter = scene.probe.element_diameter_mm;
        Self {
            diameter: diameter.unwrap_or(0.0),
            spreads: scene.probe.beam_diffraction && diameter.is_some(),
        }
    }

    /// Square of the radius in m2.
    fn radius_squared(self) -> f64 {
        0.25e-6 * self.diameter * self.diameter
    }
}

/// Whether any echo has another shape than the pulse.
pub(super) fn are_changed(stack: &Stack, element: Element) -> bool {
    let lossy = |layer: Option<propagation::Layer>| layer.is_some_and(|layer| !layer.attenuation.is_none());
    element.spreads
        || lossy(stack.delay_line)
        || lossy(stack.coating)
        || lossy(Some(stack.wall))
        || stack.film.is_some()
        || stack.back_roughness > 0.0
        || stack.tilt > 0.0
}

/// Adds the echoes' spectra, with time zero at `start`, to the slot of their round trips through the
/// wall (to the only one if there is but one).
pub(super) fn add_echoes(
    slots: &mut [&mut [Complex]],
    pulse: &BandPulse,
    stack: &Stack,
    paths: &[Path],
    element: Element,
    start: f64,
) {
    for_each_shape(pulse, stack, paths, element, |path, shape| {
        // A pit does not grow with the wall.
        let slot = if slots.len() == 1 || path.column > 0 {
            0
        } else {
            path.wall_trips as usize
        };
        let Some(sums) = slots.get_mut(slot) else { return };
        add_echo(sums, pulse, path, shape, start);
    });
}

/// Adds one echo's spectrum, with time zero at `start`.
pub(super) fn add_echo(sums: &mut [Complex], pulse: &BandPulse, path: &Path, shape: &[Complex], start: f64) {
    let step = -TAU * pulse.spacing() * (path.arrival - start);
    let turns = Rotation::new(step, pulse.first_bin() as u32);
    for ((sum, &value), turn) in sums.iter_mut().zip(shape).zip(turns) {
        *sum += (value * turn).scaled(path.weight);
    }
}

/// Visits each path with the spectrum that its way makes of the pulse, before weight and delay.
pub(super) fn for_each_shape(
    pulse: &BandPulse,
    stack: &Stack,
    paths: &[Path],
    element: Element,
    mut visit: impl FnMut(&Path, &[Complex]),
) {
    let over = |layer: Option<propagation::Layer>| -> Vec<Complex> {
        match layer.filter(|layer| !layer.attenuation.is_none()) {
            Some(layer) => pulse
                .frequencies()
                .map(|frequency| layer.attenuation.over(2.0 * layer.thickness, frequency))
                .collect(),
            None => Vec::new(),
        }
    };
    let (line, coating) = (over(stack.delay_line), over(stack.coating));
    let (near, far) = stack.border_impedances();
    let mut border = stack
        .film
        .as_ref()
        .map(|film| BorderBand::new(film, near, far, pulse.frequencies()));
    let table = element.spreads.then(Diffraction::new);
    let mut order: Vec<&Path> = paths.iter().collect();
    order.sort_by_key(|path| (path.column, path.delay_trips, path.coating_trips, path.wall_trips));
    // The pulse after the round trips of the path before: the next path needs only the difference.
    let (mut once, mut travelled) = (Vec::new(), Vec::new());
    let (mut place, mut trips) = (None, (0, 0));
    let (mut wall, mut tilt) = (Vec::new(), (0, Vec::new()));
    let mut heard = Vec::new();
    for path in order {
        if place != Some((path.column, path.delay_trips)) {
            if place.map(|(column, _)| column) != Some(path.column) {
                wall = wall_trip(pulse, stack, path.column, over);
            }
            place = Some((path.column, path.delay_trips));
            once = pulse.values().to_vec();
            multiply(&mut once, &line, path.delay_trips);
            travelled = once.clone();
            trips = (0, 0);
        }
        if path.coating_trips != trips.0 {
            multiply(&mut once, &coating, path.coating_trips - trips.0);
            travelled.clone_from(&once);
            trips = (path.coating_trips, 0);
        }
        multiply(&mut travelled, &wall, path.wall_trips - trips.1);
        trips.1 = path.wall_trips;
        let tilted = stack.tilt > 0.0 && path.wall_trips > 0 && path.role != Role::Lamination;
        if table.is_none() && border.is_none() && !tilted {
            visit(path, &travelled);
            continue;
        }
        heard.clear();
        match &table {
            Some(table) => {
                let spreading = stack.spreading(path) / element.radius_squared();
                heard.extend(travelled.iter().zip(pulse.frequencies()).map(|(&value, frequency)| {
                    // Frequency 0 spreads out without end.
                    let share = if frequency > 0.0 {
                        table.at(spreading / frequency)
                    } else {
                        Complex::ZERO
                    };
                    value * share
                }));
            }
            None => heard.extend_from_slice(&travelled),
        }
        if let Some(border) = &mut border {
            multiply(&mut heard, border.along(path.meetings), 1);
        }
        if tilted {
            if tilt.0 != path.wall_trips {
                let angle = 2.0 * f64::from(path.wall_trips) * stack.tilt;
                let (radius, velocity) = (0.5e-3 * element.diameter, stack.wall.velocity);
                tilt.0 = path.wall_trips;
                tilt.1 = pulse
                    .frequencies()
                    .map(|frequency| beam::tilt(angle, radius, velocity, frequency))
                    .collect();
            }
            for (value, &share) in heard.iter_mut().zip(&tilt.1) {
                *value = value.scaled(share);
            }
        }
        visit(path, &heard);
    }
}

/// One round trip through the wall of a column: losses, and what a rough back wall scatters.
fn wall_trip(
    pulse: &BandPulse,
    stack: &Stack,
    column: usize,
    over: impl Fn(Option<propagation::Layer>) -> Vec<Complex>,
) -> Vec<Complex> {
    let mut wall = over(Some(propagation::Layer {
        thickness: stack.thickness(column),
        ..stack.wall
    }));
    let other = column.checked_sub(1).and_then(|place| stack.columns.get(place));
    if stack.back_roughness == 0.0 || other.is_some_and(|column| column.role == Role::Lamination) {
        return wall;
    }
    if wall.is_empty() {
        wall = vec![Complex::new(1.0, 0.0); pulse.values().len()];
    }
    for (value, frequency) in wall.iter_mut().zip(pulse.frequencies()) {
        let height = TAU * frequency / stack.wall.velocity * stack.back_roughness;
        *value = value.scaled(rough_reflection(height));
    }
    wall
}

fn multiply(values: &mut [Complex], factors: &[Complex], times: u32) {
    for _ in 0..times {
        for (value, &factor) in values.iter_mut().zip(factors) {
            *value = *value * factor;
        }
    }
}
