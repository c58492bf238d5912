//! Simulates and measures one run.

use super::bound;
use super::calibration;
use super::file::{Campaign, of_run};
use super::learned::Pulses;
use super::resolve::Resolved;
use super::row::{Row, RowReading};
use crate::input_error::InputError;
use crate::joining::{self, Joining};
use crate::measuring::{HeapScratch, Measured};
use crate::setup_file::SetupFile;
use crate::synthesise::{Shot, Synthesiser, Truth, Variation};
use halfpulse::{Seconds, Span};
use std::path::Path;
use toml::Value;

/// What one thread keeps from run to run; no result depends on it.
pub struct Measurer<'c> {
    campaign: &'c Campaign,
    /// The scene that was made last.
    maker: Option<(Value, Synthesiser, Option<f64>)>,
    setup: Option<(Value, SetupFile)>,
    pulses: Pulses,
    scratch: HeapScratch,
    samples: usize,
}

/// One run with all that came of it.
pub struct Run<'c> {
    /// What was to be measured.
    pub resolved: Resolved<'c>,
    /// The record and its truth.
    pub shot: Shot,
    /// The set-up.
    pub setup: SetupFile,
    /// The learned pulse, if one was.
    pub pulse: Option<Vec<f32>>,
    /// Reading or refusal.
    pub measured: Measured,
    /// The line of the results.
    pub row: Row,
}

/// The wall that a reading is held against, in millimetres: the least under the beam. `None` if the record holds no
/// echo of it.
#[must_use]
pub fn true_wall_mm(truth: &Truth) -> Option<f64> {
    truth.back_walls().next().map(|_| truth.least_wall_mm)
}

/// The seed of a run's shot, of which it is shot 0: noise and grains differ from run to run.
///
/// The mixing function of SplitMix64 (Steele, Lea and Flood 2014, Fast splittable pseudorandom number generators;
/// constants from memory).
#[must_use]
pub const fn shot_seed(seed: u64, run: u64) -> u64 {
    let mut z = seed.wrapping_add(run.wrapping_add(1).wrapping_mul(0x9e37_79b9_7f4a_7c15));
    z = (z ^ (z >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
    z = (z ^ (z >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
    z ^ (z >> 31)
}

impl<'c> Measurer<'c> {
    /// Of a campaign.
    #[must_use]
    pub fn new(campaign: &'c Campaign) -> Self {
        Self {
            campaign,
            maker: None,
            setup: None,
            pulses: Pulses::default(),
            scratch: HeapScratch::new(0),
            samples: 0,
        }
    }

    /// One run.
    ///
    /// # Errors
    /// A run that cannot be simulated; the fault names it.
    pub fn run(&mut self, run: u64) -> Result<Run<'c>, InputError> {
        let campaign = self.campaign;
        let resolved = campaign.resolve(run)?;
        self.prepare(&resolved).map_err(|error| of_run(run, &error))?;
        let variation = campaign.variation_of(&resolved.root)?;
        let pulse = match (&campaign.pulse, &resolved.block) {
            (Some(learned), Some(block)) => Some(self.pulses.of(campaign, block, learned.shots)?),
            _ => None,
        };
        let (Some((_, maker, bound)), Some((_, setup))) = (&mut self.maker, &self.setup) else {
            return Err(InputError::in_argument(
                format!("run {run} was not prepared"),
                "report this",
            ));
        };
        let seed = shot_seed(campaign.seed, run);
        let mut taken = |number: u64| {
            if variation == Variation::default() {
                maker.shot(seed, number)
            } else {
                maker.varied_shot(seed, number, variation)
            }
        };
        let shot = taken(0);
        let mut shots = vec![shot.codes.clone()];
        shots.extend((1..campaign.shots).map(|number| taken(number).codes));
        if shot.codes.len() > self.samples {
            self.samples = shot.codes.len();
            self.scratch = HeapScratch::new(self.samples);
        }
        let calibrated = match &campaign.calibration {
            None => None,
            Some(calibration) => Some(calibration.run(campaign, run, &resolved.blocks, setup)?),
        };
        let (setup, pulse) = match &calibrated {
            Some(Ok(calibrated)) => (
                SetupFile::from_keys(calibrated.keys.clone(), setup.path()),
                Some(calibrated.pulse.clone()),
            ),
            _ => (setup.clone(), pulse),
        };
        let mut gauge = match &pulse {
            Some(pulse) => setup.gauge_with_pulse(self.scratch.workspace(), Some(pulse))?,
            None => setup.gauge(self.scratch.workspace())?,
        };
        let name = format!("run {run}");
        let (path, joining) = (Path::new(&name), Joining::of_run(campaign.shots));
        let (records, clock) = joining::join(path, shots, shot.format, shot.clock, joining, Seconds::ZERO)?;
        let mut measured = match (&calibrated, records.first()) {
            (Some(Err(error)), _) => Measured::refused(&gauge, calibration::REFUSED, error.to_string()),
            (_, Some(record)) => joining::measure(&mut gauge, &name, record, clock, false),
            (_, None) => Measured::refused(&gauge, calibration::REFUSED, "no shots".to_string()),
        };
        (measured.file, measured.shot) = (name, Some(0));
        let quarter_mm = 250.0 * shot.truth.wall_velocity_m_s / (maker.scene().probe.centre_frequency_mhz * 1e6);
        // The bound is that of the timing alone: a velocity that was learned has its own error.
        let between_back_walls = gauge.setup().span == Span::BackWallToBackWall;
        let bound = bound.filter(|_| between_back_walls && calibrated.is_none());
        let row = Row {
            run,
            cell: resolved.cell,
            truth_mm: true_wall_mm(&shot.truth),
            quarter_mm,
            // That of a shot over the root of their number.
            bound_mm: bound.map(|bound| bound * 1e3 / (campaign.shots as f64).sqrt()),
            outcome: match &measured.outcome {
                Ok(reading) => Ok(RowReading {
                    thickness_mm: reading.thickness.get() * 1e3,
                    standard_uncertainty_mm: reading.standard_uncertainty.get() * 1e3,
                    coverage_factor: reading.coverage_factor,
                    doubts: reading.doubts.iter().map(|doubt| doubt.word().to_string()).collect(),
                    dominating: reading
                        .budget
                        .dominating()
                        .map_or("", |source| source.word())
                        .to_string(),
                }),
                Err(refusal) => Err(refusal.reason.to_string()),
            },
            shown: resolved.shown.clone(),
        };
        Ok(Run {
            setup,
            resolved,
            shot,
            pulse,
            measured,
            row,
        })
    }

    /// Makes scene and set-up anew where they differ from the last run's.
    fn prepare(&mut self, resolved: &Resolved<'_>) -> Result<(), InputError> {
        let document = |name: &str| resolved.root.get(name).cloned().unwrap_or(Value::Boolean(false));
        let scene = document("scene");
        if self.maker.as_ref().is_none_or(|(made, ..)| *made != scene) {
            let maker = Synthesiser::new(&resolved.scene()?).map_err(|error| {
                let path = format!("scene.{}", error.field);
                let what = format!("{path}: {}", error.what);
                self.campaign.places.fault(&path, what, error.remedy)
            })?;
            let bound = bound::thickness(&maker);
            self.maker = Some((scene, maker, bound));
        }
        let setup = document("setup");
        if self.setup.as_ref().is_none_or(|(read, _)| *read != setup) {
            self.setup = Some((setup, resolved.setup()?));
        }
        Ok(())
    }
}
