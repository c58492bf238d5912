//! Judges every value of a scene.

use super::{Back, DelayLine, Layer, Medium, ProbeKind, Scene, SceneError};
use crate::material::{self, Material};

/// Longest record that is made: 2^20 samples.
const MOST_SAMPLES: usize = 1 << 20;

/// Longest pulse, down to one part in a thousand million.
const MOST_PULSE_SAMPLES: f64 = 16384.0;

pub(super) fn error(field: impl Into<String>, what: impl Into<String>, remedy: impl Into<String>) -> SceneError {
    SceneError {
        field: field.into(),
        what: what.into(),
        remedy: remedy.into(),
    }
}

/// Refuses a value outside `low..=high`, and one that is not a number.
pub(super) fn within(field: &str, value: f64, low: f64, high: f64, unit: &str) -> Result<(), SceneError> {
    if (low..=high).contains(&value) {
        return Ok(());
    }
    Err(error(
        field,
        format!("{value} is out of range"),
        format!("give {low} to {high} {unit}").trim_end().to_string(),
    ))
}

pub(super) fn optional(field: &str, value: Option<f64>, low: f64, high: f64, unit: &str) -> Result<(), SceneError> {
    value.map_or(Ok(()), |value| within(field, value, low, high, unit))
}

pub(super) fn only_one(table: &str, first: (&str, bool), second: (&str, bool)) -> Result<(), SceneError> {
    if first.1 && second.1 {
        return Err(error(
            format!("{table}.{}", second.0),
            format!("contradicts {}", first.0),
            "keep one of the two",
        ));
    }
    Ok(())
}

impl Scene {
    /// Judges every value, and what they mean together.
    ///
    /// # Errors
    /// The first value that cannot be used, with its range or remedy.
    pub fn check(&self) -> Result<(), SceneError> {
        if self.version != 1 {
            return Err(error(
                "version",
                format!("{} is not known", self.version),
                "give version = 1",
            ));
        }
        if let Some(table) = &self.equivalent_time {
            // What a record's length and rate mean depends on it.
            table.check(self.record.sample_rate_mhz)?;
        }
        self.check_record()?;
        self.check_probe()?;
        self.check_layers()?;
        if let Some(pulse) = &self.transmission_pulse {
            let field = |key: &str| format!("transmission_pulse.{key}");
            within(&field("amplitude_percent"), pulse.amplitude_percent, 0.0, 1e6, "%")?;
            within(&field("decay_ns"), pulse.decay_ns, 1.0, 1e5, "ns")?;
            within(&field("recovery_percent"), pulse.recovery_percent, -1e6, 1e6, "%")?;
            within(&field("recovery_ns"), pulse.recovery_ns, 1.0, 1e6, "ns")?;
        }
        let noise = &self.noise;
        only_one(
            "noise",
            ("snr_db", noise.snr_db.is_some()),
            ("rms_steps", noise.rms_steps.is_some()),
        )?;
        optional("noise.snr_db", noise.snr_db, -60.0, 200.0, "dB")?;
        optional("noise.rms_steps", noise.rms_steps, 0.0, 1e5, "steps")?;
        self.check_receiver()
    }

    fn check_record(&self) -> Result<(), SceneError> {
        let record = &self.record;
        within("record.sample_rate_mhz", record.sample_rate_mhz, 0.1, 1e4, "MHz")?;
        let most = MOST_SAMPLES / usize::from(self.phases().max(1));
        if !(16..=most).contains(&record.samples) {
            return Err(error(
                "record.samples",
                format!("{} is out of range", record.samples),
                format!("give 16 to {most}"),
            ));
        }
        within("record.first_sample_us", record.first_sample_us, -1e3, 1e5, "us")?;
        within("record.bits", f64::from(record.bits), 4.0, 16.0, "bits")?;
        only_one(
            "record",
            ("first_back_wall_percent", record.first_back_wall_percent.is_some()),
            ("gain_db", record.gain_db.is_some()),
        )?;
        optional(
            "record.first_back_wall_percent",
            record.first_back_wall_percent,
            1e-6,
            1e5,
            "%",
        )?;
        optional("record.gain_db", record.gain_db, -200.0, 200.0, "dB")
    }

    fn check_probe(&self) -> Result<(), SceneError> {
        let probe = &self.probe;
        within(
            "probe.centre_frequency_mhz",
            probe.centre_frequency_mhz,
            0.05,
            200.0,
            "MHz",
        )?;
        let shaped = probe.attack_ns.is_some() || probe.decay_ns.is_some();
        only_one(
            "probe",
            ("relative_bandwidth_percent", probe.relative_bandwidth_percent.is_some()),
            if probe.attack_ns.is_some() {
                ("attack_ns", shaped)
            } else {
                ("decay_ns", shaped)
            },
        )?;
        optional(
            "probe.relative_bandwidth_percent",
            probe.relative_bandwidth_percent,
            1.0,
            200.0,
            "%",
        )?;
        optional("probe.attack_ns", probe.attack_ns, 1.0, 1e5, "ns")?;
        optional("probe.decay_ns", probe.decay_ns, 1.0, 1e5, "ns")?;
        match (probe.relative_bandwidth_percent, probe.attack_ns, probe.decay_ns) {
            (Some(_), None, None) | (None, Some(_), Some(_)) => {}
            (None, Some(_), None) => {
                return Err(error("probe.attack_ns", "stands alone", "give decay_ns too"));
            }
            (None, None, Some(_)) => {
                return Err(error("probe.decay_ns", "stands alone", "give attack_ns too"));
            }
            _ => {
                return Err(error(
                    "probe",
                    "has no pulse",
                    "give relative_bandwidth_percent, or attack_ns and decay_ns",
                ));
            }
        }
        within("probe.phase_degrees", probe.phase_degrees, -360.0, 360.0, "degrees")?;
        optional("probe.element_diameter_mm", probe.element_diameter_mm, 0.1, 200.0, "mm")?;
        within("probe.zero_offset_ns", probe.zero_offset_ns, -1e5, 1e5, "ns")?;
        optional(
            "probe.face_impedance_mrayl",
            probe.face_impedance_mrayl,
            1e-4,
            200.0,
            "MRayl",
        )?;
        if probe.beam_diffraction && probe.element_diameter_mm.is_none() {
            return Err(error(
                "probe.beam_diffraction",
                "needs the element's size",
                "give element_diameter_mm too",
            ));
        }
        let pulse = self.pulse();
        let upper = pulse.upper_frequency() / 1e6;
        let dense_rate = self.record.sample_rate_mhz * f64::from(self.phases());
        if dense_rate < 2.0 * upper {
            return Err(error(
                "record.sample_rate_mhz",
                format!("{dense_rate} is below twice the pulse's upper -6 dB frequency of {upper:.3} MHz",),
                "sample faster or take a lower probe",
            ));
        }
        let (before, after) = pulse.reach();
        if (before + after) * dense_rate * 1e6 > MOST_PULSE_SAMPLES {
            return Err(error(
                "probe",
                format!("has a pulse of more than {MOST_PULSE_SAMPLES} samples"),
                "widen the band or lower the sample rate",
            ));
        }
        match (probe.kind, &self.delay_line) {
            (ProbeKind::Contact, Some(_)) => Err(error(
                "delay_line",
                "contradicts probe.kind = \"contact\"",
                "remove the table or give kind = \"delay-line\"",
            )),
            (ProbeKind::DelayLine, None) => Err(error(
                "probe.kind",
                "is \"delay-line\" but there is no delay line",
                "add a [delay_line] table",
            )),
            (ProbeKind::DelayLine | ProbeKind::DualElement, Some(_)) if probe.face_impedance_mrayl.is_some() => {
                Err(error(
                    "probe.face_impedance_mrayl",
                    "contradicts the delay line, whose own impedance counts",
                    "remove it",
                ))
            }
            _ => Ok(()),
        }
    }

    fn check_layers(&self) -> Result<(), SceneError> {
        if let Some(line) = &self.delay_line {
            line.as_layer()?.check("delay_line")?;
        }
        if let Some(coating) = &self.coating {
            coating.check("coating")?;
        }
        self.wall.check("wall")?;
        self.back.impedance()?;
        self.check_part()?;
        let echoes = &self.echoes;
        if let Some(count) = echoes.back_walls {
            within("echoes.back_walls", f64::from(count), 1.0, 1e4, "")?;
        }
        optional("echoes.decay", echoes.decay, 1e-6, 1.0, "")?;
        if echoes.decay.is_some() && self.wall.attenuation_db_per_m != 0.0 {
            return Err(error(
                "echoes.decay",
                "contradicts wall.attenuation_db_per_m, which sets the decay too",
                "keep one of the two",
            ));
        }
        Ok(())
    }
}

impl Layer {
    pub(super) fn check(&self, table: &str) -> Result<(), SceneError> {
        let field = |key: &str| format!("{table}.{key}");
        within(&field("thickness_mm"), self.thickness_mm, 0.001, 1e4, "mm")?;
        within(
            &field("attenuation_db_per_m"),
            self.attenuation_db_per_m,
            0.0,
            1e5,
            "dB/m",
        )?;
        optional(
            &field("velocity_slope_m_s_k"),
            self.velocity_slope_m_s_k,
            -50.0,
            50.0,
            "m/s per kelvin",
        )?;
        optional(
            &field("expansion_ppm_k"),
            self.expansion_ppm_k,
            0.0,
            1000.0,
            "millionths per kelvin",
        )?;
        optional(&field("shear_velocity_m_s"), self.shear_velocity_m_s, 50.0, 2e4, "m/s")?;
        if !(self.attenuation_exponent > 0.0 && self.attenuation_exponent < 3.0) {
            return Err(error(
                field("attenuation_exponent"),
                format!("{} is out of range", self.attenuation_exponent),
                "give a number above 0 and below 3",
            ));
        }
        self.medium(table).map(|_| ())
    }

    /// Velocity and impedance; `table` names the layer in errors.
    ///
    /// # Errors
    /// An unknown material (with the nearest names), a value out of range, or too few or too many.
    pub fn medium(&self, table: &str) -> Result<Medium, SceneError> {
        let field = |key: &str| format!("{table}.{key}");
        optional(&field("velocity_m_s"), self.velocity_m_s, 100.0, 3e4, "m/s")?;
        optional(&field("density_kg_m3"), self.density_kg_m3, 0.1, 3e4, "kg/m3")?;
        optional(&field("impedance_mrayl"), self.impedance_mrayl, 1e-4, 200.0, "MRayl")?;
        only_one(
            table,
            ("density_kg_m3", self.density_kg_m3.is_some()),
            ("impedance_mrayl", self.impedance_mrayl.is_some()),
        )?;
        let known = match &self.material {
            Some(name) => Some(named(&field("material"), name)?),
            None => None,
        };
        let velocity = self.velocity_m_s.or(known.map(|material| material.longitudinal));
        let Some(velocity) = velocity else {
            return Err(error(
                table,
                "has neither material nor velocity",
                "give material, or velocity_m_s with density_kg_m3",
            ));
        };
        let density = self.density_kg_m3.or(known.map(|material| material.density));
        let impedance = match (self.impedance_mrayl, density) {
            (Some(impedance), _) => impedance * 1e6,
            (None, Some(density)) => density * velocity,
            (None, None) => {
                return Err(error(
                    table,
                    "has neither material nor density",
                    "give density_kg_m3 or impedance_mrayl beside velocity_m_s",
                ));
            }
        };
        Ok(Medium { velocity, impedance })
    }
}

impl DelayLine {
    /// As a layer, with its length from the delay if need be.
    pub(super) fn as_layer(&self) -> Result<Layer, SceneError> {
        only_one(
            "delay_line",
            ("length_mm", self.length_mm.is_some()),
            ("delay_us", self.delay_us.is_some()),
        )?;
        optional("delay_line.length_mm", self.length_mm, 0.01, 2000.0, "mm")?;
        optional("delay_line.delay_us", self.delay_us, 1e-3, 1e4, "us")?;
        let mut layer = Layer {
            material: self.material.clone(),
            velocity_m_s: self.velocity_m_s,
            density_kg_m3: self.density_kg_m3,
            impedance_mrayl: self.impedance_mrayl,
            thickness_mm: 1.0,
            attenuation_db_per_m: self.attenuation_db_per_m,
            attenuation_exponent: self.attenuation_exponent,
            shear_velocity_m_s: None,
            velocity_slope_m_s_k: self.velocity_slope_m_s_k,
            expansion_ppm_k: self.expansion_ppm_k,
        };
        layer.thickness_mm = match (self.length_mm, self.delay_us) {
            (Some(length), _) => length,
            (None, Some(delay)) => layer.medium("delay_line")?.velocity * delay * 0.5e-3,
            (None, None) => {
                return Err(error("delay_line", "has no length", "give length_mm or delay_us"));
            }
        };
        Ok(layer)
    }
}

impl Back {
    /// Impedance in rayl.
    ///
    /// # Errors
    /// An unknown material, an impedance out of range, or both.
    pub fn impedance(&self) -> Result<f64, SceneError> {
        only_one(
            "back",
            ("material", self.material.is_some()),
            ("impedance_mrayl", self.impedance_mrayl.is_some()),
        )?;
        optional("back.impedance_mrayl", self.impedance_mrayl, 1e-4, 200.0, "MRayl")?;
        match self.impedance_mrayl {
            Some(impedance) => Ok(impedance * 1e6),
            None => named("back.material", self.material.as_deref().unwrap_or("air")).map(Material::impedance),
        }
    }
}

pub(super) fn named(field: &str, name: &str) -> Result<&'static Material, SceneError> {
    material::find(name).ok_or_else(|| {
        let near = material::suggestions(name);
        let remedy = if near.is_empty() {
            "take a material of the table, or give velocity_m_s and density_kg_m3".to_string()
        } else {
            format!("did you mean {}?", near.join(" or "))
        };
        let shown: String = name.chars().take(60).collect();
        error(field, format!("\"{shown}\" is not in the table of materials"), remedy)
    })
}
