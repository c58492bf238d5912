//! The one table of the set-up file's keys: reading, writing and help all come from it.

/// A set-up file that can be copied.
pub const EXAMPLE: &str = r#"version = 1
[record]
sample_rate_mhz = 50.0
first_sample_us = 0.0
bits = 12
codes = "signed"
[probe]
kind = "contact"
centre_frequency_mhz = 5.0
relative_bandwidth_percent = 60
element_diameter_mm = 6.0
[material]
name = "carbon steel"
velocity_m_s = 5920.0
velocity_standard_uncertainty_m_s = 17.0
[zero]
offset_ns = 0.0
standard_uncertainty_ns = 1.0
[measure]
span = "back-wall-to-back-wall"
from_us = 0.5
to_us = 60.0
coverage_factor = 2.0
"#;

/// One key of the set-up file.
#[derive(Clone, Copy, Debug)]
pub struct Key {
    /// The table it stands in; empty for the top of the file.
    pub table: &'static str,
    /// Its name.
    pub name: &'static str,
    /// What it says, with unit, range and default.
    pub about: &'static str,
}

const fn key(table: &'static str, name: &'static str, about: &'static str) -> Key {
    Key { table, name, about }
}

/// Every key that a set-up file may have, in the order in which they are written.
pub const KEYS: &[Key] = &[
    key("", "version", "version of the set-up file: 1"),
    key(
        "record",
        "sample_rate_mhz",
        "samples per microsecond; at least twice the probe's upper band edge",
    ),
    key(
        "record",
        "first_sample_us",
        "time of the first sample after the transmission trigger; without it the file's own, else 0",
    ),
    key(
        "record",
        "bits",
        "bits of the converter, 2 to 16; files of floats do without",
    ),
    key(
        "record",
        "codes",
        "\"signed\" (default) or \"offset-binary\", right-justified",
    ),
    key(
        "record",
        "full_scale",
        "what a file of floats calls full scale; default 1",
    ),
    key(
        "record",
        "trigger_jitter_ns",
        "jitter of the pulser against the sample clock, rms, 0 to 1e6: widens what counts from the trigger; default 0",
    ),
    key(
        "probe",
        "kind",
        "\"contact\", \"delay-line\" (also a water path) or \"dual-element\"",
    ),
    key(
        "probe",
        "centre_frequency_mhz",
        "middle of the -6 dB limits of the two-way spectrum",
    ),
    key(
        "probe",
        "relative_bandwidth_percent",
        "-6 dB width over the centre frequency; above 0, at most 200",
    ),
    key(
        "probe",
        "element_diameter_mm",
        "diameter of the active element; leave it out if unknown",
    ),
    key(
        "probe",
        "element_diameter_uncertainty_percent",
        "standard uncertainty (k = 1) of the diameter that acts; default 7",
    ),
    key(
        "probe",
        "face",
        "what touches the couplant: \"hard\" (default of contact) or \"plastic\" (default of the others)",
    ),
    key(
        "probe",
        "couplant_film_um",
        "how far the couplant film may differ from the one at calibration; default 2",
    ),
    key(
        "probe",
        "echo_phase_degrees",
        "standard uncertainty (k = 1) of the phase by which coupling turns one echo against another, 0 to 180: widens \
         what is read between echoes; default 2 for a hard face, 0.5 for a plastic one, 0 if couplant_film_um is 0",
    ),
    key(
        "probe",
        "back_wall_sign",
        "\"as-pulse\", \"inverted\" or \"unknown\" (default): sign of the back walls relative to the reference pulse. Written by \
         calibrate, where the blocks' back walls all had the pulse's sign. Write \"unknown\" where something stiffer than the part \
         may stand behind the wall, where the part may be softer than the probe's face (aluminium under a hard one), or where \
         the probe's leads may be swapped",
    ),
    key(
        "probe",
        "interface_sign",
        "the same for the interface echo behind a delay line",
    ),
    key(
        "probe",
        "reference_pulse",
        ".npy file of the learned pulse, relative to this file; without it a modelled pulse is used",
    ),
    key(
        "probe",
        "reference_pulse_noise_percent",
        "the learned pulse's own noise over its peak, root mean square; written by calibrate, default 0",
    ),
    key(
        "probe",
        "reference_pulse_mismatch_percent",
        "root of the energy by which other shots' echoes differ from the learned pulse; written by calibrate, default 0",
    ),
    key(
        "probe",
        "reference_pulse_learned_on_mm",
        "block whose first back wall the pulse was learned from, 0 for a delay line's interface echo: the beam is \
         corrected against what it did to the pulse; written by calibrate, without it that is not known",
    ),
    key(
        "delay_line",
        "length_mm",
        "length of the delay line, or of each delay block of a dual-element probe; the table may be left out",
    ),
    key("delay_line", "velocity_m_s", "velocity of longitudinal waves in it"),
    key(
        "dual_element",
        "separation_mm",
        "distance of the two elements' centres, where they sit: the V-shaped path is corrected with it",
    ),
    key(
        "dual_element",
        "separation_standard_uncertainty_mm",
        "its standard uncertainty (k = 1); default 3 % of it",
    ),
    key("material", "name", "what the part is made of; only shown"),
    key("material", "velocity_m_s", "velocity of longitudinal waves in the part"),
    key(
        "material",
        "velocity_standard_uncertainty_m_s",
        "its standard uncertainty (k = 1): of the table it stands in, or of the blocks it was learned on",
    ),
    key(
        "material",
        "part_velocity_standard_uncertainty_m_s",
        "how far the part's velocity may differ from the blocks' (k = 1), added as the root of squares; default 0. \
         The block is not the part: another heat or rolling direction of one steel differs by some 0.1 to 0.5 %; \
         0 only if the velocity was learned on the part, or if its own uncertainty says this already",
    ),
    key(
        "material",
        "velocity_temperature_coefficient_m_s_k",
        "how the velocity changes, in m/s per kelvin: steel about -0.8; without it temperature is left out, and the \
         velocity's uncertainty has to cover it",
    ),
    key(
        "material",
        "velocity_temperature_coefficient_standard_uncertainty_m_s_k",
        "its standard uncertainty (k = 1); default a fifth of it",
    ),
    key(
        "material",
        "velocity_temperature_c",
        "temperature in degrees Celsius that velocity_m_s holds at; default 20; calibrate writes that of the blocks",
    ),
    key(
        "part",
        "temperature_c",
        "temperature of the part in degrees Celsius, for materials with a coefficient; without it +-10 K \
         (rectangular) round velocity_temperature_c stand in the budget",
    ),
    key(
        "part",
        "temperature_standard_uncertainty_k",
        "its standard uncertainty (k = 1) in kelvin; default 1",
    ),
    key(
        "part",
        "roughness_um",
        "root mean square roughness of the back wall, for the budget (the least wall is about twice that thinner \
         than the reading); default 0",
    ),
    key(
        "part",
        "outer_radius_mm",
        "radius of the pipe on whose outside a flat probe sits; a doubt where that is too curved; without it flat",
    ),
    key(
        "part",
        "inner_radius_mm",
        "instead of it: radius of the pipe in which a flat probe sits",
    ),
    key(
        "coating",
        "velocity_m_s",
        "velocity in the coating; the table asks for coating and wall. Without it the coating is given as a time; the \
         wall needs none",
    ),
    key(
        "coating",
        "velocity_standard_uncertainty_m_s",
        "its standard uncertainty (k = 1); default 5 % of it",
    ),
    key(
        "zero",
        "offset_ns",
        "where the part's front surface lies on the record's time axis; default 0",
    ),
    key(
        "zero",
        "standard_uncertainty_ns",
        "its standard uncertainty (k = 1); needed by transmission-pulse-to-back-wall",
    ),
    key(
        "zero",
        "learned_on_mm",
        "block whose beam spreading the offset holds, 0 if the beam was corrected; without it that is not known",
    ),
    key(
        "zero",
        "reference_pulse_checksum",
        "checksum of the pulse that the zero was learned with; written by calibrate",
    ),
    key(
        "measure",
        "span",
        "\"transmission-pulse-to-back-wall\", \"interface-to-back-wall\" or \"back-wall-to-back-wall\"",
    ),
    key(
        "measure",
        "from_us",
        "where to look for echoes: beyond the transmission pulse",
    ),
    key("measure", "to_us", "where to stop looking; default: the record's end"),
    key(
        "measure",
        "uncoupled_record",
        "file with shots of the uncoupled probe, relative to this file: what the transmission pulse leaves in the dead zone, \
         taken off each shot before from_us; written by calibrate --uncoupled",
    ),
    key(
        "measure",
        "uncoupled_from_us",
        "where to look for echoes then, instead of from_us: some 0.3 us behind the last clipped sample",
    ),
    key("measure", "coverage_factor", "k of the expanded uncertainty; default 2"),
    key(
        "limits",
        "minimum_mm",
        "the wall must not be thinner; the table asks for below, above or undecided. Limits come from the codes that \
         apply and from licensed people, and so does what follows from them",
    ),
    key(
        "limits",
        "warning_mm",
        "thickness above the minimum below which somebody wants to know",
    ),
    key("limits", "maximum_mm", "the wall must not be thicker"),
    key(
        "limits",
        "guard_band_factor",
        "guard band on either side of a limit in expanded uncertainties, 0 to 10; default 1: wrong in 2.3 % at its edge",
    ),
    key(
        "limits",
        "wrong_decision_probability",
        "instead of the factor: so wide that a decision at its edge is wrong with this probability, 0.0001 to 0.5",
    ),
    key(
        "calibration",
        "velocity_zero_correlation",
        "correlation of the errors of velocity and zero, -1 to 1; default 0",
    ),
    key(
        "calibration",
        "from_mm",
        "thinnest thickness that the calibration covers",
    ),
    key("calibration", "to_mm", "thickest thickness that the calibration covers"),
    key("calibration", "blocks_mm", "thicknesses of the blocks; only shown"),
    key(
        "calibration",
        "temperature_c",
        "temperature of the blocks in degrees Celsius; only shown",
    ),
    key(
        "calibration",
        "date",
        "day of the calibration, as \"2026-01-31\"; only shown",
    ),
];

/// The names of the tables, in the order in which they are written.
pub fn tables() -> impl Iterator<Item = &'static str> {
    let mut last = "";
    KEYS.iter().filter_map(move |key| {
        let new = key.table != last;
        last = key.table;
        new.then_some(key.table)
    })
}

/// The keys of one table.
pub fn keys_of(table: &str) -> impl Iterator<Item = &'static Key> {
    KEYS.iter().filter(move |key| key.table == table)
}

/// All keys with what they say, for help.
#[must_use]
pub fn help() -> String {
    let mut text = String::from("Set-up file (TOML), its keys:\n");
    let mut table = "";
    for key in KEYS {
        if key.table != table {
            table = key.table;
            text.push_str(&format!("  [{table}]\n"));
        }
        let indent = if table.is_empty() { "  " } else { "    " };
        text.push_str(&format!("{indent}{}\n{indent}    {}\n", key.name, key.about));
    }
    text
}
