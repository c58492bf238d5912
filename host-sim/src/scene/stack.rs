//! What a scene means in SI units: layers at their temperature, the border, other walls in the beam.

use super::check::{error, named, within};
use super::{Layer, ProbeKind, Scene, SceneError, Temperature};
use crate::layered::ExactLayer;
use crate::propagation::border::{Curvature, Film};
use crate::propagation::{self, Attenuation, Column, DualElement, ModeConversion, Role, Stack};

impl Scene {
    /// What lies in front of the probe, in SI units.
    ///
    /// # Errors
    /// The first value that [`Scene::check`] objects to.
    pub fn stack(&self) -> Result<Stack, SceneError> {
        self.check()?;
        let reference = self.probe.centre_frequency_mhz * 1e6;
        let temperature = self.temperature.clone().unwrap_or_default();
        let Temperature {
            wall_c,
            coating_c,
            couplant_c,
            delay_line_c,
        } = temperature;
        let delay_line = match &self.delay_line {
            Some(line) => Some(
                line.as_layer()?
                    .at("delay_line", reference, ("delay_line_c", delay_line_c))?,
            ),
            None => None,
        };
        let coating = match &self.coating {
            Some(coating) => Some(coating.at("coating", reference, ("coating_c", coating_c))?),
            None => None,
        };
        let wall = self.wall.at("wall", reference, ("wall_c", wall_c))?;
        let film = match &self.couplant {
            None => None,
            Some(couplant) => {
                let layer = couplant
                    .as_layer()
                    .at("couplant", reference, ("couplant_c", couplant_c))?;
                Some(Film {
                    couplant: ExactLayer {
                        thickness: couplant.film_um * 1e-6,
                        velocity: layer.velocity,
                        impedance: layer.impedance,
                    },
                    roughness: self.surface.as_ref().map_or(0.0, |surface| surface.roughness_um * 1e-6),
                    part_velocity: coating.unwrap_or(wall).velocity,
                    curvature: self.curvature(),
                })
            }
        };
        let contact_face = self.probe.face_impedance_mrayl.unwrap_or(6.0) * 1e6;
        let expansion = self.wall_expansion()?;
        let dual = self
            .dual_element
            .as_ref()
            .filter(|_| self.probe.kind == ProbeKind::DualElement);
        Ok(Stack {
            zero: self.probe.zero_offset_ns * 1e-9,
            delay_line,
            near_end: self
                .delay_line
                .as_ref()
                .map_or(0.0, |line| line.near_end_percent / 100.0),
            face_impedance: delay_line.map_or(contact_face, |line| line.impedance),
            film,
            coating,
            wall,
            back_impedance: self.back.impedance()?,
            back_roughness: self.back.roughness_um * 1e-6,
            tilt: self.back.tilt_degrees.to_radians(),
            columns: self.columns(expansion)?,
            mode_conversion: match self.echoes.mode_converted_percent {
                0.0 => None,
                percent => Some(ModeConversion {
                    ratio: self.shear_ratio()?,
                    amplitude: percent / 100.0,
                }),
            },
            dual: dual.map(|dual| DualElement {
                half_separation: dual.separation_mm * 0.5e-3,
                crosstalk: dual.crosstalk_percent / 100.0,
                crosstalk_delay: dual.crosstalk_delay_ns * 1e-9,
            }),
            reference,
        })
    }

    /// Length of the wall's material at its temperature over that at 20 degrees Celsius.
    pub(crate) fn wall_expansion(&self) -> Result<f64, SceneError> {
        let celsius = self.temperature.as_ref().map_or(20.0, |temperature| temperature.wall_c);
        Ok(1.0 + self.wall.expansion("wall")? * (celsius - 20.0))
    }

    fn curvature(&self) -> Option<Curvature> {
        Some(Curvature {
            element: 0.5e-3 * self.probe.element_diameter_mm?,
            cylinder: 1e-3 * self.surface.as_ref()?.radius_mm?,
        })
    }

    fn columns(&self, expansion: f64) -> Result<Vec<Column>, SceneError> {
        let mut columns = Vec::new();
        if let Some(pit) = self.pit.as_ref().filter(|pit| pit.area_percent > 0.0) {
            columns.push(Column {
                share: pit.area_percent / 100.0,
                thickness: pit.remaining_mm * 1e-3 * expansion,
                back_impedance: self.back.impedance()?,
                role: Role::Pit,
            });
        }
        if let Some(gap) = self.lamination.as_ref().filter(|gap| gap.area_percent > 0.0) {
            columns.push(Column {
                share: gap.area_percent / 100.0,
                thickness: gap.depth_mm * 1e-3 * expansion,
                back_impedance: named("lamination", "air")?.impedance(),
                role: Role::Lamination,
            });
        }
        Ok(columns)
    }

    /// Longitudinal over shear velocity of the wall.
    pub(super) fn shear_ratio(&self) -> Result<f64, SceneError> {
        let longitudinal = self.wall.medium("wall")?.velocity;
        let known = match &self.wall.material {
            Some(name) => named("wall.material", name)?.shear,
            None => None,
        };
        match self.wall.shear_velocity_m_s.or(known) {
            Some(shear) if shear < longitudinal => Ok(longitudinal / shear),
            Some(_) => Err(error(
                "wall.shear_velocity_m_s",
                "is not below the longitudinal velocity",
                "give about half of it",
            )),
            None => Err(error(
                "echoes.mode_converted_percent",
                "needs the wall's shear velocity",
                "give wall.shear_velocity_m_s",
            )),
        }
    }
}

impl Layer {
    /// The layer at a temperature; `table` names it in errors, `key` its key in `[temperature]`.
    fn at(&self, table: &str, reference: f64, (key, celsius): (&str, f64)) -> Result<propagation::Layer, SceneError> {
        let medium = self.medium(table)?;
        let mut layer = propagation::Layer {
            thickness: self.thickness_mm * 1e-3,
            velocity: medium.velocity,
            impedance: medium.impedance,
            attenuation: Attenuation::new(self.attenuation_db_per_m, self.attenuation_exponent, reference),
        };
        if celsius == 20.0 {
            return Ok(layer);
        }
        let field = format!("temperature.{key}");
        let known = match &self.material {
            Some(name) => Some(named(&format!("{table}.material"), name)?),
            None => None,
        };
        if known.is_some_and(|material| material.name == "water") {
            within(&field, celsius, 0.0, 100.0, "degrees Celsius for water")?;
        }
        let own = self.velocity_slope_m_s_k.map(|slope| slope * (celsius - 20.0));
        let change = own.or_else(|| known.and_then(|m| Some(m.longitudinal_at(celsius)? - m.longitudinal)));
        let Some(change) = change else {
            return Err(error(
                field,
                format!("how the velocity of {table} changes with temperature is not known"),
                format!("give {table}.velocity_slope_m_s_k"),
            ));
        };
        let longer = 1.0 + self.expansion(table)? * (celsius - 20.0);
        layer.velocity += change;
        if layer.velocity < 50.0 {
            return Err(error(
                field,
                "leaves no velocity",
                "give a temperature nearer to 20 degrees Celsius",
            ));
        }
        layer.thickness *= longer;
        // The same mass in a larger volume.
        layer.impedance *= layer.velocity / medium.velocity / (longer * longer * longer);
        Ok(layer)
    }

    /// Linear expansion per kelvin; 0 where none is known.
    fn expansion(&self, table: &str) -> Result<f64, SceneError> {
        if let Some(millionths) = self.expansion_ppm_k {
            return Ok(millionths * 1e-6);
        }
        let known = match &self.material {
            Some(name) => named(&format!("{table}.material"), name)?.expansion,
            None => None,
        };
        Ok(known.unwrap_or(0.0))
    }
}
