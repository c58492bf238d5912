//! How much the noise of this record moves an arrival.
//!
//! **In**: the record, the scan and the reference pulse. **Out**: the *timing noise*: the root mean square of what the
//! pulse's derivative finds in stretches without echoes, given as the white noise (codes, root mean square per sample)
//! that would do the same.
//!
//! A least-squares arrival is off by δt = Σ n s' / (A Σ s'²): only the part of the noise that looks like the pulse's
//! derivative counts. In white noise that is the noise per sample; the noise of grain lies within the probe's own band
//! and moves arrivals up to three times as far as its size per sample says (coverage of k = 2 by simulation: 24 to 69 % with the
//! white formula, 94 to 95 % with this one; `val_uncertainty` and the campaign `coverage_grain`).
//!
//! Not for noise that differs between the quiet stretches and the echoes (grain that dies away with depth is only known on
//! average), nor for what stands under an echo alone: a phase that differs, an overlapping echo.

use crate::echo::pulse::ReferencePulse;
use crate::echo::scan::{Candidate, Detector, Scan};
use crate::math;
use crate::setup::PULSE_CAPACITY;

/// Places looked at, if the record has room for so many. A root mean square of 128 values is known to 6 %.
const PLACES: u32 = 128;
/// With fewer places the record has no quiet stretch to speak of.
const FEWEST_PLACES: usize = 16;
/// Values beyond this many times the root mean square are an echo that the scan has not listed.
const OUTLIER: f32 = 3.5;

/// Puts the record's timing noise into the scan: never less than the noise per sample that the scan has found, which is
/// what it is in white noise, and known better there.
pub fn listen(
    codes: &[i16],
    pulse: &ReferencePulse<'_>,
    scan: &mut Scan,
    detector: &Detector,
    skirt: &[u16; PULSE_CAPACITY],
    envelope: &[u16],
    scratch: &mut [f32],
) {
    let found = timing_noise(codes, pulse, scan, detector, skirt, envelope, scratch);
    scan.timing_noise = math::larger(scan.noise, found.unwrap_or(0.0));
}

/// The timing noise in codes, from stretches that no echo reaches. `None` where too few are left.
///
/// `envelope` is the one that the scan has filled. `scratch` takes one value a place; with less room fewer are looked at.
#[must_use]
pub fn timing_noise(
    codes: &[i16],
    pulse: &ReferencePulse<'_>,
    scan: &Scan,
    detector: &Detector,
    skirt: &[u16; PULSE_CAPACITY],
    envelope: &[u16],
    scratch: &mut [f32],
) -> Option<f32> {
    let length = u32::from(pulse.facts.length);
    let middle = math::saturating_i32(pulse.facts.origin).unsigned_abs();
    let step = (length / 2).max(scan.filled.length() / PLACES).max(1);
    // Where an echo's remains are below a third of the noise: as far as the detector still feels it, and as much
    // further as the pulse is longer than the detector.
    let feels = |candidate: &Candidate| detector.skirt_reach(skirt, candidate.height, 0.3 * scan.level) + length / 4;
    let mut place = scan.filled.start + middle;
    let mut count = 0usize;
    while place < scan.filled.end {
        let near = scan.candidates.iter().find(|candidate| {
            let (from, to) = (place + feels(candidate), candidate.index + feels(candidate));
            from > candidate.index && place < to
        });
        if let Some(near) = near {
            place = near.index + feels(near);
            continue;
        }
        let loud = envelope
            .get(place as usize)
            .is_none_or(|&height| f32::from(height) > scan.threshold);
        let start = place.saturating_sub(middle + 1) as usize;
        if !loud
            && let Some(found) = derivative_part(codes, start, pulse.samples)
            && let Some(entry) = scratch.get_mut(count)
        {
            *entry = found * found;
            count += 1;
        }
        place += step;
    }
    if count < FEWEST_PLACES {
        return None;
    }
    let squares = scratch.get(..count)?;
    let mut limit = f32::INFINITY;
    let mut mean = 0.0;
    // What was taken for an echo widens the first root mean square, and perhaps the second.
    for _ in 0..3 {
        let (mut sum, mut kept) = (0.0, 0u16);
        for &square in squares.iter().filter(|square| **square <= limit) {
            sum += square;
            kept += 1;
        }
        mean = sum / math::larger(f32::from(kept), 1.0);
        limit = OUTLIER * OUTLIER * mean;
    }
    Some(math::sqrt(mean / difference_energy(pulse.samples)))
}

/// Σ s\[k\] (x\[start + k + 2\] - x\[start + k\]): the record's correlation with the (negative) central difference of the
/// pulse. `None` if it would stand out of the record.
fn derivative_part(codes: &[i16], start: usize, samples: &[f32]) -> Option<f32> {
    let earlier = codes.get(start..)?;
    let later = earlier.get(2..)?;
    let later = later.get(..samples.len())?;
    let mut sum = 0.0;
    for ((s, &before), &after) in samples.iter().zip(earlier).zip(later) {
        // Two 16-bit codes differ by at most 17 bits.
        sum += s * (i32::from(after) - i32::from(before)) as f32;
    }
    Some(sum)
}

/// Energy of the pulse's central difference, its ends included.
fn difference_energy(samples: &[f32]) -> f32 {
    let (mut two_before, mut one_before, mut energy) = (0.0, 0.0, 0.0);
    for s in samples.iter().copied().chain([0.0, 0.0]) {
        energy += (s - two_before) * (s - two_before);
        (two_before, one_before) = (one_before, s);
    }
    energy
}
