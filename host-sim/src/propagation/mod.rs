//! Which echoes come back from a layered part, when, how strong, and how they are changed.
//!
//! Probe face, optional coating, wall, back medium: every reverberation returns after a whole number
//! of round trips through the coating and through the wall. All orders in which the same round trips
//! can be made arrive together; they are counted, not listed, so that one [`Path`] stands for all of
//! them and the sum over paths is exact for plane waves.

pub mod attenuation;
pub mod beam;
pub mod border;
mod search;
pub mod v_path;

pub use attenuation::Attenuation;
pub use beam::diffraction;

use border::{Film, Meetings};
use serde::Serialize;

/// A layer that sound crosses.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Layer {
    /// Thickness in metres.
    pub thickness: f64,
    /// Velocity at the centre frequency in m/s.
    pub velocity: f64,
    /// Impedance in rayl.
    pub impedance: f64,
    /// What it takes from the sound.
    pub attenuation: Attenuation,
}

impl Layer {
    /// Time there and back in seconds, at the centre frequency.
    #[must_use]
    pub fn round_trip(&self) -> f64 {
        2.0 * self.thickness / self.velocity
    }
}

/// A share of the beam that meets another wall beside the main one: a pit, a lamination.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Column {
    /// Share of the beam's area, above 0 and below 1.
    pub share: f64,
    /// Its wall in metres.
    pub thickness: f64,
    /// Impedance behind it.
    pub back_impedance: f64,
    /// What its echoes are called.
    pub role: Role,
}

/// Two elements side by side.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct DualElement {
    /// Half the distance of the elements' centres in metres.
    pub half_separation: f64,
    /// What leaks from one to the other, as a share of a total reflection.
    pub crosstalk: f64,
    /// When that arrives after the face's echo would, in seconds.
    pub crosstalk_delay: f64,
}

/// Part of the sound that comes back as a shear wave.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct ModeConversion {
    /// Longitudinal over shear velocity.
    pub ratio: f64,
    /// Amplitude over that of the first back-wall echo.
    pub amplitude: f64,
}

/// What lies in front of the probe.
#[derive(Clone, Debug, PartialEq)]
pub struct Stack {
    /// When sound that turned back at the probe's own face would arrive, in seconds.
    pub zero: f64,
    /// A delay line or water path, if there is one.
    pub delay_line: Option<Layer>,
    /// Pressure factor with which the delay line's near end turns sound back; 0: no multiples.
    pub near_end: f64,
    /// Impedance of what touches the part: delay line, or wear plate with its couplant.
    pub face_impedance: f64,
    /// A couplant film or a surface that is rough or curved; `None` for a plain border.
    pub film: Option<Film>,
    /// A coating on the part.
    pub coating: Option<Layer>,
    /// The wall.
    pub wall: Layer,
    /// Impedance of what lies behind the wall.
    pub back_impedance: f64,
    /// Root mean square of the back wall's height in metres.
    pub back_roughness: f64,
    /// Angle of the back wall against the front in radians.
    pub tilt: f64,
    /// Other walls beside the main one, which has the rest of the beam.
    pub columns: Vec<Column>,
    /// An echo by way of a shear wave.
    pub mode_conversion: Option<ModeConversion>,
    /// Two elements instead of one.
    pub dual: Option<DualElement>,
    /// The frequency in hertz to which velocities and nominal amplitudes belong.
    pub reference: f64,
}

/// What an echo is.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Role {
    /// From the end of the delay line.
    Interface,
    /// From the border between coating and wall, or a reverberation in the coating.
    Coating,
    /// From the back wall, without further reverberation in the coating.
    BackWall,
    /// From the floor of a pit, or a multiple of it.
    Pit,
    /// From a lamination, or a multiple of it.
    Lamination,
    /// From the back wall, one way as a shear wave.
    ModeConverted,
    /// Through the delay line more than once.
    DelayLineMultiple,
    /// Leaked from the transmitting to the receiving element.
    CrossTalk,
}

/// All sound that made the same round trips and met the border between probe and part alike.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Path {
    /// Which wall: 0 the main one, n the n-th of [`Stack::columns`].
    pub column: usize,
    /// Round trips through the delay line; 1 without one.
    pub delay_trips: u32,
    /// Round trips through the coating.
    pub coating_trips: u32,
    /// Round trips through the wall.
    pub wall_trips: u32,
    /// How often it met the border, where that depends on frequency (else the weight has it).
    pub meetings: Meetings,
    /// What multiplies the shape that losses, beam and border make of the pulse.
    pub weight: f64,
    /// Sum of the pressure factors at the centre frequency, without attenuation, roughness and tilt of
    /// the back wall; 1 is a total reflection at the probe's face.
    pub amplitude: f64,
    /// When it arrives, in seconds after the trigger, at the velocities of the centre frequency. A
    /// couplant film's delay is not in it.
    pub arrival: f64,
    /// What it is.
    pub role: Role,
    /// Which multiple of the back-wall echo, from 1; `None` for other roles.
    pub multiple: Option<u32>,
}

/// Limits of an enumeration.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Limits {
    /// No path that arrives later, in seconds.
    pub until: f64,
    /// No path below this share of the strongest.
    pub smallest: f64,
    /// No path with more round trips through the wall.
    pub wall_trips: u32,
}

/// Most paths that are followed.
pub const MOST_PATHS: usize = 5_000;

/// Pressure reflection factor of a border, seen from `near`.
#[must_use]
pub fn reflection_factor(near: f64, far: f64) -> f64 {
    (far - near) / (far + near)
}

impl Stack {
    /// When the part's surface (of the coating, if there is one) echoes: zero and delay line.
    #[must_use]
    pub fn face_time(&self) -> f64 {
        self.zero + self.delay_line.map_or(0.0, |line| line.round_trip())
    }

    /// Share of the beam that meets the main wall.
    #[must_use]
    pub fn main_share(&self) -> f64 {
        1.0 - self.columns.iter().map(|column| column.share).sum::<f64>()
    }

    /// Thickness of the wall of a path's column.
    #[must_use]
    pub fn thickness(&self, column: usize) -> f64 {
        let other = column.checked_sub(1).and_then(|place| self.columns.get(place));
        other.map_or(self.wall.thickness, |column| column.thickness)
    }

    /// Velocity and impedance of what the border leads into: coating or wall.
    fn beyond_border(&self) -> Layer {
        self.coating.unwrap_or(self.wall)
    }

    /// Impedances on both sides of the border.
    #[must_use]
    pub fn border_impedances(&self) -> (f64, f64) {
        (self.face_impedance, self.beyond_border().impedance)
    }

    /// When the echo of these round trips (delay line, coating, wall) arrives.
    #[must_use]
    pub fn arrival(&self, column: usize, trips: (u32, u32, u32), role: Role) -> f64 {
        let (delays, coats, walls) = trips;
        let wall = Layer {
            thickness: self.thickness(column),
            ..self.wall
        };
        if let Some(dual) = &self.dual {
            if role == Role::CrossTalk {
                return self.face_time() + dual.crosstalk_delay;
            }
            let line = self
                .delay_line
                .map_or((0.0, 1.0), |line| (line.thickness, line.velocity));
            let coat = self.coating.map_or((0.0, 1.0), |coat| (coat.thickness, coat.velocity));
            let legs = [
                (line.0 * f64::from(delays), line.1),
                (coat.0 * f64::from(coats), coat.1),
                (wall.thickness * f64::from(walls), wall.velocity),
            ];
            return self.zero + v_path::time(&legs, dual.half_separation) + self.conversion_delay(role, &wall);
        }
        let coating = self.coating.map_or(0.0, |layer| layer.round_trip());
        let again = f64::from(delays.saturating_sub(1)) * self.delay_line.map_or(0.0, |line| line.round_trip());
        self.face_time()
            + f64::from(coats) * coating
            + f64::from(walls) * wall.round_trip()
            + again
            + self.conversion_delay(role, &wall)
    }

    /// When a path of the same round trips arrives, were they made in this stack.
    #[must_use]
    pub fn arrival_of(&self, path: &Path) -> f64 {
        let trips = (path.delay_trips, path.coating_trips, path.wall_trips);
        self.arrival(path.column, trips, path.role)
    }

    /// How much later a shear wave on the way back arrives.
    fn conversion_delay(&self, role: Role, wall: &Layer) -> f64 {
        match (&self.mode_conversion, role) {
            (Some(conversion), Role::ModeConverted) => 0.5 * wall.round_trip() * (conversion.ratio - 1.0),
            _ => 0.0,
        }
    }

    /// Sum over layers of length times velocity on a path, in m2/s: over frequency and the square of
    /// the element's radius it is the S of [`diffraction`].
    #[must_use]
    pub fn spreading(&self, path: &Path) -> f64 {
        let layer = |layer: &Layer, trips: f64| 2.0 * layer.thickness * layer.velocity * trips;
        let wall = Layer {
            thickness: self.thickness(path.column),
            ..self.wall
        };
        self.delay_line
            .map_or(0.0, |line| layer(&line, f64::from(path.delay_trips)))
            + self
                .coating
                .map_or(0.0, |coating| layer(&coating, f64::from(path.coating_trips)))
            + layer(&wall, f64::from(path.wall_trips))
    }
}

#[cfg(test)]
mod tests;
