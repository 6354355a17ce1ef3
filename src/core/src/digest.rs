//! SHA-256: of a plan's bytes, and over everything the node results in.

use sha2::{Digest as _, Sha256};
use trackhold_proto::blob::{Digest, Hex};
use trackhold_proto::journal::{Body, encode_body};

/// SHA-256 of some bytes.
pub fn of_bytes(bytes: &[u8]) -> Digest {
    Hex(Sha256::digest(bytes).into())
}

/// SHA-256 over tick records and effects, in order. Events and notes are passed over: two runs agree if and only if
/// they computed the same.
#[derive(Clone, Debug, Default)]
pub struct ResultDigest(Sha256);

impl ResultDigest {
    /// Takes in an entry's body, if it is a result.
    pub fn add(&mut self, body: &Body) {
        if !body.is_result() {
            return;
        }
        let mut bytes = [0; 512];
        match encode_body(body, &mut bytes) {
            Some(length) => self.0.update(&bytes[..length]),
            // Only an acknowledgement with many findings is longer.
            None => self.add_long(body),
        }
    }

    /// The digest so far.
    pub fn finish(&self) -> Digest {
        Hex(self.0.clone().finalize().into())
    }

    fn add_long(&mut self, body: &Body) {
        let entry = trackhold_proto::journal::Entry { number: 0, at_ns: 0, body: body.clone() };
        let mut frame = alloc::vec::Vec::new();
        trackhold_proto::journal::write_frame(&entry, &mut frame);
        self.0.update(&frame[trackhold_proto::journal::FRAME_HEAD_BYTES..]);
    }
}
