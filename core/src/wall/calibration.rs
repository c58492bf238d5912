//! Blocks to zero and velocity; and does the gauge still read a block right?
//!
//! Zero and velocity of two blocks have errors that hang together, and both are *effective*: what beam and couplant film do
//! to the blocks' echoes goes into them. They read right between the blocks, with the same probe and span; beyond them the
//! uncertainty grows with the distance, however good the blocks ([`crate::wall::uncertainty::budget`] counts that, and what
//! is left of beam and film). **The block is not the part**: what the part's velocity may differ by is for the user to
//! state, [`Material::part_velocity_standard_uncertainty`].
//!
//! Block times are the arrivals that the span uses: first back wall after the transmission trigger, or after the
//! interface echo behind a delay line; less what the V of a dual-element probe and the spreading of the beam do to them
//! ([`Gauge::path_deviation`](crate::Gauge::path_deviation)), for these are taken off every reading too. The errors of blocks are taken as independent of each other.

use crate::math;
use crate::outcome::{Doubt, Doubts};
use crate::setup::{Material, Zero};
use crate::units::{Metres, MetresPerSecond, Seconds};
use core::fmt;

/// A block of known thickness and what was measured on it.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Block {
    /// Thickness, from its certificate or a micrometer.
    pub thickness: Metres,
    /// Standard uncertainty of the thickness (k = 1).
    pub thickness_uncertainty: Metres,
    /// Time of the back wall.
    pub time: Seconds,
    /// Standard uncertainty of the time (k = 1).
    pub time_uncertainty: Seconds,
}

/// Differences and times must be this many times their standard uncertainty: then the velocity is known to 10 %, and
/// first-order propagation of uncertainty is good to about 1 %.
const CLEARLY: f32 = 10.0;

/// Nothing that a wall is made of is slower: soft rubber and gases.
const SLOWEST: f32 = 300.0;

/// Nothing that a wall is made of is faster: diamond has 18 km/s.
const FASTEST: f32 = 20_000.0;

impl Block {
    /// Thickness and uncertainties must be usable numbers.
    fn check(&self) -> Result<(), CalibrationError> {
        let numbers = self.thickness.is_finite()
            && self.thickness_uncertainty.is_finite()
            && self.time.is_finite()
            && self.time_uncertainty.is_finite();
        if !numbers {
            return Err(CalibrationError::NotANumber);
        }
        if self.thickness <= Metres::ZERO {
            return Err(CalibrationError::Thickness);
        }
        if self.thickness_uncertainty < Metres::ZERO || self.time_uncertainty < Seconds::ZERO {
            return Err(CalibrationError::Uncertainty);
        }
        Ok(())
    }

    /// Variance in s² of time minus round trip: what the block contributes as a whole.
    fn variance(&self, velocity: MetresPerSecond) -> f32 {
        let thickness = (self.thickness_uncertainty * 2.0 / velocity).get();
        let time = self.time_uncertainty.get();
        thickness * thickness + time * time
    }
}

/// The zero from one block at a velocity that is known: t0 = t - 2 d / c.
///
/// u²(t0) = u²(t) + (2 u(d) / c)² + (2 d u(c) / c²)². The last part makes the zero's error follow the velocity's, which
/// the correlation says: at the block's own thickness the two cancel.
///
/// # Errors
/// A block or a velocity that is not usable.
pub fn zero_at_known_velocity(block: &Block, material: &Material) -> Result<Zero, CalibrationError> {
    block.check()?;
    let velocity = plausible(material.velocity)?;
    let doubt = material.velocity_standard_uncertainty / velocity;
    if !doubt.is_finite() {
        return Err(CalibrationError::NotANumber);
    }
    if doubt < 0.0 {
        return Err(CalibrationError::Uncertainty);
    }
    let trip = block.thickness * 2.0 / velocity;
    let from_velocity = trip.get() * doubt;
    let uncertainty = math::sqrt(block.variance(velocity) + from_velocity * from_velocity);
    finite_zero(Zero {
        offset: block.time - trip,
        standard_uncertainty: Seconds::new(uncertainty),
        velocity_correlation: share(from_velocity, uncertainty),
        learned_on: None,
    })
}

/// Zero and velocity from two blocks: c = 2 (d2 - d1) / (t2 - t1), t0 = t1 - 2 d1 / c. The order does not matter.
///
/// With e = error of t - 2 d / c of each block, T the difference of their times and λ = (t1 - t0) / T, the errors are
/// δc / c = (e1 - e2) / T and δt0 = (1 + λ) e1 - λ e2: both fall with the blocks' distance, and their correlation is
/// strongly positive.
///
/// What the beam does to the blocks goes into both, unless the blocks' times are those of straight ways (less
/// [`Gauge::path_deviation`](crate::Gauge::path_deviation)): the velocity is then the one that reads right between the
/// blocks with this probe and span, and not a property of the metal (6 mm, 5 MHz, blocks of 5 and 25 mm of steel: 0.35 %
/// too high).
///
/// # Errors
/// Blocks that are not usable, or so alike that they do not determine both.
pub fn zero_and_velocity(one: &Block, other: &Block) -> Result<(Zero, Material), CalibrationError> {
    one.check()?;
    other.check()?;
    let (thin, thick) = if other.thickness < one.thickness {
        (other, one)
    } else {
        (one, other)
    };
    let thickness = (thick.thickness - thin.thickness).get();
    let time = (thick.time - thin.time).get();
    if thickness <= 0.0 {
        return Err(CalibrationError::SameThickness);
    }
    if time == 0.0 {
        return Err(CalibrationError::SameTime);
    }
    if time < 0.0 {
        return Err(CalibrationError::ThickerIsEarlier);
    }
    let of_two = |a: f32, b: f32| math::sqrt(a * a + b * b);
    if thickness < CLEARLY * of_two(thin.thickness_uncertainty.get(), thick.thickness_uncertainty.get()) {
        return Err(CalibrationError::ThicknessesTooClose);
    }
    if time < CLEARLY * of_two(thin.time_uncertainty.get(), thick.time_uncertainty.get()) {
        return Err(CalibrationError::TimesTooClose);
    }
    let velocity = plausible(MetresPerSecond::new(2.0 * thickness / time))?;
    // 2 d1 / c from the ratio of the thicknesses: one rounding less than through the velocity.
    let trip = time * (thin.thickness.get() / thickness);
    let lambda = trip / time;
    // As roots, because the squares of picoseconds are close to what f32 holds.
    let (e1, e2) = (
        math::sqrt(thin.variance(velocity)),
        math::sqrt(thick.variance(velocity)),
    );
    let relative = of_two(e1, e2) / time;
    let (near, far) = ((1.0 + lambda) * e1, lambda * e2);
    let zero_uncertainty = of_two(near, far);
    let covariance = (near * e1 + far * e2) / time;
    Ok((
        finite_zero(Zero {
            offset: thin.time - Seconds::new(trip),
            standard_uncertainty: Seconds::new(zero_uncertainty),
            velocity_correlation: share(covariance, relative * zero_uncertainty),
            learned_on: None,
        })?,
        Material::new(velocity, velocity * relative),
    ))
}

/// The velocity from one block and a zero: c = 2 d / (t - t0). For the period of a train pass it as the block's time
/// and a zero of nothing.
///
/// u²(c) / c² = u²(d) / d² + [u²(t) + u²(t0)] / (t - t0)². The zero comes back with its correlation to the velocity:
/// whatever it was tied to before no longer counts.
///
/// # Errors
/// A block or a zero that is not usable, or a back wall that does not lie clearly behind the zero.
pub fn velocity_from_thickness(block: &Block, zero: &Zero) -> Result<(Zero, Material), CalibrationError> {
    block.check()?;
    if !(zero.offset.is_finite() && zero.standard_uncertainty.is_finite()) {
        return Err(CalibrationError::NotANumber);
    }
    if zero.standard_uncertainty < Seconds::ZERO {
        return Err(CalibrationError::Uncertainty);
    }
    let trip = block.time - zero.offset;
    if trip <= Seconds::ZERO {
        return Err(CalibrationError::BeforeZero);
    }
    let of_time = block.time_uncertainty / trip;
    let of_zero = zero.standard_uncertainty / trip;
    let of_thickness = block.thickness_uncertainty / block.thickness;
    if of_time * of_time + of_zero * of_zero > 1.0 / (CLEARLY * CLEARLY) {
        return Err(CalibrationError::TimesTooClose);
    }
    if of_thickness > 1.0 / CLEARLY {
        return Err(CalibrationError::ThicknessesTooClose);
    }
    let velocity = plausible(block.thickness * 2.0 / trip)?;
    let relative = math::sqrt(of_time * of_time + of_zero * of_zero + of_thickness * of_thickness);
    let zero = Zero {
        velocity_correlation: share(of_zero, relative),
        ..*zero
    };
    Ok((finite_zero(zero)?, Material::new(velocity, velocity * relative)))
}

/// Does the gauge still read a block as its certificate says?
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct DriftCheck {
    /// Reading less certificate: positive reads too thick.
    pub difference: Metres,
    /// Standard uncertainty of the difference (k = 1): the reading's and the block's, as the root of the sum of squares.
    pub standard_uncertainty: Metres,
    /// k of the expanded uncertainty.
    pub coverage_factor: f32,
}

/// What a [`DriftCheck`] says.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum DriftState {
    /// The difference lies within its expanded uncertainty.
    Within,
    /// It does not: something has changed, or the block is not the one that was named.
    Outside,
    /// The reading has a doubt or is no number: it says nothing about the gauge.
    Undecided,
}

impl DriftState {
    /// One stable word for programs.
    #[must_use]
    pub const fn word(self) -> &'static str {
        match self {
            Self::Within => "within",
            Self::Outside => "outside",
            Self::Undecided => "undecided",
        }
    }

    /// What to do.
    #[must_use]
    pub const fn advice(self) -> &'static str {
        match self {
            Self::Within => "nothing to do",
            Self::Outside => {
                "couple again and repeat, then check the block's name and temperature; if it stays, calibrate again, \
                 and repeat what was read since the last check that was within"
            }
            Self::Undecided => "couple again, or take a block within the calibrated range, and repeat",
        }
    }
}

impl DriftCheck {
    /// Expanded uncertainty of the difference.
    #[must_use]
    pub fn expanded(&self) -> Metres {
        self.standard_uncertainty * self.coverage_factor
    }

    /// The difference in units of its expanded uncertainty, with its sign: beyond ±1 it is outside. (The score E_n of
    /// comparisons, ISO/IEC 17043, from memory.) 0 if there is neither difference nor uncertainty.
    #[must_use]
    pub fn ratio(&self) -> f32 {
        if self.difference == Metres::ZERO {
            0.0
        } else {
            self.difference / self.expanded()
        }
    }

    /// Within or outside; undecided if the reading's `doubts` tell of any, or if something is not a number.
    ///
    /// One doubt does not count against "outside": that the multiples contradict the zero, because on a bare block that is
    /// the drift itself.
    #[must_use]
    pub fn state(&self, doubts: Doubts) -> DriftState {
        let ratio = self.ratio().abs();
        if ratio <= 1.0 && doubts.is_empty() {
            DriftState::Within
        } else if ratio > 1.0 && doubts.without(Doubt::ZeroContradicted).is_empty() {
            DriftState::Outside
        } else {
            DriftState::Undecided
        }
    }
}

/// Compares a reading of a block with its certificate: `known` and `read` are thickness and standard uncertainty (k = 1).
///
/// The reading must be made with a set-up for blocks ([`Material::of_blocks`]), or what the part may differ by would hide
/// a drift. A block that the calibration itself used has its error in both: the check is then less strict than it could
/// be, and shows drift but no error of that block. Take another one now and then.
#[must_use]
pub fn drift_check(known: (Metres, Metres), read: (Metres, Metres), coverage_factor: f32) -> DriftCheck {
    let (a, b) = (known.1.get(), read.1.get());
    DriftCheck {
        difference: read.0 - known.0,
        standard_uncertainty: Metres::new(math::sqrt(a * a + b * b)),
        coverage_factor,
    }
}

/// Refuses what has left the range of numbers on the way: microseconds squared fit, years do not.
fn finite_zero(zero: Zero) -> Result<Zero, CalibrationError> {
    if zero.offset.is_finite() && zero.standard_uncertainty.is_finite() && zero.velocity_correlation.is_finite() {
        Ok(zero)
    } else {
        Err(CalibrationError::NotANumber)
    }
}

/// Refuses a velocity that no wall has.
fn plausible(velocity: MetresPerSecond) -> Result<MetresPerSecond, CalibrationError> {
    if !velocity.is_finite() {
        Err(CalibrationError::NotANumber)
    } else if velocity.get() < SLOWEST || velocity.get() > FASTEST {
        Err(CalibrationError::Velocity { got: velocity })
    } else {
        Ok(velocity)
    }
}

/// `part / whole` as a correlation: 0 if there is nothing, and never beyond 1 by rounding.
fn share(part: f32, whole: f32) -> f32 {
    if whole > 0.0 {
        math::clamp(part / whole, -1.0, 1.0)
    } else {
        0.0
    }
}

/// Why blocks do not determine what is asked.
#[derive(Clone, Copy, Debug, PartialEq)]
#[non_exhaustive]
pub enum CalibrationError {
    /// Something is infinite or not a number.
    NotANumber,
    /// A block's thickness is not positive.
    Thickness,
    /// An uncertainty is negative.
    Uncertainty,
    /// Both blocks have the same thickness.
    SameThickness,
    /// Both blocks gave the same time.
    SameTime,
    /// The thicker block's back wall came first.
    ThickerIsEarlier,
    /// The difference of thickness (or the only thickness) is less than ten times its uncertainty.
    ThicknessesTooClose,
    /// The difference of the times is less than ten times its uncertainty.
    TimesTooClose,
    /// The back wall does not lie behind the zero.
    BeforeZero,
    /// No wall has this velocity.
    Velocity {
        /// What the blocks would say.
        got: MetresPerSecond,
    },
}

impl CalibrationError {
    /// What is wrong and what to do, in one sentence.
    #[must_use]
    pub const fn sentence(&self) -> &'static str {
        match self {
            Self::NotANumber => "a thickness, time, velocity or uncertainty is not a number: measure the block again",
            Self::Thickness => "a block's thickness must be positive: correct it",
            Self::Uncertainty => "uncertainties must be zero or positive: correct them",
            Self::SameThickness => {
                "both blocks are equally thick, which cannot determine zero and velocity: take a second thickness"
            }
            Self::SameTime => {
                "both blocks gave the same time, which cannot determine zero and velocity: check which echo was read"
            }
            Self::ThickerIsEarlier => {
                "the thicker block's echo came first: check that blocks and records belong together"
            }
            Self::ThicknessesTooClose => {
                "the thickness does not stand clear of its uncertainty: take blocks further apart or known better"
            }
            Self::TimesTooClose => {
                "the time does not stand clear of its uncertainty: take blocks further apart or average more shots"
            }
            Self::BeforeZero => "the block's echo does not lie behind the zero: learn the zero first",
            Self::Velocity { .. } => {
                "no wall has this velocity: check the thicknesses' unit, and that blocks and records belong together"
            }
        }
    }
}

impl fmt::Display for CalibrationError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(self.sentence())?;
        if let Self::Velocity { got } = self {
            write!(f, " (got {got})")?;
        }
        Ok(())
    }
}

impl core::error::Error for CalibrationError {}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;
    use std::string::ToString;

    const STEEL: MetresPerSecond = MetresPerSecond::new(5920.0);

    fn block(mm: f32, u_um: f32, us: f32, u_ns: f32) -> Block {
        Block {
            thickness: Metres::from_mm(mm),
            thickness_uncertainty: Metres::new(u_um * 1e-6),
            time: Seconds::from_us(us),
            time_uncertainty: Seconds::from_ns(u_ns),
        }
    }

    /// A block that reads right at 5920 m/s with a zero of half a microsecond.
    fn right(mm: f32) -> Block {
        block(mm, 2.0, 0.5 + 2.0 * mm / 5.92, 1.0)
    }

    #[test]
    fn val_two_blocks() {
        // 5 and 25 mm, 2 µm and 1 ns each: u(c), u(t0) and their correlation by GTC (automatic propagation).
        for (one, other) in [(5.0, 25.0), (25.0, 5.0)] {
            let (zero, material) = zero_and_velocity(&right(one), &right(other)).unwrap();
            assert!((material.velocity.get() - 5920.0).abs() < 2e-3);
            assert!((material.velocity_standard_uncertainty.get() - 1.495_406_5).abs() < 5e-6);
            assert!((zero.offset.as_ns() - 500.0).abs() < 1e-3);
            assert!((zero.standard_uncertainty.as_ns() - 1.538_464_7).abs() < 2e-6);
            assert!((zero.velocity_correlation - 0.832_050_3).abs() < 2e-6);
        }
    }

    #[test]
    fn val_one_block() {
        // By hand: 10 mm at 5920(17) m/s: 2 d / c = 3.378378 µs, of which 17/5920 is 9.701424 ns; 2 µm are
        // 0.675676 ns; with 1 ns of timing the root of the squares is 9.776203 ns.
        let material = Material::new(STEEL, MetresPerSecond::new(17.0));
        let zero = zero_at_known_velocity(&right(10.0), &material).unwrap();
        assert!((zero.offset.as_ns() - 500.0).abs() < 1e-3);
        assert!((zero.standard_uncertainty.as_ns() - 9.776_203).abs() < 1e-4, "{zero:?}");
        assert!((zero.velocity_correlation - 9.701_424 / 9.776_203).abs() < 1e-5);
        // A velocity without doubt ties nothing.
        let exact = zero_at_known_velocity(&right(10.0), &Material::new(STEEL, MetresPerSecond::ZERO)).unwrap();
        assert_eq!(exact.velocity_correlation, 0.0);
    }

    #[test]
    fn val_velocity() {
        // u(c)/c by hand: 2 µm / 10 mm, 1 ns and 2 ns in 3.378378 µs: root of squares 6.914333e-4.
        let given = Zero {
            velocity_correlation: -0.5,
            ..Zero::new(Seconds::from_us(0.5), Seconds::from_ns(2.0))
        };
        let (zero, material) = velocity_from_thickness(&right(10.0), &given).unwrap();
        assert!((material.velocity.get() - 5920.0).abs() < 2e-3);
        let relative = material.velocity_standard_uncertainty / material.velocity;
        assert!((relative - 6.914_333e-4).abs() < 1e-8, "{relative}");
        assert!((zero.velocity_correlation - 5.92e-4 / 6.914_333e-4).abs() < 1e-4);
        assert_eq!(zero.offset, given.offset);
    }

    #[test]
    fn val_drift_check() {
        // E_n = (x - X) / sqrt(U_x² + U_X²) (ISO/IEC 17043, from memory), by hand: 10 um over 2 sqrt(3² + 4²) um is 1.
        let um = |um: f32| Metres::new(um * 1e-6);
        let known = (um(10_000.0), um(3.0));
        let check = |read: f32| drift_check(known, (um(read), um(4.0)), 2.0);
        assert!((check(10_010.0).ratio() - 1.0).abs() < 1e-3 && (check(9_980.0).ratio() + 2.0).abs() < 1e-3);
        assert!((check(10_005.0).expanded().get() * 1e6 - 10.0).abs() < 1e-4);
        assert_eq!(check(10_009.0).state(Doubts::NONE), DriftState::Within);
        assert_eq!(check(9_989.0).state(Doubts::NONE), DriftState::Outside);
        let mut doubts = Doubts::NONE;
        doubts.raise(Doubt::ZeroContradicted);
        assert_eq!(check(10_000.0).state(doubts), DriftState::Undecided);
        assert_eq!(check(10_030.0).state(doubts), DriftState::Outside);
        doubts.raise(Doubt::LowSignal);
        assert_eq!(check(10_030.0).state(doubts), DriftState::Undecided);
        assert_eq!(check(f32::NAN).state(Doubts::NONE), DriftState::Undecided);
        let exact = drift_check((um(5.0), Metres::ZERO), (um(5.0), Metres::ZERO), 2.0);
        assert_eq!((exact.ratio(), exact.state(Doubts::NONE)), (0.0, DriftState::Within));
        let off = drift_check((um(5.0), Metres::ZERO), (um(6.0), Metres::ZERO), 2.0);
        assert_eq!(off.state(Doubts::NONE), DriftState::Outside);
    }

    #[test]
    fn what_blocks_cannot_determine_is_refused() {
        use CalibrationError as E;
        let two = |a, b| zero_and_velocity(&a, &b).unwrap_err();
        assert_eq!(two(right(5.0), right(5.0)), E::SameThickness);
        assert_eq!(
            two(right(5.0), block(25.0, 2.0, right(5.0).time.as_us(), 1.0)),
            E::SameTime
        );
        assert_eq!(
            two(block(5.0, 2.0, 9.0, 1.0), block(25.0, 2.0, 2.0, 1.0)),
            E::ThickerIsEarlier
        );
        assert_eq!(
            two(block(5.0, 50.0, 2.0, 1.0), block(5.1, 50.0, 2.1, 1.0)),
            E::ThicknessesTooClose
        );
        assert_eq!(
            two(block(5.0, 0.0, 2.0, 30.0), block(5.1, 0.0, 2.1, 30.0)),
            E::TimesTooClose
        );
        assert_eq!(two(block(f32::NAN, 1.0, 2.0, 1.0), right(5.0)), E::NotANumber);
        assert_eq!(two(right(5.0), block(6.0, 1.0, 2.0, f32::INFINITY)), E::NotANumber);
        assert_eq!(two(block(-1.0, 1.0, 2.0, 1.0), right(5.0)), E::Thickness);
        assert_eq!(two(block(1.0, -1.0, 2.0, 1.0), right(5.0)), E::Uncertainty);
        assert!(matches!(
            two(block(5.0, 1.0, 2.0, 0.1), block(25.0, 1.0, 2.1, 0.1)),
            E::Velocity { .. }
        ));
        let stopped = Material::new(MetresPerSecond::ZERO, MetresPerSecond::ZERO);
        assert!(matches!(
            zero_at_known_velocity(&right(5.0), &stopped),
            Err(E::Velocity { .. })
        ));
        let backwards = Material::new(STEEL, MetresPerSecond::new(-1.0));
        assert_eq!(zero_at_known_velocity(&right(5.0), &backwards), Err(E::Uncertainty));
        let behind = Zero::new(Seconds::from_us(50.0), Seconds::ZERO);
        assert_eq!(velocity_from_thickness(&right(5.0), &behind), Err(E::BeforeZero));
        let vague = Zero::new(Seconds::ZERO, Seconds::from_us(1.0));
        assert_eq!(velocity_from_thickness(&right(5.0), &vague), Err(E::TimesTooClose));
        let text = E::Velocity { got: STEEL }.to_string();
        assert!(text.contains("check") && text.ends_with("(got 5920 m/s)"), "{text}");
    }

    proptest! {
        #[test]
        fn two_right_blocks_give_back_what_made_them(
            c in 1000.0f32..9000.0, zero_ns in -500.0f32..5000.0, thin in 0.5f32..20.0, more in 2.0f32..80.0,
        ) {
            let at = |mm: f32| block(mm, 1.0, zero_ns * 1e-3 + 2e3 * mm / c, 1.0);
            let (zero, material) = zero_and_velocity(&at(thin), &at(thin + more)).unwrap();
            // Both errors come from rounding the times to f32: far below the stated uncertainty.
            prop_assert!((material.velocity.get() - c).abs() < 0.2 * material.velocity_standard_uncertainty.get());
            prop_assert!((zero.offset.as_ns() - zero_ns).abs() < 0.2 * zero.standard_uncertainty.as_ns());
            prop_assert!((0.0..=1.0).contains(&zero.velocity_correlation));
        }

        #[test]
        fn any_input_gives_an_answer_or_a_refusal(a in any::<[f32; 4]>(), b in any::<[f32; 4]>()) {
            let make = |v: [f32; 4]| Block {
                thickness: Metres::new(v[0]),
                thickness_uncertainty: Metres::new(v[1]),
                time: Seconds::new(v[2]),
                time_uncertainty: Seconds::new(v[3]),
            };
            if let Ok((zero, material)) = zero_and_velocity(&make(a), &make(b)) {
                prop_assert!(material.velocity.get() >= SLOWEST && zero.velocity_correlation.abs() <= 1.0);
            }
        }
    }
}
