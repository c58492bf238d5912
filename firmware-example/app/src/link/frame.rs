//! Frames: from a message to bytes and back, without a panic whatever the bytes are.

use crate::link::message::Message;
use crc::{CRC_32_ISO_HDLC, Crc, Table};
use embedded_io::Write;

/// Longest message with its check sum: one COBS block, so that the overhead is one byte.
pub const PAYLOAD_CAPACITY: usize = 254;
/// Longest frame between its delimiters.
pub const FRAME_CAPACITY: usize = PAYLOAD_CAPACITY + 1;
/// Bytes of the check sum.
const CHECK: usize = 4;

/// CRC-32 as Ethernet and zip use it: polynomial 04C11DB7, reflected, start and end FFFFFFFF.
static CHECK_SUM: Crc<u32, Table<1>> = Crc::<u32, Table<1>>::new(&CRC_32_ISO_HDLC);

/// CRC-32 of some bytes.
#[must_use]
pub fn crc_of_bytes(bytes: &[u8]) -> u32 {
    CHECK_SUM.checksum(bytes)
}

/// CRC-32 of a block of samples, each as two bytes, the lower one first.
#[must_use]
pub fn crc_of_codes(codes: &[i16]) -> u32 {
    let mut digest = CHECK_SUM.digest();
    for code in codes {
        digest.update(&code.to_le_bytes());
    }
    digest.finalize()
}

/// CRC-32 of a pulse's samples, each as four bytes, the lowest first.
#[must_use]
pub fn crc_of_samples(samples: &[f32]) -> u32 {
    let mut digest = CHECK_SUM.digest();
    for sample in samples {
        digest.update(&sample.to_le_bytes());
    }
    digest.finalize()
}

/// Why bytes are not a message.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum FrameError {
    /// The frame is cut short, its COBS code points outside, or the check sum is wrong.
    Broken,
    /// The check sum is right, but nobody here knows such a message.
    Unknown,
}

/// A message that does not fit [`PAYLOAD_CAPACITY`]. No message of this protocol can be as long.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct TooLong;

/// Writes a message as a frame with its two delimiters.
///
/// # Errors
/// `Ok(Err(TooLong))` if the message is too long: nothing was written. The outer error is the link's.
pub fn write_frame<W: Write>(message: &Message, out: &mut W) -> Result<Result<(), TooLong>, W::Error> {
    let mut payload = [0u8; PAYLOAD_CAPACITY];
    let Some(length) = fill_payload(message, &mut payload) else {
        return Ok(Err(TooLong));
    };
    let payload = payload.get(..length).unwrap_or(&[]);
    out.write_all(&[0])?;
    // COBS: each run without a zero goes out behind its length plus one.
    for run in payload.split(|&byte| byte == 0) {
        out.write_all(&[u8::try_from(run.len() + 1).unwrap_or(u8::MAX)])?;
        out.write_all(run)?;
    }
    out.write_all(&[0])?;
    out.flush()?;
    Ok(Ok(()))
}

fn fill_payload(message: &Message, payload: &mut [u8; PAYLOAD_CAPACITY]) -> Option<usize> {
    let room = payload.get_mut(..PAYLOAD_CAPACITY - CHECK)?;
    let length = postcard::to_slice(message, room).ok()?.len();
    let sum = crc_of_bytes(payload.get(..length)?);
    let places = payload.get_mut(length..)?.iter_mut();
    for (place, byte) in places.zip(sum.to_le_bytes()) {
        *place = byte;
    }
    Some(length + CHECK)
}

/// Reads what stood between two delimiters. The bytes are decoded in place.
///
/// # Errors
/// [`FrameError`]; the bytes are of no use then.
pub fn read_frame(frame: &mut [u8]) -> Result<Message, FrameError> {
    let length = uncobs(frame).ok_or(FrameError::Broken)?;
    let payload = frame.get(..length).ok_or(FrameError::Broken)?;
    let (message, sum) = payload.split_last_chunk::<CHECK>().ok_or(FrameError::Broken)?;
    if crc_of_bytes(message) != u32::from_le_bytes(*sum) {
        return Err(FrameError::Broken);
    }
    match postcard::take_from_bytes(message) {
        Ok((message, [])) => Ok(message),
        _ => Err(FrameError::Unknown),
    }
}

/// Undoes COBS in place; the length of what was in it. `None` if a code points outside the frame, or
/// if there is a zero.
fn uncobs(frame: &mut [u8]) -> Option<usize> {
    let (mut from, mut to) = (0usize, 0usize);
    loop {
        let run = usize::from(*frame.get(from)?).checked_sub(1)?;
        from += 1;
        for _ in 0..run {
            let byte = *frame.get(from)?;
            if byte == 0 {
                return None;
            }
            *frame.get_mut(to)? = byte;
            from += 1;
            to += 1;
        }
        if from == frame.len() {
            return Some(to);
        }
        // A full run stands for no zero; frames of this protocol hold at most one, at their end.
        if run != 254 {
            *frame.get_mut(to)? = 0;
            to += 1;
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;
    use std::vec::Vec;

    #[test]
    fn check_sums_agree_with_the_published_check_value() {
        // Check value of CRC-32/ISO-HDLC for "123456789" (catalogue of parametrised CRC algorithms, G. Cook).
        assert_eq!(crc_of_bytes(b"123456789"), 0xcbf4_3926);
        assert_eq!(crc_of_codes(&[0x3231, 0x3433]), crc_of_bytes(b"1234"));
    }

    /// Examples of S. Cheshire and M. Baker, "Consistent overhead byte stuffing", IEEE/ACM Transactions on
    /// Networking 7 (1999), and the runs at the edge of one block.
    #[test]
    fn cobs_is_undone() {
        for (coded, plain) in [
            (&[0x01u8][..], &[][..]),
            (&[0x01, 0x01], &[0]),
            (&[0x03, 0x11, 0x22, 0x02, 0x33], &[0x11, 0x22, 0, 0x33]),
            (&[0x02, 0x11, 0x01, 0x01, 0x01], &[0x11, 0, 0, 0]),
        ] {
            let mut bytes = coded.to_vec();
            let length = uncobs(&mut bytes).unwrap();
            assert_eq!(&bytes[..length], plain);
        }
        let mut full: Vec<u8> = std::vec![0xff];
        full.extend(1..=254u8);
        assert_eq!(uncobs(&mut full), Some(254));
        for broken in [&[][..], &[0], &[0x03, 0x11], &[0x03, 0x11, 0x00], &[0x02, 0x11, 0x00]] {
            assert_eq!(uncobs(&mut broken.to_vec()), None, "{broken:x?}");
        }
    }

    #[test]
    fn every_single_changed_bit_is_noticed() {
        let mut frame = Vec::new();
        let message = Message::Hello(crate::link::Hello {
            protocol: 1,
            samples: 4096,
        });
        write_frame(&message, &mut WriteVec(&mut frame)).unwrap().unwrap();
        let inside = &frame[1..frame.len() - 1];
        assert_eq!(read_frame(&mut inside.to_vec()), Ok(message));
        for bit in 0..inside.len() * 8 {
            let mut spoilt = inside.to_vec();
            spoilt[bit / 8] ^= 1 << (bit % 8);
            assert!(read_frame(&mut spoilt).is_err(), "bit {bit}");
        }
    }

    /// A `Vec` to write to.
    struct WriteVec<'v>(&'v mut Vec<u8>);
    impl embedded_io::ErrorType for WriteVec<'_> {
        type Error = core::convert::Infallible;
    }
    impl Write for WriteVec<'_> {
        fn write(&mut self, bytes: &[u8]) -> Result<usize, Self::Error> {
            self.0.extend_from_slice(bytes);
            Ok(bytes.len())
        }
        fn flush(&mut self) -> Result<(), Self::Error> {
            Ok(())
        }
    }

    proptest! {
        #[test]
        fn any_bytes_end_in_an_answer(mut bytes in proptest::collection::vec(any::<u8>(), 0..600)) {
            let _ = read_frame(&mut bytes);
        }

        #[test]
        fn a_valid_sum_over_any_bytes_ends_in_an_answer(bytes in proptest::collection::vec(1u8.., 0..249)) {
            let mut frame = std::vec![0u8];
            frame.extend_from_slice(&bytes);
            frame.extend_from_slice(&crc_of_bytes(&bytes).to_le_bytes());
            // Only frames without a zero: one run.
            if frame[1..].iter().all(|&b| b != 0) {
                frame[0] = frame.len() as u8;
                prop_assert_ne!(read_frame(&mut frame), Err(FrameError::Broken));
            }
        }
    }
}
