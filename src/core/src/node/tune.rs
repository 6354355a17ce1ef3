//! What an operator changes while the machine runs: the speed cap, the law and its gains.

use super::orders::Given;
use super::tuning::{Tuning, told};
use super::{Node, Sink};
use crate::digest;
use crate::law::Law;
use alloc::boxed::Box;
use alloc::string::String;
use alloc::vec::Vec;
use trackhold_proto::blob::Digest;
use trackhold_proto::journal::{AckEffect, Body, TuneEvent};
use trackhold_proto::message::LEAST_SHARE;
use trackhold_proto::words::{Mode, Refusal};

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

    /// Takes a law in. Whatever becomes of it, nothing is freed here: it goes into an entry, or back.
    pub(super) fn tune(
        &mut self,
        event: TuneEvent,
        built: Result<Box<Tuning>, Vec<String>>,
        sink: &mut impl Sink,
    ) {
        let (session, sequence) = (event.session, event.sequence);
        let given = Given::Tune(digest::of_bytes(event.law.as_bytes()));
        self.emit(Body::Tune(event), sink);
        let known = self.orders.find(session, sequence).map(|known| known.outcome_of(&given));
        let (refusal, findings) = match (known, built) {
            (None, Ok(tuning)) => (self.take_law(tuning, sink).err(), Vec::new()),
            (None, Err(findings)) => (Some(Refusal::LawUnfit), findings),
            (Some(refusal), Ok(tuning)) => {
                sink.retire_law(tuning);
                (refusal, Vec::new())
            }
            (Some(refusal), Err(findings)) => (refusal, findings),
        };
        if known.is_none() {
            self.orders.keep(session, sequence, given, refusal);
        }
        let (order_kind, plan) = (TuneEvent::KIND, Digest::NONE);
        self.emit(Body::Ack(AckEffect { session, sequence, order_kind, plan, refusal, findings }), sink);
    }

    /// Puts a law in force, and hands back the one that was.
    fn take_law(&mut self, mut tuning: Box<Tuning>, sink: &mut impl Sink) -> Result<(), Refusal> {
        if let Err(refusal) = self.admit_law(tuning.law()) {
            sink.retire_law(tuning);
            return Err(refusal);
        }
        self.feedback.exchange(&mut tuning.law, self.vehicle.body(&self.wheels));
        let law = self.feedback.law();
        self.terms.following = law.domain().following();
        let gains = core::mem::take(&mut tuning.gains);
        let changed = told(tuning.name.as_str(), gains, law, &*self.vehicle);
        self.emit(Body::LawChanged(changed), sink);
        sink.retire_law(tuning);
        Ok(())
    }

    /// Whether a law may take over now: in this mode, and on the plans that are loaded.
    fn admit_law(&self, law: &dyn Law) -> Result<(), Refusal> {
        if !matches!(self.mode, Mode::Standby | Mode::Tracking) {
            return Err(Refusal::Mode { mode: self.mode });
        }
        let loaded = self.plan.iter().map(|plan| plan.travel());
        let travel = loaded.fold(self.successors.travel(), |all, travel| all.with(travel));
        match law.domain().unfit_direction(travel) {
            Some(reverse) => Err(Refusal::LawDirection { reverse }),
            None => Ok(()),
        }
    }
}
