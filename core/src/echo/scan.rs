//! The only pass over the whole record: integers, additions, a few tens of operations a sample.
//!
//! **In**: codes. **Out**: the scanned envelope (in the caller's `u16` scratch), the noise, and the
//! candidates: places where an echo stands above noise and above the skirts of stronger echoes.
//!
//! The detector is a pair of add-only filters in quadrature: five lobes of half a period weighted
//! 1 -2 2 -2 1 and four weighted 1 -2 2 -1, so a constant or a slow drift leaves nothing. Each step
//! only adds what enters and leaves the lobes. Signal-to-noise ratio against a full matched filter:
//! up to 2 dB less at 60 and 100 % bandwidth, up to 3 dB at 30 %, while rectify-and-threshold loses 5 to 8.
//!
//! **False alarms**: the threshold is set for one false candidate in [`FALSE_ALARM_RECORDS`] records of white noise
//! (`val_false_alarm_rate` counts them).
//!
//! Not for records in which echoes fill everything (no stretch of noise is left to learn from: the
//! noise is then overestimated, never underestimated), nor for coarser than two samples a half period.

use crate::echo::pulse::ReferencePulse;
use crate::math;
use crate::order;
use crate::record::{AdcFormat, SampleRange};
use crate::setup::PULSE_CAPACITY;
use heapless::Vec;

/// One false candidate in this many records of white noise.
pub const FALSE_ALARM_RECORDS: f32 = 1000.0;

/// Most candidates looked at before skirts are taken out.
const RAW_CAPACITY: usize = 32;
/// Most candidates handed on.
pub const CANDIDATE_CAPACITY: usize = 16;
/// Weights of the five-lobe filter, and of the four-lobe one; the factors bring both to one gain.
const EVEN: [i32; 5] = [3, -6, 6, -6, 3];
const ODD: [i32; 4] = [4, -8, 8, -4];
/// Sum of the squared weights of both filters: their noise power for lobes of one sample.
const NOISE_POWER: f32 = 286.0;
/// Blocks that the record is divided into for the first noise estimate.
const BLOCKS: usize = 64;

/// A place where an echo may be.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Candidate {
    /// The sample near which the pulse's origin lies.
    pub index: u32,
    /// Height of the scanned envelope.
    pub height: u16,
}

/// The filters, and how they answer to the reference pulse.
#[derive(Clone, Copy, Debug, PartialEq, Default)]
pub struct Detector {
    /// Samples in a lobe: half a period.
    lobe: u16,
    /// Envelope of the answer to a pulse of unit amplitude.
    gain: f32,
    /// How far the answer's maximum lies behind the pulse's origin, in samples.
    lag: i16,
    /// Entries of the skirt table in use.
    skirt_length: u16,
    /// Samples to either side inside which an echo far below its neighbour is not believed.
    shadow: u16,
}

impl Detector {
    /// Fits the filters to the pulse and fills the skirt table: the answer to one pulse, from its
    /// maximum outwards (the larger of the two sides), in 1/32768 of the maximum.
    #[must_use]
    pub fn new(samples_per_cycle: f32, pulse: &ReferencePulse<'_>, skirt: &mut [u16; PULSE_CAPACITY]) -> Self {
        let half_period = math::round_to_i32(0.5 * samples_per_cycle).clamp(1, 512);
        let lobe = half_period.unsigned_abs() as usize;
        // The answer reaches as far as pulse and filter together.
        let reach = (pulse.samples.len() + 5 * lobe) as i32;
        let (mut top, mut highest) = (0, 0.0);
        for place in -reach..=reach {
            let answer = response(pulse.samples, place, lobe);
            if answer > highest {
                (top, highest) = (place, answer);
            }
        }
        let mut length = 0u16;
        for (distance, entry) in skirt.iter_mut().enumerate() {
            let distance = distance as i32;
            if distance > reach {
                *entry = 0;
                continue;
            }
            let side = math::larger(
                response(pulse.samples, top + distance, lobe),
                response(pulse.samples, top - distance, lobe),
            );
            let share = if highest > 0.0 { side / highest } else { 0.0 };
            *entry = u16::try_from(math::round_to_i32(share * 32768.0)).unwrap_or(u16::MAX);
            if share > 0.005 {
                length = distance as u16 + 1;
            }
        }
        let shadow = math::round_to_i32(1.3 * pulse.facts.envelope_duration);
        Self {
            lobe: lobe as u16,
            gain: highest,
            lag: i16::try_from(top - math::round_to_i32(pulse.facts.origin)).unwrap_or(0),
            skirt_length: length,
            shadow: u16::try_from(shadow).unwrap_or(u16::MAX),
        }
    }

    /// Bits by which the envelope of a record with this full scale is shifted to fit 16 bits.
    fn shift(&self, format: AdcFormat) -> u32 {
        // A full-scale sine answers with 24 · 2/π of the lobe's length; what is more saturates.
        let largest = 16.0 * f32::from(self.lobe) * format.full_scale();
        let mut shift = 0;
        while shift < 24 && largest / (1u32 << shift) as f32 > 65535.0 {
            shift += 1;
        }
        shift
    }

    /// Standard deviation of one filter's output in envelope counts, for noise of 1 code rms.
    fn noise_gain(&self, shift: u32) -> f32 {
        math::sqrt(0.5 * NOISE_POWER * f32::from(self.lobe)) / (1u32 << shift) as f32
    }

    /// Envelope counts of an echo of one code's amplitude.
    #[must_use]
    pub fn counts_per_code(&self, format: AdcFormat) -> f32 {
        self.gain / (1u32 << self.shift(format)) as f32
    }

    /// Height in envelope counts at `distance` samples from an echo of this height.
    fn skirt_height(&self, skirt: &[u16; PULSE_CAPACITY], height: u16, distance: u32) -> u32 {
        if distance >= u32::from(self.skirt_length) {
            return 0;
        }
        let share = skirt.get(distance as usize).copied().unwrap_or(0);
        (u32::from(height) * u32::from(share)) >> 15
    }

    /// Samples from an echo to where its skirt has fallen below `floor` counts.
    pub(crate) fn skirt_reach(&self, skirt: &[u16; PULSE_CAPACITY], height: u16, floor: f32) -> u32 {
        let mut reach = u32::from(self.skirt_length);
        while reach > 0 && (self.skirt_height(skirt, height, reach - 1) as f32) < floor {
            reach -= 1;
        }
        reach + 2 * u32::from(self.lobe)
    }
}

/// Envelope of the filters' answer with their middle at `place` of `samples`.
#[inline(never)]
fn response(samples: &[f32], place: i32, lobe: usize) -> f32 {
    let width = lobe as i32;
    let filter = |weights: &[i32], first: i32| {
        let mut sum = 0.0;
        for (l, &weight) in weights.iter().enumerate() {
            let mut lobe_sum = 0.0;
            for i in 0..width {
                let at = first + l as i32 * width + i;
                lobe_sum += usize::try_from(at)
                    .ok()
                    .and_then(|i| samples.get(i))
                    .copied()
                    .unwrap_or(0.0);
            }
            sum += weight as f32 * lobe_sum;
        }
        sum
    };
    let even = filter(&EVEN, place - 5 * width / 2);
    let odd = filter(&ODD, place - 2 * width);
    math::sqrt(even * even + odd * odd)
}

/// What the scan found.
#[derive(Clone, Debug, PartialEq, Default)]
pub struct Scan {
    /// Root mean square of the noise per sample, in codes; never below rounding noise.
    pub noise: f32,
    /// Did the record leave enough stretches without echoes to learn the noise from? If not, `noise` may be an echo's.
    pub quiet: bool,
    /// Standard deviation of one filter's output from noise, in envelope counts.
    pub level: f32,
    /// Height from which a candidate counts, in envelope counts.
    pub threshold: f32,
    /// The samples that the envelope covers.
    pub filled: SampleRange,
    /// The candidates in the order of their places.
    pub candidates: Vec<Candidate, CANDIDATE_CAPACITY>,
}

/// Fills `envelope` (one entry a sample of `codes`; those outside `range` and near the record's ends become 0) and
/// returns the range that could be filled.
fn fill(codes: &[i16], range: SampleRange, detector: &Detector, shift: u32, envelope: &mut [u16]) -> SampleRange {
    let lobe = usize::from(detector.lobe);
    let before = 5 * lobe / 2;
    let start = (range.start as usize).max(before);
    let end = (range.end as usize).min((codes.len() + before).saturating_sub(5 * lobe));
    for entry in envelope.iter_mut() {
        *entry = 0;
    }
    let empty = SampleRange {
        start: range.start,
        end: range.start,
    };
    let Some(count) = end.checked_sub(start).filter(|&count| count > 0) else {
        return empty;
    };

    // The filters at `start`, in full.
    let sum_of = |weights: &[i32], first: usize| {
        let mut sum = 0i32;
        for (lobe_number, &weight) in weights.iter().enumerate() {
            let from = first + lobe_number * lobe;
            for &code in codes.get(from..from + lobe).unwrap_or(&[]) {
                sum += weight * i32::from(code);
            }
        }
        sum
    };
    let mut even = sum_of(&EVEN, start - before);
    let mut odd = sum_of(&ODD, start - 2 * lobe);

    // From there on only what enters and leaves each lobe.
    let taps = |first: usize, number: usize| codes.get(first + number * lobe..).unwrap_or(&[]);
    let e = start - before;
    let o = start - 2 * lobe;
    let even_taps = taps(e, 0)
        .iter()
        .zip(taps(e, 1))
        .zip(taps(e, 2))
        .zip(taps(e, 3))
        .zip(taps(e, 4))
        .zip(taps(e, 5));
    let odd_taps = taps(o, 0)
        .iter()
        .zip(taps(o, 1))
        .zip(taps(o, 2))
        .zip(taps(o, 3))
        .zip(taps(o, 4));
    let out = envelope.get_mut(start..start + count).unwrap_or(&mut []);
    let half = (1i32 << shift) >> 1;
    for ((entry, (((((e0, e1), e2), e3), e4), e5)), ((((o0, o1), o2), o3), o4)) in
        out.iter_mut().zip(even_taps).zip(odd_taps)
    {
        let (a, b) = (even.abs(), odd.abs());
        let (high, low) = if a > b { (a, b) } else { (b, a) };
        // Root of a sum of squares to 2.4 %: the larger of max and 7/8 max + 1/2 min.
        let mixed = high - (high >> 3) + (low >> 1);
        let magnitude = ((if mixed > high { mixed } else { high }) + half) >> shift;
        *entry = if magnitude > 65535 { u16::MAX } else { magnitude as u16 };
        let i = |code: &i16| i32::from(*code);
        even += 3 * (i(e5) - i(e0)) + 9 * (i(e1) - i(e4)) + 12 * (i(e3) - i(e2));
        odd += 12 * (i(o1) + i(o3)) - 4 * (i(o0) + i(o4)) - 16 * i(o2);
    }
    SampleRange {
        start: start as u32,
        end: end as u32,
    }
}

/// First noise estimate, in counts of one filter's standard deviation: the lower quartile of block
/// means, so that up to three quarters of the record may hold echoes.
fn quiet_level(envelope: &[u16], lobe: usize) -> f32 {
    let block = (16 * lobe).max(envelope.len().div_ceil(BLOCKS)).max(1);
    let mut means: Vec<u32, BLOCKS> = Vec::new();
    let mut rest = envelope;
    while !rest.is_empty() {
        let (heights, later) = rest.split_at_checked(block).unwrap_or((rest, &[]));
        let mut sum = 0u32;
        for &height in heights {
            sum += u32::from(height);
        }
        // In 1/16 counts, since quiet records have few.
        let length = (heights.len() as u32).max(1);
        let _ = means.push((sum << 4) / length);
        rest = later;
    }
    order::sort(&mut means, |a, b| a < b);
    let quartile = means.get(means.len() / 4).copied().unwrap_or(0) as f32 / 16.0;
    // A Rayleigh variable's mean is 1.2533 standard deviations; the quartile of block means lies
    // about a tenth below the mean (`quiet_level_is_unbiased_on_noise`).
    quartile * (1.1 / 1.253_314)
}

/// Scans a record.
///
/// `envelope` must be at least as long as `codes`: the gauge has made sure of that.
#[inline(never)]
pub fn scan(
    codes: &[i16],
    format: AdcFormat,
    range: SampleRange,
    detector: &Detector,
    skirt: &[u16; PULSE_CAPACITY],
    envelope: &mut [u16],
) -> Scan {
    let shift = detector.shift(format);
    let filled = fill(codes, range, detector, shift, envelope);
    let scanned = envelope.get(filled.start as usize..filled.end as usize).unwrap_or(&[]);
    let noise_gain = detector.noise_gain(shift);
    let factor = threshold_factor(filled.length() as f32 / f32::from(detector.lobe).max(1.0));

    // Rounding that noise has dithered averages as noise does; before that is known, the lower limit.
    let dithered = noise_gain * format.rounding_noise(f32::INFINITY);
    let first_level = math::larger(quiet_level(scanned, usize::from(detector.lobe)), dithered);
    let mut raw = peaks(scanned, filled.start, u32::from(detector.lobe), factor * first_level);
    let spread = quiet_spread(scanned, filled.start, &raw, detector, skirt, first_level);
    let level = spread.unwrap_or(first_level);
    let level = math::larger(level, noise_gain * format.rounding_noise(level / noise_gain));
    let threshold = factor * level;
    raw.retain(|peak| f32::from(peak.height) >= threshold);

    let mut candidates = unmasked(&mut raw, detector, skirt, 0.5 * threshold);
    for candidate in &mut candidates {
        candidate.index = candidate.index.saturating_add_signed(-i32::from(detector.lag));
    }
    Scan {
        noise: level / noise_gain,
        quiet: spread.is_some(),
        level,
        threshold,
        filled,
        candidates,
    }
}

/// Threshold in standard deviations of one filter: sqrt(2 ln(n / p)) for n independent envelope
/// values and a false-alarm probability p a record, times 1.12: the four-lobe filter passes 6 % more
/// noise than the mean of both and its tail decides, and the envelope's approximate root adds up to 2.4 %.
fn threshold_factor(independent: f32) -> f32 {
    1.12 * math::sqrt(2.0 * math::ln(math::larger(independent, 2.0) * FALSE_ALARM_RECORDS))
}

/// Local maxima above `threshold`, the strongest if there are too many.
#[inline(never)]
fn peaks(scanned: &[u16], first: u32, lobe: u32, threshold: f32) -> Vec<Candidate, RAW_CAPACITY> {
    let mut found: Vec<Candidate, RAW_CAPACITY> = Vec::new();
    let mut keep = |peak: Candidate| {
        if f32::from(peak.height) < threshold {
            return;
        }
        if found.is_full() {
            let weakest = found.iter_mut().min_by_key(|c| c.height);
            if let Some(weakest) = weakest.filter(|w| w.height < peak.height) {
                *weakest = peak;
            }
        } else {
            let _ = found.push(peak);
        }
    };
    // The height beyond which it climbs out of a valley, as a whole number, and only where the valley changes.
    let rise = threshold * 0.1;
    let above = |valley: u16| {
        let limit = f32::from(valley) * 1.25 + rise;
        if limit < 65535.0 {
            math::saturating_i32(limit) as u16
        } else {
            u16::MAX
        }
    };
    let (mut climbing, mut top, mut valley, mut limit) = (
        false,
        Candidate {
            index: first,
            height: 0,
        },
        u16::MAX,
        u16::MAX,
    );
    for (i, &height) in scanned.iter().enumerate() {
        let index = first + i as u32;
        if climbing {
            if height > top.height {
                top = Candidate { index, height };
            } else if height < top.height - (top.height >> 2) || index - top.index > 2 * lobe {
                keep(top);
                (climbing, valley, limit) = (false, height, above(height));
            }
        } else if height < valley {
            (valley, limit) = (height, above(height));
        } else if height > limit {
            (climbing, top) = (true, Candidate { index, height });
        }
    }
    found
}

/// Standard deviation of one filter's output from all samples that no peak's skirt reaches; `None` if
/// fewer than 40 lobes are left.
///
/// Echoes too weak to be candidates (the tail of a train) must not count as noise: the samples are
/// taken in blocks, and a block far louder than the quiet level is left out. The limit, 2.5 times the
/// quiet mean square, costs 1 % of bias in pure noise.
fn quiet_spread(
    scanned: &[u16],
    first: u32,
    peaks: &[Candidate],
    detector: &Detector,
    skirt: &[u16; PULSE_CAPACITY],
    level: f32,
) -> Option<f32> {
    let lobe = usize::from(detector.lobe);
    let (mut sum, mut count) = (0u64, 0u32);
    let mut add = |from: usize, to: usize| {
        let mut rest = scanned.get(from..to).unwrap_or(&[]);
        while !rest.is_empty() {
            let (block, later) = rest.split_at_checked(16 * lobe).unwrap_or((rest, &[]));
            let mut squares = 0u64;
            for &height in block {
                squares += u64::from(u32::from(height) * u32::from(height));
            }
            if squares as f32 <= 5.0 * level * level * block.len() as f32 {
                sum += squares;
                count += block.len() as u32;
            }
            rest = later;
        }
    };
    let mut position = 0usize;
    // Peaks stand in the order of their places unless the list ran full; skipping backwards is harmless.
    for peak in peaks {
        let reach = detector.skirt_reach(skirt, peak.height, 0.3 * level) as usize;
        let at = (peak.index - first) as usize;
        let from = at.saturating_sub(reach);
        if from > position {
            add(position, from);
        }
        position = position.max(at + reach);
    }
    add(position, scanned.len());
    if (count as usize) < 40 * lobe {
        return None;
    }
    // Two filters in quadrature: the envelope's mean square is twice one filter's variance.
    Some(math::sqrt(0.5 * (sum as f32 / count as f32)))
}

/// The candidates that stand above the skirts of all stronger ones, in the order of their places.
/// `noise` is what noise may lift a skirt by.
#[inline(never)]
fn unmasked(
    raw: &mut Vec<Candidate, RAW_CAPACITY>,
    detector: &Detector,
    skirt: &[u16; PULSE_CAPACITY],
    noise: f32,
) -> Vec<Candidate, CANDIDATE_CAPACITY> {
    order::sort(raw, |a, b| a.height > b.height);
    let mut kept: Vec<Candidate, CANDIDATE_CAPACITY> = Vec::new();
    for candidate in raw.iter() {
        let hidden = kept.iter().any(|stronger| {
            let distance = stronger.index.abs_diff(candidate.index);
            let height = detector.skirt_height(skirt, stronger.height, distance);
            let mut mask = height + (height >> 2);
            if distance < u32::from(detector.shadow) {
                mask = mask.max(u32::from(stronger.height) / 20);
            }
            mask > 0 && f32::from(candidate.height) <= mask as f32 + noise
        });
        if !hidden && kept.push(*candidate).is_err() {
            break;
        }
    }
    order::sort(&mut kept, |a, b| a.index < b.index);
    kept
}

#[cfg(test)]
#[path = "scan_tests.rs"]
mod tests;
