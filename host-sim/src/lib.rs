//! The simulator: makes A-scans with known truth, and measures them with the core.

pub mod band;
pub mod cli;
pub mod input_error;
pub mod measuring;
pub mod record_file;
pub mod setup_file;
pub mod spelling;
