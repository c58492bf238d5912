//! The reference pulse, learned from a block's shots.

use super::block::{BlockRecord, BlockTimes};
use crate::input_error::InputError;
use halfpulse::echo::learning::{LearningError, PulseLearner, mismatch, unexplained};
use halfpulse::echo::pulse::PulseQuality;
use halfpulse::setup::PULSE_CAPACITY;
use halfpulse::{Echo, Gauge, GaugeSetup, Record, Seconds};

/// A learned pulse and how good it is.
#[derive(Clone, Debug)]
pub struct LearnedPulse {
    /// Its samples, envelope peak 1.
    pub samples: Vec<f32>,
    /// Its own noise, and how far other shots' echoes differ from it.
    pub quality: PulseQuality,
    /// How many shots are in it.
    pub shots: usize,
}

/// One shot in eight is kept out of a first pulse, to tell by how much echoes of other shots differ from it.
const KEPT_OUT: usize = 8;
/// With fewer shots than this none is kept out: a first pulse of so few would have more noise than mismatch.
const ENOUGH_TO_KEEP_OUT: usize = 16;

/// The mean of all shots' first back walls, each moved to the same place, scaled to an envelope peak of 1, with
/// tapered ends: [`halfpulse::echo::learning`].
///
/// # Errors
/// An echo too close to the record's ends or to its neighbours; a pulse longer than the core holds.
pub fn reference_pulse(block: &BlockRecord, times: &BlockTimes, setup: &GaugeSetup) -> Result<Vec<f32>, InputError> {
    Ok(learned(block, times, setup, |_| true)?.samples)
}

/// The pulse of the shots that `takes` lets through, by their place in the list of those that show the echo.
pub fn learned(
    block: &BlockRecord,
    times: &BlockTimes,
    setup: &GaugeSetup,
    takes: impl Fn(usize) -> bool,
) -> Result<LearnedPulse, InputError> {
    let fault = |error: LearningError| {
        let (what, remedy) = error.sentence().split_once(": ").unwrap_or((error.sentence(), ""));
        InputError::in_file(&block.path, what, remedy)
    };
    let (before, length) = window(block, times, setup);
    let mut sums = vec![0.0; length];
    let mut learner = PulseLearner::new(&mut sums, before);
    let mut trouble = LearningError::NoShot;
    for (number, echo) in times
        .of_shots
        .iter()
        .enumerate()
        .filter(|(place, _)| takes(*place))
        .map(|(_, of_shot)| of_shot)
    {
        let Some(shot) = block.shots.get(*number) else { continue };
        // A shot that is clipped, or whose echo jitters out of the record, is left out.
        if let Err(error) = learner.add(&Record::new(&shot.codes, shot.format, block.clock), echo) {
            trouble = error;
        }
    }
    if learner.shots() == 0 {
        return Err(fault(trouble));
    }
    let learned = learner.finish(setup.samples_per_cycle()).map_err(fault)?;
    Ok(LearnedPulse {
        samples: learned.samples.to_vec(),
        quality: PulseQuality {
            learned_on: Some(block.thickness),
            ..learned.quality
        },
        shots: usize::from(learned.shots),
    })
}

/// Samples before the echo's place, and in all: half of the way to the neighbours, because they reach as far
/// towards this echo; and inside the record, with a cycle to spare for shots that jitter.
fn window(block: &BlockRecord, times: &BlockTimes, setup: &GaugeSetup) -> (usize, usize) {
    let peak_at = times.back_wall.position.index as usize;
    let to_samples = |time: Seconds| (time.get() * setup.sample_rate.get()) as usize;
    let room = |neighbour: Option<Seconds>| {
        let way = neighbour.map(|time| (time - times.back_wall.arrival).abs());
        way.map_or(PULSE_CAPACITY, |way| to_samples(way) / 2)
    };
    let spare = if block.shots.len() > 1 {
        setup.samples_per_cycle().ceil() as usize
    } else {
        0
    };
    let before = room(times.neighbours.0).min(peak_at.saturating_sub(spare));
    let behind = block.average.codes.len().saturating_sub(peak_at + 2 + spare);
    (before, before + room(times.neighbours.1).min(behind) + 1)
}

/// How far the echoes of other shots, and of other blocks, differ from a pulse: the root of the energy that it leaves
/// unexplained. `gauge` has the set-up of the blocks; it comes back with the pulse learned from all shots.
///
/// One shot in eight is measured with a pulse of the others. Of another block, whose metal changes the pulse's shape a
/// little, all are; the larger of all these counts. Too few shots tell nothing (0) about their own block.
///
/// # Errors
/// As [`reference_pulse`]; a pulse that the core refuses.
pub fn learn_with_mismatch(
    gauge: &mut Gauge<'_>,
    blocks: &[BlockRecord],
    times: &[BlockTimes],
    own: usize,
) -> Result<LearnedPulse, InputError> {
    let setup = *gauge.setup();
    let (Some(block), Some(its_times)) = (blocks.get(own), times.get(own)) else {
        return Err(InputError::in_argument(
            "a block is missing",
            "give --block 5.000mm=FILE",
        ));
    };
    let refused = |error: halfpulse::SetupError| {
        InputError::in_file(
            &block.path,
            format!("its echo is no reference pulse: {error}"),
            "record the block again",
        )
    };
    let mut worst = 0.0f32;
    if its_times.of_shots.len() >= ENOUGH_TO_KEEP_OUT {
        let first = learned(block, its_times, &setup, |place| place % KEPT_OUT != 0)?;
        gauge
            .learn_pulse_of_quality(&first.samples, first.quality)
            .map_err(refused)?;
        let kept_out = its_times.of_shots.iter().step_by(KEPT_OUT);
        worst = worst.max(mean_mismatch(gauge, block, kept_out));
    }
    let mut all = learned(block, its_times, &setup, |_| true)?;
    gauge
        .learn_pulse_of_quality(&all.samples, all.quality)
        .map_err(refused)?;
    for (number, (other, times)) in blocks.iter().zip(times).enumerate() {
        if number != own && is_isolated(times, gauge) {
            worst = worst.max(mean_mismatch(gauge, other, times.of_shots.iter()));
        }
    }
    all.quality.mismatch = worst;
    gauge
        .learn_pulse_of_quality(&all.samples, all.quality)
        .map_err(refused)?;
    Ok(all)
}

/// Is the first back wall further from its neighbours than two pulses?
fn is_isolated(times: &BlockTimes, gauge: &Gauge<'_>) -> bool {
    let clear = gauge.setup().sample_rate.period() * (2.0 * gauge.pulse().facts.envelope_duration);
    [times.neighbours.0, times.neighbours.1]
        .iter()
        .flatten()
        .all(|neighbour| (*neighbour - times.back_wall.arrival).abs() > clear)
}

/// Mismatch of the gauge's pulse from the first back walls of some shots.
fn mean_mismatch<'e>(
    gauge: &mut Gauge<'_>,
    block: &BlockRecord,
    shots: impl Iterator<Item = &'e (usize, Echo)>,
) -> f32 {
    let half_cycle = gauge.setup().probe.centre_frequency.period() * 0.5;
    let (mut sum, mut count) = (0.0f64, 0u32);
    for (number, known) in shots {
        let Some(shot) = block.shots.get(*number) else { continue };
        let record = Record::new(&shot.codes, shot.format, block.clock);
        // Whether the record gives a reading does not matter here.
        let _ = gauge.measure(&record);
        let echoes = &gauge.findings().echoes;
        let found = echoes
            .iter()
            .find(|echo| (echo.arrival - known.arrival).abs() < half_cycle && !echo.clipped);
        let (pulse, noise) = (gauge.pulse(), gauge.findings().noise);
        if let Some(left) = found.and_then(|echo| unexplained(&record, &pulse, noise, echo)) {
            sum += f64::from(left);
            count += 1;
        }
    }
    if count == 0 {
        return 0.0;
    }
    mismatch((sum / f64::from(count)) as f32)
}
