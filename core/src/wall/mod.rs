//! What the echoes say about the part.

pub mod beam;
pub mod judgement;
pub mod calibration;
pub mod company;
pub mod coupling;
pub mod curvature;
pub mod limits;
pub mod thickness;
pub mod thin;
pub mod uncertainty;
pub mod way;
