//! The transmission pulse's tail taken off with a stored record of the uncoupled probe: a first echo inside the dead zone is
//! read.
//!
//! **In**: a record whose transmission pulse is in it, and the record (best an average of many shots) that the same probe gave
//! in air at the same gain. **Out**: a reading whose window begins inside the dead zone.
//!
//! 1. The stored record is moved and scaled to the shot's own transmission pulse, by least squares over what lies before
//!    [`Uncoupled::from`] and is clipped in neither.
//! 2. What that fit leaves over tells whether the two belong together: another gain or another probe is an error, and nothing
//!    is taken off.
//! 3. The stored record is subtracted up to the start of the set-up's window, and nowhere else.
//! 4. What the fit left over counts as noise of every echo inside the dead zone, in the uncertainty and in the decision
//!    whether it stands out.
//!
//! Not to be trusted where coupling damps the probe's own ringing, by more than the fit leaves over: a hard-faced
//! undamped element rings shorter on steel than in air. A wall so thin that its first echo lies before [`Uncoupled::from`] is
//! not seen, or contradicts the fit.

use super::{Gauge, Reading};
use crate::echo::clipping::is_cut;
use crate::echo::interpolate::{REACH, at_codes};
use crate::echo::{Echo, EchoRole, STANDS_OUT};
use crate::math;
use crate::outcome::{Doubt, NoReading};
use crate::record::{AdcFormat, Record, SampleClock};
use crate::setup::Span;
use crate::units::{Decibels, Seconds};
use crate::wall::thickness::wall_span;
use crate::wall::uncertainty::Source;
use crate::wall::way;
use core::fmt;

/// Most samples by which the stored record is moved: what triggers jitter by, and not another delay.
const MOST_SHIFT: f32 = 2.0;
/// Most by which the heights may differ: what a pulser's voltage drifts by, and not another gain.
const MOST_DECIBELS: f32 = 0.5;
/// Share of the tail that may be left over: another probe, or a wall so thin that its echo lies there, leaves more.
const MOST_LEFT: f32 = 0.05;
/// So many samples tell how the stored record lies to the shot.
const TELLING_SAMPLES: u32 = 16;

/// A stored record of the uncoupled probe, and from when on what it leaves can be read.
#[derive(Clone, Copy, Debug)]
pub struct Uncoupled<'u> {
    /// The record, from before the transmission pulse's end to the end of the dead zone at least. The caller keeps its codes.
    pub record: Record<'u>,
    /// From when on echoes are looked for once the tail has been taken off: some way behind the last clipped sample.
    /// What lies before tells how the stored record fits.
    pub from: Seconds,
}

/// How the stored record fitted to a shot.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct TailFit {
    /// How much later the shot's transmission pulse came.
    pub shift: Seconds,
    /// How many times as high it was.
    pub factor: f32,
    /// Root mean square of what the fit left over, in codes of the shot: the noise of both, and what differs.
    pub left: f32,
}

/// Sums of a fit: of squares of the stored samples and their slopes, and of what both have in common with the shot.
#[derive(Clone, Copy, Default)]
struct Sums {
    samples: u32,
    ss: f32,
    sd: f32,
    dd: f32,
    rs: f32,
    rd: f32,
    rr: f32,
}

impl Uncoupled<'_> {
    /// The stored record moved by `shift` samples, at a sample of the shot, in the shot's codes; `None` where a clipped code lies
    /// near.
    fn at(&self, index: usize, shift: f32, scale: f32) -> Option<f32> {
        let format = self.record.format();
        let around = self.record.codes().get(index.checked_sub(REACH)?..=index + REACH)?;
        if around.iter().any(|&code| is_cut(code, &format)) {
            return None;
        }
        let place = index as f32 - shift;
        let whole = math::floor(place);
        let first = usize::try_from(math::saturating_i32(whole)).ok()?;
        Some(at_codes(self.record.codes(), first, place - whole) * scale)
    }

    /// Sums over the samples before `end` that are whole in both.
    fn sums(&self, codes: &[i16], format: &AdcFormat, end: usize, shift: f32, scale: f32) -> Sums {
        let mut sums = Sums::default();
        for (index, &code) in codes.iter().enumerate().take(end) {
            if is_cut(code, format) {
                continue;
            }
            let (Some(s), Some(before), Some(after)) = (
                self.at(index, shift, scale),
                self.at(index, shift + 0.5, scale),
                self.at(index, shift - 0.5, scale),
            ) else {
                continue;
            };
            // Later means a smaller place in the stored record.
            let (d, r) = (before - after, f32::from(code));
            sums.samples += 1;
            sums.ss += s * s;
            sums.sd += s * d;
            sums.dd += d * d;
            sums.rs += r * s;
            sums.rd += r * d;
            sums.rr += r * r;
        }
        sums
    }

    /// Fits the stored record to a shot and, if they belong together, takes it off the shot's codes from
    /// [`Uncoupled::from`] to `to`. What lies outside is left as it is.
    ///
    /// # Errors
    /// Why they do not belong together; the codes are as they were then.
    pub fn take_off(
        &self,
        codes: &mut [i16],
        format: &AdcFormat,
        clock: &SampleClock,
        to: Seconds,
    ) -> Result<TailFit, UncoupledError> {
        if self.record.clock() != *clock || self.record.format().bits != format.bits {
            return Err(UncoupledError::OtherClock);
        }
        let place = |time: Seconds| usize::try_from(math::saturating_i32(math::floor(clock.samples_at(time) + 0.999)));
        let (Ok(from), Ok(to)) = (place(self.from), place(to)) else {
            return Err(UncoupledError::NothingToTell);
        };
        let scale = format.full_scale() / self.record.format().full_scale();
        // Coarsely first: a pulse of few samples a cycle has more than one place where the fit does not get better.
        let left_at = |sums: &Sums| math::larger(sums.rr - sums.rs * sums.rs / sums.ss, 0.0);
        let mut shift = 0.0;
        let mut least = f32::INFINITY;
        for step in -4i8..=4 {
            let there = f32::from(step) * 0.5 * MOST_SHIFT * 0.5;
            let sums = self.sums(codes, format, from, there, scale);
            if sums.samples < TELLING_SAMPLES || !(sums.ss > 0.0) {
                return Err(UncoupledError::NothingToTell);
            }
            if left_at(&sums) < least {
                (least, shift) = (left_at(&sums), there);
            }
        }
        let (mut factor, mut left, mut whole) = (1.0, 0.0, 0.0);
        for _ in 0..5 {
            let sums = self.sums(codes, format, from, shift, scale);
            let determinant = sums.ss * sums.dd - sums.sd * sums.sd;
            if sums.samples < TELLING_SAMPLES || !(determinant > 0.0) {
                return Err(UncoupledError::NothingToTell);
            }
            factor = sums.rs / sums.ss;
            left = math::sqrt(left_at(&sums) / sums.samples as f32);
            whole = math::sqrt(sums.ss / sums.samples as f32);
            let slope = (sums.ss * sums.rd - sums.sd * sums.rs) / determinant;
            let step = slope / math::larger(factor.abs(), 0.1);
            shift = math::clamp(shift + step, -2.0 * MOST_SHIFT, 2.0 * MOST_SHIFT);
        }
        let seen = Decibels::from_amplitude_ratio(math::larger(factor, 1e-3));
        if factor > 0.0 && left < MOST_LEFT * whole * factor && !(seen.get().abs() <= MOST_DECIBELS) {
            return Err(UncoupledError::OtherGain { seen });
        }
        if !(left < MOST_LEFT * whole && shift.abs() <= MOST_SHIFT && seen.get().abs() <= MOST_DECIBELS) {
            return Err(UncoupledError::OtherTail);
        }
        // All or nothing: a clipped sample in the dead zone ends it before anything is changed.
        let zone = codes.get(from..to).ok_or(UncoupledError::NothingToTell)?;
        let whole_zone = zone
            .iter()
            .enumerate()
            .all(|(number, &code)| !is_cut(code, format) && self.at(from + number, shift, scale).is_some());
        if !whole_zone {
            return Err(UncoupledError::Clipped);
        }
        let (upper, lower) = (i32::from(format.upper_rail()) - 1, i32::from(format.lower_rail()) + 1);
        for (number, code) in codes.iter_mut().enumerate().take(to).skip(from) {
            let tail = self.at(number, shift, scale).unwrap_or(0.0) * factor;
            let cleared = math::round_to_i32(f32::from(*code) - tail).clamp(lower, upper);
            *code = i16::try_from(cleared).unwrap_or(*code);
        }
        // Rounding to codes once more.
        let left = math::sqrt(left * left + 1.0 / 12.0);
        Ok(TailFit {
            shift: clock.rate.period() * shift,
            factor,
            left,
        })
    }
}

impl Gauge<'_> {
    /// Measures one shot after the tail of the transmission pulse has been taken off it, in `codes` themselves: see
    /// [`crate::gauge::uncoupled`]. Echoes are then looked for from [`Uncoupled::from`] on instead of from the set-up's
    /// window.
    ///
    /// # Errors
    /// The outer one: the stored record does not belong to the shot, and nothing has been taken off. The inner one as
    /// [`Gauge::measure`].
    #[inline(never)]
    pub fn measure_uncoupled(
        &mut self,
        codes: &mut [i16],
        format: AdcFormat,
        clock: SampleClock,
        stored: &Uncoupled<'_>,
    ) -> Result<Result<Reading, NoReading>, UncoupledError> {
        let window = self.setup.window;
        if !(stored.from < window.from) {
            return Err(UncoupledError::NothingToTell);
        }
        if wall_span(&self.setup) == Span::InterfaceToBackWall {
            return Err(UncoupledError::Span);
        }
        let fit = stored.take_off(codes, &format, &clock, window.from)?;
        self.setup.window.from = stored.from;
        let outcome = self.measure(&Record::new(codes, format, clock));
        self.setup.window = window;
        Ok(outcome.map(|reading| self.with_tail(reading, &fit, window.from)))
    }

    /// A reading with what the taking off has added to the noise of echoes before `end`.
    fn with_tail(&self, mut reading: Reading, fit: &TailFit, end: Seconds) -> Reading {
        let noise = self.findings.noise;
        let more = math::sqrt(math::larger(fit.left * fit.left - noise * noise, 0.0)) / noise;
        let inside = |echo: &&Echo| matches!(echo.role, EchoRole::BackWall(_)) && echo.arrival < end;
        let counts = match wall_span(&self.setup) {
            Span::BackWallToBackWall => self.findings.train.map_or(1.0, |train| train.contrast),
            _ => 1.0,
        };
        let mut variance = 0.0;
        for echo in self.findings.echoes.iter().filter(inside) {
            let moved = self.setup.velocity() * (echo.standard_uncertainty * (0.5 * more * counts));
            let moved = moved.get() * way::gain(&self.setup, reading.thickness);
            variance += moved * moved;
            let height = echo.amplitude * math::sqrt(self.facts.energy);
            reading
                .doubts
                .raise_if(height < STANDS_OUT * math::larger(fit.left, noise), Doubt::LowSignal);
        }
        reading.budget.widen(Source::Timing, math::sqrt(variance));
        reading.standard_uncertainty = reading.budget.combined();
        reading
    }
}

/// Why a stored record of the uncoupled probe is not taken off.
#[derive(Clone, Copy, Debug, PartialEq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum UncoupledError {
    /// Stored record and shot differ in sample rate, time of the first sample or bits.
    OtherClock,
    /// The heights of the transmission pulses differ.
    OtherGain {
        /// By so much is the shot's higher.
        seen: Decibels,
    },
    /// The transmission pulses differ in shape or place.
    OtherTail,
    /// A sample inside the dead zone is clipped.
    Clipped,
    /// Too little before [`Uncoupled::from`] that is not clipped, or no dead zone behind it.
    NothingToTell,
    /// A span that begins at an interface has no use for it.
    Span,
}

impl UncoupledError {
    /// What is wrong and what to do, in one sentence.
    #[must_use]
    pub const fn sentence(&self) -> &'static str {
        match self {
            Self::OtherClock => {
                "the record of the uncoupled probe differs in clock or bits: record it anew with the set-up in use"
            }
            Self::OtherGain { .. } => {
                "the record of the uncoupled probe was taken at another gain: record it anew at the gain in use"
            }
            Self::OtherTail => {
                "the transmission pulse is not that of the uncoupled probe: record it anew with this probe and cable, or \
                 leave it out for so thin a wall"
            }
            Self::Clipped => "the dead zone is clipped: lower the gain, or look for echoes from later on",
            Self::NothingToTell => {
                "too little of the transmission pulse is whole to take it off: record from earlier on, lower the gain, or \
                 look for echoes from later on, but before the window"
            }
            Self::Span => "a span from the interface does not begin in the dead zone: leave the uncoupled record out",
        }
    }
}

impl fmt::Display for UncoupledError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(self.sentence())?;
        if let Self::OtherGain { seen } = self {
            write!(f, " (the codes show {} dB)", math::round_to_i32(seen.get()))?;
        }
        Ok(())
    }
}

impl core::error::Error for UncoupledError {}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::setup::{GaugeSetup, Material, Probe, Window, Zero};
    use crate::units::{Hertz, Metres, MetresPerSecond};
    use crate::workspace::Scratch;
    use std::vec::Vec;

    const RATE: f64 = 50e6;
    const FORMAT: AdcFormat = AdcFormat::signed(12);

    fn clock() -> SampleClock {
        SampleClock::new(Hertz::new(RATE as f32))
    }

    /// A ringing that dies away over 0.25 µs, clipped at first; the shot's trigger late by so many samples.
    fn tail(i: usize, late: f64, height: f64, mhz: f64) -> f64 {
        let t = (i as f64 - 20.0 - late) / RATE;
        if t < 0.0 {
            return 0.0;
        }
        // Rises over 40 ns, so that it is limited in band.
        let rise = 1.0 - (-(t / 4e-8).powi(2)).exp();
        height * rise * (-t / 2.5e-7).exp() * (std::f64::consts::TAU * mhz * 1e6 * t).sin()
    }

    fn noise(seed: u64, i: usize) -> f64 {
        let mut sum = 0.0;
        for k in 0..12u64 {
            let mut z = (seed * 7919 + i as u64 * 12 + k).wrapping_mul(0x9e37_79b9_7f4a_7c15);
            z = (z ^ (z >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
            z = (z ^ (z >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
            sum += ((z ^ (z >> 31)) >> 11) as f64 / (1u64 << 53) as f64;
        }
        sum - 6.0
    }

    fn codes(of: impl Fn(usize) -> f64, seed: u64) -> Vec<i16> {
        (0..2048)
            .map(|i| (of(i) + 2.0 * noise(seed, i)).round().clamp(-2048.0, 2047.0) as i16)
            .collect()
    }

    /// One echo of a wall whose round trip is `trip` seconds, 5 MHz and 60 %.
    fn echo(i: usize, late: f64, trip: f64) -> f64 {
        let t = (i as f64 - 20.0 - late) / RATE - trip;
        let sigma = 1.175_394 / (std::f64::consts::PI * 3e6);
        300.0 * (-0.5 * (t / sigma).powi(2)).exp() * (std::f64::consts::TAU * 5e6 * t).cos()
    }

    fn setup() -> GaugeSetup {
        GaugeSetup::new(
            Hertz::new(RATE as f32),
            Probe::contact(Hertz::from_mhz(5.0), 0.6)
                .with_couplant_film(Metres::ZERO)
                .with_element_diameter(Metres::new(100.0)),
            Material::new(MetresPerSecond::new(5920.0), MetresPerSecond::ZERO),
            Zero::new(Seconds::from_ns(400.0), Seconds::ZERO),
            Span::TransmissionPulseToBackWall,
            Window {
                from: Seconds::from_us(2.4),
                to: Seconds::from_us(30.0),
            },
        )
        .with_trigger_jitter(Seconds::from_ns(0.0))
    }

    /// Mean of 64 shots, rounded to codes: a good stored record.
    fn stored(height: f64, mhz: f64) -> Vec<i16> {
        (0..2048)
            .map(|i| {
                let noise: f64 = (0..64).map(|shot| noise(1000 + shot, i)).sum::<f64>() / 64.0;
                (tail(i, 0.0, height, mhz) + 2.0 * noise).round().clamp(-2048.0, 2047.0) as i16
            })
            .collect()
    }

    #[test]
    fn val_a_wall_in_the_tail_is_read() {
        let air = stored(6000.0, 4.0);
        let stored = Uncoupled {
            record: Record::new(&air, FORMAT, clock()),
            from: Seconds::from_us(1.3),
        };
        let mut scratch = Scratch::<2048>::ZERO;
        let mut gauge = Gauge::new(setup(), scratch.workspace()).unwrap();
        let (mut inside, mut worst) = (0, 0.0f64);
        for shot in 0..40u64 {
            let late = 0.7 * noise(77, shot as usize);
            // A lone echo 1.35 to 1.7 µs after the zero.
            let trip = 1.35e-6 + 0.35e-6 * (shot as f64) / 40.0;
            let record = codes(|i| tail(i, 0.0, 6000.0, 4.0) + echo(i, 0.0, trip), 50 + shot);
            let without = gauge.measure(&Record::new(&record, FORMAT, clock()));
            assert!(
                without.is_err() || without.is_ok_and(|reading| !reading.doubts.is_empty()),
                "read without a doubt though its echo lies in the dead zone"
            );
            let mut jittered = codes(|i| tail(i, late, 6000.0, 4.0) + echo(i, late, trip), 150 + shot);
            let untouched = jittered.clone();
            let fit = stored
                .take_off(&mut jittered.clone(), &FORMAT, &clock(), Seconds::from_us(2.4))
                .unwrap();
            assert!(
                (f64::from(fit.shift.as_ns()) - 20.0 * late).abs() < 0.5,
                "{fit:?}, late by {late}"
            );
            assert!((fit.factor - 1.0).abs() < 0.005, "{fit:?}");
            let reading = gauge
                .measure_uncoupled(&mut jittered, FORMAT, clock(), &stored)
                .unwrap()
                .unwrap();
            assert_eq!(untouched.get(..65), jittered.get(..65));
            assert_eq!(untouched.get(120..), jittered.get(120..));
            let error = f64::from(reading.thickness.get()) - 2960.0 * (trip + late / RATE);
            let ratio = error / f64::from(reading.standard_uncertainty.get());
            worst = worst.max(ratio.abs());
            inside += u32::from(ratio.abs() < 2.0);
        }
        std::println!("walls in the tail: {inside} of 40 within k = 2, worst {worst:.2} standard uncertainties");
        assert!(inside >= 36 && worst < 4.0, "{inside} of 40, worst {worst}");
        assert_eq!(gauge.setup().window.from, Seconds::from_us(2.4));
    }

    #[test]
    fn what_does_not_belong_together_is_found_out() {
        let air = stored(6000.0, 4.0);
        let stored_record = Uncoupled {
            record: Record::new(&air, FORMAT, clock()),
            from: Seconds::from_us(1.3),
        };
        let to = Seconds::from_us(2.4);
        let refused = |shot: &[i16]| {
            let mut changed = shot.to_vec();
            let why = stored_record.take_off(&mut changed, &FORMAT, &clock(), to).unwrap_err();
            assert_eq!(changed, shot, "{why}: the codes were changed");
            why
        };
        // Half a decibel is drift, one and more another gain (1 dB is 1.122).
        let of = |factor: f64| codes(|i| tail(i, 0.0, 6000.0 * factor, 4.0), 3);
        assert!(stored_record.take_off(&mut of(1.03), &FORMAT, &clock(), to).is_ok());
        for factor in [0.5, 0.89, 1.122, 2.0] {
            let why = refused(&of(factor));
            assert!(matches!(why, UncoupledError::OtherGain { .. }), "{factor}: {why}");
        }
        // Another probe rings at another frequency, an upside-down one with the leads swapped.
        for mhz in [3.6, 4.4, 5.0] {
            assert_eq!(
                refused(&codes(|i| tail(i, 0.0, 6000.0, mhz), 4)),
                UncoupledError::OtherTail
            );
        }
        assert_eq!(
            refused(&codes(|i| -tail(i, 0.0, 6000.0, 4.0), 4)),
            UncoupledError::OtherTail
        );
        // Another delay, no transmission pulse at all, a wall before the start, a clipped dead zone, another clock.
        assert_eq!(
            refused(&codes(|i| tail(i, 6.0, 6000.0, 4.0), 5)),
            UncoupledError::OtherTail
        );
        assert_eq!(refused(&codes(|_| 0.0, 6)), UncoupledError::OtherTail);
        assert_eq!(
            refused(&codes(|i| tail(i, 0.0, 6000.0, 4.0) + echo(i, 0.0, 0.7e-6), 7)),
            UncoupledError::OtherTail
        );
        let mut clipped = of(1.0);
        clipped[100] = 2047;
        assert_eq!(refused(&clipped), UncoupledError::Clipped);
        let other = SampleClock::new(Hertz::from_mhz(40.0));
        let why = stored_record.take_off(&mut of(1.0), &FORMAT, &other, to);
        assert_eq!(why, Err(UncoupledError::OtherClock));
        let blind = Uncoupled {
            from: Seconds::from_us(0.3),
            ..stored_record
        };
        assert_eq!(
            blind.take_off(&mut of(1.0), &FORMAT, &clock(), to),
            Err(UncoupledError::NothingToTell)
        );
    }

    #[test]
    fn odd_input_is_no_panic() {
        let air = stored(6000.0, 4.0);
        let mut scratch = Scratch::<2048>::ZERO;
        let mut gauge = Gauge::new(setup(), scratch.workspace()).unwrap();
        for length in [0, 1, 30, 61, 100, 119, 2048] {
            for from in [f32::NAN, -1.0, 0.0, 1.2e-6, 1.0] {
                let stored = Uncoupled {
                    record: Record::new(air.get(..length).unwrap(), FORMAT, clock()),
                    from: Seconds::new(from),
                };
                for shot in [0, 10, 70, 2048] {
                    let mut codes = air.get(..shot).unwrap().to_vec();
                    let _ = gauge.measure_uncoupled(&mut codes, FORMAT, clock(), &stored);
                }
            }
        }
    }
}
