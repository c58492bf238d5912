//! The simulator: makes A-scans with known truth, and measures them with the core.
//!
//! Signals are made in `f64` from physics alone; the core is never asked for them, or it would be
//! tested against itself. All that reaches a signal goes through `libm`, so that the same seed gives
//! the same codes on every machine.
#![forbid(unsafe_code)]
#![deny(missing_docs)]
// Tests compare with tolerances; only what makes signals must be the same to the last bit.
#![cfg_attr(test, allow(clippy::disallowed_methods))]

// These look at signals and print; they make none.
#[allow(clippy::disallowed_methods)]
pub mod band;
pub mod calibrating;
#[allow(clippy::disallowed_methods)]
pub mod cli;
pub mod fourier;
pub mod front_end;
pub mod input_error;
pub mod layered;
pub mod material;
pub mod measuring;
pub mod propagation;
pub mod record_file;
pub mod scene;
pub mod setup_file;
pub mod spelling;
pub mod synthesise;
pub mod transducer;

pub use scene::Scene;
pub use synthesise::{Shot, Synthesiser, Truth, Variation, synthesise};
