//! Pulse-echo thickness measurement that can be trusted, without a heap.
#![no_std]
#![forbid(unsafe_code)]
#![deny(missing_docs)]
// `!(x > 0.0)` is meant: it also catches "not a number", which `x <= 0.0` lets through.
#![allow(clippy::neg_cmp_op_on_partial_ord)]

#[cfg(test)]
extern crate std;
#[cfg(test)]
mod test_support;

pub mod units;
pub mod math;
pub mod setup;
pub mod outcome;
pub mod workspace;
pub mod record;
pub mod echo;
pub mod wall;
pub mod gauge;

pub use echo::{Echo, EchoList, EchoRole, Polarity};
pub use gauge::{CoatingReading, Findings, Gauge, Reading};
pub use outcome::{Doubt, Doubts, NoReading};
pub use record::average::{AverageError, Averager, Interleaver};
pub use record::{AdcFormat, Record, SampleClock};
pub use setup::{
    CalibratedRange, Coating, GaugeSetup, Material, Probe, ProbeFace, ProbeKind, SetupError, Span, Window, Zero,
};
pub use units::{Celsius, Decibels, Hertz, Metres, MetresPerSecond, SamplePosition, Seconds};
pub use wall::calibration::{Block, CalibrationError};
pub use wall::uncertainty::{Budget, Source, Term};
pub use workspace::{Scratch, Workspace};
