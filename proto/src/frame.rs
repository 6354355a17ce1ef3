//! The frame around a journal entry, on the wire and in a track log.
//!
//! A 24-byte head (number u64, moment u64 in ns of the daemon's clock, body length u32, CRC-32C u32 over the other 20
//! bytes and the body; little endian) and the body, [`Body`] in this crate's fixed-width encoding.

use crate::codec::{Broken, decode_whole};
use crate::journal::{Body, Entry};
use alloc::string::String;
use alloc::vec::Vec;
use thiserror::Error;

/// Length of a frame's head, bytes.
pub const FRAME_HEAD_BYTES: usize = 24;

/// No entry's body is longer than this: the largest plan and some room.
pub const MAX_BODY_BYTES: usize = MAX_PLAN_BYTES + 4096;

/// No plan is longer than this, bytes.
pub const MAX_PLAN_BYTES: usize = 64 << 20;

/// Number of the frames a recorder writes itself: gaps and the end mark.
pub const UNNUMBERED: u64 = u64::MAX;

/// First bytes of a track log; the digit is the format's version.
pub const LOG_MAGIC: [u8; 8] = *b"TRKHLOG1";

const JOURNAL: bincode::config::Configuration<
    bincode::config::LittleEndian,
    bincode::config::Fixint,
    bincode::config::Limit<{ 2 * MAX_BODY_BYTES }>,
> = bincode::config::standard().with_fixed_int_encoding().with_limit::<{ 2 * MAX_BODY_BYTES }>();

/// A body up to this length decodes under the tighter limit below, so that a small one that states a huge length
/// inside allocates little.
const SMALL_BODY_BYTES: usize = 64 << 10;

/// The limit counts in-memory size, at most four times the encoded one (an empty text: 8 bytes there, 32 here).
const SMALL: bincode::config::Configuration<
    bincode::config::LittleEndian,
    bincode::config::Fixint,
    bincode::config::Limit<{ 8 * SMALL_BODY_BYTES }>,
> = bincode::config::standard().with_fixed_int_encoding().with_limit::<{ 8 * SMALL_BODY_BYTES }>();

/// CRC-32C (Castagnoli), as in RFC 3720.
const CRC32C: crc::Crc<u32, crc::Table<16>> = crc::Crc::<u32, crc::Table<16>>::new(&crc::CRC_32_ISCSI);

/// What was wrong with a frame.
#[derive(Clone, Debug, PartialEq, Eq, Error)]
pub enum FrameError {
    /// The bytes end within the frame.
    #[error("ends {missing} bytes early")]
    Short {
        /// How many are missing.
        missing: usize,
    },
    /// The stated length is beyond any entry's.
    #[error("states a body of {bytes} bytes, at most {MAX_BODY_BYTES} are allowed")]
    TooLong {
        /// The stated length.
        bytes: usize,
    },
    /// The bytes are not those that were written.
    #[error("entry {number} is damaged: its CRC-32C is {computed:08x}, {stated:08x} was written")]
    Damaged {
        /// The entry's number as it stands there.
        number: u64,
        /// CRC of the bytes found.
        computed: u32,
        /// CRC found.
        stated: u32,
    },
    /// The bytes are those that were written, but mean nothing to this program.
    #[error("entry {number} is intact, but not an entry this program knows: {what}")]
    Unknown {
        /// The entry's number.
        number: u64,
        /// What did not decode.
        what: String,
    },
}

/// Encodes a body into `into`, for the digest over results, and returns the length. Allocates nothing.
pub fn encode_body(body: &Body, into: &mut [u8]) -> Option<usize> {
    bincode::encode_into_slice(body, into, JOURNAL).ok()
}

/// Appends the entry's frame to `to`.
pub fn write_frame(entry: &Entry, to: &mut Vec<u8>) {
    let begin = to.len();
    to.extend_from_slice(&entry.number.to_le_bytes());
    to.extend_from_slice(&entry.at_ns.to_le_bytes());
    to.extend_from_slice(&[0; 8]);
    struct Appending<'a>(&'a mut Vec<u8>);
    impl bincode::enc::write::Writer for Appending<'_> {
        fn write(&mut self, bytes: &[u8]) -> Result<(), bincode::error::EncodeError> {
            self.0.extend_from_slice(bytes);
            Ok(())
        }
    }
    if let Err(error) = bincode::encode_into_writer(&entry.body, Appending(to), JOURNAL) {
        unreachable!("appending to a vector cannot fail: {error}");
    }
    let bytes = u32::try_from(to.len() - begin - FRAME_HEAD_BYTES).unwrap_or(u32::MAX);
    to[begin + 16..begin + 20].copy_from_slice(&bytes.to_le_bytes());
    let crc = frame_crc(&to[begin..]);
    to[begin + 20..begin + 24].copy_from_slice(&crc.to_le_bytes());
}

/// Reads the frame at the start of `bytes` and returns the entry and the frame's length.
///
/// # Errors
/// Says what is wrong with the frame; a frame that merely ends early gives [`FrameError::Short`].
pub fn read_frame(bytes: &[u8]) -> Result<(Entry, usize), FrameError> {
    let length = frame_length(bytes)?;
    let Some(frame) = bytes.get(..length) else {
        return Err(FrameError::Short { missing: length - bytes.len() });
    };
    let (number, at_ns) = (word(frame, 0), word(frame, 8));
    let stated = (word(frame, 16) >> 32) as u32;
    let computed = frame_crc(frame);
    if computed != stated {
        return Err(FrameError::Damaged { number, computed, stated });
    }
    let body = &frame[FRAME_HEAD_BYTES..];
    let decoded = match body.len() {
        0..=SMALL_BODY_BYTES => decode_whole(body, SMALL),
        _ => decode_whole(body, JOURNAL),
    };
    match decoded {
        Ok(body) => Ok((Entry { number, at_ns, body }, length)),
        Err(Broken { at, what }) => {
            Err(FrameError::Unknown { number, what: alloc::format!("body, read up to byte {at}: {what}") })
        }
    }
}

/// Length of the frame at the start of `bytes`, head included, from its head alone.
///
/// # Errors
/// If the head is not all there, or states a length beyond any entry's.
pub fn frame_length(bytes: &[u8]) -> Result<usize, FrameError> {
    if bytes.len() < FRAME_HEAD_BYTES {
        return Err(FrameError::Short { missing: FRAME_HEAD_BYTES - bytes.len() });
    }
    let body = (word(bytes, 16) & 0xffff_ffff) as usize;
    if body > MAX_BODY_BYTES {
        return Err(FrameError::TooLong { bytes: body });
    }
    Ok(FRAME_HEAD_BYTES + body)
}

fn frame_crc(frame: &[u8]) -> u32 {
    let mut digest = CRC32C.digest();
    digest.update(&frame[..20]);
    digest.update(&frame[FRAME_HEAD_BYTES..]);
    digest.finalize()
}

fn word(bytes: &[u8], at: usize) -> u64 {
    let mut word = [0; 8];
    word.copy_from_slice(&bytes[at..at + 8]);
    u64::from_le_bytes(word)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::blob::Digest;
    use crate::journal::{PlanEvent, TickRecord};
    use crate::message::WheelLayout;
    use alloc::vec;

    fn tick_entry() -> Entry {
        let mut record = TickRecord::blank(WheelLayout::LeftRight);
        record.tick = 7;
        record.x_m = -1.25;
        Entry { number: 41, at_ns: 1_000_000, body: Body::Tick(record) }
    }

    #[test]
    fn crc_is_the_published_one() {
        // RFC 3720, appendix B.4: 32 bytes of zeros, and of ones.
        assert_eq!(CRC32C.checksum(&[0; 32]), 0x8a91_36aa);
        assert_eq!(CRC32C.checksum(&[0xff; 32]), 0x62a8_ab43);
    }

    #[test]
    fn a_frame_reads_back_and_the_next_one_follows() {
        let mut bytes = Vec::new();
        write_frame(&tick_entry(), &mut bytes);
        let first = bytes.len();
        let plan = PlanEvent { session: 1, sequence: 2, digest: Digest::NONE, raw: vec![b'x'; 5000] };
        write_frame(&Entry { number: 42, at_ns: 2, body: Body::Plan(plan.clone()) }, &mut bytes);
        let (entry, used) = read_frame(&bytes).unwrap();
        assert_eq!((entry, used), (tick_entry(), first));
        assert_eq!(read_frame(&bytes[first..]).unwrap().0.body, Body::Plan(plan));
    }

    #[test]
    fn every_altered_byte_and_every_cut_is_noticed() {
        let mut bytes = Vec::new();
        write_frame(&tick_entry(), &mut bytes);
        for at in 0..bytes.len() {
            for change in [1, 0x80, 0xff] {
                let mut altered = bytes.clone();
                altered[at] ^= change;
                assert!(read_frame(&altered).is_err(), "byte {at} ^ {change}");
            }
            assert!(matches!(read_frame(&bytes[..at]), Err(FrameError::Short { .. })), "cut at {at}");
        }
    }

    #[test]
    fn a_hostile_length_is_refused_before_anything_is_allocated() {
        let mut bytes = vec![0; FRAME_HEAD_BYTES];
        bytes[16..20].copy_from_slice(&u32::MAX.to_le_bytes());
        assert_eq!(frame_length(&bytes), Err(FrameError::TooLong { bytes: u32::MAX as usize }));
    }
}
