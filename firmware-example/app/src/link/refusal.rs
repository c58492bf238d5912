//! Refusals as the link carries them: a code, and the evidence to the last bit.

use halfpulse::{Hertz, Metres, NoReading, Seconds};
use serde::{Deserialize, Serialize};

/// A refusal: which one, and up to three numbers of evidence (bits of the `f32`, or the whole number).
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct Refusal {
    /// Which refusal; 0 for one that this version of the protocol does not know.
    pub code: u8,
    /// Its evidence in the order of the core's fields; 0 where there is none.
    pub evidence: [u32; 3],
}

impl Refusal {
    /// A refusal of the core as the link carries it.
    #[must_use]
    pub fn of(refusal: &NoReading) -> Self {
        let bits = |value: f32| value.to_bits();
        let (code, evidence) = match *refusal {
            NoReading::SampleRateMismatch { expected, got } => (1, [bits(expected.get()), bits(got.get()), 0]),
            NoReading::RecordTooLong { capacity, got } => (2, [capacity, got, 0]),
            NoReading::RecordTooShort { needed, got } => (3, [needed, got, 0]),
            NoReading::WindowOutsideRecord => (4, [0; 3]),
            NoReading::DeadReceiver => (5, [0; 3]),
            NoReading::StuckBits { mask } => (6, [u32::from(mask), 0, 0]),
            NoReading::Clipped { per_mille } => (7, [u32::from(per_mille), 0, 0]),
            NoReading::NoEcho { noise } => (8, [bits(noise), 0, 0]),
            NoReading::OnlyTransmissionPulse => (9, [0; 3]),
            NoReading::NotCoupled => (10, [0; 3]),
            NoReading::NoInterfaceEcho => (11, [0; 3]),
            NoReading::OneEchoWhereTwoAreNeeded { at } => (12, [bits(at.get()), 0, 0]),
            NoReading::Ambiguous { candidates, best, next } => {
                (13, [u32::from(candidates), bits(best.get()), bits(next.get())])
            }
            NoReading::BelowMinimum { minimum } => (14, [bits(minimum.get()), 0, 0]),
            NoReading::NotThePulse { unexplained_percent } => (15, [u32::from(unexplained_percent), 0, 0]),
            NoReading::Unsteady { echoes, moved } => (16, [u32::from(echoes), bits(moved.get()), 0]),
            _ => (0, [0; 3]),
        };
        Self { code, evidence }
    }

    /// The core's refusal, with its words and advice; `None` for a code that is not known here.
    #[must_use]
    pub fn refusal(&self) -> Option<NoReading> {
        let [a, b, c] = self.evidence;
        let number = f32::from_bits;
        Some(match self.code {
            1 => NoReading::SampleRateMismatch {
                expected: Hertz::new(number(a)),
                got: Hertz::new(number(b)),
            },
            2 => NoReading::RecordTooLong { capacity: a, got: b },
            3 => NoReading::RecordTooShort { needed: a, got: b },
            4 => NoReading::WindowOutsideRecord,
            5 => NoReading::DeadReceiver,
            6 => NoReading::StuckBits {
                mask: u16::try_from(a).ok()?,
            },
            7 => NoReading::Clipped {
                per_mille: u16::try_from(a).ok()?,
            },
            8 => NoReading::NoEcho { noise: number(a) },
            9 => NoReading::OnlyTransmissionPulse,
            10 => NoReading::NotCoupled,
            11 => NoReading::NoInterfaceEcho,
            12 => NoReading::OneEchoWhereTwoAreNeeded {
                at: Seconds::new(number(a)),
            },
            13 => NoReading::Ambiguous {
                candidates: u8::try_from(a).ok()?,
                best: Metres::new(number(b)),
                next: Metres::new(number(c)),
            },
            14 => NoReading::BelowMinimum {
                minimum: Metres::new(number(a)),
            },
            15 => NoReading::NotThePulse {
                unexplained_percent: u16::try_from(a).ok()?,
            },
            16 => NoReading::Unsteady {
                echoes: u8::try_from(a).ok()?,
                moved: Metres::new(number(b)),
            },
            _ => return None,
        })
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn every_code_comes_back_as_it_went() {
        let mut known = 0;
        for code in 1..=255u8 {
            let sent = Refusal {
                code,
                evidence: [7, 8, 9],
            };
            let Some(refusal) = sent.refusal() else { continue };
            let back = Refusal::of(&refusal);
            assert_eq!(back.code, code);
            assert!(
                back.evidence
                    .iter()
                    .zip([7, 8, 9])
                    .all(|(&got, sent)| got == sent || got == 0)
            );
            assert_eq!(back.refusal(), Some(refusal));
            known += 1;
        }
        assert_eq!(known, 16);
    }
}
