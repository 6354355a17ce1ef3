//! What an operator changes while the machine runs: the speed cap.

use super::Node;
use trackhold_proto::message::LEAST_SHARE;
use trackhold_proto::words::Refusal;

impl Node {
    /// Caps the speed. In every mode: a cap given before a start holds for it.
    pub(super) fn cap(&mut self, share: f64) -> Result<(), Refusal> {
        // The wire lets nothing else through; a recording might.
        if !(LEAST_SHARE..=1.0).contains(&share) {
            return Err(Refusal::CapOutOfRange);
        }
        self.run.set_cap(share);
        Ok(())
    }
}
