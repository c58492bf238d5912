//! What the checks share.

pub mod oracle;
pub mod published;
pub mod readme;
