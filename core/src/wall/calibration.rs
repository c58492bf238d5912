//! Blocks to zero and velocity.
