//! What the echoes say about the part.

pub mod calibration;
pub mod thickness;
pub mod uncertainty;
