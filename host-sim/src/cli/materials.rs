//! `halfpulse materials`: the table of materials, as text or JSON.

use super::read::Format;
use super::{Outcome, written};
use crate::input_error::InputError;
use crate::material::{MATERIALS, Material};
use comfy_table::{CellAlignment, Table, presets};
use serde::Serialize;
use std::io::Write;

/// Arguments of `materials`.
#[derive(Debug, clap::Args)]
#[command(after_help = "\
Velocities are for about 20 degrees Celsius. A velocity from a table is a start: a block of the part's
own material is the truth. +- is the half-width of the interval in which the velocity lies; divided by
the square root of 3 it is a standard uncertainty. Slope: change of the longitudinal velocity per kelvin.
A scene takes a material by its name, or one of its own by velocity_m_s and density_kg_m3.

Examples:
  halfpulse materials
  halfpulse materials steel
  halfpulse materials --format json")]
pub struct Arguments {
    /// Only names that contain this
    name: Option<String>,
    /// For people, or for programs (one object a line)
    #[arg(long, value_enum, default_value_t = Format::Text)]
    format: Format,
}

/// One material for programs.
#[derive(Serialize)]
struct Entry {
    name: &'static str,
    density_kg_m3: f64,
    longitudinal_m_s: f64,
    longitudinal_half_width_m_s: f64,
    longitudinal_standard_uncertainty_m_s: f64,
    shear_m_s: Option<f64>,
    impedance_mrayl: f64,
    poisson_ratio: Option<f64>,
    youngs_modulus_gpa: Option<f64>,
    bulk_modulus_gpa: Option<f64>,
    slope_m_s_k: Option<f64>,
    expansion_ppm_k: Option<f64>,
    source: &'static str,
}

impl Entry {
    fn of(material: &Material) -> Self {
        Self {
            name: material.name,
            density_kg_m3: material.density,
            longitudinal_m_s: material.longitudinal,
            longitudinal_half_width_m_s: material.half_width,
            longitudinal_standard_uncertainty_m_s: material.velocity_standard_uncertainty(),
            shear_m_s: material.shear,
            impedance_mrayl: material.impedance() / 1e6,
            poisson_ratio: material.poisson_ratio(),
            youngs_modulus_gpa: material.youngs_modulus().map(|modulus| modulus / 1e9),
            bulk_modulus_gpa: material.bulk_modulus().map(|modulus| modulus / 1e9),
            slope_m_s_k: material.slope,
            // Stored per kelvin; a millionth has few digits.
            expansion_ppm_k: material.expansion.map(|expansion| (expansion * 1e9).round() / 1e3),
            source: material.source,
        }
    }
}

/// Runs the command.
///
/// # Errors
/// A name that no material contains (with the nearest ones), an output that cannot be written.
pub fn run(arguments: &Arguments, out: &mut dyn Write) -> Result<Outcome, InputError> {
    let wanted = arguments.name.as_deref().unwrap_or("").trim().to_lowercase();
    let found: Vec<&Material> = MATERIALS
        .iter()
        .filter(|material| material.name.to_lowercase().contains(&wanted))
        .collect();
    if found.is_empty() {
        let near = crate::material::suggestions(&wanted);
        let remedy = if near.is_empty() {
            "see halfpulse materials".to_string()
        } else {
            format!("did you mean {}?", near.join(" or "))
        };
        let shown: String = wanted.chars().take(60).collect();
        return Err(InputError::in_argument(
            format!("no material's name contains \"{shown}\""),
            remedy,
        ));
    }
    let text = match arguments.format {
        Format::Text => table(&found),
        Format::Json => lines(&found)?,
    };
    written(out.write_all(text.as_bytes()))?;
    Ok(Outcome::Done)
}

fn lines(found: &[&Material]) -> Result<String, InputError> {
    let mut text = String::new();
    for material in found {
        let line = serde_json::to_string(&Entry::of(material))
            .map_err(|error| InputError::in_argument(format!("the table cannot be made ({error})"), "report this"))?;
        text.push_str(&line);
        text.push('\n');
    }
    Ok(text)
}

fn table(found: &[&Material]) -> String {
    let mut table = Table::new();
    table.load_style(presets::NOTHING);
    table.set_header([
        "material",
        "kg/m3",
        "long. m/s",
        "+-",
        "shear m/s",
        "MRayl",
        "Poisson",
        "m/s per K",
        "source",
    ]);
    let optional =
        |value: Option<f64>, digits: usize| value.map_or("-".to_string(), |value| format!("{value:.digits$}"));
    for material in found {
        let small = if material.density < 100.0 { 4 } else { 2 };
        table.add_row([
            material.name.to_string(),
            format!("{}", material.density),
            format!("{}", material.longitudinal),
            format!("{}", material.half_width),
            optional(material.shear, 0),
            format!("{:.small$}", material.impedance() / 1e6),
            optional(material.poisson_ratio(), 3),
            optional(material.slope, 2),
            material.source.to_string(),
        ]);
    }
    for column in 1..8 {
        if let Some(column) = table.column_mut(column) {
            column.set_cell_alignment(CellAlignment::Right);
        }
    }
    let mut text: String = table.lines().map(|line| format!("{}\n", line.trim_end())).collect();
    text.push_str("About 20 degrees Celsius. A block of the part's own material beats any table.\n");
    text
}

#[cfg(test)]
mod tests {
    use super::*;

    fn said(name: Option<&str>, format: Format) -> Result<String, InputError> {
        let mut out = Vec::new();
        let arguments = Arguments {
            name: name.map(str::to_string),
            format,
        };
        run(&arguments, &mut out)?;
        Ok(String::from_utf8(out).unwrap())
    }

    #[test]
    fn every_material_is_listed() {
        let (text, json) = (said(None, Format::Text).unwrap(), said(None, Format::Json).unwrap());
        assert_eq!(json.lines().count(), MATERIALS.len());
        for (material, line) in MATERIALS.iter().zip(json.lines()) {
            assert!(text.contains(material.name) && text.contains(material.source));
            let entry: serde_json::Value = serde_json::from_str(line).unwrap();
            assert_eq!(entry["name"], material.name);
            assert_eq!(entry["longitudinal_m_s"], material.longitudinal);
        }
    }

    #[test]
    fn a_name_narrows_the_list_and_a_wrong_one_gets_the_nearest() {
        assert_eq!(said(Some("Steel"), Format::Json).unwrap().lines().count(), 7);
        let error = said(Some("polistyrene"), Format::Text).unwrap_err().to_string();
        assert!(error.contains("polystyrene?") && !error.contains('\n'), "{error}");
    }
}
