//! The reference pulse, learned on a simulated block just as `halfpulse calibrate` learns it.

use super::draw::{Draw, hash};
use super::file::{Campaign, draws, table_of};
use super::places::Places;
use crate::calibrating::block::{self, BlockRecord};
use crate::calibrating::cut;
use crate::input_error::InputError;
use crate::measuring::HeapScratch;
use crate::record_file::RecordFile;
use crate::synthesise::Synthesiser;
use toml::Table;

/// Pulses that are kept: draws may change the probe from run to run.
const MOST_KEPT: usize = 16;

/// How the reference pulse is learned.
#[derive(Clone, Debug, PartialEq)]
pub struct LearnedPulse {
    /// Shots on the block.
    pub shots: u32,
    /// What differs on the block from the scene of the cell.
    pub fields: Vec<Draw>,
}

impl LearnedPulse {
    /// Reads the table `[pulse]`, if there is one.
    ///
    /// # Errors
    /// What is wrong with it, with its line.
    pub fn parse(written: &Table, places: &Places) -> Result<Option<Self>, InputError> {
        if !written.contains_key("pulse") {
            return Ok(None);
        }
        let table = table_of(written, places, "pulse")?;
        let shots = table.get("learned").and_then(toml::Value::as_integer).unwrap_or(0);
        let Some(shots) = u32::try_from(shots).ok().filter(|shots| (1..=256).contains(shots)) else {
            let what = "learned is no whole number from 1 to 256";
            return Err(places.fault("pulse.learned", what, "write learned = 128, or remove [pulse]"));
        };
        let fields = draws(written, places, "pulse", &["learned"])?;
        if let Some(random) = fields.iter().find(|field| field.is_random()) {
            let what = format!("{} of the block is drawn", random.name);
            return Err(places.fault(&random.name, what, "give one value"));
        }
        Ok(Some(Self { shots, fields }))
    }
}

/// The pulses of the blocks that were met last.
#[derive(Debug, Default)]
pub struct Pulses {
    kept: Vec<(Table, Vec<f32>)>,
}

impl Pulses {
    /// The pulse of a block: kept, or learned now.
    ///
    /// # Errors
    /// A block that gives no pulse.
    pub fn of(&mut self, campaign: &Campaign, block: &Table, shots: u32) -> Result<Vec<f32>, InputError> {
        if let Some((_, pulse)) = self.kept.iter().find(|(table, _)| table == block) {
            return Ok(pulse.clone());
        }
        let pulse = learn(campaign, block, shots)?;
        if self.kept.len() >= MOST_KEPT {
            self.kept.remove(0);
        }
        self.kept.push((block.clone(), pulse.clone()));
        Ok(pulse)
    }
}

fn learn(campaign: &Campaign, block: &Table, shots: u32) -> Result<Vec<f32>, InputError> {
    let fault = |error: &InputError| {
        let what = format!("no pulse can be learned on the block: {}", error.what());
        campaign.places.fault("pulse", what, error.remedy())
    };
    let scene = campaign.scene_of(block)?;
    let setup = campaign.setup_of(block)?;
    let mut maker = Synthesiser::new(&scene).map_err(|error| {
        let path = format!("scene.{}", error.field);
        campaign
            .places
            .fault(&path, format!("{}: {}", error.field, error.what), error.remedy)
    })?;
    // The block's noise depends on the block, not on which run happens to need it first.
    let seed = campaign.seed ^ hash(&block.to_string());
    let shots: Vec<_> = (0..u64::from(shots)).map(|shot| maker.shot(seed, shot)).collect();
    let Some((format, clock)) = shots.first().map(|shot| (shot.format, shot.clock)) else {
        return Ok(Vec::new());
    };
    let file = RecordFile::from_codes(shots.into_iter().map(|shot| shot.codes).collect(), format);
    let size = (scene.wall.thickness_mm, 0.001);
    let block = BlockRecord::new(&campaign.setup_path, size, file, clock).map_err(|error| fault(&error))?;
    let mut scratch = HeapScratch::new(scene.record.samples);
    let mut gauge = setup.gauge(scratch.workspace())?;
    let times = block::measure(&mut gauge, &block, false).map_err(|error| fault(&error))?;
    cut::reference_pulse(&block, &times, gauge.setup()).map_err(|error| fault(&error))
}
