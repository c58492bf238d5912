//! What is in a record: the part, the noise, every echo.

use super::ReceiverTruth;
use crate::propagation::{Path, Role, Stack, beam};
use crate::scene::Scene;
use crate::transducer::PulseFigures;
use serde::Serialize;

/// What is in a record. Times are after the transmission trigger.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Truth {
    /// Seed of the random numbers.
    pub seed: u64,
    /// Number of the shot, from 0.
    pub shot: u64,
    /// The wall at its temperature, without coating: its own thickness, whatever pits it has.
    pub wall_thickness_mm: f64,
    /// The least wall under the -6 dB beam: see [`least_wall`].
    pub least_wall_mm: f64,
    /// The wall's velocity at the centre frequency.
    pub wall_velocity_m_s: f64,
    /// The coating, if there is one.
    pub coating_thickness_mm: Option<f64>,
    /// The coating's velocity at the centre frequency.
    pub coating_velocity_m_s: Option<f64>,
    /// When the part's surface (the coating's, if there is one) echoes: the zero offset of a reading
    /// from the transmission pulse.
    pub face_ns: f64,
    /// Noise rms per sample in codes, before rounding.
    pub noise_rms_codes: f64,
    /// Peak of the first back-wall echo's envelope over the noise rms; `None` without noise.
    pub first_back_wall_snr_db: Option<f64>,
    /// The pulse's figures.
    pub pulse: PulseFigures,
    /// The echoes in the order of their arrival.
    pub echoes: Vec<EchoTruth>,
    /// What the receiver did to this record, if it is not ideal.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub receiver: Option<ReceiverTruth>,
}

impl Truth {
    /// The plain back-wall echoes.
    pub fn back_walls(&self) -> impl Iterator<Item = &EchoTruth> {
        self.echoes.iter().filter(|echo| echo.role == Role::BackWall)
    }
}

/// One echo of a record.
#[derive(Clone, Copy, Debug, PartialEq, Serialize)]
pub struct EchoTruth {
    /// Shift of the reference pulse, whose origin is the maximum of its envelope: path over velocity at
    /// the centre frequency. What film, dispersion and the beam do to the echo's shape is not in it.
    pub arrival_ns: f64,
    /// How much later a correlation with the reference pulse finds the echo, for what film, dispersion,
    /// the beam, roughness and tilt make of its shape.
    pub correlation_shift_ns: f64,
    /// Peak of the echo's envelope over full scale.
    pub amplitude_percent: f64,
    /// Relative to the pulse.
    pub polarity: &'static str,
    /// What it is.
    pub role: Role,
    /// Which multiple of the back-wall echo, from 1.
    pub multiple: Option<u32>,
    /// Round trips through the coating.
    pub coating_round_trips: u32,
    /// Round trips through the wall.
    pub wall_round_trips: u32,
}

/// The truth of an echo of `share` of full scale.
pub(super) fn echo_truth(path: &Path, share: f64, shift: f64) -> EchoTruth {
    EchoTruth {
        arrival_ns: path.arrival * 1e9,
        correlation_shift_ns: shift * 1e9,
        amplitude_percent: share * 100.0,
        polarity: if path.amplitude < 0.0 { "negative" } else { "positive" },
        role: path.role,
        multiple: path.multiple,
        coating_round_trips: path.coating_trips,
        wall_round_trips: path.wall_trips,
    }
}

/// The least wall in metres under the -6 dB beam: what the thinnest place of a part that is not plane
/// would measure.
///
/// The beam is as wide as [`beam::width`] says at the back wall. A pit or a lamination counts as soon
/// as any of the beam meets it. A tilt b takes tan(b) times half the width. Roughness s takes what the
/// lowest of N independent heights of a normal distribution falls below the mean in one of two cases
/// (its median), N = (width / length)^2 and at least 1, with the length over which heights are alike.
#[must_use]
pub fn least_wall(scene: &Scene, stack: &Stack) -> f64 {
    let least = stack
        .columns
        .iter()
        .map(|column| column.thickness)
        .fold(stack.wall.thickness, f64::min);
    let Some(diameter) = scene.probe.element_diameter_mm else {
        return least;
    };
    let layer = |layer: &crate::propagation::Layer| layer.thickness * layer.velocity / stack.reference;
    let way =
        stack.delay_line.as_ref().map_or(0.0, layer) + stack.coating.as_ref().map_or(0.0, layer) + layer(&stack.wall);
    let width = beam::width(way, diameter * 1e-3);
    let across = width / (scene.back.roughness_length_mm * 1e-3);
    let places = (across * across).max(1.0);
    let lowest = stack.back_roughness * median_of_lowest(places);
    (least - 0.5 * width * libm::tan(stack.tilt) - lowest).max(0.0)
}

/// How many standard deviations the lowest of `places` independent normal values lies below the mean
/// in one of two cases: the x with P(value < -x) = 1 - 2^(-1/places).
fn median_of_lowest(places: f64) -> f64 {
    let wanted = -libm::expm1(-std::f64::consts::LN_2 / places);
    let (mut low, mut high) = (0.0, 10.0);
    for _ in 0..60 {
        let middle = 0.5 * (low + high);
        if 0.5 * libm::erfc(middle * std::f64::consts::FRAC_1_SQRT_2) > wanted {
            low = middle;
        } else {
            high = middle;
        }
    }
    0.5 * (low + high)
}
