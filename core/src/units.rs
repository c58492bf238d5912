//! Quantities with their units, so that a number cannot be read in the wrong one.
//!
//! Each type wraps a private `f32` in SI units. Only operators that mean something exist:
//! `MetresPerSecond * Seconds` is `Metres`, and `Seconds + Metres` does not compile.
//! Conversions multiply once; nothing here can panic.
//!
//! Precision: at 100 µs one step of an `f32` is 7.3 ps, that is 22 nm of steel. What must not be
//! done is to accumulate `t += period`; [`SamplePosition`] subtracts whole samples first.

use crate::math;
use core::fmt;
use core::ops::{Add, Div, Mul, Neg, Sub};

macro_rules! quantity {
    ($(#[$meta:meta])* $name:ident) => {
        $(#[$meta])*
        #[derive(Clone, Copy, Debug, PartialEq, PartialOrd, Default)]
        #[repr(transparent)]
        #[cfg_attr(feature = "defmt", derive(defmt::Format))]
        pub struct $name(f32);

        impl $name {
            /// Nothing of it.
            pub const ZERO: Self = Self(0.0);

            /// From the SI value.
            #[must_use]
            pub const fn new(si: f32) -> Self {
                Self(si)
            }

            /// The SI value.
            #[must_use]
            pub const fn get(self) -> f32 {
                self.0
            }

            /// Neither infinite nor "not a number".
            #[must_use]
            pub const fn is_finite(self) -> bool {
                self.0.is_finite()
            }

            /// The distance from zero.
            #[must_use]
            pub const fn abs(self) -> Self {
                Self(self.0.abs())
            }
        }

        impl Add for $name {
            type Output = Self;
            fn add(self, other: Self) -> Self {
                Self(self.0 + other.0)
            }
        }
        impl Sub for $name {
            type Output = Self;
            fn sub(self, other: Self) -> Self {
                Self(self.0 - other.0)
            }
        }
        impl Neg for $name {
            type Output = Self;
            fn neg(self) -> Self {
                Self(-self.0)
            }
        }
        impl Mul<f32> for $name {
            type Output = Self;
            fn mul(self, factor: f32) -> Self {
                Self(self.0 * factor)
            }
        }
        impl Div<f32> for $name {
            type Output = Self;
            fn div(self, divisor: f32) -> Self {
                Self(self.0 / divisor)
            }
        }
        impl Div for $name {
            /// A ratio of two like quantities has no unit.
            type Output = f32;
            fn div(self, other: Self) -> f32 {
                self.0 / other.0
            }
        }
    };
}

quantity! {
    /// A time in seconds. Times of a record count from the transmission trigger.
    Seconds
}
quantity! {
    /// A length in metres.
    Metres
}
quantity! {
    /// A sound velocity in metres per second.
    MetresPerSecond
}
quantity! {
    /// A frequency in hertz.
    Hertz
}
quantity! {
    /// A temperature in degrees Celsius; differences are in kelvin.
    Celsius
}
quantity! {
    /// A ratio of amplitudes in decibels: 20 log10(a / b).
    Decibels
}

impl Seconds {
    /// The longer of two times.
    #[must_use]
    pub fn longer(self, other: Self) -> Self {
        if other > self { other } else { self }
    }
    /// From nanoseconds.
    #[must_use]
    pub const fn from_ns(ns: f32) -> Self {
        Self(ns * 1e-9)
    }
    /// From microseconds.
    #[must_use]
    pub const fn from_us(us: f32) -> Self {
        Self(us * 1e-6)
    }
    /// In nanoseconds.
    #[must_use]
    pub const fn as_ns(self) -> f32 {
        self.0 * 1e9
    }
    /// In microseconds.
    #[must_use]
    pub const fn as_us(self) -> f32 {
        self.0 * 1e6
    }
}

impl Metres {
    /// From millimetres.
    #[must_use]
    pub const fn from_mm(mm: f32) -> Self {
        Self(mm * 1e-3)
    }
    /// In millimetres.
    #[must_use]
    pub const fn as_mm(self) -> f32 {
        self.0 * 1e3
    }
    /// In whole micrometres, rounded to the nearest: what a device prints.
    #[must_use]
    pub fn as_um(self) -> i32 {
        math::round_to_i32(self.0 * 1e6)
    }
}

impl Hertz {
    /// From megahertz.
    #[must_use]
    pub const fn from_mhz(mhz: f32) -> Self {
        Self(mhz * 1e6)
    }
    /// In megahertz.
    #[must_use]
    pub const fn as_mhz(self) -> f32 {
        self.0 * 1e-6
    }
    /// The duration of one cycle.
    #[must_use]
    pub const fn period(self) -> Seconds {
        Seconds(1.0 / self.0)
    }
}

impl Decibels {
    /// From a ratio of amplitudes. A ratio of zero or below gives the floor of -200 dB, so that the
    /// result is always a number.
    #[must_use]
    pub fn from_amplitude_ratio(ratio: f32) -> Self {
        if ratio > 1e-10 {
            Self(20.0 * math::log10(ratio))
        } else {
            Self(-200.0)
        }
    }
    /// The ratio of amplitudes.
    #[must_use]
    pub fn as_amplitude_ratio(self) -> f32 {
        math::exp(self.0 * (core::f32::consts::LN_10 / 20.0))
    }
}

impl Mul<Seconds> for MetresPerSecond {
    type Output = Metres;
    fn mul(self, time: Seconds) -> Metres {
        Metres(self.0 * time.0)
    }
}
impl Div<MetresPerSecond> for Metres {
    type Output = Seconds;
    fn div(self, velocity: MetresPerSecond) -> Seconds {
        Seconds(self.0 / velocity.0)
    }
}
impl Div<Seconds> for Metres {
    type Output = MetresPerSecond;
    fn div(self, time: Seconds) -> MetresPerSecond {
        MetresPerSecond(self.0 / time.0)
    }
}
impl Div<Hertz> for MetresPerSecond {
    /// The wavelength.
    type Output = Metres;
    fn div(self, frequency: Hertz) -> Metres {
        Metres(self.0 / frequency.0)
    }
}

/// Writes `scaled / 10^decimals` with integers only: formatting a float would bring panic paths
/// and kilobytes onto a microcontroller.
fn fixed_point(f: &mut fmt::Formatter<'_>, scaled: i32, decimals: u32, unit: &str) -> fmt::Result {
    let sign = if scaled < 0 { "-" } else { "" };
    let magnitude = scaled.unsigned_abs();
    let (whole, part) = match decimals {
        1 => (magnitude / 10, magnitude % 10),
        3 => (magnitude / 1000, magnitude % 1000),
        _ => (magnitude, 0),
    };
    match decimals {
        1 => write!(f, "{sign}{whole}.{part} {unit}"),
        3 => write!(f, "{sign}{whole}.{part:03} {unit}"),
        _ => write!(f, "{sign}{whole} {unit}"),
    }
}

impl fmt::Display for Seconds {
    /// In nanoseconds with one decimal.
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        fixed_point(f, math::round_to_i32(self.0 * 1e10), 1, "ns")
    }
}
impl fmt::Display for Metres {
    /// In millimetres with three decimals.
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        fixed_point(f, math::round_to_i32(self.0 * 1e6), 3, "mm")
    }
}
impl fmt::Display for MetresPerSecond {
    /// In whole metres per second.
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        fixed_point(f, math::round_to_i32(self.0), 0, "m/s")
    }
}
impl fmt::Display for Hertz {
    /// In megahertz with three decimals.
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        fixed_point(f, math::round_to_i32(self.0 * 1e-3), 3, "MHz")
    }
}
impl fmt::Display for Celsius {
    /// In degrees with one decimal.
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        fixed_point(f, math::round_to_i32(self.0 * 10.0), 1, "degC")
    }
}
impl fmt::Display for Decibels {
    /// With one decimal.
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        fixed_point(f, math::round_to_i32(self.0 * 10.0), 1, "dB")
    }
}

/// A place in a record: a whole sample and a fraction of one, counted from the record's first.
///
/// Kept apart because the difference of two nearby places is then exact to the fraction's last
/// bit, however far into the record they lie.
#[derive(Clone, Copy, Debug, PartialEq, Default)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct SamplePosition {
    /// The sample at or before the place.
    pub index: u32,
    /// How far beyond it, from 0 up to (not including) 1 sample.
    pub fraction: f32,
}

impl SamplePosition {
    /// `index + offset` samples, with the offset's whole part moved into the index. A place before
    /// the record's first sample becomes the first sample; an offset that is not a number counts
    /// as zero.
    #[must_use]
    pub fn new(index: u32, offset: f32) -> Self {
        let whole = math::floor(offset);
        let moved = i64::from(index) + i64::from(math::saturating_i32(whole));
        let fraction = offset - whole;
        if moved < 0 || !fraction.is_finite() {
            let index = if fraction.is_finite() { 0 } else { index };
            return Self { index, fraction: 0.0 };
        }
        // `floor` of a tiny negative offset leaves a fraction that rounds to 1.
        let (moved, fraction) = if fraction >= 1.0 {
            (moved + 1, 0.0)
        } else {
            (moved, fraction)
        };
        Self {
            index: u32::try_from(moved).unwrap_or(u32::MAX),
            fraction,
        }
    }

    /// The distance in samples from `earlier` to here; negative if it lies the other way.
    #[must_use]
    pub fn samples_after(self, earlier: Self) -> f32 {
        let whole = i64::from(self.index) - i64::from(earlier.index);
        whole as f32 + (self.fraction - earlier.fraction)
    }

    /// As one number of samples: fine for looking up, too coarse for differences.
    #[must_use]
    pub fn as_samples(self) -> f32 {
        self.index as f32 + self.fraction
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    #[test]
    fn operators_keep_the_units() {
        let path = MetresPerSecond::new(5920.0) * Seconds::from_us(2.0);
        assert!((path.as_mm() - 11.84).abs() < 1e-5);
        assert!(((path / MetresPerSecond::new(5920.0)).as_us() - 2.0).abs() < 1e-6);
        let wavelength = MetresPerSecond::new(5920.0) / Hertz::from_mhz(5.0);
        assert!((wavelength.as_mm() - 1.184).abs() < 1e-6);
        assert!((Hertz::from_mhz(5.0).period().as_ns() - 200.0).abs() < 1e-4);
    }

    #[test]
    fn decibels_go_both_ways_and_have_a_floor() {
        assert!((Decibels::from_amplitude_ratio(10.0).get() - 20.0).abs() < 1e-5);
        assert!((Decibels::new(-6.0).as_amplitude_ratio() - 0.501_187_2).abs() < 1e-6);
        assert_eq!(Decibels::from_amplitude_ratio(0.0).get(), -200.0);
        assert_eq!(Decibels::from_amplitude_ratio(f32::NAN).get(), -200.0);
    }

    #[test]
    fn display_prints_fixed_point() {
        assert_eq!(std::format!("{}", Metres::from_mm(-3.004_6)), "-3.005 mm");
        assert_eq!(std::format!("{}", Seconds::from_ns(12.34)), "12.3 ns");
        assert_eq!(std::format!("{}", MetresPerSecond::new(5920.4)), "5920 m/s");
        assert_eq!(std::format!("{}", Decibels::new(-0.04)), "0.0 dB");
        assert_eq!(std::format!("{}", Metres::new(f32::NAN)), "0.000 mm");
    }

    proptest! {
        #[test]
        fn positions_normalise_without_losing_distance(index in 0u32..1_000_000, offset in -1000.0f32..1000.0) {
            let place = SamplePosition::new(index + 1000, offset);
            prop_assert!((0.0..1.0).contains(&place.fraction));
            let back = place.samples_after(SamplePosition::new(index + 1000, 0.0));
            prop_assert!((back - offset).abs() <= 1e-4);
        }

        #[test]
        fn any_position_is_finite(index in any::<u32>(), offset in any::<f32>()) {
            let place = SamplePosition::new(index, offset);
            prop_assert!((0.0..1.0).contains(&place.fraction));
        }
    }
}
