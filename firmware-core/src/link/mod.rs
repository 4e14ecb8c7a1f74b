//! The protocol both ends share: messages with a fixed little-endian layout, in frames that a listener can join at any
//! byte.
//!
//! Wire version 0 is not frozen. [`LAYOUT`] fingerprints the source that defines it, both sides exchange it in
//! [`Hello`], and sides with different fingerprints refuse each other.
//!
//! | direction | message | when |
//! |---|---|---|
//! | controller → host | [`Hello`] | at start, when asked, every few seconds |
//! | controller → host | [`Record`] | every step that the profile's schedule marks |
//! | host → controller | [`Message::HelloRequest`] | after opening the line |
//! | host → controller | [`Message::Ack`] | once records are durable |

pub mod frame;
pub mod message;

pub use frame::{Decoder, FrameError};
pub use message::{Hello, KeyEstimates, Message, MessageError, Record};

/// The version both sides must name.
pub const WIRE_VERSION: u8 = 0;

/// Fingerprint of the sources that define messages, frames and profile bytes: while the version is 0, any change of
/// them makes another protocol.
pub const LAYOUT: u32 = {
    let parts = [
        crate::checksum::crc32(include_bytes!("message.rs")),
        crate::checksum::crc32(include_bytes!("frame.rs")),
        crate::checksum::crc32(include_bytes!("../machine/profile.rs")),
    ];
    let [message, frame, profile] = parts;
    message ^ frame.rotate_left(11) ^ profile.rotate_left(22)
};
