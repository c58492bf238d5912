//! `halfpulse simulate`: shots of a scene, with the truth beside them.

use crate::cli::Outcome;
use crate::input_error::InputError;
use crate::record_file;
use crate::scene::Scene;
use crate::synthesise::{Synthesiser, Truth};
use serde::Serialize;
use std::io::Write;
use std::path::{Path, PathBuf};

/// Most samples that one command makes: 256 MiB of codes.
const MOST_SAMPLES: usize = 1 << 27;
/// A scene file is a page of text.
const MOST_BYTES: u64 = 1 << 20;

/// Arguments of `simulate`.
#[derive(Debug, clap::Args)]
#[command(after_help = "\
A scene says what is under the probe and what the receiver adds. The least one:

  version = 1
  [record]
  sample_rate_mhz = 50.0
  samples = 2048
  [probe]
  kind = \"contact\"                     # or \"delay-line\", with a table [delay_line]
  centre_frequency_mhz = 5.0
  relative_bandwidth_percent = 60.0    # or attack_ns, decay_ns and phase_degrees
  [wall]
  material = \"carbon steel\"            # or velocity_m_s and density_kg_m3
  thickness_mm = 10.0
  [noise]
  snr_db = 30.0                        # of the first back-wall echo

More tables: [delay_line], [dual_element], [couplant], [surface], [coating], [back], [pit],
[lamination], [grain], [temperature], [echoes], [transmission_pulse]; and for a receiver that is not
ideal: [receiver], [interference], [timing], [converter], [equivalent_time], [drop_outs].
Commented examples are in host-sim/scenes/: spoilt_receiver.toml has every key of the receiver's tables. Interference
is stated as it reaches the converter: band limits act on echoes and thermal noise alone.

Examples:
  halfpulse simulate host-sim/scenes/painted_steel.toml -o painted.npy
  halfpulse simulate host-sim/scenes/clean_train.toml --seed 7 --shots 64 -o train.csv
  halfpulse simulate host-sim/scenes/equivalent_time.toml --rounds 2 -o slow.npy

The truth (every echo's arrival, amplitude and role, the pulse's figures, the noise) is written beside
the shots under the same name, ending in .json. The same scene, seed and shot give the same codes on
every machine. Names of materials: halfpulse materials. Noise, and what the receiver does wrong, is all
that differs between the shots of one scene. With [equivalent_time] each shot is one phase: shot n fires
(n mod phases) steps later; --rounds counts in whole rounds, for `halfpulse read --interleave`.")]
pub struct Arguments {
    /// The scene: probe, part, receiver (TOML)
    pub scene: PathBuf,
    /// Same seed, same records
    #[arg(long, default_value_t = 1)]
    pub seed: u64,
    /// How many shots of the same place
    #[arg(long, default_value_t = 1)]
    pub shots: u32,
    /// How many rounds of all delays of the scene's equivalent_time instead; after a single round the first delay is fired again
    #[arg(long, conflicts_with = "shots", value_parser = clap::value_parser!(u32).range(1..=65_535))]
    pub rounds: Option<u32>,
    /// Where to write the shots: .npy, .csv or .wav (one shot); the truth goes beside it as .json
    #[arg(short, long)]
    pub output: PathBuf,
}

impl Arguments {
    /// How many shots that is.
    fn count(&self, scene: &Scene) -> u32 {
        match (self.rounds, u32::from(scene.phases())) {
            (Some(1), phases) if phases > 1 => phases + 1,
            (Some(rounds), phases) => rounds.saturating_mul(phases),
            (None, _) => self.shots,
        }
    }
}

/// The file beside the records.
#[derive(Serialize)]
struct TruthFile<'t> {
    /// What made it, for whoever finds the file later.
    made_by: &'static str,
    /// The scene with its defaults.
    scene: &'t Scene,
    /// One entry a shot.
    shots: Vec<Truth>,
}

/// Runs the command.
///
/// # Errors
/// What is wrong with the scene (file, line, remedy) or the output.
pub fn run(arguments: &Arguments, out: &mut dyn Write) -> Result<Outcome, InputError> {
    let scene = read_scene(&arguments.scene)?;
    let output = &arguments.output;
    let truth_file = output.with_extension("json");
    if truth_file == *output {
        return Err(InputError::in_file(
            output,
            "is where the truth goes",
            "let the shots' name end in .npy, .csv or .wav",
        ));
    }
    let count = arguments.count(&scene);
    let shots = count as usize;
    if shots == 0 || shots.saturating_mul(scene.record.samples) > MOST_SAMPLES {
        return Err(InputError::in_argument(
            format!(
                "{}{shots} of {} samples cannot be made",
                if arguments.rounds.is_some() {
                    "shots: "
                } else {
                    "--shots "
                },
                scene.record.samples
            ),
            format!("give 1 to {}", (MOST_SAMPLES / scene.record.samples).max(1)),
        ));
    }
    let mut maker = Synthesiser::new(&scene).map_err(|error| {
        let field = error.field.clone();
        InputError::in_file(&arguments.scene, format!("{field}: {}", error.what), error.remedy)
    })?;
    let (mut codes, mut truths) = (Vec::with_capacity(shots), Vec::with_capacity(shots));
    for number in 0..u64::from(count) {
        let shot = maker.phased_shot(arguments.seed, number);
        codes.push(shot.codes);
        truths.push(shot.truth);
    }
    let (rate, first) = (scene.record.sample_rate_mhz * 1e6, scene.record.first_sample_us * 1e-6);
    record_file::write(output, &codes, rate, first)?;
    let truth = TruthFile {
        made_by: concat!("halfpulse ", env!("CARGO_PKG_VERSION")),
        scene: &scene,
        shots: truths,
    };
    let mut text = serde_json::to_string_pretty(&truth)
        .map_err(|error| InputError::in_file(&truth_file, format!("cannot be made ({error})"), "report this"))?;
    text.push('\n');
    std::fs::write(&truth_file, text).map_err(|error| InputError::unwritable(&truth_file, &error))?;
    let plural = if shots == 1 { "shot" } else { "shots" };
    // What counts is in the files: a closed pipe is no error.
    let _ = writeln!(
        out,
        "{}: {shots} {plural} of {} samples, {} echoes; truth in {}",
        output.display(),
        scene.record.samples,
        maker.truth().echoes.len(),
        truth_file.display()
    );
    Ok(Outcome::Done)
}

/// Reads a scene file.
///
/// # Errors
/// A file that cannot be read, or what is wrong in it, with line and remedy.
pub fn read_scene(path: &Path) -> Result<Scene, InputError> {
    let about = std::fs::metadata(path).map_err(|error| InputError::unreadable(path, &error))?;
    if about.len() > MOST_BYTES {
        return Err(InputError::in_file(
            path,
            "is too large for a scene",
            "give a scene file (TOML)",
        ));
    }
    let text = std::fs::read_to_string(path).map_err(|error| InputError::unreadable(path, &error))?;
    Scene::from_toml(&text).map_err(|error| match error.line {
        Some(line) => InputError::in_line(path, line, error.what, error.remedy),
        None => InputError::in_file(path, error.what, error.remedy),
    })
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::record_file::Coding;

    fn arguments(scene: &Path, output: PathBuf, shots: u32) -> Arguments {
        Arguments {
            scene: scene.to_path_buf(),
            seed: 5,
            shots,
            rounds: None,
            output,
        }
    }

    #[test]
    fn writes_shots_and_their_truth() {
        let folder = tempfile::tempdir().unwrap();
        let scene = Path::new(env!("CARGO_MANIFEST_DIR")).join("scenes/clean_train.toml");
        for (name, shots) in [("a.npy", 3), ("b.csv", 2), ("c.wav", 1)] {
            let output = folder.path().join(name);
            let mut said = Vec::new();
            run(&arguments(&scene, output.clone(), shots), &mut said).unwrap();
            let coding = Coding {
                bits: Some(12),
                ..Coding::default()
            };
            let back = record_file::read(&output, &coding).unwrap();
            let mut maker = Synthesiser::new(&read_scene(&scene).unwrap()).unwrap();
            assert_eq!(back.shots.len(), shots as usize);
            for (number, codes) in back.shots.iter().enumerate() {
                assert_eq!(*codes, maker.shot(5, number as u64).codes);
            }
            let truth = std::fs::read_to_string(output.with_extension("json")).unwrap();
            let truth: serde_json::Value = serde_json::from_str(&truth).unwrap();
            assert_eq!(truth["shots"].as_array().unwrap().len(), shots as usize);
            assert_eq!(truth["shots"][0]["wall_thickness_mm"], 10.0);
            assert_eq!(truth["shots"][0]["echoes"][5]["multiple"], 6);
            assert_eq!(truth["scene"]["echoes"]["decay"], 0.8);
            assert!(String::from_utf8(said).unwrap().contains("6 echoes"));
        }
    }

    /// Every example can be simulated, and shows what its comments say: nothing is refused, and echoes there are.
    #[test]
    fn all_examples_can_be_simulated() {
        let folder = tempfile::tempdir().unwrap();
        let scenes = Path::new(env!("CARGO_MANIFEST_DIR")).join("scenes");
        let mut seen = 0;
        for entry in std::fs::read_dir(scenes).unwrap() {
            let path = entry.unwrap().path();
            let output = folder.path().join("a.npy");
            let mut said = Vec::new();
            run(&arguments(&path, output.clone(), 10), &mut said).unwrap_or_else(|error| panic!("{error}"));
            let truth = std::fs::read_to_string(output.with_extension("json")).unwrap();
            let truth: serde_json::Value = serde_json::from_str(&truth).unwrap();
            assert!(
                !truth["shots"][9]["echoes"].as_array().unwrap().is_empty(),
                "{}",
                path.display()
            );
            let written: toml::Table = std::fs::read_to_string(&path).unwrap().parse().unwrap();
            for (table, value) in &written {
                // What a file says and the scene does not keep would be said in vain.
                assert!(!truth["scene"][table].is_null(), "{}: {table} {value}", path.display());
            }
            seen += 1;
        }
        assert!(seen >= 7, "{seen} scenes");
    }

    #[test]
    fn faults_are_one_line_with_place_and_remedy() {
        let folder = tempfile::tempdir().unwrap();
        let good = Path::new(env!("CARGO_MANIFEST_DIR")).join("scenes/clean_train.toml");
        let refused = |scene: &Path, output: &str, shots: u32, words: &[&str]| {
            let error = run(&arguments(scene, folder.path().join(output), shots), &mut Vec::new()).unwrap_err();
            let text = error.to_string();
            assert!(!text.contains('\n') && text.contains("; "), "{text}");
            for word in words {
                assert!(text.contains(word), "{text} lacks {word}");
            }
        };
        refused(
            &folder.path().join("none.toml"),
            "a.npy",
            1,
            &["none.toml", "no such file"],
        );
        refused(folder.path(), "a.npy", 1, &["folder"]);
        refused(&good, "a.json", 1, &[".npy"]);
        refused(&good, "a.npy", 0, &["--shots 0"]);
        refused(&good, "a.npy", u32::MAX, &["give 1 to"]);
        refused(&good, "no/such/folder/a.npy", 1, &["folder"]);
        refused(&good, "a.mp3", 1, &["a.mp3"]);
        let broken = folder.path().join("broken.toml");
        let text = std::fs::read_to_string(&good).unwrap();
        std::fs::write(&broken, text.replace("thickness_mm = 10.0", "thickness_mm = -10.0")).unwrap();
        refused(&broken, "a.npy", 1, &["broken.toml:21: wall.thickness_mm", "0.001"]);
        std::fs::write(&broken, [0xff, 0xfe, 0x00]).unwrap();
        refused(&broken, "a.npy", 1, &["UTF-8"]);
    }
}
