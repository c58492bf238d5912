//! From records of blocks to reference pulse, zero and velocity.
//!
//! 1. Each block's averaged shots are measured with the pulse at hand (modelled, or learned before) to
//!    find its first back wall near the time that its thickness promises ([`block`]).
//! 2. The reference pulse is learned from all shots' first back walls on the block where it is clearest ([`cut`]), with
//!    its own noise and with how far echoes of other shots and blocks differ from it.
//! 3. All blocks are measured again with that pulse, and zero and velocity follow from what the span
//!    measures between: the first back wall; the first back wall after the interface; or the period for
//!    the velocity and the first back wall for the zero.
//!
//! A pulse that was learned is a back wall, and where all back walls of the blocks have its sign, so will the parts': the
//! new set-up says `back_wall_sign = "as-pulse"`, unless the old one keeps it `"unknown"`. That holds for walls with something soft
//! behind them (air, water, oil), and for parts that are stiffer than the probe's face, as steel is.
//!
//! If only the velocity is learned, the set-up's zero is carried over to the new pulse: see `translated`.
//!
//! Uncertainties contain the thickness of the block, the noise of the averaged record or the scatter of
//! its shots (the larger), and for a velocity also what nobody corrects: couplant films that differ
//! between blocks, and the beam's spreading from one block to the other.

pub mod block;
pub mod cut;

use crate::input_error::InputError;
use crate::measuring::HeapScratch;
use crate::setup_file::{CalibrationKeys, SetupFile, SetupKeys, checksum};
use block::{BlockRecord, BlockTimes};
use cut::LearnedPulse;
use halfpulse::echo::Polarity;
use halfpulse::echo::pulse::PulseQuality;
use halfpulse::math::RECTANGULAR;
use halfpulse::wall::calibration::{self, Block, CalibrationError};
use halfpulse::wall::thickness::Timed;
use halfpulse::wall::{coupling, way};
use halfpulse::{
    CalibratedRange, Celsius, DriftCheck, DriftState, EchoSign, GaugeSetup, Material, Metres, MetresPerSecond,
    NoReading, Reading, Record, Seconds, Span, Zero,
};

/// What shall be learned from the blocks, besides the reference pulse.
#[derive(Clone, Copy, Debug, PartialEq, Eq, clap::ValueEnum)]
pub enum Learn {
    /// The zero, at the set-up's velocity: one block
    Zero,
    /// The velocity, with the set-up's zero: one block
    Velocity,
    /// Both: two blocks
    ZeroAndVelocity,
}

/// What the blocks have taught.
#[derive(Clone, Debug)]
pub struct Calibrated {
    /// The set-up with everything that was learned; its pulse's file has the name that was asked for.
    pub keys: SetupKeys,
    /// The reference pulse.
    pub pulse: Vec<f32>,
    /// Its own noise, and how far other shots' echoes differ from it.
    pub quality: PulseQuality,
    /// How many shots are in it.
    pub pulse_shots: usize,
    /// The zero in force.
    pub zero: Zero,
    /// The material in force.
    pub material: Material,
    /// Which block the pulse was cut from.
    pub pulse_from: usize,
    /// What was measured on each block.
    pub times: Vec<BlockTimes>,
}

/// How well the temperature of a block is known, where one is stated: its standard uncertainty (k = 1) in kelvin.
const BLOCK_TEMPERATURE_UNCERTAINTY: Celsius = Celsius::new(1.0);

/// Calibrates a set-up on blocks. `pulse_name` is what the set-up will call the pulse's file.
///
/// # Errors
/// As [`calibrate_at`]; a set-up whose velocity follows temperature, because that of the blocks is not stated.
pub fn calibrate(
    setup: &SetupFile,
    blocks: &[BlockRecord],
    learn: Learn,
    pulse_name: &str,
) -> Result<Calibrated, InputError> {
    calibrate_at(setup, blocks, learn, pulse_name, None)
}

/// The same with the blocks' temperature in degrees Celsius. If the set-up's velocity follows temperature, a zero is
/// learned with the velocity at that temperature, and a velocity that is learned holds at it.
///
/// # Errors
/// A block whose back wall is not found or contradicts its thickness; blocks that do not determine what
/// shall be learned; a temperature that is needed and not stated.
pub fn calibrate_at(
    setup: &SetupFile,
    blocks: &[BlockRecord],
    learn: Learn,
    pulse_name: &str,
    temperature_c: Option<f64>,
) -> Result<Calibrated, InputError> {
    let mut core_setup = setup.gauge_setup()?;
    check_number(core_setup.span, blocks.len(), learn)?;
    // Blocks are bare, and what an earlier calibration covered says nothing about this one.
    core_setup.coating = None;
    core_setup.calibrated = None;
    let as_stated = core_setup.material;
    core_setup.material = material_of_blocks(&as_stated, temperature_c)?;
    if learn != Learn::Velocity && way::corrects_beam(&core_setup) {
        core_setup.zero.learned_on = Some(Metres::ZERO);
    }

    let longest = blocks.iter().map(|block| block.average.codes.len()).max().unwrap_or(0);
    let mut scratch = HeapScratch::new(longest);
    let mut gauge = setup.gauge(scratch.workspace())?;
    gauge.change_setup(core_setup).map_err(|error| setup.locate(error))?;
    // The pulse at hand has to find the first back walls. Periods can wait for the pulse that is learned: under a couplant
    // film echoes may be so unlike a modelled one that their half cycles are told only by chance.
    let before: Vec<BlockTimes> = blocks
        .iter()
        .map(|block| block::measure(&mut gauge, block, false))
        .collect::<Result<_, _>>()?;
    let snr = |times: &BlockTimes| times.back_wall.snr.get();
    let clearest = before.iter().enumerate().max_by(|a, b| snr(a.1).total_cmp(&snr(b.1)));
    let Some((pulse_from, _)) = clearest else {
        return Err(InputError::in_argument(
            "there is no block",
            "give --block 5.000mm=FILE",
        ));
    };
    // Signs that the set-up states count from the pulse at hand. The one that is learned is a back wall itself.
    let stated = setup.keys.probe.back_wall_sign;
    let mut interface_sign = setup.keys.probe.interface_sign;
    if before
        .get(pulse_from)
        .is_some_and(|times| times.back_wall.polarity == Polarity::Negative)
    {
        interface_sign = interface_sign.map(opposite);
    }
    core_setup.probe.interface_sign = interface_sign.unwrap_or_default();
    if core_setup.probe.back_wall_sign != EchoSign::Unknown {
        core_setup.probe.back_wall_sign = EchoSign::AsPulse;
    }
    let learned = cut::learn_with_mismatch(&mut gauge, blocks, &before, pulse_from)?;
    gauge.change_setup(core_setup).map_err(|error| setup.locate(error))?;

    let needs_period = core_setup.span == Span::BackWallToBackWall && learn != Learn::Zero;
    let mut times: Vec<BlockTimes> = blocks
        .iter()
        .map(|block| block::measure(&mut gauge, block, needs_period))
        .collect::<Result<_, _>>()?;
    if let (Learn::Velocity, [before], [after]) = (learn, &before[..], &times[..]) {
        core_setup.zero = translated(&core_setup, before, after);
    }
    let (mut zero, mut material) = solve(&core_setup, blocks, &times, learn)?;
    // The way of the sound hangs a little on the velocity that is being learned.
    for _ in 0..2 {
        core_setup.material.velocity = material.velocity;
        gauge.change_setup(core_setup).map_err(|error| setup.locate(error))?;
        for (times, block) in times.iter_mut().zip(blocks) {
            times.deviation = gauge.path_deviation(block.thickness);
        }
        (zero, material) = solve(&core_setup, blocks, &times, learn)?;
    }
    zero.learned_on = core_setup.zero.learned_on;
    if learn == Learn::Zero {
        // What temperature adds to the doubt of the blocks' velocity is no error of the velocity that the set-up keeps.
        let (kept, used) = (
            as_stated.velocity_standard_uncertainty.get(),
            core_setup.material.velocity_standard_uncertainty.get(),
        );
        if used > 0.0 {
            zero.velocity_correlation *= kept / used;
        }
        material = as_stated;
    }
    let mut keys = new_keys(setup, blocks, learn, (&zero, &material), &learned, pulse_name);
    keys.probe.interface_sign = interface_sign;
    // With the sign free on the blocks themselves, all of their back walls had the pulse's own: so will the parts'.
    if stated != Some(EchoSign::Unknown) && times.iter().all(|times| times.upright) {
        keys.probe.back_wall_sign = Some(EchoSign::AsPulse);
    }
    if let Some(calibration) = &mut keys.calibration {
        calibration.temperature_c = temperature_c;
    }
    if learn != Learn::Zero && as_stated.temperature.is_some() {
        keys.material.velocity_temperature_c = temperature_c;
    }
    Ok(Calibrated {
        keys,
        pulse: learned.samples,
        quality: learned.quality,
        pulse_shots: learned.shots,
        zero,
        material,
        pulse_from,
        times,
    })
}

/// The same sign as a pulse upside down sees it.
fn opposite(sign: EchoSign) -> EchoSign {
    match sign {
        EchoSign::Unknown => EchoSign::Unknown,
        EchoSign::AsPulse => EchoSign::Inverted,
        EchoSign::Inverted => EchoSign::AsPulse,
    }
}

/// The material as the blocks have it, at their temperature.
fn material_of_blocks(stated: &Material, temperature_c: Option<f64>) -> Result<Material, InputError> {
    let Some(follows) = stated.temperature else {
        return Ok(stated.of_blocks());
    };
    let Some(temperature) = temperature_c else {
        return Err(InputError::in_argument(
            "the set-up's velocity follows temperature, and that of the blocks is not stated",
            "add --temperature, or remove the coefficient from the set-up",
        ));
    };
    let temperature = Celsius::new(temperature as f32);
    let there = stated.with_temperature(follows.with_part(temperature, BLOCK_TEMPERATURE_UNCERTAINTY));
    let (own, by_temperature) = (
        there.velocity_standard_uncertainty.get(),
        there.temperature_uncertainty().get(),
    );
    Ok(Material::new(
        there.velocity_in_part(),
        MetresPerSecond::new(own.hypot(by_temperature)),
    ))
}

/// One block read with a set-up as it is.
#[derive(Clone, Debug)]
pub struct Checked {
    /// What the average of its shots reads, or why it does not.
    pub outcome: Result<Reading, NoReading>,
    /// Its difference to the block; `None` without a reading.
    pub drift: Option<(DriftCheck, DriftState)>,
}

/// Reads a block with a set-up as it is, for drift: what the part may differ from blocks by is left out, and so is a
/// coating.
///
/// # Errors
/// A set-up or pulse that cannot be used; a temperature that is needed and not stated.
pub fn check(setup: &SetupFile, block: &BlockRecord, temperature_c: Option<f64>) -> Result<Checked, InputError> {
    let mut scratch = HeapScratch::new(block.average.codes.len());
    let mut gauge = setup.gauge(scratch.workspace())?;
    let mut core_setup = *gauge.setup();
    core_setup.coating = None;
    core_setup.material = material_of_blocks(&core_setup.material, temperature_c)?;
    gauge.change_setup(core_setup).map_err(|error| setup.locate(error))?;
    let record = Record::new(&block.average.codes, block.average.format, block.clock);
    let outcome = gauge.measure(&record);
    let drift = outcome.as_ref().ok().map(|reading| {
        let drift = calibration::drift_check(
            (block.thickness, block.thickness_uncertainty),
            (reading.thickness, reading.standard_uncertainty),
            reading.coverage_factor,
        );
        (drift, drift.state(reading.doubts))
    });
    Ok(Checked { outcome, drift })
}

/// A zero that was learned with another pulse, as the new pulse sees it.
///
/// The two pulses' origins lie differently in the same echo: the zero moves by as much as the block's
/// arrival did, each less what the beam does to it against its own pulse. Between interface and back wall the origin cancels. The uncertainty takes up that of the
/// arrival, although most of the noise is common to both.
fn translated(setup: &GaugeSetup, before: &BlockTimes, after: &BlockTimes) -> Zero {
    if setup.span == Span::InterfaceToBackWall {
        return setup.zero;
    }
    let (old, new) = (before.first_back_wall, after.first_back_wall);
    let (known, noise) = (setup.zero.standard_uncertainty.get(), new.standard_uncertainty.get());
    Zero {
        offset: setup.zero.offset + (new.time - old.time) - (after.deviation - before.deviation),
        standard_uncertainty: Seconds::new((known * known + noise * noise).sqrt()),
        ..setup.zero
    }
}

/// How many blocks what shall be learned takes.
///
/// # Errors
/// Other blocks are needed.
pub fn check_number(span: Span, blocks: usize, learn: Learn) -> Result<(), InputError> {
    let between_back_walls = span == Span::BackWallToBackWall;
    let fits = match learn {
        Learn::Zero | Learn::Velocity => blocks == 1,
        // Period and first back wall of a single block say both.
        Learn::ZeroAndVelocity => blocks == 2 || (blocks == 1 && between_back_walls),
    };
    if fits {
        return Ok(());
    }
    Err(match (learn, blocks) {
        (Learn::ZeroAndVelocity, 1) => InputError::in_argument(
            "one block cannot determine both zero and velocity",
            "give a second --block of another thickness, or --learn zero",
        ),
        (Learn::ZeroAndVelocity, _) => InputError::in_argument(
            format!("zero and velocity are determined by two blocks, not {blocks}"),
            "give two --block",
        ),
        (Learn::Zero | Learn::Velocity, _) => InputError::in_argument(
            format!("{blocks} blocks where one is asked for"),
            "give one --block, or --learn zero-and-velocity",
        ),
    })
}

/// The block with one of its times, the uncertainty widened by further half-widths.
fn as_block(record: &BlockRecord, time: Timed, half_widths: &[Seconds]) -> Block {
    let squared = |time: Seconds| f64::from(time.get()) * f64::from(time.get());
    let mut variance = squared(time.standard_uncertainty);
    for half_width in half_widths {
        variance += squared(*half_width * RECTANGULAR);
    }
    Block {
        thickness: record.thickness,
        thickness_uncertainty: record.thickness_uncertainty,
        time: time.time,
        time_uncertainty: Seconds::new(variance.sqrt() as f32),
    }
}

fn refusal(error: CalibrationError) -> InputError {
    let sentence = error.to_string();
    let (what, remedy) = sentence.split_once(": ").unwrap_or((&sentence, "give other blocks"));
    InputError::in_argument(what, remedy)
}

/// Zero and material from what the blocks' echoes say.
fn solve(
    setup: &GaugeSetup,
    blocks: &[BlockRecord],
    times: &[BlockTimes],
    learn: Learn,
) -> Result<(Zero, Material), InputError> {
    // A zero takes film and beam of its block with it; the budget of each reading counts how far the
    // part's differ. A velocity has to count them here.
    let film = coupling::half_width(&setup.probe, setup.span);
    let first = |number: usize, half_widths: &[Seconds]| match (blocks.get(number), times.get(number)) {
        (Some(block), Some(times)) => Ok(as_block(block, times.first(), half_widths)),
        _ => Err(InputError::in_argument(
            "a block is missing",
            "give --block 5.000mm=FILE",
        )),
    };
    let zero_from_first = |material: &Material| {
        let thinnest = if blocks.len() > 1 && blocks[1].thickness < blocks[0].thickness {
            1
        } else {
            0
        };
        calibration::zero_at_known_velocity(&first(thinnest, &[])?, material).map_err(refusal)
    };
    match (learn, setup.span) {
        (Learn::Zero, _) => Ok((zero_from_first(&setup.material)?, setup.material)),
        (Learn::Velocity, Span::BackWallToBackWall) => Ok((setup.zero, velocity_from_periods(setup, blocks, times)?)),
        (Learn::Velocity, _) => {
            let beam = spreading(setup, Metres::ZERO, blocks[0].thickness);
            calibration::velocity_from_thickness(&first(0, &[film, beam])?, &setup.zero).map_err(refusal)
        }
        (Learn::ZeroAndVelocity, Span::BackWallToBackWall) => {
            let material = velocity_from_periods(setup, blocks, times)?;
            Ok((zero_from_first(&material)?, material))
        }
        (Learn::ZeroAndVelocity, _) => {
            // What moves one block's echo against the other's is shared between the two.
            let beam = spreading(setup, blocks[0].thickness, blocks[1].thickness) * std::f32::consts::FRAC_1_SQRT_2;
            let (one, other) = (first(0, &[film, beam])?, first(1, &[film, beam])?);
            calibration::zero_and_velocity(&one, &other).map_err(refusal)
        }
    }
}

/// How far the spreading of the beam moves the echo of one wall against another's beyond what is corrected, as a
/// half-width.
fn spreading(setup: &GaugeSetup, from: Metres, to: Metres) -> Seconds {
    let mut against = *setup;
    // What nobody corrects is the whole difference.
    against.zero.learned_on = setup.zero.learned_on.map(|_| from);
    against.calibrated = (from > Metres::ZERO).then_some(CalibratedRange { from, to: from });
    way::beam_uncertainty(&against, to) * (1.0 / RECTANGULAR)
}

/// The velocity from the periods of one or two blocks: the mean weighted by the inverse variances.
fn velocity_from_periods(
    setup: &GaugeSetup,
    blocks: &[BlockRecord],
    times: &[BlockTimes],
) -> Result<Material, InputError> {
    let film = coupling::half_width(&setup.probe, Span::BackWallToBackWall);
    let mut materials = Vec::new();
    for (block, times) in blocks.iter().zip(times) {
        let Some(period) = times.period else {
            return Err(InputError::in_file(
                &block.path,
                "shows one back wall, the velocity between back walls needs two",
                "record for longer, or raise the gain",
            ));
        };
        let mut between = *setup;
        between.span = Span::BackWallToBackWall;
        let beam = way::beam_uncertainty(&between, block.thickness) * (1.0 / RECTANGULAR);
        let phase = times.period_phase * (1.0 / RECTANGULAR);
        let nothing = Zero::new(Seconds::ZERO, Seconds::ZERO);
        let (_, material) =
            calibration::velocity_from_thickness(&as_block(block, period, &[film, beam, phase]), &nothing)
                .map_err(refusal)?;
        materials.push(material);
    }
    weighted(&materials)
}

fn weighted(materials: &[Material]) -> Result<Material, InputError> {
    if let [one] = materials {
        return Ok(*one);
    }
    let (mut weights, mut sum) = (0.0f64, 0.0f64);
    for material in materials {
        // A centimetre per second keeps an uncertainty of zero from deciding alone.
        let u = f64::from(material.velocity_standard_uncertainty.get()).max(0.01);
        weights += 1.0 / (u * u);
        sum += f64::from(material.velocity.get()) / (u * u);
    }
    let mean = sum / weights;
    for material in materials {
        let off = (f64::from(material.velocity.get()) - mean).abs();
        let u = f64::from(material.velocity_standard_uncertainty.get()).max(0.01);
        // Four standard uncertainties: by chance once in ten thousand pairs of blocks.
        if off > 4.0 * u {
            return Err(InputError::in_argument(
                format!(
                    "the blocks contradict each other: {} against {mean:.0} m/s",
                    material.velocity
                ),
                "check that blocks and records belong together, and the blocks' uncertainties",
            ));
        }
    }
    Ok(Material::new(
        MetresPerSecond::new(mean as f32),
        MetresPerSecond::new((1.0 / weights.sqrt()) as f32),
    ))
}

/// The set-up with what was learned.
fn new_keys(
    setup: &SetupFile,
    blocks: &[BlockRecord],
    learn: Learn,
    (zero, material): (&Zero, &Material),
    pulse: &LearnedPulse,
    pulse_name: &str,
) -> SetupKeys {
    let mut keys = setup.keys.clone();
    keys.probe.reference_pulse = Some(pulse_name.to_string());
    keys.zero.reference_pulse_checksum = Some(checksum(&pulse.samples));
    let percent = |share: f32| rounded((share * 1e6).round() * 1e-4);
    keys.probe.reference_pulse_noise_percent = Some(percent(pulse.quality.noise));
    keys.probe.reference_pulse_mismatch_percent = Some(percent(pulse.quality.mismatch));
    keys.probe.reference_pulse_learned_on_mm = pulse.quality.learned_on.map(|block| rounded(block.as_mm()));
    // An unknown zero (see the set-up file) stays unknown.
    if learn != Learn::Velocity || keys.zero.standard_uncertainty_ns.is_some() {
        keys.zero.offset_ns = rounded(zero.offset.as_ns());
        keys.zero.standard_uncertainty_ns = Some(rounded(zero.standard_uncertainty.as_ns()));
        keys.zero.learned_on_mm = zero.learned_on.map(|block| rounded(block.as_mm()));
    }
    if learn != Learn::Zero {
        keys.material.velocity_m_s = rounded(material.velocity.get());
        keys.material.velocity_standard_uncertainty_m_s = rounded(material.velocity_standard_uncertainty.get());
    }
    let mut thicknesses: Vec<f64> = blocks.iter().map(|block| block.thickness_mm).collect();
    thicknesses.sort_by(f64::total_cmp);
    let learned_zero = learn != Learn::Velocity || setup.keys.measure.span != Span::BackWallToBackWall;
    keys.calibration = Some(CalibrationKeys {
        velocity_zero_correlation: Some(if learned_zero {
            rounded(zero.velocity_correlation)
        } else {
            0.0
        }),
        from_mm: thicknesses.first().copied(),
        to_mm: thicknesses.last().copied(),
        blocks_mm: thicknesses,
        temperature_c: None,
        date: None,
    });
    keys
}

/// The shortest decimal number that is the same `f32`.
fn rounded(value: f32) -> f64 {
    value.to_string().parse().unwrap_or(f64::from(value))
}
