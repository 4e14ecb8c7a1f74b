//! Frames: `00 | COBS(payload | CRC-32 LE) | 00`.
//!
//! Consistent overhead byte stuffing (Cheshire and Baker, 1997) keeps 00 out of the body, so 00 always ends a frame and
//! a listener is in step again at the next one. The leading 00 ends whatever half frame a reset left behind: after the
//! last bad byte at most one frame is lost, the second complete one is delivered.

use crate::{bytes::Reader, checksum::crc32};

/// The longest frame on the wire, both delimiters included.
pub const MAX_FRAME: usize = 96;
/// Two delimiters, one stuffing byte, four bytes of CRC.
pub const OVERHEAD: usize = 7;
/// The longest payload a frame carries.
pub const MAX_PAYLOAD: usize = MAX_FRAME - OVERHEAD;

/// One frame as it goes onto the line.
pub type Frame = heapless::Vec<u8, MAX_FRAME>;

/// Why received bytes were no frame. The decoder is in step again with the next delimiter.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum FrameError {
    /// More bytes than any frame has before a delimiter came.
    TooLong,
    /// The stuffing is broken: bytes were lost or changed.
    BrokenStuffing,
    /// The checksum does not fit the payload.
    ChecksumMismatch,
}

/// Puts a payload into a frame; `None` if it is longer than [`MAX_PAYLOAD`].
#[must_use]
pub fn encode(payload: &[u8]) -> Option<Frame> {
    if payload.len() > MAX_PAYLOAD {
        return None;
    }
    let mut frame = Frame::new();
    frame.push(0).ok()?;
    let mut code_at = frame.len();
    let mut run: u8 = 1; // distance from the code byte to the next zero
    frame.push(0).ok()?;
    for &byte in payload.iter().chain(&crc32(payload).to_le_bytes()) {
        // A body of at most 93 bytes never reaches the 254 that would need a second code byte.
        if byte == 0 {
            *frame.get_mut(code_at)? = run;
            code_at = frame.len();
            run = 1;
            frame.push(0).ok()?;
        } else {
            frame.push(byte).ok()?;
            run = run.wrapping_add(1);
        }
    }
    *frame.get_mut(code_at)? = run;
    frame.push(0).ok()?;
    Some(frame)
}

/// Turns received bytes into payloads; `N` bytes of buffer, at least [`MAX_FRAME`] to take every frame of this protocol.
#[derive(Clone, Debug)]
pub struct Decoder<const N: usize> {
    body: heapless::Vec<u8, N>,
    overflowed: bool,
    /// The body was handed out and is to be cleared before the next byte.
    delivered: bool,
}

impl<const N: usize> Default for Decoder<N> {
    fn default() -> Self {
        Self { body: heapless::Vec::new(), overflowed: false, delivered: false }
    }
}

impl<const N: usize> Decoder<N> {
    /// Takes one byte. `Some` when it ended a frame: the payload, or why there is none.
    pub fn push(&mut self, byte: u8) -> Option<Result<&[u8], FrameError>> {
        if core::mem::take(&mut self.delivered) {
            self.body.clear();
        }
        if byte != 0 {
            self.overflowed |= self.body.push(byte).is_err();
            return None;
        }
        if core::mem::take(&mut self.overflowed) {
            self.body.clear();
            return Some(Err(FrameError::TooLong));
        }
        if self.body.is_empty() {
            return None; // between two frames there are two delimiters
        }
        self.delivered = true;
        Some(match unstuff(&mut self.body) {
            None => Err(FrameError::BrokenStuffing),
            Some(length) => check(self.body.get(..length).unwrap_or(&[])),
        })
    }
}

/// Undoes the stuffing in place; the length of what is left, or `None` if a code points outside.
fn unstuff(body: &mut [u8]) -> Option<usize> {
    // Every byte but the codes moves down by one place, and the place before the next code becomes the zero it stands
    // for: so reading and writing stay one apart. Byte by byte, because the optimiser cannot prove the bounds of a
    // range taken from a received code, and would keep a panic for it.
    let mut left = 0_u8; // bytes before the next code
    for at in 0..body.len() {
        let byte = *body.get(at)?;
        let moved = match left {
            0 => {
                left = byte;
                0
            }
            _ => byte,
        };
        left = left.checked_sub(1)?; // a code 0 cannot be: the delimiter is 0
        if let Some(before) = at.checked_sub(1) {
            *body.get_mut(before)? = moved;
        }
    }
    if left == 0 { body.len().checked_sub(1) } else { None } // one byte less: the first code
}

fn check(body: &[u8]) -> Result<&[u8], FrameError> {
    let (payload, received) = body.split_last_chunk::<4>().ok_or(FrameError::ChecksumMismatch)?;
    let expected = Reader::new(received).u32();
    if expected == Some(crc32(payload)) { Ok(payload) } else { Err(FrameError::ChecksumMismatch) }
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;
    use std::vec::Vec;

    fn feed(bytes: &[u8]) -> Vec<Result<Vec<u8>, FrameError>> {
        let mut decoder = Decoder::<MAX_FRAME>::default();
        let mut out = Vec::new();
        for &byte in bytes {
            if let Some(result) = decoder.push(byte) {
                out.push(result.map(<[u8]>::to_vec));
            }
        }
        out
    }

    #[test]
    fn literal_frame() {
        // CRC-32 of 11 00 22 is B1 51 C5 37 little-endian (checked with Python's zlib.crc32).
        let frame = encode(&[0x11, 0x00, 0x22]).unwrap();
        assert_eq!(frame.as_slice(), [0x00, 0x02, 0x11, 0x06, 0x22, 0xb1, 0x51, 0xc5, 0x37, 0x00]);
        assert_eq!(feed(&frame), [Ok([0x11, 0x00, 0x22].to_vec())]);
    }

    #[test]
    fn longest_payload_fits_and_one_more_does_not() {
        assert_eq!(encode(&[7; MAX_PAYLOAD]).unwrap().len(), MAX_FRAME);
        assert!(encode(&[7; MAX_PAYLOAD + 1]).is_none());
    }

    #[test]
    fn endless_noise_is_reported_once_it_ends() {
        let mut bytes = std::vec![0xff; 5000];
        bytes.push(0);
        bytes.extend_from_slice(&encode(b"after").unwrap());
        assert_eq!(feed(&bytes), [Err(FrameError::TooLong), Ok(b"after".to_vec())]);
    }

    proptest! {
        #[test]
        fn any_payload_survives(payload in prop::collection::vec(any::<u8>(), 0..=MAX_PAYLOAD)) {
            let frame = encode(&payload).unwrap();
            prop_assert!(frame.len() <= payload.len() + OVERHEAD);
            prop_assert_eq!(feed(&frame), [Ok(payload)]);
        }

        #[test]
        fn any_bytes_do_not_panic(bytes in prop::collection::vec(any::<u8>(), 0..600)) {
            feed(&bytes);
        }

        /// Noise, flips and truncation anywhere before: the second complete frame after it always arrives, and nothing
        /// that was never sent is delivered as good.
        #[test]
        fn second_frame_after_damage_is_delivered(
            before in prop::collection::vec(any::<u8>(), 0..300),
            payloads in prop::collection::vec(prop::collection::vec(any::<u8>(), 0..60), 2..5),
            cut in 0_usize..40,
            flips in prop::collection::vec((0_usize..40, 1_u8..=255), 0..4),
        ) {
            let mut bytes = before;
            let mut damaged = encode(b"a frame that will be damaged on its way").unwrap().to_vec();
            for (at, mask) in flips {
                if let Some(byte) = damaged.get_mut(at) { *byte ^= mask; }
            }
            damaged.truncate(cut);
            bytes.extend_from_slice(&damaged);
            for payload in &payloads {
                bytes.extend_from_slice(&encode(payload).unwrap());
            }
            let good: Vec<_> = feed(&bytes).into_iter().filter_map(Result::ok).collect();
            prop_assert!(good.ends_with(&payloads[1..]), "{good:?}");
        }
    }
}
