//! The same echo in shot after shot: how much the trigger jitters, and whether probe and part keep still.
//!
//! **In**: arrivals of one strong echo in single shots, in the order of the shots, each with its standard uncertainty from
//! noise. **Out**: [`Jitter`], and whether the arrivals wander ([`ShotArrivals::wanders`]).
//!
//! An arrival scatters by noise c, which the Cramér-Rao bound gives, and by the jitter j of the pulser against the sample
//! clock, independently: s² = c² + j². So j² = s² - c². An average of n shots scatters by sqrt((c² + j²) / n), and its
//! amplitude falls by exp(-(ω j)² / 2) (0.988 at 5 ns and 5 MHz; both held by `val_averaging`). Jitter is common
//! to all echoes of a shot: it moves only what counts from the trigger. State it in the set-up
//! ([`crate::GaugeSetup::with_trigger_jitter`]), and readings carry their share.
//!
//! Take an echo of 30 dB or more: below that noise hides the jitter, which the stated uncertainty then says. What moves the
//! echo slowly (a sliding probe, a part that warms up) is not jitter: ask [`ShotArrivals::wanders`] first. Echoes that
//! overlap change with them and are not suited.

use crate::math;
use crate::units::Seconds;

/// Arrivals of one echo over shots, summed up as they come: nothing else is kept.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct ShotArrivals {
    shots: u16,
    /// Later times are kept as differences to it, which have all their digits.
    first: f32,
    last: f32,
    mean: f32,
    /// Sum of squares about the mean.
    squares: f32,
    /// Sum of squares of steps from shot to shot.
    steps: f32,
    /// Sum of the variances by noise.
    noise: f32,
}

/// How much the pulser jitters against the sample clock.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Jitter {
    /// Root mean square of the jitter, noise taken off; 0 if the arrivals scatter no more than noise makes them.
    pub rms: Seconds,
    /// Its standard uncertainty (k = 1): from the number of shots, and from how much noise there was to be taken off.
    pub standard_uncertainty: Seconds,
    /// Shots it rests on.
    pub shots: u16,
}

impl Jitter {
    /// What the jitter adds to the standard uncertainty of an arrival in an average of so many shots: j / sqrt(n).
    #[must_use]
    pub fn in_average(&self, shots: u16) -> Seconds {
        self.rms * (1.0 / math::sqrt(f32::from(shots.max(1))))
    }
}

/// Fewest shots whose order tells anything.
const FEWEST_IN_ORDER: u16 = 8;
/// Standard normal quantile that 0.8 % lie beyond; of few shots, which are not quite normal, fewer.
const WANDERING_QUANTILE: f32 = 2.41;

impl ShotArrivals {
    /// No shot yet.
    #[must_use]
    pub const fn new() -> Self {
        Self {
            shots: 0,
            first: 0.0,
            last: 0.0,
            mean: 0.0,
            squares: 0.0,
            steps: 0.0,
            noise: 0.0,
        }
    }

    /// Adds the next shot's arrival, with its standard uncertainty from noise ([`crate::Echo::arrival`] and
    /// [`crate::Echo::standard_uncertainty`]). What is not a number is left out; so are shots beyond 65535.
    pub fn add(&mut self, arrival: Seconds, standard_uncertainty: Seconds) {
        if !(arrival.is_finite() && standard_uncertainty.is_finite()) || self.shots == u16::MAX {
            return;
        }
        if self.shots == 0 {
            self.first = arrival.get();
        }
        // In nanoseconds: squares of seconds come close to where an `f32` ends.
        let time = (arrival.get() - self.first) * 1e9;
        let noise = standard_uncertainty.as_ns();
        if self.shots > 0 {
            let step = time - self.last;
            self.steps += step * step;
        }
        self.shots += 1;
        let off = time - self.mean;
        self.mean += off / f32::from(self.shots);
        self.squares += off * (time - self.mean);
        self.noise += noise * noise;
        self.last = time;
    }

    /// Shots so far.
    #[must_use]
    pub const fn shots(&self) -> u16 {
        self.shots
    }

    /// Mean arrival; `None` without a shot.
    #[must_use]
    pub fn mean(&self) -> Option<Seconds> {
        (self.shots > 0).then_some(Seconds::new(self.first + self.mean * 1e-9))
    }

    /// Standard deviation of the arrivals from shot to shot, noise included; `None` with fewer than two shots.
    #[must_use]
    pub fn scatter(&self) -> Option<Seconds> {
        (self.shots > 1).then(|| Seconds::from_ns(math::sqrt(self.variance())))
    }

    /// The trigger's jitter; `None` with fewer than two shots.
    ///
    /// j² = s² - c², with the variance s² of n arrivals (n - 1 degrees of freedom) and the mean c² of their variances by
    /// noise. s² is uncertain by s² sqrt(2 / (n - 1)) (normal errors), and so is j²; u(j) is half of the longer side of the
    /// interval from the root of j² - 2 u(j²), or 0, to that of j² + 2 u(j²): u(j²) / 2 j for a jitter that stands out,
    /// sqrt(u(j²) / 2) where none is seen. An error in the stated uncertainties is not in it: it matters where j is smaller
    /// than c.
    #[must_use]
    pub fn jitter(&self) -> Option<Jitter> {
        if self.shots < 2 {
            return None;
        }
        let shots = f32::from(self.shots);
        let variance = self.variance();
        let jitter = math::larger(variance - self.noise / shots, 0.0);
        let doubt = 2.0 * variance * math::sqrt(2.0 / (shots - 1.0));
        let rms = math::sqrt(jitter);
        let below = rms - math::sqrt(math::larger(jitter - doubt, 0.0));
        let above = math::sqrt(jitter + doubt) - rms;
        Some(Jitter {
            rms: Seconds::from_ns(rms),
            standard_uncertainty: Seconds::from_ns(0.5 * math::larger(below, above)),
            shots: self.shots,
        })
    }

    /// Do the arrivals wander, rather than scatter? `None` with fewer than eight shots, which do not tell.
    ///
    /// Arrivals that know nothing of each other step from shot to shot by twice their variance: Σ (step)² / Σ (x - mean)²
    /// is 2 on average, with a variance of 4 (n - 2) / (n² - 1) (von Neumann 1941, from memory). What moves slowly
    /// against the shots steps by less. The limit is passed by chance in less than 1 % of series; a steady slide is found
    /// in 95 % once it is, from first shot to last, ten times the scatter in 8 shots, six times in 16, four in 64 and two in 256
    /// (`val_wandering`). It needs neither noise nor jitter to be known.
    #[must_use]
    pub fn wanders(&self) -> Option<bool> {
        if self.shots < FEWEST_IN_ORDER {
            return None;
        }
        let shots = f32::from(self.shots);
        let deviation = math::sqrt((shots - 2.0) / (shots * shots - 1.0));
        Some(self.steps < 2.0 * self.squares * (1.0 - WANDERING_QUANTILE * deviation))
    }

    /// Variance in squared nanoseconds.
    fn variance(&self) -> f32 {
        self.squares / (f32::from(self.shots) - 1.0)
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    fn of(times: &[f32], noise: f32) -> ShotArrivals {
        let mut arrivals = ShotArrivals::new();
        for &time in times {
            arrivals.add(Seconds::from_ns(time), Seconds::from_ns(noise));
        }
        arrivals
    }

    #[test]
    fn by_hand() {
        // Times 0, 3, -3, 4, -4 ns: variance (9 + 9 + 16 + 16) / 4 = 12.5; noise of 1.5 ns leaves 10.25.
        let arrivals = of(&[0.0, 3.0, -3.0, 4.0, -4.0], 1.5);
        assert!((arrivals.scatter().unwrap().as_ns() - 12.5f32.sqrt()).abs() < 1e-5);
        let jitter = arrivals.jitter().unwrap();
        assert!((jitter.rms.as_ns() - 10.25f32.sqrt()).abs() < 1e-5);
        // u(j²) = 12.5 sqrt(2 / 4) = 8.8388: from 0 to 5.2848, 3.2016 below and 2.0832 above.
        let expected = 0.5 * 10.25f32.sqrt();
        assert!((jitter.standard_uncertainty.as_ns() - expected).abs() < 1e-5);
        assert!((jitter.in_average(16).as_ns() - 10.25f32.sqrt() / 4.0).abs() < 1e-5);
        // More noise than scatter: none is seen, within what so few shots tell.
        let none = of(&[0.0, 3.0, -3.0, 4.0, -4.0], 4.0).jitter().unwrap();
        assert_eq!(none.rms, Seconds::ZERO);
        assert!((none.standard_uncertainty.as_ns() - (8.838_835f32 / 2.0).sqrt()).abs() < 1e-5);
    }

    #[test]
    fn too_few_say_nothing() {
        let one = of(&[5.0], 1.0);
        assert_eq!((one.scatter(), one.jitter(), one.wanders()), (None, None, None));
        assert_eq!(one.mean().unwrap().as_ns(), 5.0);
        assert_eq!(ShotArrivals::new().mean(), None);
        let mut with_rubbish = one;
        with_rubbish.add(Seconds::new(f32::NAN), Seconds::ZERO);
        with_rubbish.add(Seconds::ZERO, Seconds::new(f32::INFINITY));
        assert_eq!(with_rubbish, one);
        assert_eq!(of(&[1.0; 7], 1.0).wanders(), None);
        assert_eq!(of(&[1.0; 8], 1.0).wanders(), Some(false));
    }

    #[test]
    fn a_slide_wanders_and_a_flutter_does_not() {
        let slide: std::vec::Vec<f32> = (0..16).map(|i| i as f32).collect();
        assert_eq!(of(&slide, 0.1).wanders(), Some(true));
        let flutter: std::vec::Vec<f32> = (0..16).map(|i| (i % 2) as f32).collect();
        assert_eq!(of(&flutter, 0.1).wanders(), Some(false));
    }

    proptest! {
        #[test]
        fn when_it_arrives_does_not_matter(times in prop::collection::vec(-10.0f32..10.0, 2..40), later in 0.0f32..100.0) {
            // Whole multiples of what an `f32` resolves at 100 ns.
            let grid = |t: f32| (t * 1024.0).round() / 1024.0;
            let times: std::vec::Vec<f32> = times.into_iter().map(grid).collect();
            let moved: std::vec::Vec<f32> = times.iter().map(|t| t + grid(later)).collect();
            let (a, b) = (of(&times, 0.5).jitter().unwrap(), of(&moved, 0.5).jitter().unwrap());
            prop_assert!((a.rms - b.rms).abs().as_ns() < 2e-2);
        }
    }
}
