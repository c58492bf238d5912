//! What comes of one place: a reading, a refusal, or a fault of the hardware. Never two of them.

use crate::link::{EchoPlace, FrontEndFault, LinkCoatingReading, LinkReading, LinkReport, Outcome, Refusal};
use core::fmt;
use halfpulse::{Decibels, Findings, NoReading, Reading};
use heapless::Vec;

/// Why there is no record to read: the hardware's fault or the request's, not the part's.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
#[non_exhaustive]
pub enum Fault {
    /// The front end did not answer in time: it is dead, late, or the line between is broken.
    NoAnswer,
    /// The front end says that it fired, but its samples never came, or came damaged.
    SamplesMissing,
    /// The front end did not fire, and says why.
    NotFired(FrontEndFault),
    /// The line to the front end takes or gives no bytes.
    Line,
    /// The front end claims more samples than there is room for, or other than were asked for.
    WrongCount,
    /// The shots of one average differ in gain, format or clock.
    ShotsDiffer,
    /// The request makes no sense: no shot, too many shots, no sample, more samples than there is room for.
    Request,
}

impl Fault {
    /// Every fault there is.
    pub const ALL: [Self; 10] = [
        Self::NoAnswer,
        Self::SamplesMissing,
        Self::NotFired(FrontEndFault::NoHighVoltage),
        Self::NotFired(FrontEndFault::NoTrigger),
        Self::NotFired(FrontEndFault::TooManySamples),
        Self::NotFired(FrontEndFault::CannotSet),
        Self::Line,
        Self::WrongCount,
        Self::ShotsDiffer,
        Self::Request,
    ];

    /// The number that stands for it on the link.
    #[must_use]
    pub const fn code(self) -> u8 {
        match self {
            Self::NoAnswer => 1,
            Self::SamplesMissing => 2,
            Self::NotFired(FrontEndFault::NoHighVoltage) => 3,
            Self::NotFired(FrontEndFault::NoTrigger) => 4,
            Self::NotFired(FrontEndFault::TooManySamples) => 5,
            Self::NotFired(FrontEndFault::CannotSet) => 6,
            Self::Line => 7,
            Self::WrongCount => 8,
            Self::ShotsDiffer => 9,
            Self::Request => 10,
        }
    }

    /// The fault of a number; `None` for one that is not known here.
    #[must_use]
    pub fn from_code(code: u8) -> Option<Self> {
        Self::ALL.iter().copied().find(|fault| fault.code() == code)
    }

    /// What is wrong, and what to do.
    #[must_use]
    pub const fn sentence(self) -> &'static str {
        match self {
            Self::NoAnswer => "the front end does not answer; check its supply and the line to it",
            Self::SamplesMissing => "the front end fired, but its samples are missing or damaged; fire again",
            Self::NotFired(FrontEndFault::NoHighVoltage) => {
                "the pulser did not charge; check its supply and the probe's cable"
            }
            Self::NotFired(FrontEndFault::NoTrigger) => {
                "the converter did not start with the trigger; check the trigger line"
            }
            Self::NotFired(FrontEndFault::TooManySamples) => {
                "the front end cannot take so many samples; ask for a shorter record"
            }
            Self::NotFired(FrontEndFault::CannotSet) => {
                "the front end cannot set this gain or delay; ask for one that it has"
            }
            Self::Line => "the line to the front end takes or gives no bytes; check the connection",
            Self::WrongCount => "the front end gave another number of samples than was asked for; check its program",
            Self::ShotsDiffer => "the shots of one average differ in gain or clock; keep both and fire again",
            Self::Request => "the request makes no sense; ask for 1 to 256 shots of a record that fits",
        }
    }
}

impl fmt::Display for Fault {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(self.sentence())
    }
}

impl core::error::Error for Fault {}

impl From<core::convert::Infallible> for Fault {
    fn from(never: core::convert::Infallible) -> Self {
        match never {}
    }
}

/// Why there is no reading.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Shortfall {
    /// The record gives none: a normal outcome.
    NoReading(NoReading),
    /// There is no record.
    Fault(Fault),
}

/// What came of one place.
#[derive(Debug)]
pub struct Report<'r> {
    /// The number under which it was asked for.
    pub number: u32,
    /// Shots in the record; 0 if there is none.
    pub shots: u16,
    /// The gain of the record's shots; 0 dB if there is none.
    pub gain: Decibels,
    /// The reading, or why there is none.
    pub outcome: Result<Reading, Shortfall>,
    /// What the record held; `None` if there is no record.
    pub findings: Option<&'r Findings>,
}

impl Report<'_> {
    /// The report as the link carries it.
    #[must_use]
    pub fn to_link(&self) -> LinkReport {
        let mut echoes = Vec::new();
        for echo in self.findings.iter().flat_map(|findings| &findings.echoes) {
            // As many places as the core has.
            let _ = echoes.push(EchoPlace {
                index: echo.position.index,
                fraction: echo.position.fraction,
            });
        }
        LinkReport {
            number: self.number,
            shots: self.shots,
            gain: self.gain.get(),
            noise: self.findings.map_or(0.0, |findings| findings.noise),
            outcome: match &self.outcome {
                Ok(reading) => Outcome::Reading(LinkReading {
                    thickness: reading.thickness.get(),
                    standard_uncertainty: reading.standard_uncertainty.get(),
                    coverage_factor: reading.coverage_factor,
                    coating: reading.coating.map(|coating| LinkCoatingReading {
                        round_trip: [
                            coating.round_trip.time.get(),
                            coating.round_trip.standard_uncertainty.get(),
                        ],
                        thickness: (coating.thickness)
                            .map(|coating| [coating.thickness.get(), coating.standard_uncertainty.get()]),
                    }),
                    wrong_cycle_probability: reading.wrong_cycle_probability,
                    doubts: reading.doubts.bits(),
                }),
                Err(Shortfall::NoReading(refusal)) => Outcome::NoReading(Refusal::of(refusal)),
                Err(Shortfall::Fault(fault)) => Outcome::Fault(fault.code()),
            },
            echoes,
        }
    }
}

/// Where reports go besides the link: a log, a screen, a list in a test.
pub trait ReportSink {
    /// Takes one report. What goes wrong in doing so is the sink's own affair.
    fn report(&mut self, report: &Report<'_>);
}

/// Drops all reports.
impl ReportSink for () {
    fn report(&mut self, _: &Report<'_>) {}
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn every_fault_has_its_own_code_and_a_remedy() {
        for (place, fault) in Fault::ALL.iter().enumerate() {
            assert_eq!(usize::from(fault.code()), place + 1);
            assert_eq!(Fault::from_code(fault.code()), Some(*fault));
            assert!(fault.sentence().contains("; "), "{fault}");
        }
        assert_eq!(Fault::from_code(0), None);
    }
}
