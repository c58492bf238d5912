//! What the checks share: see `tests/published`.

pub use halfpulse_published::{self as published, oracle, page, readme};
