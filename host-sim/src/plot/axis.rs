//! The horizontal axis of a campaign's figures.

use crate::campaign::summary::Summary;

/// Ends of the names of fields, and how a figure writes them.
const UNITS: [(&str, &str); 19] = [
    ("_db_per_m", "dB/m"),
    ("_m_s", "m/s"),
    ("_ppm_k", "ppm/K"),
    ("_mhz", "MHz"),
    ("_khz", "kHz"),
    ("_mrayl", "MRayl"),
    ("_mm", "mm"),
    ("_um", "µm"),
    ("_us", "µs"),
    ("_ns", "ns"),
    ("_ps", "ps"),
    ("_db", "dB"),
    ("_percent", "%"),
    ("_degrees", "degrees"),
    ("_ppm", "ppm"),
    ("_steps", "steps"),
    ("_uv", "µV"),
    ("_mv", "mV"),
    ("_c", "°C"),
];

/// A field's name for people: `scene.noise.snr_db` is "SNR in dB".
pub fn label(field: &str) -> String {
    let name = field.rsplit('.').next().unwrap_or(field);
    let unit = UNITS
        .iter()
        .find_map(|(end, unit)| Some((name.strip_suffix(end)?, *unit)));
    let (name, unit) = unit.map_or((name, String::new()), |(name, unit)| (name, format!(" in {unit}")));
    let words: Vec<&str> = name
        .split('_')
        .map(|word| match word {
            "snr" => "SNR",
            "rms" => "noise (rms)",
            word => word,
        })
        .collect();
    format!("{}{unit}", words.join(" "))
}

/// One axis of the grid, along which all is drawn.
pub struct Axis {
    /// Its number in the campaign.
    pub number: usize,
    /// What is written below it.
    pub label: String,
    /// Do its values grow by ratios rather than by steps?
    pub logarithmic: bool,
    /// Its values, if they are words.
    pub names: Option<Vec<String>>,
    /// The place of each cell.
    places: Vec<Option<f64>>,
}

impl Axis {
    /// The axis with most values, one of numbers rather than one of words; `None` if nothing changes.
    pub fn of(summary: &Summary) -> Option<Self> {
        let count = |axis: usize| different(summary, axis).len();
        let numeric = |axis: usize| numbers(summary, axis).iter().all(Option::is_some);
        let axes = || (0..summary.axes.len()).filter(|axis| count(*axis) > 1);
        // The first of those with most.
        let most = |axes: &mut dyn Iterator<Item = usize>| axes.max_by_key(|axis| (count(*axis), usize::MAX - *axis));
        let numbered = most(&mut axes().filter(|axis| numeric(*axis)));
        let number = numbered.or_else(|| most(&mut axes()))?;
        let name = summary.axes.get(number)?;
        let (places, names) = if numbered.is_some() {
            (numbers(summary, number), None)
        } else {
            let names = different(summary, number);
            let place = |labels: &Vec<String>| {
                let label = labels.get(number)?;
                Some(1.0 + names.iter().position(|name| name == label)? as f64)
            };
            (summary.labels.iter().map(place).collect(), Some(names))
        };
        let mut axis = Self {
            number,
            label: label(name),
            logarithmic: false,
            names,
            places,
        };
        let (first, last) = axis.ends();
        axis.logarithmic = axis.names.is_none() && first > 0.0 && last >= 8.0 * first;
        Some(axis)
    }

    /// Where a cell stands.
    pub fn place(&self, cell: usize) -> Option<f64> {
        self.places.get(cell).copied().flatten()
    }

    /// The least and the largest value.
    pub fn ends(&self) -> (f64, f64) {
        let places = || self.places.iter().copied().flatten();
        (
            places().fold(f64::INFINITY, f64::min),
            places().fold(f64::NEG_INFINITY, f64::max),
        )
    }

    /// A place moved by a share of the axis's length.
    pub fn aside(&self, place: f64, share: f64) -> f64 {
        let (first, last) = self.ends();
        if self.logarithmic {
            place * (last / first).powf(share)
        } else {
            place + share * (last - first)
        }
    }
}

fn numbers(summary: &Summary, axis: usize) -> Vec<Option<f64>> {
    let number = |values: &Vec<Option<f64>>| values.get(axis).copied().flatten();
    summary.values.iter().map(number).collect()
}

fn different(summary: &Summary, axis: usize) -> Vec<String> {
    let mut names: Vec<String> = Vec::new();
    for label in summary.labels.iter().filter_map(|labels| labels.get(axis)) {
        if !names.contains(label) {
            names.push(label.clone());
        }
    }
    names
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn fields_have_names_for_people() {
        for (field, text) in [
            ("scene.noise.snr_db", "SNR in dB"),
            ("scene.wall.thickness_mm", "thickness in mm"),
            ("scene.wall.attenuation_db_per_m", "attenuation in dB/m"),
            ("scene.noise.rms_steps", "noise (rms) in steps"),
            ("scene.echoes.decay", "decay"),
            ("walls", "walls"),
        ] {
            assert_eq!(label(field), text);
        }
    }
}
