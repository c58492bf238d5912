//! Reads a scene file; errors name the line.

use super::{Scene, SceneError};
use crate::spelling;
use std::fmt;

/// Why a text is not a scene.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct SceneFileError {
    /// The line, from 1, where it is known.
    pub line: Option<u64>,
    /// What is wrong.
    pub what: String,
    /// What to do about it.
    pub remedy: String,
}

impl fmt::Display for SceneFileError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        if let Some(line) = self.line {
            write!(f, "{line}: ")?;
        }
        write!(f, "{}; {}", self.what, self.remedy)
    }
}

impl std::error::Error for SceneFileError {}

impl Scene {
    /// Reads and checks a scene file's text.
    ///
    /// # Errors
    /// What is wrong, in which line, and the remedy: syntax, unknown keys (with the nearest known
    /// name), values out of range.
    pub fn from_toml(text: &str) -> Result<Self, SceneFileError> {
        let scene: Self = toml::from_str(text).map_err(|error| explain(text, &error))?;
        scene.check().map_err(|error| locate(text, error))?;
        Ok(scene)
    }
}

/// Finds the line of a value that was objected to: of its key, else of its table.
#[must_use]
pub fn locate(text: &str, error: SceneError) -> SceneFileError {
    SceneFileError {
        line: line_of_field(text, &error.field),
        what: format!("{}: {}", error.field, error.what),
        remedy: error.remedy,
    }
}

fn line_of_field(text: &str, field: &str) -> Option<u64> {
    let document = toml::de::DeTable::parse(text).ok()?;
    let mut parts = field.split('.');
    let first = parts.next()?;
    let (key, value) = document.get_ref().iter().find(|(key, _)| key.get_ref() == first)?;
    let (mut place, mut value) = (key.span().start, value);
    // As deep as the file goes: what is left out there is a matter of what holds it.
    for part in parts {
        let inner = match value.get_ref() {
            toml::de::DeValue::Table(table) => table.iter().find(|(key, _)| key.get_ref() == part),
            toml::de::DeValue::Array(items) => {
                let item = part.parse::<usize>().ok().and_then(|number| items.get(number));
                let Some(item) = item else { break };
                (place, value) = (item.span().start, item);
                continue;
            }
            _ => None,
        };
        let Some((key, inner)) = inner else { break };
        (place, value) = (key.span().start, inner);
    }
    Some(line_of(text, place))
}

fn line_of(text: &str, byte: usize) -> u64 {
    let before = text.as_bytes().get(..byte).unwrap_or(text.as_bytes());
    1 + before.iter().filter(|&&byte| byte == b'\n').count() as u64
}

/// Turns the parser's sentence into fault and remedy; an unknown name gets the nearest known ones.
fn explain(text: &str, error: &toml::de::Error) -> SceneFileError {
    let message = error.message().lines().collect::<Vec<_>>().join(" ");
    let line = error.span().map(|span| line_of(text, span.start));
    for (start, kind) in [("unknown field ", "unknown key"), ("unknown variant ", "unknown value")] {
        let Some(rest) = message.strip_prefix(start) else {
            continue;
        };
        let mut names = rest.split('`').skip(1).step_by(2);
        let given = names.next().unwrap_or_default();
        let known: Vec<&str> = names.collect();
        let near = spelling::nearest(given, known.iter().copied(), 1);
        let remedy = match near.first() {
            Some(name) => format!("did you mean {name}?"),
            None => format!("known here: {}", known.join(", ")),
        };
        let shown: String = given.chars().take(60).collect();
        return SceneFileError {
            line,
            what: format!("{kind} {shown}"),
            remedy,
        };
    }
    let at = line
        .and_then(|line| text.lines().nth(line as usize - 1))
        .unwrap_or_default();
    if at.trim_start().starts_with("[[") && message.starts_with("invalid type") {
        return SceneFileError {
            line,
            what: "is a list of tables where one table is expected".to_string(),
            remedy: "give one of it in single brackets: a scene has one coating, one wall, one pit".to_string(),
        };
    }
    let remedy = if message.starts_with("missing field") {
        "add it"
    } else if message.starts_with("invalid type: string") && !message.contains("expected a string") {
        "give the number alone, without quotes; its unit stands in the key's name"
    } else if message.starts_with("invalid type") || message.starts_with("invalid value") {
        "give the kind of value that is expected"
    } else {
        "correct the line"
    };
    SceneFileError {
        line,
        what: message,
        remedy: remedy.to_string(),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    const GOOD: &str = r#"version = 1
[record]
sample_rate_mhz = 50
samples = 2048
[probe]
kind = "contact"
centre_frequency_mhz = 5
relative_bandwidth_percent = 60
[wall]
material = "carbon steel"
thickness_mm = 10
"#;

    /// Line, and words that the message must hold.
    fn refused(text: &str, line: Option<u64>, words: &[&str]) {
        let error = Scene::from_toml(text).unwrap_err();
        let message = error.to_string();
        assert_eq!(error.line, line, "{message}");
        for word in words {
            assert!(message.contains(word), "{message} lacks {word}");
        }
        assert!(!message.contains('\n'), "{message}");
    }

    #[test]
    fn a_good_scene_survives_the_round_trip() {
        let scene = Scene::from_toml(GOOD).unwrap();
        assert_eq!(scene.record.bits, 12);
        let value = toml::Value::try_from(&scene).unwrap();
        assert_eq!(value.try_into::<Scene>().unwrap(), scene);
    }

    #[test]
    fn unknown_names_get_the_nearest_known_one() {
        refused(
            &GOOD.replace("thickness_mm", "thicknes_mm"),
            Some(11),
            &["unknown key", "thickness_mm?"],
        );
        refused(&GOOD.replace("[wall]", "[wal]"), Some(9), &["wall?"]);
        refused(
            &GOOD.replace("\"contact\"", "\"contakt\""),
            Some(6),
            &["unknown value contakt", "contact?"],
        );
        refused(
            &GOOD.replace("carbon steel", "carbonsteel"),
            Some(10),
            &["carbon steel"],
        );
        refused(&GOOD.replace("carbon steel", "zzzzzzzz"), Some(10), &["velocity_m_s"]);
    }

    #[test]
    fn absurd_values_are_refused_with_line_and_range() {
        for (from, to, line, word) in [
            ("thickness_mm = 10", "thickness_mm = -3", 11, "give 0.001"),
            ("thickness_mm = 10", "thickness_mm = nan", 11, "give 0.001"),
            ("thickness_mm = 10", "thickness_mm = inf", 11, "give 0.001"),
            ("samples = 2048", "samples = 1000000000", 4, "give 16 to"),
            ("samples = 2048", "samples = 2048\nbits = 24", 5, "give 4 to 16"),
            ("sample_rate_mhz = 50", "sample_rate_mhz = 12", 3, "sample faster"),
            ("sample_rate_mhz = 50", "sample_rate_mhz = 0", 3, "give 0.1"),
            ("percent = 60", "percent = 201", 8, "give 1 to 200"),
            ("percent = 60", "percent = 60\nattack_ns = 100", 9, "keep one"),
            ("relative_bandwidth_percent = 60", "attack_ns = 100", 8, "decay_ns too"),
            ("relative_bandwidth_percent = 60", "", 5, "has no pulse"),
            ("\"contact\"", "\"delay-line\"", 6, "[delay_line]"),
            ("version = 1", "version = 2", 1, "version = 1"),
            ("material = \"carbon steel\"", "velocity_m_s = 5900", 9, "density_kg_m3"),
            (
                "material = \"carbon steel\"",
                "velocity_m_s = 5900\nimpedance_mrayl = 0",
                11,
                "MRayl",
            ),
            (
                "thickness_mm = 10",
                "thickness_mm = 10\n[noise]\nsnr_db = 20\nrms_steps = 1",
                14,
                "keep one",
            ),
            (
                "thickness_mm = 10",
                "thickness_mm = 10\n[back]\nimpedance_mrayl = 0",
                13,
                "MRayl",
            ),
            (
                "thickness_mm = 10",
                "thickness_mm = 10\n[echoes]\ndecay = 1.5",
                13,
                "give",
            ),
        ] {
            refused(&GOOD.replace(from, to), Some(line), &[word]);
        }
    }

    #[test]
    fn absurd_receivers_are_refused_with_line_and_range() {
        for (table, line, word) in [
            ("[receiver]\ngain_step_db = -1", 13, "give 0 to 20 dB"),
            ("[receiver]\ngain_error_db = 1", 13, "gain_step_db too"),
            ("[receiver]\nhigh_pass_mhz = 5\nlow_pass_mhz = 2", 14, "widen the band"),
            ("[receiver]\nlow_pass_order = 9", 13, "give 1 to 8"),
            ("[receiver]\nthermal_noise_uv = nan", 13, "give 0 to"),
            ("[receiver]\nthermal_noise_mv = 1", 13, "thermal_noise_uv?"),
            (
                "[[interference.tones]]\nfrequency_mhz = 1\namplitude_percent = 1\n[[interference.tones]]\nfrequency_mhz = 0\namplitude_percent = 1",
                16,
                "give 0.001 to 1000 MHz",
            ),
            (
                "[interference.bursts]\nperiod_us = 2\nlength_us = 3\nfrequency_mhz = 1\namplitude_percent = 1",
                14,
                "give 0.01 to 2 us",
            ),
            (
                "[interference.spikes]\nrate_per_ms = 1e6\namplitude_percent = 5\ndecay_ns = 20",
                13,
                "spikes in a record",
            ),
            ("[interference.hum]\namplitude_percent = -1", 13, "give 0 to 10000 %"),
            ("[timing]\naperture_jitter_ns = 100", 13, "give 0 to 3."),
            ("[timing]\ntrigger_jitter_ns = inf", 13, "give 0 to 100 ns"),
            ("[converter]\nbits_stuck_high = [12]", 13, "give 0 to 11"),
            (
                "[converter]\nbits_stuck_high = [3]\nbits_stuck_low = [3]",
                14,
                "keep one",
            ),
            (
                "[converter]\nintegral_nonlinearity_steps = 600",
                13,
                "give 0 to 256 steps",
            ),
            ("[equivalent_time]\nphases = 0", 13, "give 1 to 64"),
            ("[equivalent_time]\nphases = 65", 13, "give 1 to 64"),
            ("[drop_outs]\nblock_samples = 0", 13, "give 1 to 65536"),
            ("[drop_outs]\nlost_shots_percent = 101", 13, "give 0 to 100 %"),
        ] {
            refused(&format!("{GOOD}{table}\n"), Some(line), &[word]);
        }
        let long = GOOD.replace("samples = 2048", "samples = 1000000") + "[equivalent_time]\nphases = 10\n";
        refused(&long, Some(4), &["give 16 to 104857"]);
    }

    #[test]
    fn broken_text_is_refused_in_one_line() {
        refused("", Some(1), &["missing field"]);
        refused("version = ", Some(1), &["correct the line"]);
        refused(
            &GOOD.replace("samples = 2048", "samples = \"many\""),
            Some(4),
            &["invalid type"],
        );
        refused(
            &GOOD.replace("samples = 2048", "samples = -1"),
            Some(4),
            &["invalid value"],
        );
        refused(
            &GOOD.replace("samples = 2048\n", ""),
            Some(2),
            &["missing field `samples`"],
        );
        refused(&"[".repeat(100_000), Some(1), &[]);
    }
}

#[cfg(test)]
mod properties {
    use super::*;
    use proptest::prelude::*;

    proptest! {
        #![proptest_config(ProptestConfig::with_cases(400))]

        /// Whatever stands in a file, there is a scene or one line.
        #[test]
        fn any_text_is_a_scene_or_one_line(text in "[a-z\\[\\]=\\.\"0-9\n_ -]{0,200}") {
            if let Err(error) = Scene::from_toml(&text) {
                prop_assert!(!error.to_string().contains('\n'));
            }
        }
    }
}
