//! A set-up back into its file, each key with what it says.

use super::keys::KEYS;
use super::{CODES, CoatingKeys, FACES, KINDS, SIGNS, SPANS, SetupKeys, word_of};
use crate::input_error::InputError;
use std::path::Path;

fn number(value: f64) -> String {
    // `{:?}` keeps a point in whole numbers and the shortest digits that read back the same.
    format!("{value:?}")
}

fn quoted(text: &str) -> String {
    let mut out = String::from("\"");
    for c in text.chars() {
        match c {
            '"' | '\\' => {
                out.push('\\');
                out.push(c);
            }
            c if c.is_control() => out.push_str(&format!("\\u{:04X}", u32::from(c))),
            c => out.push(c),
        }
    }
    out.push('"');
    out
}

impl SetupKeys {
    /// The value of one key as it stands in a file; `None` leaves it out.
    fn value_of(&self, table: &str, name: &str) -> Option<String> {
        let (calibration, limits) = (self.calibration.as_ref(), self.limits.as_ref());
        let word = |text: &str| Some(quoted(text));
        match (table, name) {
            ("", "version") => Some("1".to_string()),
            ("record", "sample_rate_mhz") => Some(number(self.record.sample_rate_mhz)),
            ("record", "first_sample_us") => self.record.first_sample_us.map(number),
            ("record", "bits") => self.record.bits.map(|bits| bits.to_string()),
            ("record", "codes") => word(word_of(CODES, self.record.codes)),
            ("record", "full_scale") => self.record.full_scale.map(number),
            ("record", "trigger_jitter_ns") => self.record.trigger_jitter_ns.map(number),
            ("probe", "kind") => word(word_of(KINDS, self.probe.kind)),
            ("probe", "centre_frequency_mhz") => Some(number(self.probe.centre_frequency_mhz)),
            ("probe", "relative_bandwidth_percent") => Some(number(self.probe.relative_bandwidth_percent)),
            ("probe", "element_diameter_mm") => self.probe.element_diameter_mm.map(number),
            ("probe", "element_diameter_uncertainty_percent") => {
                Some(number(self.probe.element_diameter_uncertainty_percent))
            }
            ("probe", "face") => self.probe.face.and_then(|face| word(word_of(FACES, face))),
            ("probe", "couplant_film_um") => Some(number(self.probe.couplant_film_um)),
            ("probe", "echo_phase_degrees") => self.probe.echo_phase_degrees.map(number),
            ("probe", "back_wall_sign") => self.probe.back_wall_sign.and_then(|sign| word(word_of(SIGNS, sign))),
            ("probe", "interface_sign") => self.probe.interface_sign.and_then(|sign| word(word_of(SIGNS, sign))),
            ("probe", "reference_pulse") => self.probe.reference_pulse.as_deref().and_then(word),
            ("probe", "reference_pulse_noise_percent") => self.probe.reference_pulse_noise_percent.map(number),
            ("probe", "reference_pulse_mismatch_percent") => self.probe.reference_pulse_mismatch_percent.map(number),
            ("probe", "reference_pulse_learned_on_mm") => self.probe.reference_pulse_learned_on_mm.map(number),
            ("delay_line", "length_mm") => self.delay_line.map(|line| number(line.length_mm)),
            ("delay_line", "velocity_m_s") => self.delay_line.map(|line| number(line.velocity_m_s)),
            ("dual_element", "separation_mm") => self.dual_element.map(|dual| number(dual.separation_mm)),
            ("dual_element", "separation_standard_uncertainty_mm") => {
                (self.dual_element).and_then(|dual| dual.separation_standard_uncertainty_mm.map(number))
            }
            ("material", "name") => self.material.name.as_deref().and_then(word),
            ("material", "velocity_m_s") => Some(number(self.material.velocity_m_s)),
            ("material", "velocity_standard_uncertainty_m_s") => {
                Some(number(self.material.velocity_standard_uncertainty_m_s))
            }
            ("material", "part_velocity_standard_uncertainty_m_s") => {
                self.material.part_velocity_standard_uncertainty_m_s.map(number)
            }
            ("material", "velocity_temperature_coefficient_m_s_k") => {
                self.material.velocity_temperature_coefficient_m_s_k.map(number)
            }
            ("material", "velocity_temperature_coefficient_standard_uncertainty_m_s_k") => self
                .material
                .velocity_temperature_coefficient_standard_uncertainty_m_s_k
                .map(number),
            ("material", "velocity_temperature_c") => self.material.velocity_temperature_c.map(number),
            ("part", "roughness_um") => self.part.roughness_um.map(number),
            ("part", "outer_radius_mm") => self.part.outer_radius_mm.map(number),
            ("part", "inner_radius_mm") => self.part.inner_radius_mm.map(number),
            ("part", "temperature_c") => self.part.temperature_c.map(number),
            ("part", "temperature_standard_uncertainty_k") => self.part.temperature_standard_uncertainty_k.map(number),
            ("limits", "minimum_mm") => limits.map(|limits| number(limits.minimum_mm)),
            ("limits", "warning_mm") => limits.and_then(|limits| limits.warning_mm).map(number),
            ("limits", "maximum_mm") => limits.and_then(|limits| limits.maximum_mm).map(number),
            ("limits", "guard_band_factor") => limits.and_then(|limits| limits.guard_band_factor).map(number),
            ("limits", "wrong_decision_probability") => {
                limits.and_then(|limits| limits.wrong_decision_probability).map(number)
            }
            ("coating", "velocity_m_s") => self.coating.and_then(|coating| coating.velocity_m_s).map(number),
            ("coating", "velocity_standard_uncertainty_m_s") => (self.coating)
                .and_then(|coating| coating.velocity_standard_uncertainty_m_s)
                .map(number),
            ("zero", "offset_ns") => Some(number(self.zero.offset_ns)),
            ("zero", "standard_uncertainty_ns") => self.zero.standard_uncertainty_ns.map(number),
            ("zero", "learned_on_mm") => self.zero.learned_on_mm.map(number),
            ("zero", "reference_pulse_checksum") => self.zero.reference_pulse_checksum.as_deref().and_then(word),
            ("measure", "span") => word(word_of(SPANS, self.measure.span)),
            ("measure", "from_us") => Some(number(self.measure.from_us)),
            ("measure", "to_us") => self.measure.to_us.map(number),
            ("measure", "uncoupled_record") => self.measure.uncoupled_record.as_deref().and_then(word),
            ("measure", "uncoupled_from_us") => self.measure.uncoupled_from_us.map(number),
            ("measure", "coverage_factor") => Some(number(self.measure.coverage_factor)),
            ("calibration", "velocity_zero_correlation") => {
                calibration.and_then(|c| c.velocity_zero_correlation).map(number)
            }
            ("calibration", "from_mm") => calibration.and_then(|c| c.from_mm).map(number),
            ("calibration", "to_mm") => calibration.and_then(|c| c.to_mm).map(number),
            ("calibration", "blocks_mm") => calibration.map(|c| {
                let blocks: Vec<String> = c.blocks_mm.iter().copied().map(number).collect();
                format!("[{}]", blocks.join(", "))
            }),
            ("calibration", "temperature_c") => calibration.and_then(|c| c.temperature_c).map(number),
            ("calibration", "date") => calibration.and_then(|c| c.date.as_deref()).and_then(word),
            _ => None,
        }
    }

    /// The whole file as text, with a comment above each key.
    #[must_use]
    pub fn to_toml(&self) -> String {
        let mut text = String::from("# Set-up of a thickness gauge. Times count from the transmission trigger.\n");
        let mut table = "";
        for key in KEYS {
            let Some(value) = self.value_of(key.table, key.name) else {
                continue;
            };
            if key.table != table {
                table = key.table;
                text.push_str(&format!("\n[{table}]\n"));
            }
            text.push_str(&format!("# {}\n{} = {value}\n", key.about, key.name));
        }
        // A table that asks for something by being there.
        if self.coating == Some(CoatingKeys::default()) {
            text.push_str("\n[coating]\n");
        }
        text
    }

    /// Writes the file.
    ///
    /// # Errors
    /// A file that cannot be written.
    pub fn write(&self, path: &Path) -> Result<(), InputError> {
        std::fs::write(path, self.to_toml()).map_err(|error| InputError::unwritable(path, &error))
    }
}
