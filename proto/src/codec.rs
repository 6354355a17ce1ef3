//! Datagram ⇄ message. Total: any bytes give a value or an error that says what was wrong where, in bounded memory.

use crate::header::{HEADER_BYTES, Header, MAX_DATAGRAM_BYTES, TAG_BYTES};
use crate::message::{Message, Payload};
use alloc::string::{String, ToString};
use alloc::vec::Vec;
use bincode::config::Config;
use bincode::de::read::Reader;
use bincode::{Decode, Encode};
use thiserror::Error;

pub use crate::json::MAX_JSON_BYTES;

/// Longest payload, bytes.
pub const MAX_PAYLOAD_BYTES: usize = MAX_DATAGRAM_BYTES - HEADER_BYTES - TAG_BYTES;

/// Fixed-width little endian: one spelling a value, readable with a C struct. The limit counts in-memory size and
/// keeps a hostile length from allocating.
pub(crate) const WIRE: bincode::config::Configuration<
    bincode::config::LittleEndian,
    bincode::config::Fixint,
    bincode::config::Limit<8192>,
> = bincode::config::standard().with_fixed_int_encoding().with_limit::<8192>();

/// What was wrong with a datagram.
#[derive(Clone, Debug, PartialEq, Eq, Error)]
pub enum DecodeError {
    /// Longer than any datagram of this protocol.
    #[error("{bytes} bytes, at most {MAX_DATAGRAM_BYTES} are allowed")]
    TooLong {
        /// Its length.
        bytes: usize,
    },
    /// Shorter than a header.
    #[error("{bytes} bytes, a header alone has {HEADER_BYTES}")]
    TooShort {
        /// Its length.
        bytes: usize,
    },
    /// The first four bytes are not the magic.
    #[error("bytes 0 to 3 are {got:02x?}, neither the magic a7 54 4b 48 nor a JSON object")]
    Magic {
        /// What they are.
        got: [u8; 4],
    },
    /// Another protocol version.
    #[error("byte 4: protocol version {got}, this program speaks 1")]
    Version {
        /// The version stated.
        got: u8,
    },
    /// The reserved bytes are not zero.
    #[error("bytes 36 to 39 are reserved and must be 0")]
    Reserved,
    /// The stated payload length does not match the datagram.
    #[error(
        "byte 6: payload length {stated}, but {present} bytes follow the header (payload, then a tag of 0 or 16)"
    )]
    Length {
        /// Length stated in the header.
        stated: usize,
        /// Bytes after the header.
        present: usize,
    },
    /// No such kind.
    #[error("byte 5: there is no kind {got}")]
    Kind {
        /// The kind stated.
        got: u8,
    },
    /// No such kind, by name.
    #[error("field kind: no such kind; see PROTOCOL.md for the names")]
    KindName,
    /// The payload ends early, is too long, or holds a value that does not exist.
    #[error("payload of {kind}, read up to byte {at}: {what}")]
    Payload {
        /// Name of its kind.
        kind: &'static str,
        /// How many of its bytes were read before.
        at: usize,
        /// What is wrong with it.
        what: String,
    },
    /// A number is NaN or infinite.
    #[error("field {field}: not a finite number")]
    NotFinite {
        /// The field's name.
        field: &'static str,
    },
    /// A value lies outside its bound.
    #[error("field {field}: must be {bound}")]
    Value {
        /// The field's name.
        field: &'static str,
        /// Its bound.
        bound: &'static str,
    },
    /// Not a JSON object, or not one of this kind.
    #[error("JSON: {what}")]
    Json {
        /// What is wrong with it.
        what: String,
    },
}

/// A message with its sender's numbers.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Envelope {
    /// Session of the sender.
    pub session: u64,
    /// Sequence number within the session.
    pub sequence: u64,
    /// The sender's clock when it sent, ns.
    pub stamp_ns: u64,
    /// The message.
    pub message: Message,
}

impl Envelope {
    /// Decodes a datagram, binary or JSON (first byte `{`).
    ///
    /// # Errors
    /// Says what was wrong where.
    pub fn decode(datagram: &[u8]) -> Result<Self, DecodeError> {
        if datagram.first() == Some(&b'{') {
            if datagram.len() > MAX_DATAGRAM_BYTES {
                return Err(DecodeError::TooLong { bytes: datagram.len() });
            }
            return Self::from_json(datagram);
        }
        let (header, payload, _tag) = Header::split(datagram)?;
        Ok(Self {
            session: header.session,
            sequence: header.sequence,
            stamp_ns: header.stamp_ns,
            message: Message::decode_payload(header.kind, payload)?,
        })
    }

    /// Encodes into `datagram` and returns the length. Allocates nothing.
    pub fn encode(&self, datagram: &mut [u8; MAX_DATAGRAM_BYTES]) -> usize {
        let payload_bytes = self.message.encode_payload(&mut datagram[HEADER_BYTES..]);
        let header = Header {
            kind: self.message.kind(),
            payload_bytes: u16::try_from(payload_bytes).unwrap_or(u16::MAX),
            session: self.session,
            sequence: self.sequence,
            stamp_ns: self.stamp_ns,
            key_id: 0,
        };
        datagram[..HEADER_BYTES].copy_from_slice(&header.to_bytes());
        HEADER_BYTES + payload_bytes
    }

    /// Encodes into a new vector.
    pub fn to_vec(&self) -> Vec<u8> {
        let mut datagram = [0; MAX_DATAGRAM_BYTES];
        let length = self.encode(&mut datagram);
        datagram[..length].to_vec()
    }

    /// The same as one JSON object, which can be longer than a datagram to the daemon may be.
    pub fn to_json(&self) -> String {
        crate::json::encode(self)
    }

    /// Reads what [`Envelope::to_json`] gives, at most [`MAX_JSON_BYTES`].
    ///
    /// # Errors
    /// Says what was wrong where.
    pub fn from_json(text: &[u8]) -> Result<Self, DecodeError> {
        crate::json::decode(text)
    }
}

/// Decodes a payload that must fill `bytes` to the last one.
pub(crate) fn decode_exact<T: Payload + Decode<()>>(bytes: &[u8]) -> Result<T, DecodeError> {
    let payload: T = decode_whole(bytes, WIRE).map_err(|Broken { at, what }| DecodeError::Payload {
        kind: T::NAME,
        at,
        what,
    })?;
    payload.check()?;
    Ok(payload)
}

/// Where and why bytes did not decode.
pub(crate) struct Broken {
    /// How many bytes were read before.
    pub(crate) at: usize,
    /// What was found there.
    pub(crate) what: String,
}

/// A reader that knows how far it is, so that an error can say where.
struct Counting<'a> {
    bytes: &'a [u8],
    at: usize,
}

impl Reader for Counting<'_> {
    fn read(&mut self, into: &mut [u8]) -> Result<(), bincode::error::DecodeError> {
        let rest = &self.bytes[self.at..];
        let Some(found) = rest.get(..into.len()) else {
            return Err(bincode::error::DecodeError::UnexpectedEnd { additional: into.len() - rest.len() });
        };
        into.copy_from_slice(found);
        self.at += into.len();
        Ok(())
    }
}

/// Decodes a value that must fill `bytes` to the last one.
pub(crate) fn decode_whole<T: Decode<()>>(bytes: &[u8], config: impl Config) -> Result<T, Broken> {
    let mut reader = Counting { bytes, at: 0 };
    let decoded = bincode::decode_from_reader::<T, _, _>(&mut reader, config);
    let at = reader.at;
    match decoded {
        Ok(value) if at == bytes.len() => Ok(value),
        Ok(_) => Err(Broken { at, what: alloc::format!("{} bytes too many follow", bytes.len() - at) }),
        Err(error) => Err(Broken { at, what: describe(&error) }),
    }
}

fn describe(error: &bincode::error::DecodeError) -> String {
    use bincode::error::{AllowedEnumVariants, DecodeError as E};
    match error {
        E::UnexpectedEnd { additional } => alloc::format!("ends early, {additional} bytes are missing"),
        E::UnexpectedVariant { type_name, found, allowed: AllowedEnumVariants::Range { max, .. } } => {
            alloc::format!("{type_name} has no value {found}, only 0 to {max}")
        }
        E::LimitExceeded => "states a length beyond the limit".to_string(),
        E::Other(what) => what.to_string(),
        other => other.to_string(),
    }
}

/// Encodes a payload; every payload of this crate fits, which the tests of this crate show.
pub(crate) fn encode_into<T: Encode>(payload: &T, into: &mut [u8]) -> usize {
    match bincode::encode_into_slice(payload, into, WIRE) {
        Ok(used) => used,
        Err(error) => unreachable!("a payload is bounded by its type: {error}"),
    }
}
