//! The fixed 40 bytes in front of every binary datagram. All integers are little endian.
//!
//! | offset | size | field |
//! | --- | --- | --- |
//! | 0 | 4 | magic `A7 54 4B 48` |
//! | 4 | 1 | protocol version, 1 |
//! | 5 | 1 | kind of the payload |
//! | 6 | 2 | length of the payload, bytes |
//! | 8 | 8 | session of the sender: drawn at random when it starts |
//! | 16 | 8 | sequence: counts up by at least one with every new datagram of a session |
//! | 24 | 8 | stamp: the sender's clock when it sent, ns |
//! | 32 | 4 | key id, 0 where no tag follows |
//! | 36 | 4 | reserved, 0 |
//! | 40 | n | payload |
//! | 40+n | 0 or 16 | authentication tag |

use crate::codec::DecodeError;

/// First bytes of every binary datagram; never `{`, which begins a JSON one.
pub const MAGIC: [u8; 4] = [0xA7, 0x54, 0x4B, 0x48];

/// The protocol version this crate speaks.
pub const VERSION: u8 = 1;

/// Length of the header, bytes.
pub const HEADER_BYTES: usize = 40;

/// Length of an authentication tag, bytes.
pub const TAG_BYTES: usize = 16;

/// No datagram is longer than this, header and tag included: it passes every common link unfragmented.
pub const MAX_DATAGRAM_BYTES: usize = 1200;

/// What a header says, apart from magic and version.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Header {
    /// Kind of the payload, see [`crate::message::kind`].
    pub kind: u8,
    /// Length of the payload, bytes.
    pub payload_bytes: u16,
    /// Session of the sender.
    pub session: u64,
    /// Sequence number within the session.
    pub sequence: u64,
    /// The sender's clock when it sent, ns.
    pub stamp_ns: u64,
    /// Which key made the tag; 0 without a tag.
    pub key_id: u32,
}

impl Header {
    /// The header's 40 bytes.
    pub fn to_bytes(&self) -> [u8; HEADER_BYTES] {
        let mut bytes = [0; HEADER_BYTES];
        bytes[..4].copy_from_slice(&MAGIC);
        bytes[4] = VERSION;
        bytes[5] = self.kind;
        bytes[6..8].copy_from_slice(&self.payload_bytes.to_le_bytes());
        bytes[8..16].copy_from_slice(&self.session.to_le_bytes());
        bytes[16..24].copy_from_slice(&self.sequence.to_le_bytes());
        bytes[24..32].copy_from_slice(&self.stamp_ns.to_le_bytes());
        bytes[32..36].copy_from_slice(&self.key_id.to_le_bytes());
        bytes
    }

    /// Splits a datagram into header, payload and tag (empty or 16 bytes).
    ///
    /// # Errors
    /// Says which part of the frame is wrong; the payload itself is not looked at.
    pub fn split(datagram: &[u8]) -> Result<(Self, &[u8], &[u8]), DecodeError> {
        if datagram.len() > MAX_DATAGRAM_BYTES {
            return Err(DecodeError::TooLong { bytes: datagram.len() });
        }
        let Some((head, rest)) = datagram.split_first_chunk::<HEADER_BYTES>() else {
            return Err(DecodeError::TooShort { bytes: datagram.len() });
        };
        if head[..4] != MAGIC {
            return Err(DecodeError::Magic { got: [head[0], head[1], head[2], head[3]] });
        }
        if head[4] != VERSION {
            return Err(DecodeError::Version { got: head[4] });
        }
        let header = Self {
            kind: head[5],
            payload_bytes: u16::from_le_bytes([head[6], head[7]]),
            session: u64_at(head, 8),
            sequence: u64_at(head, 16),
            stamp_ns: u64_at(head, 24),
            key_id: u32::from_le_bytes([head[32], head[33], head[34], head[35]]),
        };
        if head[36..40] != [0; 4] {
            return Err(DecodeError::Reserved);
        }
        let stated = usize::from(header.payload_bytes);
        match rest.len().checked_sub(stated) {
            Some(0 | TAG_BYTES) => {
                let (payload, tag) = rest.split_at(stated);
                Ok((header, payload, tag))
            }
            _ => Err(DecodeError::Length { stated, present: rest.len() }),
        }
    }
}

fn u64_at(bytes: &[u8; HEADER_BYTES], at: usize) -> u64 {
    let mut word = [0; 8];
    word.copy_from_slice(&bytes[at..at + 8]);
    u64::from_le_bytes(word)
}
