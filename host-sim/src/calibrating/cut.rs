//! The reference pulse, cut out of a block's record.

use super::block::{BlockRecord, BlockTimes};
use crate::input_error::InputError;
use halfpulse::echo::envelope::envelope_into;
use halfpulse::setup::PULSE_CAPACITY;
use halfpulse::{GaugeSetup, Seconds};

/// Where the pulse may end: -46 dB below its envelope's peak.
const END_LEVEL: f32 = 0.005;
/// Or where it may not be told from noise: the envelope of noise exceeds 3.5 sigma once in 460 samples
/// (Rayleigh's distribution, exp(-3.5²/2)).
const NOISE_LEVEL: f32 = 3.5;

/// The samples round the first back wall, scaled to an envelope peak of 1, with tapered ends.
///
/// The pulse ends on either side where its envelope stays below -46 dB, or within the noise, for a cycle; at the latest half-way to the neighbouring echo. Half a cycle at each end is tapered to zero.
///
/// # Errors
/// An echo too close to the record's ends or to its neighbours; a pulse longer than the core holds.
pub fn reference_pulse(block: &BlockRecord, times: &BlockTimes, setup: &GaugeSetup) -> Result<Vec<f32>, InputError> {
    let fault = |what: &str, remedy: &str| InputError::in_file(&block.path, what, remedy);
    let samples_per_cycle = setup.samples_per_cycle();
    let cycle = samples_per_cycle.ceil() as usize;
    let codes: Vec<f32> = block.average.codes.iter().map(|code| f32::from(*code)).collect();
    let peak_at = times.back_wall.position.index as usize;
    let to_samples = |time: Seconds| (time.get() * setup.sample_rate.get()) as usize;
    // Half of the way, because the neighbour reaches as far towards this echo.
    let room = |neighbour: Option<Seconds>| {
        let way = neighbour.map(|time| (time - times.back_wall.arrival).abs());
        way.map_or(PULSE_CAPACITY, |way| to_samples(way) / 2)
    };
    let first = peak_at.saturating_sub(room(times.neighbours.0));
    let last = (peak_at + room(times.neighbours.1)).min(codes.len().saturating_sub(1));

    // A constant offset of the converter would end up in the envelope.
    let around = codes.get(first..=last).unwrap_or(&[]);
    let mean = around.iter().sum::<f32>() / around.len().max(1) as f32;
    let centred: Vec<f32> = around.iter().map(|code| code - mean).collect();
    let mut envelope = vec![0.0; centred.len()];
    envelope_into(&centred, samples_per_cycle, &mut envelope);
    let middle = peak_at - first;
    let near = middle.saturating_sub(cycle)..(middle + cycle + 1).min(envelope.len());
    let peak = envelope.get(near).unwrap_or(&[]).iter().copied().fold(0.0, f32::max);
    if peak <= 0.0 {
        return Err(fault("holds no pulse", "record the block again"));
    }
    let noise = times.back_wall.amplitude / times.back_wall.snr.as_amplitude_ratio();
    let level = (END_LEVEL * peak).max(NOISE_LEVEL * noise);
    let reach = |values: &mut dyn Iterator<Item = f32>| {
        let mut last_loud = 0;
        for (distance, value) in values.enumerate() {
            if value >= level {
                last_loud = distance;
            } else if distance - last_loud > cycle {
                break;
            }
        }
        last_loud
    };
    let after = reach(&mut envelope[middle..].iter().copied());
    let before = reach(&mut envelope[..=middle].iter().rev().copied());
    let taper = (cycle / 2).max(2);
    let start = middle.saturating_sub(before + taper);
    let end = (middle + after + taper + 1).min(centred.len());
    if before + after < cycle || end - start < 2 * cycle + 1 {
        return Err(fault(
            "its first back wall has no room for a reference pulse",
            "take a thicker block, or record for longer",
        ));
    }
    if end - start > PULSE_CAPACITY {
        return Err(fault(
            "its pulse is longer than the gauge can hold",
            "lower the sample rate, or raise the signal",
        ));
    }
    let mut pulse: Vec<f32> = centred[start..end].iter().map(|sample| sample / peak).collect();
    let length = pulse.len();
    for (i, sample) in pulse.iter_mut().enumerate() {
        let edge = i.min(length - 1 - i);
        if edge < taper {
            // Raised cosine: no step at either end of the taper.
            *sample *= 0.5 - 0.5 * (std::f32::consts::PI * (edge as f32 + 0.5) / taper as f32).cos();
        }
    }
    Ok(pulse)
}
