//! halfpulse on the emulated Cortex-M4F board: canned records, what is written about each, and the
//! board's own code. The first two also run on the host, so that both sides can be compared.
#![no_std]
#![deny(unsafe_code)]
#![deny(missing_docs)]

pub mod canned;
pub mod plan;
pub mod printout;
pub mod search;
#[cfg(target_os = "none")]
#[allow(unsafe_code)]
pub mod board;
