//! Bounded byte strings, texts and digests: they decode without allocating, so that a hostile length costs nothing.

use alloc::string::String;
use bincode::de::{BorrowDecode, BorrowDecoder, Decoder, read::Reader};
use bincode::enc::{Encoder, write::Writer};
use bincode::error::{DecodeError, EncodeError};
use bincode::{Decode, Encode};
use core::fmt;
use serde::{Deserialize, Deserializer, Serialize, Serializer};

/// At most `N` bytes. On the wire: u16 count, then that many bytes. In JSON: a string of hex digits.
#[derive(Clone, Copy, PartialEq, Eq)]
pub struct Blob<const N: usize> {
    count: u16,
    bytes: [u8; N],
}

impl<const N: usize> Blob<N> {
    /// Copies `bytes`, or returns `None` if there are more than `N`.
    pub fn new(bytes: &[u8]) -> Option<Self> {
        let mut blob = Self { count: u16::try_from(bytes.len()).ok()?, bytes: [0; N] };
        blob.bytes.get_mut(..bytes.len())?.copy_from_slice(bytes);
        Some(blob)
    }

    /// The bytes held.
    pub fn as_slice(&self) -> &[u8] {
        &self.bytes[..usize::from(self.count)]
    }
}

impl<const N: usize> fmt::Debug for Blob<N> {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "Blob({} bytes)", self.count)
    }
}

impl<const N: usize> Encode for Blob<N> {
    fn encode<E: Encoder>(&self, encoder: &mut E) -> Result<(), EncodeError> {
        self.count.encode(encoder)?;
        encoder.writer().write(self.as_slice())
    }
}

impl<C, const N: usize> Decode<C> for Blob<N> {
    fn decode<D: Decoder<Context = C>>(decoder: &mut D) -> Result<Self, DecodeError> {
        let count = u16::decode(decoder)?;
        if usize::from(count) > N {
            return Err(DecodeError::Other("a byte string is longer than its bound"));
        }
        decoder.claim_bytes_read(usize::from(count))?;
        let mut bytes = [0; N];
        decoder.reader().read(&mut bytes[..usize::from(count)])?;
        Ok(Self { count, bytes })
    }
}

impl<'de, C, const N: usize> BorrowDecode<'de, C> for Blob<N> {
    fn borrow_decode<D: BorrowDecoder<'de, Context = C>>(decoder: &mut D) -> Result<Self, DecodeError> {
        Self::decode(decoder)
    }
}

impl<const N: usize> Serialize for Blob<N> {
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        serializer.serialize_str(&to_hex(self.as_slice()))
    }
}

impl<'de, const N: usize> Deserialize<'de> for Blob<N> {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        let text = String::deserialize(deserializer)?;
        let mut bytes = [0; N];
        let held = text.len() / 2;
        let room = bytes
            .get_mut(..held)
            .ok_or_else(|| serde::de::Error::custom(format_args!("{held} bytes where at most {N} fit")))?;
        from_hex(&text, room).ok_or_else(|| serde::de::Error::custom("not a string of hex digit pairs"))?;
        Ok(Self { count: u16::try_from(held).map_err(serde::de::Error::custom)?, bytes })
    }
}

/// UTF-8 text of at most `N` bytes. On the wire like [`Blob`]; in JSON a string.
#[derive(Clone, Copy, PartialEq, Eq)]
pub struct Text<const N: usize>(Blob<N>);

impl<const N: usize> Text<N> {
    /// The longest prefix of `text` that fits; a cut text ends with `…`, so that a reader sees the cut.
    pub fn cut(text: &str) -> Self {
        if let Some(blob) = Blob::new(text.as_bytes()) {
            return Self(blob);
        }
        let mark = "…";
        let mut end = N.saturating_sub(mark.len());
        while !text.is_char_boundary(end) {
            end -= 1;
        }
        let mut whole = String::from(&text[..end]);
        whole.push_str(mark);
        Self(Blob::new(whole.as_bytes()).unwrap_or(Blob { count: 0, bytes: [0; N] }))
    }

    /// The text held.
    pub fn as_str(&self) -> &str {
        core::str::from_utf8(self.0.as_slice()).unwrap_or("")
    }
}

impl<const N: usize> fmt::Debug for Text<N> {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "{:?}", self.as_str())
    }
}

impl<const N: usize> Encode for Text<N> {
    fn encode<E: Encoder>(&self, encoder: &mut E) -> Result<(), EncodeError> {
        self.0.encode(encoder)
    }
}

impl<C, const N: usize> Decode<C> for Text<N> {
    fn decode<D: Decoder<Context = C>>(decoder: &mut D) -> Result<Self, DecodeError> {
        let blob = Blob::<N>::decode(decoder)?;
        match core::str::from_utf8(blob.as_slice()) {
            Ok(_) => Ok(Self(blob)),
            Err(_) => Err(DecodeError::Other("a text is not UTF-8")),
        }
    }
}

impl<'de, C, const N: usize> BorrowDecode<'de, C> for Text<N> {
    fn borrow_decode<D: BorrowDecoder<'de, Context = C>>(decoder: &mut D) -> Result<Self, DecodeError> {
        Self::decode(decoder)
    }
}

impl<const N: usize> Serialize for Text<N> {
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        serializer.serialize_str(self.as_str())
    }
}

impl<'de, const N: usize> Deserialize<'de> for Text<N> {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        let text = String::deserialize(deserializer)?;
        Blob::new(text.as_bytes()).map(Self).ok_or_else(|| {
            serde::de::Error::custom(format_args!("a text of {} bytes where at most {N} fit", text.len()))
        })
    }
}

/// Fixed bytes that people read as hex: a SHA-256 digest, a boot identity.
#[derive(Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Hash, Encode, Decode)]
pub struct Hex<const N: usize>(pub [u8; N]);

/// SHA-256 of something: of a plan's bytes, of tick records and effects.
pub type Digest = Hex<32>;

/// Drawn at random when a daemon starts; a start order quotes it, so that an order recorded before a restart is refused.
pub type BootId = Hex<16>;

impl<const N: usize> Hex<N> {
    /// All bytes zero: "none".
    pub const NONE: Self = Self([0; N]);

    /// Parses exactly `2 N` hex digits.
    pub fn parse(text: &str) -> Option<Self> {
        let mut bytes = [0; N];
        (text.len() == 2 * N).then(|| from_hex(text, &mut bytes))??;
        Some(Self(bytes))
    }
}

impl<const N: usize> fmt::Display for Hex<N> {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(&to_hex(&self.0))
    }
}

impl<const N: usize> fmt::Debug for Hex<N> {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        fmt::Display::fmt(self, f)
    }
}

impl<const N: usize> Serialize for Hex<N> {
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        serializer.serialize_str(&to_hex(&self.0))
    }
}

impl<'de, const N: usize> Deserialize<'de> for Hex<N> {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        let text = String::deserialize(deserializer)?;
        Self::parse(&text).ok_or_else(|| serde::de::Error::custom(format_args!("not {} hex digits", 2 * N)))
    }
}

pub(crate) fn to_hex(bytes: &[u8]) -> String {
    let digit = |nibble: u8| char::from_digit(u32::from(nibble), 16).unwrap_or('?');
    bytes.iter().flat_map(|byte| [digit(byte >> 4), digit(byte & 15)]).collect()
}

/// Fills `into` from `text`, which must hold exactly two hex digits a byte.
fn from_hex(text: &str, into: &mut [u8]) -> Option<()> {
    let digits = text.as_bytes();
    if digits.len() != 2 * into.len() {
        return None;
    }
    let value = |digit: u8| char::from(digit).to_digit(16).and_then(|nibble| u8::try_from(nibble).ok());
    for (byte, pair) in into.iter_mut().zip(digits.chunks_exact(2)) {
        *byte = (value(pair[0])? << 4) | value(pair[1])?;
    }
    Some(())
}

#[cfg(test)]
mod tests {
    use super::*;
    use alloc::format;

    #[test]
    fn a_cut_text_shows_the_cut_and_keeps_characters_whole() {
        let text = Text::<8>::cut("häämatka on pitkä");
        assert_eq!(text.as_str(), "hää…");
        assert_eq!(Text::<8>::cut("kurz").as_str(), "kurz");
    }

    #[test]
    fn hex_reads_what_it_prints_and_nothing_else() {
        let id = Hex([0, 1, 0xab, 0xff]);
        assert_eq!(format!("{id}"), "0001abff");
        assert_eq!(Hex::<4>::parse("0001ABff"), Some(id));
        for wrong in ["", "0001abf", "0001abffa", "0001abfg", "+1+1+1+1"] {
            assert_eq!(Hex::<4>::parse(wrong), None, "{wrong}");
        }
    }
}
