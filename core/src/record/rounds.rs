//! Two rounds of one place: their mean, and their difference, in which nothing is left of what both have.
//!
//! **In**: two records of the same length, format and clock, one of an earlier and one of a later round of shots: single shots,
//! averages of as many shots each, interleaved records. **Out**: [`TwoRounds`], made in the memory of the two. Echoes, grain and
//! whatever else comes back the same way each time cancel in the difference; noise does not, and has the same size
//! there as in the mean. So the difference tells the noise of a record that is full of echoes, and which echoes
//! only one of the rounds has: [`crate::Gauge::measure_two_rounds`] uses both.
//!
//! Not for grain, which both rounds have: as noise of an arrival only a quiet stretch of the mean tells it.

use crate::record::average::AverageError;
use crate::record::{AdcFormat, Record, SampleClock};

/// Mean and half difference of two rounds.
#[derive(Clone, Copy, Debug)]
pub struct TwoRounds<'r> {
    mean: Record<'r>,
    difference: Record<'r>,
}

impl<'r> TwoRounds<'r> {
    /// Turns the earlier round into the mean and the later one into the difference (later less earlier), in place. `format` and
    /// `clock` are those of either round.
    ///
    /// As long as the sums fit 16 bits they are the codes, exactly; beyond that half of them, rounded. What is clipped in
    /// either round is clipped in the mean, and 0 in the difference.
    ///
    /// # Errors
    /// [`AverageError::LengthChanged`], or [`AverageError::Nothing`] if there are no samples.
    pub fn new(
        earlier: &'r mut [i16],
        later: &'r mut [i16],
        format: AdcFormat,
        clock: SampleClock,
    ) -> Result<Self, AverageError> {
        let number = |length: usize| u32::try_from(length).unwrap_or(u32::MAX);
        if earlier.len() != later.len() {
            return Err(AverageError::LengthChanged {
                expected: number(earlier.len()),
                got: number(later.len()),
            });
        }
        if earlier.is_empty() {
            return Err(AverageError::Nothing);
        }
        let whole = format.full_scale() <= 16_384.0;
        let both = AdcFormat {
            codes_per_step: if whole { 2.0 } else { 1.0 } * format.codes_per_step,
            shots: format.shots.saturating_mul(2),
            ..format
        };
        let (upper, lower) = (format.upper_rail(), format.lower_rail());
        let (highest, lowest) = (both.upper_rail(), both.lower_rail());
        for (a, b) in earlier.iter_mut().zip(later.iter_mut()) {
            let (x, y) = (i32::from(*a), i32::from(*b));
            (*a, *b) = if *a >= upper || *b >= upper {
                (highest, 0)
            } else if *a <= lower || *b <= lower {
                (lowest, 0)
            } else if whole {
                ((x + y) as i16, (y - x) as i16)
            } else {
                // Half up in the one, half down in the other: neither is on the whole too high.
                (((x + y + 1) >> 1) as i16, ((y - x) >> 1) as i16)
            };
        }
        Ok(Self {
            mean: Record::new(earlier, both, clock),
            difference: Record::new(later, both, clock),
        })
    }

    /// The mean of the two rounds: an average of all their shots.
    #[must_use]
    pub const fn mean(&self) -> Record<'r> {
        self.mean
    }

    /// Half of the later round less the earlier one, in the codes of the mean.
    #[must_use]
    pub const fn difference(&self) -> Record<'r> {
        self.difference
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::units::Hertz;

    fn clock() -> SampleClock {
        SampleClock::new(Hertz::from_mhz(50.0))
    }

    #[test]
    fn sums_that_fit_are_exact_and_the_rest_is_halved() {
        let (mut a, mut b) = ([3, -1000, 2047, 5, -2048], [4, -900, 2, 2047, 7]);
        let rounds = TwoRounds::new(&mut a, &mut b, AdcFormat::signed(12), clock()).unwrap();
        let format = rounds.mean().format();
        assert_eq!((format.shots, format.codes_per_step), (2, 2.0));
        let (upper, lower) = (format.upper_rail(), format.lower_rail());
        assert_eq!(rounds.mean().codes(), [7, -1900, upper, upper, lower]);
        assert_eq!(rounds.difference().codes(), [1, 100, 0, 0, 0]);
        // Sixteen bits are full: halves, and still all 65536 differences fit.
        let (mut a, mut b) = ([3, 32_766, -32_767], [4, -32_767, 32_766]);
        let rounds = TwoRounds::new(&mut a, &mut b, AdcFormat::signed(16), clock()).unwrap();
        assert_eq!(rounds.mean().format().codes_per_step, 1.0);
        assert_eq!(rounds.mean().codes(), [4, 0, 0]);
        assert_eq!(rounds.difference().codes(), [0, -32_767, 32_766]);
        assert_eq!(rounds.difference().format(), rounds.mean().format());
    }

    #[test]
    fn what_does_not_belong_together_is_refused() {
        let (mut a, mut b) = ([0i16; 3], [0i16; 4]);
        let found = TwoRounds::new(&mut a, &mut b, AdcFormat::signed(12), clock()).map(|_| ());
        assert_eq!(found, Err(AverageError::LengthChanged { expected: 3, got: 4 }));
        let found = TwoRounds::new(&mut [], &mut [], AdcFormat::signed(12), clock()).map(|_| ());
        assert_eq!(found, Err(AverageError::Nothing));
    }
}
