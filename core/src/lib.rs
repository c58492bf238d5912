//! Pulse-echo thickness measurement that can be trusted, without a heap.
//!
//! A record of converter codes goes in; a thickness that can be signed for comes out, with its
//! uncertainty and its doubts, or the reason why there is none:
//!
//! ```
//! use halfpulse::*;
//!
//! // A wrong set-up in a `const` does not compile.
//! const SETUP: GaugeSetup = GaugeSetup::new(
//!     Hertz::from_mhz(50.0),
//!     Probe::delay_line(Hertz::from_mhz(5.0), 0.6).with_element_diameter(Metres::from_mm(6.0)),
//!     Material::new(MetresPerSecond::new(5920.0), MetresPerSecond::new(5.0)),
//!     Zero::new(Seconds::ZERO, Seconds::from_ns(1.0)),
//!     Span::InterfaceToBackWall,
//!     Window { from: Seconds::from_us(4.0), to: Seconds::from_us(60.0) },
//! );
//!
//! # fn digitise(codes: &mut [i16]) {
//! #     for (place, height) in [(400.0f32, 1400.0f32), (569.0, -500.0), (738.0, -420.0), (907.0, -350.0)] {
//! #         for (i, code) in codes.iter_mut().enumerate() {
//! #             let t = i as f32 - place;
//! #             *code += (height * (-t * t / 77.8).exp() * (t * 0.628_318_5).cos()) as i16;
//! #         }
//! #     }
//! # }
//! let mut scratch = Scratch::<4096>::ZERO; // in firmware: a static
//! let mut gauge = Gauge::new(SETUP, scratch.workspace()).expect("checked above, and the scratch is large enough");
//!
//! let mut codes = [0i16; 4096];
//! digitise(&mut codes); // your pulser, receiver and converter
//! let record = Record::new(&codes, AdcFormat::signed(12), SampleClock::new(Hertz::from_mhz(50.0)));
//! match gauge.measure(&record) {
//!     Ok(reading) => println!("{} +- {} ({})", reading.thickness, reading.expanded(), reading.doubts),
//!     Err(why) => println!("no reading: {why}"),
//! }
//! # assert!((gauge.measure(&record).unwrap().thickness.as_mm() - 10.005).abs() < 0.002);
//! ```
//!
//! The signal's way through the modules, each of which can be used alone:
//!
//! 1. [`record`]: codes, what a code stands for, when they were taken; averaging; the trait that a
//!    board implements.
//! 2. [`echo::scan`]: the only pass over the whole record, in integers: noise and candidates.
//! 3. [`echo::arrival`]: the reference pulse ([`echo::pulse`]) fitted at each candidate.
//! 4. [`echo::separation`]: can neighbours be told apart?
//! 5. [`echo::train`]: which echoes are the multiples of one wall, and their joint period.
//! 6. [`wall::thickness`]: times to thickness, by the three spans, with or without a coating.
//! 7. [`wall::uncertainty`]: the budget of named terms; [`wall::calibration`] learns what it needs.
//! 8. [`wall::judgement`]: the doubts; [`wall::limits`]: is the wall thick enough?
//! 9. [`gauge`]: the facade that runs them.
//!
//! Failures are of three kinds and never mixed: [`SetupError`] (the caller's fault, at build or at
//! start), [`NoReading`] (a normal outcome with its evidence) and [`Doubts`] (flags on a valid reading).
//!
//! Nothing here allocates, panics, or depends on the machine: the same record gives the same bits on a
//! desktop and on a microcontroller.
#![no_std]
#![forbid(unsafe_code)]
#![deny(missing_docs)]
// `!(x > 0.0)` is meant: it also catches "not a number", which `x <= 0.0` lets through.
#![allow(clippy::neg_cmp_op_on_partial_ord)]

/// README's example compiles and runs, or the tests fail.
#[cfg(doctest)]
#[doc = include_str!("../../README.md")]
pub struct Readme;

#[doc = include_str!("../ACCURACY.md")]
pub mod accuracy {}

#[cfg(test)]
extern crate std;
#[cfg(test)]
mod test_support;

pub mod units;
pub mod math;
pub mod order;
pub mod setup;
pub mod outcome;
pub mod workspace;
pub mod path;
pub mod record;
pub mod echo;
pub mod wall;
pub mod gauge;

pub use echo::shots::{Jitter, ShotArrivals};
pub use echo::{Echo, EchoList, EchoRole, Polarity};
pub use gauge::two_gains::{TwoGains, TwoGainsError};
pub use gauge::uncoupled::{TailFit, Uncoupled, UncoupledError};
pub use gauge::{CoatingReading, CoatingThickness, Findings, Gauge, Interpretation, Reading};
pub use outcome::{Doubt, Doubts, NoReading};
pub use record::average::{AverageError, Averager, Interleaver};
pub use record::movement::{Movement, movement};
pub use record::rounds::TwoRounds;
pub use record::{AdcFormat, Record, SampleClock};
pub use setup::{
    CalibratedRange, Coating, DelayLine, EchoSign, ElementSeparation, GaugeSetup, Material, PartTemperature, Probe,
    ProbeFace, ProbeKind, SetupError, Span, Surface, VelocityTemperature, Window, Zero,
};
pub use units::{Celsius, Decibels, Hertz, Metres, MetresPerSecond, SamplePosition, Seconds};
pub use wall::calibration::{Block, CalibrationError, DriftCheck, DriftState};
pub use wall::limits::{Guard, LimitState, Limits, LimitsError, LimitsVerdict};
pub use wall::uncertainty::{Budget, Source, Term};
pub use workspace::{Scratch, Workspace};
