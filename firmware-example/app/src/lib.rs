//! The gauge as an application: it acquires, measures and reports.
//!
//! The same code runs on a real board, on the emulated one and on the host. What differs is behind
//! traits: the pulser and receiver ([`halfpulse::record::receiver::PulseReceiver`]), the delay
//! (`embedded_hal::delay::DelayNs`), the link's bytes (`embedded_io`) and where reports go
//! ([`report::ReportSink`]).
//!
//! 1. [`acquire`]: gain steps, then coherent averaging: shots become one record.
//! 2. [`gauge_app`]: what the link asks for, done: a set-up, a reading, the counters.
//! 3. [`report`]: what comes of one place: a reading, a refusal, or a fault of the hardware.
//! 4. [`link`]: messages in frames over a serial line; both ends use it. `LINK.md` beside this crate
//!    is its specification.
//! 5. [`remote`]: a pulser and receiver at the other end of the link.
//!
//! Nothing here allocates or panics, and every wait is bounded.
#![no_std]
#![forbid(unsafe_code)]
#![deny(missing_docs)]

#[cfg(test)]
extern crate std;

pub mod link;
pub mod report;
pub mod acquire;
pub mod remote;
pub mod gauge_app;

#[cfg(feature = "defmt")]
pub mod log;
