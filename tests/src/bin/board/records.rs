//! The canned records and the scenes that they are made from.

use crate::Trouble;
use crate::toolchain::root;
use halfpulse_mps2::canned::RECORDS;
use halfpulse_sim::cli::simulate::read_scene;
use halfpulse_sim::{Scene, record_file, synthesise};
use std::path::PathBuf;

/// The same as `halfpulse simulate` without `--seed`.
const SEED: u64 = 1;

fn file(name: &str, ending: &str) -> PathBuf {
    root()
        .join("firmware-example/mps2/records")
        .join(format!("{name}.{ending}"))
}

/// The scene of a record.
pub fn scene_of(name: &str) -> Result<Scene, String> {
    read_scene(&file(name, "toml")).map_err(|error| error.to_string())
}

/// The scene of a record, and its codes.
fn make(name: &str) -> Result<(Scene, Vec<i16>), String> {
    let scene = scene_of(name)?;
    let shot = synthesise(&scene, SEED).map_err(|error| format!("{name}: {error}"))?;
    Ok((scene, shot.codes))
}

/// Makes every record again.
pub fn write() -> Result<(), Trouble> {
    for record in &RECORDS {
        let (scene, codes) = make(record.name).map_err(Trouble::Failed)?;
        let (rate, first) = (scene.record.sample_rate_mhz * 1e6, scene.record.first_sample_us * 1e-6);
        let path = file(record.name, "npy");
        record_file::write(&path, &[codes], rate, first).map_err(|error| Trouble::Failed(error.to_string()))?;
        say!("{}", path.display());
    }
    Ok(())
}

#[cfg(test)]
mod tests {
    use super::*;
    use halfpulse::{AdcFormat, Hertz, Seconds};
    use halfpulse_mps2::canned::CAPACITY;

    /// Same scene, same seed, same codes, on whatever machine this runs. If a change of the simulator
    /// is meant to change them: `cargo board records`, and look at the difference.
    #[test]
    fn the_records_are_what_the_simulator_makes() {
        for record in &RECORDS {
            let (_, codes) = make(record.name).unwrap();
            assert!(
                record.copy_codes(&mut [0; CAPACITY]) == codes,
                "{} differs from its scene",
                record.name
            );
        }
    }

    #[test]
    fn records_are_described_as_their_scenes_say() {
        for record in &RECORDS {
            let (scene, _) = make(record.name).unwrap();
            assert_eq!(record.format, AdcFormat::signed(scene.record.bits), "{}", record.name);
            assert_eq!(
                record.clock.rate,
                Hertz::from_mhz(scene.record.sample_rate_mhz as f32),
                "{}",
                record.name
            );
            assert_eq!(
                record.clock.first_sample,
                Seconds::from_us(scene.record.first_sample_us as f32),
                "{}",
                record.name
            );
        }
    }
}
