//! What can come of a measurement besides a number: a refusal with its evidence, or doubts.
//!
//! The two are never mixed with set-up errors ([`crate::setup::SetupError`]). A refusal is a normal
//! outcome, to be counted and shown; a doubt is a flag on a valid reading, raised only where what it
//! names could move the reading beyond its stated uncertainty.

use crate::units::{Hertz, Metres, Seconds};
use core::fmt;

/// Why there is no reading.
#[derive(Clone, Copy, Debug, PartialEq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum NoReading {
    /// The record does not come from the sample clock that the set-up names.
    SampleRateMismatch {
        /// What the set-up says.
        expected: Hertz,
        /// What the record says.
        got: Hertz,
    },
    /// The record is longer than the gauge's scratch memory.
    RecordTooLong {
        /// Samples that the scratch memory holds.
        capacity: u32,
        /// Samples in the record.
        got: u32,
    },
    /// The part of the record inside the window is shorter than two reference pulses.
    RecordTooShort {
        /// Samples needed.
        needed: u32,
        /// Samples there.
        got: u32,
    },
    /// The window and the record have no sample in common.
    WindowOutsideRecord,
    /// Every code is the same: the receiver, its supply or the converter is dead.
    DeadReceiver,
    /// A bit of the converter never changes although the codes use its neighbours.
    StuckBits {
        /// The bits that never change, as a mask over the code.
        mask: u16,
    },
    /// Too many samples at the converter's limits: lower the gain.
    Clipped {
        /// Share of the window's samples that are clipped, in thousandths.
        per_mille: u16,
    },
    /// Nothing rises above the noise.
    NoEcho {
        /// Root mean square of the noise in codes.
        noise: f32,
    },
    /// Only the transmission pulse is there: the probe is not coupled, or the part absorbs everything.
    OnlyTransmissionPulse,
    /// Only the interface echo of the delay line is there: the probe is not coupled to the part.
    NotCoupled,
    /// No interface echo where the span needs one.
    NoInterfaceEcho,
    /// One back-wall echo, but the span needs two.
    OneEchoWhereTwoAreNeeded {
        /// When it arrived.
        at: Seconds,
    },
    /// What would be the wall's echoes does not look like the pulse: spikes, ringing, interference.
    NotThePulse {
        /// Energy that the fitted pulse leaves unexplained over what it explains, in per cent.
        unexplained_percent: u16,
    },
    /// More than one wall explains the echoes about as well.
    Ambiguous {
        /// How many explanations are close to the best.
        candidates: u8,
        /// The best explanation's thickness.
        best: Metres,
        /// The next one's.
        next: Metres,
    },
    /// The echoes overlap: the wall is thinner than this span can read with this pulse.
    BelowMinimum {
        /// The smallest thickness that the span reads.
        minimum: Metres,
    },
    /// Two rounds of shots of one place do not show the same echoes: something has moved, or what looks like echoes is none.
    Unsteady {
        /// Echoes of the mean that the rounds do not have in common.
        echoes: u8,
        /// How far the reading moved from the one round to the other.
        moved: Metres,
    },
}

impl NoReading {
    /// One stable word for programs.
    #[must_use]
    pub const fn word(&self) -> &'static str {
        match self {
            Self::SampleRateMismatch { .. } => "sample-rate-mismatch",
            Self::RecordTooLong { .. } => "record-too-long",
            Self::RecordTooShort { .. } => "record-too-short",
            Self::WindowOutsideRecord => "window-outside-record",
            Self::DeadReceiver => "dead-receiver",
            Self::StuckBits { .. } => "stuck-bits",
            Self::Clipped { .. } => "clipped",
            Self::NoEcho { .. } => "no-echo",
            Self::OnlyTransmissionPulse => "only-transmission-pulse",
            Self::NotCoupled => "not-coupled",
            Self::NoInterfaceEcho => "no-interface-echo",
            Self::OneEchoWhereTwoAreNeeded { .. } => "one-echo-where-two-are-needed",
            Self::NotThePulse { .. } => "not-the-pulse",
            Self::Ambiguous { .. } => "ambiguous",
            Self::BelowMinimum { .. } => "below-minimum",
            Self::Unsteady { .. } => "unsteady",
        }
    }

    /// What to do about it.
    #[must_use]
    pub const fn advice(&self) -> &'static str {
        match self {
            Self::SampleRateMismatch { .. } => "use the set-up that belongs to this record, or correct its sample rate",
            Self::RecordTooLong { .. } => "give the gauge scratch memory for the longest record, or cut the record",
            Self::RecordTooShort { .. } => "record for longer, or widen the window",
            Self::WindowOutsideRecord => {
                "move the window to where the record is, or correct the time of its first sample"
            }
            Self::DeadReceiver => "check the receiver's supply, the cable and the converter",
            Self::StuckBits { .. } => "check the converter and its data lines",
            Self::Clipped { .. } => "lower the gain until the echoes stay inside the converter's range",
            Self::NoEcho { .. } => "couple the probe, raise the gain or average more shots",
            Self::OnlyTransmissionPulse => "couple the probe to the part",
            Self::NotCoupled => "couple the delay line's end to the part",
            Self::NoInterfaceEcho => "let the window start before the delay line's end, or choose another span",
            Self::OneEchoWhereTwoAreNeeded { .. } => {
                "use a span that needs one echo, record for longer, or raise the gain"
            }
            Self::NotThePulse { .. } => {
                "look at the A-scan for spikes and ringing, or learn the reference pulse with this probe"
            }
            Self::Ambiguous { .. } => "move the probe a little, couple it better, or average more shots",
            Self::BelowMinimum { .. } => "use a delay line or a probe with a shorter pulse",
            Self::Unsteady { .. } => "hold probe and part still, and look for interference",
        }
    }
}

impl fmt::Display for NoReading {
    /// The reason with its evidence, then the advice.
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match *self {
            Self::SampleRateMismatch { expected, got } => {
                write!(f, "the record was sampled at {got}, the set-up says {expected}")?;
            }
            Self::RecordTooLong { capacity, got } => {
                write!(f, "the record has {got} samples, the scratch memory holds {capacity}")?;
            }
            Self::RecordTooShort { needed, got } => {
                write!(f, "{got} samples inside the window, at least {needed} are needed")?;
            }
            Self::WindowOutsideRecord => f.write_str("window and record do not overlap")?,
            Self::DeadReceiver => f.write_str("all samples are equal")?,
            Self::StuckBits { mask } => write!(f, "bits {mask:#06x} of the codes never change")?,
            Self::Clipped { per_mille } => {
                write!(f, "{}.{} % of the window is clipped", per_mille / 10, per_mille % 10)?;
            }
            Self::NoEcho { noise } => {
                let tenths = crate::math::round_to_i32(noise * 10.0).unsigned_abs();
                write!(f, "nothing above the noise ({}.{} codes rms)", tenths / 10, tenths % 10)?;
            }
            Self::OnlyTransmissionPulse => f.write_str("only the transmission pulse, no echo")?,
            Self::NotCoupled => f.write_str("only the interface echo, no back wall")?,
            Self::NoInterfaceEcho => f.write_str("no interface echo in the window")?,
            Self::OneEchoWhereTwoAreNeeded { at } => {
                write!(f, "one back-wall echo at {at}, the span needs two")?;
            }
            Self::NotThePulse { unexplained_percent } => {
                write!(
                    f,
                    "what came back is not the pulse: {unexplained_percent} % as much left over as explained"
                )?;
            }
            Self::Ambiguous { candidates, best, next } => {
                write!(
                    f,
                    "{candidates} walls explain the echoes about as well, {best} and {next} best"
                )?;
            }
            Self::BelowMinimum { minimum } => write!(f, "the echoes overlap: thinner than {minimum}")?,
            Self::Unsteady { echoes: 0, moved } => write!(f, "the wall moved by {moved} between two rounds of shots")?,
            Self::Unsteady { echoes, .. } => {
                write!(f, "{echoes} of the echoes are not the same in two rounds of shots")?;
            }
        }
        write!(f, "; {}", self.advice())
    }
}

impl core::error::Error for NoReading {}

macro_rules! doubts {
    ($($(#[$meta:meta])* $name:ident = $bit:literal, $word:literal, $advice:literal;)*) => {
        /// One reason to look twice at a reading.
        #[derive(Clone, Copy, Debug, PartialEq, Eq)]
        #[non_exhaustive]
        #[repr(u32)]
        #[cfg_attr(feature = "defmt", derive(defmt::Format))]
        pub enum Doubt {
            $($(#[$meta])* $name = 1 << $bit,)*
        }

        impl Doubt {
            /// Every doubt there is, in the order in which they are shown.
            pub const ALL: &'static [Self] = &[$(Self::$name,)*];

            /// One stable word for programs.
            #[must_use]
            pub const fn word(self) -> &'static str {
                match self { $(Self::$name => $word,)* }
            }

            /// What to do about it.
            #[must_use]
            pub const fn advice(self) -> &'static str {
                match self { $(Self::$name => $advice,)* }
            }
        }
    };
}

doubts! {
    /// The reading rests on the fewest echoes that the span allows.
    FewEchoes = 0, "few-echoes", "move the probe a little and see whether the reading stays";
    /// The wall is close to the thinnest that the span can read.
    NearMinimum = 1, "near-minimum", "check with a delay line or a shorter pulse";
    /// The true first echo could lie hidden in the dead zone: the wall could be half or a third.
    PossibleDouble = 2, "possible-double", "check with a delay line or against a known neighbour";
    /// Something else arrives together with the echo and could have moved it.
    OverlappingEcho = 3, "overlapping-echo", "look at the A-scan: paint, a pit or a lamination under the probe?";
    /// The echoes do not look like the reference pulse, by enough to move the reading.
    PulseMismatch = 4, "pulse-mismatch", "learn the reference pulse on a block with this probe";
    /// The echo is so close to the noise that another cycle could have been read.
    LowSignal = 5, "low-signal", "couple better, raise the gain or average more shots";
    /// Outside the thicknesses that the calibration covered.
    OutsideCalibratedRange = 6, "outside-calibrated-range", "calibrate on blocks that bracket the part";
    /// The element size is not known, and the beam's spreading could have moved the reading.
    BeamUnknown = 7, "beam-unknown", "state the element diameter in the set-up";
    /// A dual-element probe's V-shaped path is not corrected, or could have moved the reading in spite of it.
    VPathUncorrected = 8, "v-path-uncorrected", "state the distance of the elements and their delay blocks in the set-up";
    /// Fewer than four samples a cycle of the centre frequency.
    CoarseSampling = 9, "coarse-sampling", "sample faster, or interleave delayed shots";
    /// Samples near the reading's echoes are clipped.
    ClippedEcho = 10, "clipped-echo", "lower the gain";
    /// First echo and period of the back walls contradict the zero: paint, or a wrong zero?
    ZeroContradicted = 11, "zero-contradicted", "set the zero again on a block, or state the coating";
    /// The echoes are not spaced evenly enough for the multiples of one wall.
    UnevenTrain = 12, "uneven-train", "look at the A-scan: a pit or a tilted back wall under the probe?";
    /// Much of what came back belongs to no multiple of this wall.
    UnexplainedEchoes = 13, "unexplained-echoes", "look at the A-scan: grain, a lamination or interference?";
    /// An echo came back before the back wall: something under the probe may be thinner than the reading.
    EarlierEcho = 15, "earlier-echo", "look at the A-scan: a pit, a step or a lamination above the back wall?";
    /// The part is more curved than a flat probe takes, and that could have moved the reading.
    CurvedSurface = 16, "curved-surface", "take a smaller probe, or one made to fit, and calibrate on a block of the same curvature";
    /// The part's temperature is not stated, and most of the uncertainty is a guess of it.
    TemperatureUnknown = 14, "temperature-unknown", "measure the part's temperature and state it in the set-up";
}

/// A set of doubts.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Default)]
pub struct Doubts(u32);

impl Doubts {
    /// No doubt.
    pub const NONE: Self = Self(0);

    /// Raises a doubt.
    pub fn raise(&mut self, doubt: Doubt) {
        self.0 |= doubt as u32;
    }

    /// Raises a doubt if `condition` holds.
    pub fn raise_if(&mut self, condition: bool, doubt: Doubt) {
        if condition {
            self.raise(doubt);
        }
    }

    /// The same set without this doubt.
    #[must_use]
    pub const fn without(self, doubt: Doubt) -> Self {
        Self(self.0 & !(doubt as u32))
    }

    /// Is this doubt raised?
    #[must_use]
    pub const fn contains(self, doubt: Doubt) -> bool {
        self.0 & (doubt as u32) != 0
    }

    /// No doubt at all.
    #[must_use]
    pub const fn is_empty(self) -> bool {
        self.0 == 0
    }

    /// As bits, for a link or a log.
    #[must_use]
    pub const fn bits(self) -> u32 {
        self.0
    }

    /// The doubts that are raised, in the order in which they are shown.
    pub fn iter(self) -> impl Iterator<Item = Doubt> {
        Doubt::ALL.iter().copied().filter(move |doubt| self.contains(*doubt))
    }
}

#[cfg(feature = "defmt")]
impl defmt::Format for Doubts {
    /// As [`fmt::Display`] does.
    fn format(&self, f: defmt::Formatter<'_>) {
        if self.is_empty() {
            defmt::write!(f, "none");
        }
        for (number, doubt) in self.iter().enumerate() {
            let before = if number > 0 { ", " } else { "" };
            defmt::write!(f, "{=str}{=str}", before, doubt.word());
        }
    }
}

impl fmt::Display for Doubts {
    /// The words, separated by commas; `none` if there is none.
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        if self.is_empty() {
            return f.write_str("none");
        }
        for (number, doubt) in self.iter().enumerate() {
            if number > 0 {
                f.write_str(", ")?;
            }
            f.write_str(doubt.word())?;
        }
        Ok(())
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use std::string::ToString;

    #[test]
    fn every_doubt_has_its_own_bit_word_and_advice() {
        for (i, a) in Doubt::ALL.iter().enumerate() {
            assert_eq!((*a as u32).count_ones(), 1);
            assert!(a.advice().len() > 10);
            for b in &Doubt::ALL[..i] {
                assert!(*a as u32 != *b as u32 && a.word() != b.word());
            }
        }
    }

    #[test]
    fn sets_print_their_words() {
        let mut doubts = Doubts::NONE;
        assert_eq!(doubts.to_string(), "none");
        doubts.raise(Doubt::LowSignal);
        doubts.raise(Doubt::FewEchoes);
        doubts.raise_if(false, Doubt::NearMinimum);
        assert_eq!(doubts.to_string(), "few-echoes, low-signal");
        assert_eq!(doubts.iter().count(), 2);
        assert_eq!(doubts.without(Doubt::LowSignal).to_string(), "few-echoes");
        assert_eq!(doubts.without(Doubt::NearMinimum), doubts);
    }

    #[test]
    fn refusals_print_evidence_and_advice() {
        let text = NoReading::Clipped { per_mille: 123 }.to_string();
        assert!(text.contains("12.3 %") && text.contains("lower the gain"), "{text}");
        let text = NoReading::OneEchoWhereTwoAreNeeded {
            at: Seconds::from_us(1.0),
        }
        .to_string();
        assert!(text.contains("1000.0 ns"), "{text}");
    }
}
