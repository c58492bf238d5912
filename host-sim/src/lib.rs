//! The simulator: makes A-scans with known truth, and measures them with the core.
//!
//! Signals are made in `f64` from physics alone; the core is never asked for them, or it would be
//! tested against itself. All that reaches a signal goes through `libm`, so that the same seed gives
//! the same codes on every machine.
#![forbid(unsafe_code)]
#![deny(missing_docs)]
// The system's sine and logarithm are refused only where signals are made (and not in tests, which
// compare with tolerances).
#![allow(clippy::disallowed_methods)]

pub mod band;
pub mod calibrating;
pub mod campaign;
pub mod cli;
pub mod export;
pub mod plot;
pub mod statistics;
pub mod device;
pub mod faults;
pub mod demo;
#[cfg_attr(not(test), deny(clippy::disallowed_methods))]
pub mod fourier;
#[cfg_attr(not(test), deny(clippy::disallowed_methods))]
pub mod front_end;
pub mod input_error;
#[cfg_attr(not(test), deny(clippy::disallowed_methods))]
pub mod joining;
pub mod layered;
#[cfg_attr(not(test), deny(clippy::disallowed_methods))]
pub mod link;
pub mod material;
pub mod measuring;
pub mod output;
#[cfg_attr(not(test), deny(clippy::disallowed_methods))]
pub mod propagation;
pub mod record_file;
#[cfg_attr(not(test), deny(clippy::disallowed_methods))]
pub mod scene;
pub mod setup_file;
pub mod spelling;
#[cfg_attr(not(test), deny(clippy::disallowed_methods))]
pub mod synthesise;
#[cfg_attr(not(test), deny(clippy::disallowed_methods))]
pub mod transducer;
pub mod uncoupled;

pub use scene::Scene;
pub use synthesise::{Shot, Synthesiser, Truth, Variation, synthesise};
