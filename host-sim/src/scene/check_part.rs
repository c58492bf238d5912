//! Judges the tables that make a part less than ideal, and the dual-element probe.

use super::check::{error, only_one, optional, within};
use super::{Couplant, Layer, ProbeKind, Scene, SceneError};

impl Scene {
    /// Everything but the layers themselves.
    pub(super) fn check_part(&self) -> Result<(), SceneError> {
        if let Some(line) = &self.delay_line {
            within("delay_line.near_end_percent", line.near_end_percent, -100.0, 100.0, "%")?;
        }
        self.check_dual()?;
        self.check_border()?;
        let back = &self.back;
        within("back.roughness_um", back.roughness_um, 0.0, 1000.0, "um")?;
        within("back.roughness_length_mm", back.roughness_length_mm, 0.01, 100.0, "mm")?;
        within("back.tilt_degrees", back.tilt_degrees, 0.0, 10.0, "degrees")?;
        for (field, wanted) in [
            ("back.roughness_um", back.roughness_um > 0.0),
            ("back.tilt_degrees", back.tilt_degrees > 0.0),
        ] {
            if wanted && self.probe.element_diameter_mm.is_none() {
                return Err(needs_element(field));
            }
        }
        self.check_columns()?;
        self.check_grain()?;
        within(
            "echoes.mode_converted_percent",
            self.echoes.mode_converted_percent,
            0.0,
            100.0,
            "%",
        )?;
        if self.echoes.mode_converted_percent > 0.0 {
            self.shear_ratio()?;
        }
        if let Some(temperature) = &self.temperature {
            for (key, celsius) in [
                ("wall_c", temperature.wall_c),
                ("coating_c", temperature.coating_c),
                ("couplant_c", temperature.couplant_c),
                ("delay_line_c", temperature.delay_line_c),
            ] {
                within(&format!("temperature.{key}"), celsius, -100.0, 500.0, "degrees Celsius")?;
            }
        }
        self.check_decay()
    }

    fn check_dual(&self) -> Result<(), SceneError> {
        let is_dual = self.probe.kind == ProbeKind::DualElement;
        let Some(dual) = &self.dual_element else {
            return if is_dual {
                Err(error(
                    "probe.kind",
                    "is \"dual-element\" but the elements' distance is missing",
                    "add a [dual_element] table",
                ))
            } else {
                Ok(())
            };
        };
        if !is_dual {
            return Err(error(
                "dual_element",
                "contradicts probe.kind",
                "remove the table or give kind = \"dual-element\"",
            ));
        }
        within("dual_element.separation_mm", dual.separation_mm, 0.0, 100.0, "mm")?;
        within(
            "dual_element.crosstalk_percent",
            dual.crosstalk_percent,
            0.0,
            100.0,
            "%",
        )?;
        within(
            "dual_element.crosstalk_delay_ns",
            dual.crosstalk_delay_ns,
            -1e4,
            1e4,
            "ns",
        )?;
        if self
            .delay_line
            .as_ref()
            .is_some_and(|line| line.near_end_percent != 0.0)
        {
            return Err(error(
                "delay_line.near_end_percent",
                "contradicts probe.kind = \"dual-element\": delay blocks give no multiples",
                "remove it",
            ));
        }
        Ok(())
    }

    fn check_border(&self) -> Result<(), SceneError> {
        if let Some(couplant) = &self.couplant {
            within("couplant.film_um", couplant.film_um, 0.0, 1000.0, "um")?;
            couplant.as_layer().check("couplant")?;
            if self.delay_line.is_none() && self.probe.face_impedance_mrayl.is_none() {
                return Err(error(
                    "couplant",
                    "needs the impedance of the face before it",
                    "give probe.face_impedance_mrayl, such as 38.5 of a ceramic wear plate",
                ));
            }
        }
        let Some(surface) = &self.surface else {
            return Ok(());
        };
        if self.couplant.is_none() {
            return Err(error(
                "surface",
                "needs a couplant that fills its valleys",
                "add a [couplant] table; film_um = 0.0 if there is no more of it than that",
            ));
        }
        within("surface.roughness_um", surface.roughness_um, 0.0, 1000.0, "um")?;
        let Some(radius) = surface.radius_mm else {
            return Ok(());
        };
        let Some(diameter) = self.probe.element_diameter_mm else {
            return Err(needs_element("surface.radius_mm"));
        };
        within("surface.radius_mm", radius, 0.501 * diameter, 1e5, "mm")
    }

    fn check_columns(&self) -> Result<(), SceneError> {
        let mut area = 0.0;
        let wall = self.wall.thickness_mm;
        let pit = self
            .pit
            .as_ref()
            .map(|pit| ("pit.remaining_mm", pit.remaining_mm, "pit", pit.area_percent));
        let lamination = self
            .lamination
            .as_ref()
            .map(|gap| ("lamination.depth_mm", gap.depth_mm, "lamination", gap.area_percent));
        for (field, depth, table, share) in [pit, lamination].into_iter().flatten() {
            within(field, depth, 0.001, wall, "mm")?;
            if depth == wall {
                return Err(error(field, "is the whole wall", "give less than wall.thickness_mm"));
            }
            within(&format!("{table}.area_percent"), share, 0.0, 99.0, "%")?;
            area += share;
        }
        if area > 99.0 {
            return Err(error(
                "lamination.area_percent",
                "leaves, with the pit, no beam for the back wall",
                "give areas of 99 % together at most",
            ));
        }
        Ok(())
    }

    fn check_grain(&self) -> Result<(), SceneError> {
        let Some(grain) = &self.grain else {
            return Ok(());
        };
        only_one(
            "grain",
            ("level_db", grain.level_db.is_some()),
            ("size_um", grain.size_um.is_some()),
        )?;
        optional("grain.level_db", grain.level_db, -120.0, 20.0, "dB")?;
        optional("grain.size_um", grain.size_um, 1.0, 1000.0, "um")?;
        optional("grain.anisotropy_gpa", grain.anisotropy_gpa, -500.0, 500.0, "GPa")?;
        within(
            "grain.scatterers_per_us",
            grain.scatterers_per_us,
            0.01,
            1e4,
            "in a microsecond",
        )?;
        if grain.level_db.is_none() && grain.size_um.is_none() {
            return Err(error("grain", "has no level", "give level_db or size_um"));
        }
        if grain.size_um.is_some() && self.probe.element_diameter_mm.is_none() {
            return Err(needs_element("grain.size_um"));
        }
        if grain.size_um.is_none() && grain.anisotropy_gpa.is_some() {
            return Err(error(
                "grain.anisotropy_gpa",
                "means nothing with level_db",
                "remove it",
            ));
        }
        Ok(())
    }

    /// A train that is cleaner than nature has nothing that spoils it.
    fn check_decay(&self) -> Result<(), SceneError> {
        if self.echoes.decay.is_none() {
            return Ok(());
        }
        for (spoiler, there) in [
            ("couplant", self.couplant.is_some()),
            ("pit", self.pit.is_some()),
            ("lamination", self.lamination.is_some()),
            ("back.roughness_um", self.back.roughness_um > 0.0),
            ("back.tilt_degrees", self.back.tilt_degrees > 0.0),
            (
                "delay_line.near_end_percent",
                self.delay_line
                    .as_ref()
                    .is_some_and(|line| line.near_end_percent != 0.0),
            ),
        ] {
            if there {
                return Err(error(
                    "echoes.decay",
                    format!("contradicts {spoiler}, which sets amplitudes too"),
                    "keep one of the two",
                ));
            }
        }
        Ok(())
    }
}

impl Couplant {
    /// As a layer; the film's own thickness may be 0.
    pub(super) fn as_layer(&self) -> Layer {
        Layer {
            material: self.material.clone(),
            velocity_m_s: self.velocity_m_s,
            density_kg_m3: self.density_kg_m3,
            impedance_mrayl: self.impedance_mrayl,
            thickness_mm: 1.0,
            attenuation_exponent: 1.0,
            velocity_slope_m_s_k: self.velocity_slope_m_s_k,
            ..Layer::default()
        }
    }
}

fn needs_element(field: &str) -> SceneError {
    error(field, "needs the element's size", "give probe.element_diameter_mm too")
}
