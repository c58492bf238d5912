//! The tables of a scene that make a part less than ideal: couplant, surface, pits, laminations,
//! grain, temperature; and the dual-element probe.

use serde::{Deserialize, Serialize};

/// Table `[dual_element]`: of a probe with a transmitting and a receiving element. Delay blocks, if any,
/// stand in `[delay_line]`.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct DualElement {
    /// Distance of the elements' centres (without delay blocks: of the points where the sound enters
    /// and leaves), 0 to 100 mm.
    pub separation_mm: f64,
    /// What leaks across through the blocks, over a total reflection at the probe's face, 0 to 100 %.
    #[serde(default)]
    pub crosstalk_percent: f64,
    /// How much later than straight down and up the delay blocks it arrives, -10000 to 10000 ns.
    #[serde(default)]
    pub crosstalk_delay_ns: f64,
}

/// Table `[couplant]`: material, or velocity with density or impedance; an exact thin layer.
#[derive(Clone, Debug, PartialEq, Default, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Couplant {
    /// A material of the table, such as `oil` or `glycerine`.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub material: Option<String>,
    /// Velocity, 100 to 30000 m/s.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub velocity_m_s: Option<f64>,
    /// Density, 0.1 to 30000 kg/m3.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub density_kg_m3: Option<f64>,
    /// Impedance, 0.0001 to 200 MRayl, instead of the density.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub impedance_mrayl: Option<f64>,
    /// Thickness of the film, 0 to 1000 um.
    pub film_um: f64,
    /// Change of the velocity near 20 degrees Celsius, -50 to 50 m/s per kelvin; the material's if left out.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub velocity_slope_m_s_k: Option<f64>,
}

/// Table `[surface]`: the part's front under the couplant.
#[derive(Clone, Debug, PartialEq, Default, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Surface {
    /// Roughness, rms, 0 to 1000 um. Kirchhoff: gentle slopes, heights alike over a wavelength or more.
    #[serde(default)]
    pub roughness_um: f64,
    /// Radius of a pipe's outside under a flat probe, larger than the element's radius, to 100000 mm;
    /// flat if left out.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub radius_mm: Option<f64>,
}

/// Table `[pit]`: a flat pit in the back wall; a part of the beam meets its floor.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Pit {
    /// Wall that is left at its floor, at 20 degrees Celsius: 0.001 mm to less than the wall.
    pub remaining_mm: f64,
    /// Share of the beam's area that meets the floor, 0 to 99 %.
    pub area_percent: f64,
}

/// Table `[lamination]`: a gap full of air inside the wall, parallel to its front.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Lamination {
    /// Depth below the wall's front at 20 degrees Celsius: 0.001 mm to less than the wall.
    pub depth_mm: f64,
    /// Share of the beam's area that it turns back, 0 to 99 %.
    pub area_percent: f64,
}

/// Table `[grain]`: echoes of the wall's grains. The same in every shot of one place, so that averaging
/// does not lower them. Level, or size of the grains.
#[derive(Clone, Debug, PartialEq, Default, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Grain {
    /// Rms of the noise just below the surface over the peak of the first back-wall echo, -120 to 20 dB.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub level_db: Option<f64>,
    /// Mean grain diameter, 1 to 1000 um: the level is then that of single scattering (Born) by an
    /// untextured cubic metal with an exponential correlation of its grains.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub size_um: Option<f64>,
    /// Anisotropy of the crystal, c11 - c12 - 2 c44, -500 to 500 GPa; -136.1 (alpha iron) if left out. Only
    /// with `size_um`.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub anisotropy_gpa: Option<f64>,
    /// Scatterers in a microsecond of record, 0.01 to 10000: few make single spikes, many a normal
    /// distribution. 100 if left out.
    #[serde(default = "hundred")]
    pub scatterers_per_us: f64,
    /// Another number, another place: other grains with the same seed.
    #[serde(default)]
    pub place: u32,
}

const fn hundred() -> f64 {
    100.0
}

/// Table `[temperature]`: in degrees Celsius, -100 to 500 (water 0 to 100). Velocities change with the
/// material's coefficient and solids expand; lengths and velocities elsewhere in the scene are those at
/// 20 degrees.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Temperature {
    /// The wall, with pit and lamination.
    #[serde(default = "room")]
    pub wall_c: f64,
    /// The coating.
    #[serde(default = "room")]
    pub coating_c: f64,
    /// The couplant.
    #[serde(default = "room")]
    pub couplant_c: f64,
    /// The delay line, water path or delay blocks.
    #[serde(default = "room")]
    pub delay_line_c: f64,
}

impl Default for Temperature {
    fn default() -> Self {
        Self {
            wall_c: room(),
            coating_c: room(),
            couplant_c: room(),
            delay_line_c: room(),
        }
    }
}

const fn room() -> f64 {
    20.0
}
