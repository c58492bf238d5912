//! How much the noise of this record moves an arrival, and how that changes with time.
//!
//! **In**: the record, the scan and the reference pulse. **Out**: [`TimingNoise`]: the root mean square of what the
//! pulse's derivative finds in stretches without echoes, given as the white noise (codes, root mean square per sample)
//! that would do the same.
//!
//! A least-squares arrival is off by δt = Σ n s' / (A Σ s'²): only the part of the noise that looks like the pulse's
//! derivative counts. In white noise that is the noise per sample. The noise of grain lies within the probe's own band, so
//! that it moves arrivals up to three times as far as its size per sample says (by simulation the true delay lies inside
//! k = 2 of the white formula in 53 to 69 of 100 cases, of this one in 94 to 95; the campaign `coverage_grain` prints it);
//! and it dies away with depth as the echoes do. So the record is cut into [`BLOCKS`] parts, and where the noise has
//! significantly fallen the parts are told apart: levels that never rise, found by pooling adjacent violators (isotonic
//! regression, from memory), with straight lines between them.
//!
//! Not for noise that grows with time, nor for what stands under an echo alone: a phase that differs, an overlapping echo.

use crate::echo::pulse::ReferencePulse;
use crate::echo::scan::{Candidate, Detector, Scan};
use crate::math;
use crate::record::{Record, SampleRange};
use crate::setup::PULSE_CAPACITY;
use crate::workspace::ECHO_CAPACITY;
use heapless::Vec;

/// Places looked at, if the record has room for so many. A root mean square of 100 values is known to 7 %.
const PLACES: u32 = 100;
/// With fewer places the record has no quiet stretch to speak of.
const FEWEST_PLACES: f32 = 16.0;
/// Parts of the record whose noise may differ.
pub const BLOCKS: usize = 12;
/// Values beyond this many times the root mean square are an echo that the scan has not listed.
const OUTLIER: f32 = 3.5;
/// Most that the variance is said to rise from the first level back to the record's start.
const EARLIER: f32 = 2.0;

/// The noise that moves arrivals, in codes.
#[derive(Clone, Copy, Debug, PartialEq, Default)]
pub struct TimingNoise {
    /// Middle of each level's part in samples from the record's first, and its variance.
    knots: [(f32, f32); BLOCKS],
    /// How many are in use; 1 for a steady noise.
    count: u8,
}

impl TimingNoise {
    /// The same at all times: white noise of this root mean square, in codes.
    #[must_use]
    pub const fn steady(noise: f32) -> Self {
        let mut knots = [(0.0, 0.0); BLOCKS];
        knots[0] = (0.0, noise * noise);
        Self { knots, count: 1 }
    }

    /// Root mean square, in codes, at a place in samples from the record's first.
    #[must_use]
    pub fn at(&self, place: f32) -> f32 {
        let knots = self.knots.get(..usize::from(self.count)).unwrap_or(&[]);
        let (mut before, mut variance) = (None, 0.0);
        for &(middle, level) in knots {
            if place < middle {
                variance = match before {
                    Some((earlier, higher)) => level + (higher - level) * (middle - place) / (middle - earlier),
                    None => level * self.rise(middle - place),
                };
                return math::sqrt(variance);
            }
            (before, variance) = (Some((middle, level)), level);
        }
        math::sqrt(variance)
    }

    /// The same course where it lies above another one.
    #[must_use]
    pub fn at_least(mut self, other: &Self) -> Self {
        for (middle, variance) in self.knots.iter_mut().take(usize::from(self.count)) {
            let least = other.at(*middle);
            *variance = math::larger(*variance, least * least);
        }
        self
    }

    /// Replaces every variance by another one.
    pub(super) fn change_variances(&mut self, other: impl Fn(f32) -> f32) {
        for (_, variance) in self.knots.iter_mut().take(usize::from(self.count)) {
            *variance = other(*variance);
        }
    }

    /// How much higher than its first level the variance was this many samples before: the straight line through the
    /// first two levels, carried on.
    fn rise(&self, before: f32) -> f32 {
        match self.knots.get(..usize::from(self.count)) {
            Some([(first, high), (second, low), ..]) if *high > 0.0 => {
                let slope = (high - low) / (high * (second - first));
                math::smaller(1.0 + slope * before, EARLIER)
            }
            _ => 1.0,
        }
    }
}

/// The noise of one record.
#[derive(Clone, Copy, Debug, PartialEq, Default)]
pub struct Noise {
    /// Root mean square per sample, in codes, as the scan has found it: of the probe's band, as if the noise were white.
    pub per_sample: f32,
    /// What of it moves arrivals.
    pub timing: TimingNoise,
    /// Did the record leave enough stretches without echoes? If not, echoes may have been taken for noise.
    pub sure: bool,
}

/// What one part of the record, or several pooled ones, have shown.
#[derive(Clone, Copy, Debug, Default)]
struct Part {
    squares: f32,
    places: f32,
    count: f32,
    largest: f32,
}

impl Part {
    fn add(&mut self, place: f32, square: f32) {
        self.squares += square;
        self.places += place;
        self.count += 1.0;
        self.largest = math::larger(self.largest, square);
    }

    fn join(&mut self, other: &Self) {
        self.squares += other.squares;
        self.places += other.places;
        self.count += other.count;
    }

    /// Leaves out the largest square if it is far beyond the others.
    fn without_outlier(mut self) -> Self {
        let rest = self.squares - self.largest;
        if self.count > 3.0 && self.largest * (self.count - 1.0) > OUTLIER * OUTLIER * rest {
            self.squares = rest;
            self.places *= (self.count - 1.0) / self.count;
            self.count -= 1.0;
        }
        self
    }

    fn variance(&self) -> f32 {
        self.squares / math::larger(self.count, 1.0)
    }
}

/// A stretch that an echo reaches: its place in samples from the record's first, and how far to either side.
pub type Reached = (u32, u32);

/// Most echoes that [`listen`] stays away from.
pub const REACHED_CAPACITY: usize = 2 * ECHO_CAPACITY;

/// The stretches that these candidates reach: as far as the detector still feels a third of the noise, and as much
/// further as the pulse is longer than the detector.
#[must_use]
pub fn reached(
    candidates: impl Iterator<Item = Candidate>,
    pulse: &ReferencePulse<'_>,
    scan: &Scan,
    detector: &Detector,
    skirt: &[u16; PULSE_CAPACITY],
) -> Vec<Reached, REACHED_CAPACITY> {
    let beyond = u32::from(pulse.facts.length) / 4;
    // No `collect`: whether its panic for a full list can be reached is left to the optimiser.
    let mut all = Vec::new();
    for candidate in candidates {
        let reach = detector.skirt_reach(skirt, candidate.height, 0.3 * scan.level);
        if all.push((candidate.index, reach + beyond)).is_err() {
            break;
        }
    }
    all
}

/// The record's timing noise beside the echoes. A steady one is never less than the noise per sample that the scan has
/// found, which is what it is in white noise and known better there.
///
/// Only `range` is listened to: before the part's surface there is no grain. `envelope` is the one that the scan has
/// filled: where it is above `quiet`, in its counts, something stands that is not noise.
#[must_use]
#[inline(never)]
pub fn listen(
    record: &Record<'_>,
    pulse: &ReferencePulse<'_>,
    scan: &Scan,
    range: SampleRange,
    echoes: &[Reached],
    envelope: &[u16],
    quiet: f32,
) -> TimingNoise {
    let mut parts = [Part::default(); BLOCKS];
    let per_sample = BLOCKS as f32 / math::larger(range.length() as f32, 1.0);
    // Densest where the first back wall mostly is: the first quarter gets as many places as the rest, if there is room.
    let half_pulse = u32::from(pulse.facts.length) / 2;
    let early = range.start + range.length() / 4;
    let step = |place: u32| half_pulse.max(range.length() / if place < early { 2 * PLACES } else { PLACES * 2 / 3 });
    quiet_places(range, step, echoes, |place| {
        if f32::from(envelope.get(place as usize).copied().unwrap_or(u16::MAX)) > quiet {
            return;
        }
        let block = math::saturating_i32((place - range.start) as f32 * per_sample);
        let start = i64::from(place) - i64::from(math::saturating_i32(pulse.facts.origin)) - 1;
        let part = usize::try_from(block).ok().and_then(|block| parts.get_mut(block));
        let found = usize::try_from(start)
            .ok()
            .and_then(|start| derivative_part(record.codes(), start, pulse.samples));
        if let (Some(part), Some(found)) = (part, found) {
            part.add(place as f32, found * found);
        }
    });
    for part in &mut parts {
        *part = part.without_outlier();
    }
    let energy = difference_energy(pulse.samples);
    let rounding = record.format().rounding_noise(scan.noise);
    course(&parts, energy, scan.noise, rounding * rounding)
}

/// From what the parts have shown to the noise's course.
#[inline(never)]
fn course(parts: &[Part; BLOCKS], energy: f32, noise: f32, least: f32) -> TimingNoise {
    let (mut early, mut late) = (Part::default(), Part::default());
    for (number, part) in parts.iter().enumerate() {
        if number < BLOCKS / 2 { &mut early } else { &mut late }.join(part);
    }
    let count = early.count + late.count;
    if count < FEWEST_PLACES {
        return TimingNoise::steady(noise);
    }
    // The ratio of two mean squares by chance: two standard deviations, and a quarter more because neighbouring places hang together.
    let chance = 2.5 * math::sqrt(2.0 / math::larger(early.count, 1.0) + 2.0 / math::larger(late.count, 1.0));
    if !(early.count > 0.0 && late.count > 0.0 && early.variance() > (1.0 + chance) * late.variance()) {
        let found = math::sqrt((early.squares + late.squares) / (count * energy));
        return TimingNoise::steady(math::larger(noise, found));
    }
    // Levels that never rise: a part above its forerunner is pooled with it.
    let mut levels: Vec<Part, BLOCKS> = Vec::new();
    for part in parts.iter().filter(|part| part.count > 0.0) {
        let mut pooled = *part;
        while let Some(earlier) = levels.last().filter(|earlier| earlier.variance() <= pooled.variance()) {
            pooled.join(earlier);
            levels.truncate(levels.len() - 1);
        }
        // As many places as parts: it cannot be full.
        let _ = levels.push(pooled);
    }
    let mut course = TimingNoise::default();
    for (knot, level) in course.knots.iter_mut().zip(&levels) {
        *knot = (
            level.places / level.count,
            math::larger(level.variance() * few(level.count) / energy, least),
        );
        course.count += 1;
    }
    course
}

/// By how much the variance of so few values has to be widened for k = 2 to hold: half of Student's t at 95.45 %,
/// squared (JCGM 100:2008, table G.2), as 1 + 2.6 / (n - 1) to 7 %. Fewer than 4 values are as good as 4: never are
/// so few alone.
fn few(count: f32) -> f32 {
    1.0 + 2.6 / math::larger(count - 1.0, 3.0)
}

/// Calls `visit` with places that no echo reaches.
pub(super) fn quiet_places(
    range: SampleRange,
    step: impl Fn(u32) -> u32,
    echoes: &[Reached],
    mut visit: impl FnMut(u32),
) {
    let mut place = range.start;
    while place < range.end {
        match echoes.iter().find(|(middle, reach)| place.abs_diff(*middle) < *reach) {
            // Never less than one step on, so that it ends.
            Some((middle, reach)) => place = middle.saturating_add(*reach).max(place + 1),
            None => {
                visit(place);
                place += step(place).max(1);
            }
        }
    }
}

/// Σ s\[k\] (x\[start + k + 2\] - x\[start + k\]): the record's correlation with the (negative) central difference of the
/// pulse. `None` if it would stand out of the record.
fn derivative_part(codes: &[i16], start: usize, samples: &[f32]) -> Option<f32> {
    let ([a, b], later) = codes.get(start..)?.split_first_chunk::<2>()?;
    let later = later.get(..samples.len())?;
    let [mut a, mut b] = [i32::from(*a), i32::from(*b)];
    let mut sum = 0.0;
    // Unrolled by four: every code is loaded once.
    let (samples, last_samples) = samples.as_chunks::<4>();
    let (later, last_later) = later.as_chunks::<4>();
    for ([s0, s1, s2, s3], [x0, x1, x2, x3]) in samples.iter().zip(later) {
        let (x0, x1, x2, x3) = (i32::from(*x0), i32::from(*x1), i32::from(*x2), i32::from(*x3));
        sum += s0 * (x0 - a) as f32;
        sum += s1 * (x1 - b) as f32;
        sum += s2 * (x2 - x0) as f32;
        sum += s3 * (x3 - x1) as f32;
        (a, b) = (x2, x3);
    }
    for (s, x) in last_samples.iter().zip(last_later) {
        let x = i32::from(*x);
        sum += s * (x - a) as f32;
        (a, b) = (b, x);
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

#[cfg(test)]
mod tests {
    use super::*;
    use crate::echo::pulse::{PulseFacts, model};
    use crate::echo::scan::scan;
    use crate::record::{AdcFormat, SampleClock};
    use crate::test_support::{Noise as Normals, setup};
    use crate::units::{Hertz, Seconds};
    use std::vec;
    use std::vec::Vec as StdVec;

    /// Everything about a record of 4096 samples at 50 MS/s, as the gauge would have it.
    struct Bench {
        pulse: [f32; PULSE_CAPACITY],
        facts: PulseFacts,
        skirt: [u16; PULSE_CAPACITY],
        detector: Detector,
    }

    impl Bench {
        fn new() -> Self {
            let mut pulse = [0.0; PULSE_CAPACITY];
            let facts = model(&setup(), &mut pulse).unwrap();
            let mut skirt = [0; PULSE_CAPACITY];
            let detector = Detector::new(10.0, &ReferencePulse::new(&pulse, facts), &mut skirt);
            Self {
                pulse,
                facts,
                skirt,
                detector,
            }
        }

        fn pulse(&self) -> ReferencePulse<'_> {
            ReferencePulse::new(&self.pulse, self.facts)
        }

        fn listen(&self, signal: &[f32], echoes_count: bool) -> TimingNoise {
            let codes: StdVec<i16> = signal.iter().map(|x| math::round_to_i32(*x) as i16).collect();
            let format = AdcFormat::signed(14);
            let clock = SampleClock {
                rate: Hertz::from_mhz(50.0),
                first_sample: Seconds::ZERO,
            };
            let range = SampleRange {
                start: 0,
                end: codes.len() as u32,
            };
            let mut envelope = vec![0; codes.len()];
            let found = scan(&codes, format, range, &self.detector, &self.skirt, &mut envelope);
            let candidates = found.candidates.iter().copied().filter(|_| echoes_count);
            let echoes = reached(candidates, &self.pulse(), &found, &self.detector, &self.skirt);
            let record = Record::new(&codes, format, clock);
            listen(
                &record,
                &self.pulse(),
                &found,
                found.filled,
                &echoes,
                &envelope,
                f32::INFINITY,
            )
        }

        /// Noise with the pulse's own spectrum: white noise through the pulse as a filter, of unit variance.
        fn grain(&self, normals: &mut Normals) -> StdVec<f32> {
            let white: StdVec<f32> = (0..4096 + self.pulse().samples.len())
                .map(|_| normals.normal())
                .collect();
            let gain = math::sqrt(self.facts.energy);
            white
                .windows(self.pulse().samples.len())
                .take(4096)
                .map(|w| w.iter().zip(self.pulse().samples).map(|(x, s)| x * s).sum::<f32>() / gain)
                .collect()
        }

        fn add(&self, signal: &mut [f32], origin: usize, amplitude: f32) {
            let start = origin - self.facts.origin as usize;
            for (x, s) in signal.iter_mut().skip(start).zip(self.pulse().samples) {
                *x += amplitude * s;
            }
        }
    }

    #[test]
    fn val_few_values_are_widened_as_student_says() {
        // t at 95.45 % for 5, 7, 10, 20, 50 and 100 degrees of freedom: JCGM 100:2008, table G.2.
        for (count, t) in [
            (5.0, 2.65),
            (7.0, 2.43),
            (10.0, 2.28),
            (20.0, 2.13),
            (50.0, 2.05),
            (100.0, 2.025),
        ] {
            let widened: f32 = t * t / 4.0;
            assert!(
                (few(count) / widened - 1.0).abs() < 0.07,
                "{count}: {} {widened}",
                few(count)
            );
        }
    }

    #[test]
    fn val_white_noise_is_what_it_is() {
        // By definition the timing noise of white noise is its root mean square per sample (and what rounding adds).
        let (bench, mut normals) = (Bench::new(), Normals::new(3));
        let (mut ratio, mut falling) = (0.0, 0);
        for round in 0..200 {
            let mut signal: StdVec<f32> = (0..4096).map(|_| 20.0 * normals.normal()).collect();
            bench.add(&mut signal, 900 + round, 3000.0);
            bench.add(&mut signal, 1800 + 2 * round, 2000.0);
            let heard = bench.listen(&signal, true);
            falling += u32::from(heard.count > 1);
            ratio += heard.at(1000.0) / 20.0 / 200.0;
        }
        // Never below what the scan says, and so a little high.
        assert!((1.0..1.06).contains(&ratio), "{ratio}");
        // Two standard deviations on one side would be 2.3 %; they are not independent.
        assert!(falling <= 12, "{falling} of 200 seem to fall");
    }

    #[test]
    fn val_noise_of_the_pulses_band_counts_by_its_spectrum() {
        // For noise of spectrum S(f) the derivative filter passes ∫ S |P|² f² / ∫ |P|² f² of the variance. Here S is
        // |P|² / E, so that Parseval's theorem turns the ratio into sums over the pulse's autocorrelation, made
        // here in f64 from the samples alone.
        let (bench, mut normals) = (Bench::new(), Normals::new(5));
        let samples: StdVec<f64> = bench.pulse().samples.iter().map(|s| f64::from(*s)).collect();
        let correlate = |a: &[f64], b: &[f64], lag: i64| -> f64 {
            (0..a.len() as i64)
                .filter_map(|i| Some(a.get(i as usize)? * b.get(usize::try_from(i + lag).ok()?)?))
                .sum()
        };
        let at = |i: i64| {
            usize::try_from(i)
                .ok()
                .and_then(|i| samples.get(i))
                .copied()
                .unwrap_or(0.0)
        };
        let difference: StdVec<f64> = (0..samples.len() as i64 + 2).map(|i| at(i) - at(i - 2)).collect();
        let reach = difference.len() as i64;
        let energy = correlate(&samples, &samples, 0);
        let passed: f64 = (-reach..=reach)
            .map(|lag| correlate(&samples, &samples, lag) / energy * correlate(&difference, &difference, lag))
            .sum();
        let expected = (passed / correlate(&difference, &difference, 0)).sqrt() as f32;

        let mut ratio = 0.0;
        for _ in 0..200 {
            let signal: StdVec<f32> = bench.grain(&mut normals).iter().map(|g| 50.0 * g).collect();
            ratio += bench.listen(&signal, false).at(1000.0) / 50.0 / 200.0;
        }
        std::println!("timing noise of grain over its size per sample: {ratio:.3}, by its spectrum {expected:.3}");
        assert!((ratio / expected - 1.0).abs() < 0.06, "{ratio} {expected}");
        assert!(expected > 2.0);
    }

    #[test]
    fn noise_that_dies_away_is_followed() {
        let (bench, mut normals) = (Bench::new(), Normals::new(9));
        let (mut early, mut late) = (0.0, 0.0);
        for _ in 0..200 {
            // From 100 to 10 codes over the record, in the probe's band.
            let grain = bench.grain(&mut normals);
            let course = |i: usize| 100.0 * math::exp(-core::f32::consts::LN_10 * i as f32 / 4096.0);
            let signal: StdVec<f32> = grain.iter().enumerate().map(|(i, g)| course(i) * g).collect();
            let steady: StdVec<f32> = grain.iter().map(|g| 100.0 * g).collect();
            let unit = bench.listen(&steady, false).at(2000.0) / 100.0;
            let heard = bench.listen(&signal, false);
            early += heard.at(400.0) / (unit * course(400)) / 200.0;
            late += heard.at(3500.0) / (unit * course(3500)) / 200.0;
        }
        std::println!("heard over true: early {early:.3}, late {late:.3}");
        assert!(
            (0.9..1.15).contains(&early) && (0.85..1.15).contains(&late),
            "{early} {late}"
        );
    }

    #[test]
    fn a_record_full_of_echoes_has_no_timing_noise_of_its_own() {
        let (bench, mut normals) = (Bench::new(), Normals::new(11));
        let mut signal: StdVec<f32> = (0..4096).map(|_| 5.0 * normals.normal()).collect();
        for echo in 0..16 {
            bench.add(&mut signal, 100 + 250 * echo, 4000.0);
        }
        let heard = bench.listen(&signal, true);
        assert_eq!(heard.count, 1);
        for length in [0, 1, 30, 49, 60] {
            let _ = bench.listen(&vec![0.0; length], true);
        }
        assert!(TimingNoise::default().at(5.0) == 0.0 && TimingNoise::steady(3.0).at(f32::NAN) == 3.0);
    }
}
