//! Messages in frames over a serial line. `LINK.md` is the specification; its tables are pinned by
//! this module's tests, byte by byte.
//!
//! A frame is `0x00`, COBS(postcard(message), CRC-32), `0x00`. Everything that does not decode is
//! dropped and counted, and never more than the frame that was hit: each frame brings the delimiters
//! on both its sides.

pub mod frame;
pub mod message;
pub mod port;
pub mod refusal;

pub use frame::{FRAME_CAPACITY, FrameError, crc_of_bytes, crc_of_codes, crc_of_samples};
pub use message::{
    Done, EchoPlace, Fire, FrontEndFault, GainChoice, Hello, LinkCoating, LinkCoatingReading, LinkReading, LinkReport,
    Message, NotFired, Outcome, PART_SAMPLES, PROTOCOL, PULSE_INCOMPLETE, PulsePart, SetUp, Status, Take, TakePulse,
    UNKNOWN_CHOICE, pulse_error_code, setup_error_code,
};
pub use port::{Counts, LinkError, Port, SharedPort};
pub use refusal::Refusal;
