//! Blocks on which a run calibrates before it reads the wall, in the same simulated world: what the run has drawn of
//! probe, velocity, zero and receiver holds for its blocks too. The calibration is that of `halfpulse calibrate`.

use super::draw::{Assignment, Draw, hash, number};
use super::file::{Campaign, at, draws, table_of};
use super::measure::shot_seed;
use super::places::Places;
use crate::calibrating::block::BlockRecord;
use crate::calibrating::{self, Calibrated, Learn};
use crate::input_error::InputError;
use crate::record_file::RecordFile;
use crate::setup_file::SetupFile;
use crate::synthesise::Synthesiser;
use clap::ValueEnum;
use std::path::PathBuf;
use toml::{Table, Value};

/// The word of a run whose calibration has failed.
pub const REFUSED: &str = "not-calibrated";

const KEYS: [&str; 3] = ["blocks", "shots", "learn"];
const BLOCK_KEYS: [&str; 2] = ["thickness_mm", "standard_uncertainty_mm"];
const MOST_SHOTS: u32 = 256;
/// What a set of blocks can hold and still be simulated for every run.
const MOST_BLOCKS: usize = 8;

/// What blocks do not have unless a field puts it there.
const NOT_OF_BLOCKS: [&str; 8] = [
    "scene.coating",
    "scene.surface",
    "scene.back",
    "scene.pit",
    "scene.lamination",
    "scene.grain",
    "scene.echoes.mode_converted_percent",
    "shot",
];

/// One block.
#[derive(Clone, Debug, PartialEq)]
struct Block {
    /// What its certificate says.
    thickness_mm: f64,
    standard_uncertainty_mm: f64,
    /// Its true thickness.
    thickness: Draw,
    /// What differs on it from the scene of the run.
    fields: Vec<Draw>,
}

/// Table `[calibrate]`.
#[derive(Clone, Debug, PartialEq)]
pub struct Calibration {
    learn: Learn,
    shots: u32,
    /// Of all blocks.
    fields: Vec<Draw>,
    blocks: Vec<Block>,
}

impl Calibration {
    /// Reads the table, if there is one.
    ///
    /// # Errors
    /// What is wrong with it, with its line.
    pub fn parse(written: &Table, places: &Places) -> Result<Option<Self>, InputError> {
        if !written.contains_key("calibrate") {
            return Ok(None);
        }
        if written.contains_key("pulse") {
            let what = "calibrate and pulse both learn the reference pulse";
            return Err(places.fault("pulse", what, "remove one of the two tables"));
        }
        let table = table_of(written, places, "calibrate")?;
        let form = "write blocks = [{ thickness_mm = 5.0, standard_uncertainty_mm = 0.005 }, ..]";
        let listed = table
            .get("blocks")
            .and_then(Value::as_array)
            .map(Vec::as_slice)
            .unwrap_or_default();
        if !(1..=MOST_BLOCKS).contains(&listed.len()) {
            let what = format!("blocks is no list of 1 to {MOST_BLOCKS} blocks");
            return Err(places.fault("calibrate.blocks", what, form));
        }
        let blocks: Vec<Block> = listed
            .iter()
            .enumerate()
            .map(|(number, block)| {
                Block::parse(block, number, places)?
                    .ok_or_else(|| places.fault("calibrate.blocks", format!("block {} is none", number + 1), form))
            })
            .collect::<Result<_, InputError>>()?;
        let shots = match table.get("shots") {
            None => Some(16),
            Some(shots) => shots.as_integer().and_then(|shots| u32::try_from(shots).ok()),
        };
        let Some(shots) = shots.filter(|shots| (1..=MOST_SHOTS).contains(shots)) else {
            let what = format!("shots is no whole number from 1 to {MOST_SHOTS}");
            return Err(places.fault("calibrate.shots", what, "write shots = 16"));
        };
        let learn = match table.get("learn") {
            None if blocks.len() == 1 => Some(Learn::Zero),
            None => Some(Learn::ZeroAndVelocity),
            Some(word) => word.as_str().and_then(|word| Learn::from_str(word, false).ok()),
        };
        let Some(learn) = learn else {
            let words: Vec<String> = Learn::value_variants()
                .iter()
                .filter_map(|learn| Some(learn.to_possible_value()?.get_name().to_string()))
                .collect();
            let remedy = format!("write one of: {}", words.join(", "));
            return Err(places.fault("calibrate.learn", "learn is no such word", remedy));
        };
        let fields = draws(written, places, "calibrate", &KEYS)?;
        let of_blocks = blocks.iter().flat_map(|block| &block.fields);
        for path in fields.iter().chain(of_blocks).flat_map(Draw::paths) {
            if !path.starts_with("scene.") {
                let what = format!("{path} is no field of a block's scene");
                return Err(places.fault(path, what, "give fields that begin with scene."));
            }
        }
        Ok(Some(Self {
            learn,
            shots,
            fields,
            blocks,
        }))
    }

    /// What differs on each block of a run from the run's own scene.
    #[must_use]
    pub fn fields(&self, seed: u64, run: u64) -> Vec<Vec<Assignment>> {
        let of_block = |(number, block): (usize, &Block)| {
            let mut fields: Vec<Assignment> = NOT_OF_BLOCKS
                .iter()
                .map(|path| Assignment {
                    path: (*path).to_string(),
                    value: None,
                })
                .collect();
            let seed = block_seed(seed, number);
            let own = std::iter::once(&block.thickness).chain(&block.fields);
            for field in self.fields.iter().chain(own) {
                field.draw(seed, run, &mut fields, &mut Vec::new());
            }
            fields
        };
        self.blocks.iter().enumerate().map(of_block).collect()
    }

    /// Do the blocks determine what shall be learned, with this set-up?
    ///
    /// # Errors
    /// They do not, or the set-up's own pulse cannot be read.
    pub fn check(&self, campaign: &Campaign, setup: &SetupFile) -> Result<(), InputError> {
        setup.reference_pulse()?;
        let span = setup.gauge_setup()?.span;
        calibrating::check_number(span, self.blocks.len(), self.learn).map_err(|error| {
            let remedy = "give other blocks, or another learn";
            campaign.places.fault("calibrate", error.what(), remedy)
        })
    }

    /// Calibrates one run; the inner error is that of the calibration itself, a result like any other.
    ///
    /// # Errors
    /// A block that cannot be simulated.
    pub fn run(
        &self,
        campaign: &Campaign,
        run: u64,
        scenes: &[Table],
        setup: &SetupFile,
    ) -> Result<Result<Calibrated, InputError>, InputError> {
        let mut records = Vec::with_capacity(self.blocks.len());
        for (number, (block, table)) in self.blocks.iter().zip(scenes).enumerate() {
            let scene = campaign.scene_of(table)?;
            let mut maker = Synthesiser::new(&scene).map_err(|error| {
                let path = format!("scene.{}", error.field);
                let what = format!("block {}: {path}: {}", number + 1, error.what);
                campaign.places.fault(&path, what, error.remedy)
            })?;
            let seed = shot_seed(block_seed(campaign.seed, number), run);
            let first = maker.shot(seed, 0);
            let (format, clock) = (first.format, first.clock);
            let mut codes = vec![first.codes];
            codes.extend((1..u64::from(self.shots)).map(|shot| maker.shot(seed, shot).codes));
            let file = RecordFile::from_codes(codes, format);
            let path = PathBuf::from(format!("block {}", number + 1));
            let size = (block.thickness_mm, block.standard_uncertainty_mm);
            records.push(BlockRecord::new(&path, size, file, clock)?);
        }
        Ok(calibrating::calibrate(setup, &records, self.learn, "learned.npy"))
    }
}

/// What a block draws is its own, and not what the part or another block draws.
fn block_seed(seed: u64, number: usize) -> u64 {
    seed ^ hash(&format!("block {}", number + 1))
}

impl Block {
    /// `None`: not a table with a thickness and its uncertainty.
    fn parse(value: &Value, index: usize, places: &Places) -> Result<Option<Self>, InputError> {
        let Some(table) = value.as_table() else { return Ok(None) };
        let of = |key: &str| table.get(key).and_then(number);
        let (Some(thickness_mm), Some(standard_uncertainty_mm)) = (of("thickness_mm"), of("standard_uncertainty_mm"))
        else {
            return Ok(None);
        };
        if !(0.05..=10_000.0).contains(&thickness_mm) || !(0.0..0.1 * thickness_mm).contains(&standard_uncertainty_mm) {
            let what = format!(
                "block {}: {thickness_mm} mm with a standard uncertainty of {standard_uncertainty_mm} mm is no block",
                index + 1
            );
            let remedy =
                "give thickness_mm from 0.05 to 10000, and standard_uncertainty_mm from 0 to below a tenth of it";
            return Err(places.fault("calibrate.blocks", what, remedy));
        }
        let path = "scene.wall.thickness_mm";
        let parse = |name: &str, value: &Value| {
            Draw::parse(name, value).map_err(|error| at(places, "calibrate.blocks", name, error))
        };
        let distribution = vec![Value::Float(thickness_mm), Value::Float(standard_uncertainty_mm)];
        let distribution = Table::from_iter([("normal".to_string(), Value::Array(distribution))]);
        let fields = table
            .iter()
            .filter(|(name, _)| !BLOCK_KEYS.contains(&name.as_str()))
            .map(|(name, value)| parse(name, value))
            .collect::<Result<_, _>>()?;
        Ok(Some(Self {
            thickness_mm,
            standard_uncertainty_mm,
            thickness: parse(path, &Value::Table(distribution))?,
            fields,
        }))
    }
}
