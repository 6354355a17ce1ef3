//! Outcomes: who waits for which, what is said, and those of plans for planners that did not hear.

use crate::mail::{OrderKey, Peer};
use crate::worker::PLAN_KIND;
use std::collections::VecDeque;
use trackhold_proto::blob::{Digest, Text};
use trackhold_proto::journal::AckEffect;
use trackhold_proto::message::Ack;

/// So many orders can wait for their outcome.
const MAX_WAITING: usize = 128;
/// So many outcomes of plans are kept.
const MAX_OUTCOMES: usize = 16;

/// Who waits, and what became of plans.
#[derive(Debug, Default)]
pub(super) struct Acks {
    waiting: VecDeque<(OrderKey, Peer)>,
    outcomes: VecDeque<Ack>,
}

impl Acks {
    /// The outcome of this order goes there. The oldest of too many is forgotten: its sender repeats the order.
    pub(super) fn expect(&mut self, order: OrderKey, peer: Peer) {
        if self.waiting.len() >= MAX_WAITING {
            self.waiting.pop_front();
        }
        self.waiting.push_back((order, peer));
    }

    /// Whoever waits for an outcome.
    pub(super) fn settle(&mut self, ack: &Ack) -> Option<Peer> {
        let order =
            OrderKey { session: ack.order_session, sequence: ack.order_sequence, kind: ack.order_kind };
        if ack.order_kind == PLAN_KIND {
            self.keep(*ack);
        }
        let index = self.waiting.iter().position(|(waiting, _)| *waiting == order)?;
        self.waiting.remove(index).map(|(_, peer)| peer)
    }

    /// What became of a plan, if that is known.
    pub(super) fn outcome(&self, session: u64, plan: Digest) -> Option<&Ack> {
        self.outcomes.iter().find(|ack| ack.order_session == session && ack.plan == plan)
    }

    fn keep(&mut self, ack: Ack) {
        self.outcomes.retain(|kept| kept.order_session != ack.order_session || kept.plan != ack.plan);
        if self.outcomes.len() >= MAX_OUTCOMES {
            self.outcomes.pop_front();
        }
        self.outcomes.push_back(ack);
    }
}

/// The answer to an order, from what the node made of it. Too many findings are cut, which the text shows.
pub(super) fn answer(effect: &AckEffect) -> Ack {
    let mut text = effect.refusal.map(|refusal| refusal.to_string()).unwrap_or_default();
    for (index, finding) in effect.findings.iter().enumerate() {
        text.push_str(if index == 0 { ": " } else { "; " });
        text.push_str(finding);
    }
    Ack {
        order_session: effect.session,
        order_sequence: effect.sequence,
        order_kind: effect.order_kind,
        accepted: u32::from(effect.refusal.is_none()),
        plan: effect.plan,
        text: Text::cut(&text),
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::mail::Form;
    use trackhold_proto::words::Refusal;

    fn effect(sequence: u64, order_kind: u32, findings: usize) -> AckEffect {
        AckEffect {
            session: 1,
            sequence,
            order_kind,
            plan: Digest::NONE,
            refusal: (findings > 0).then_some(Refusal::PlanUnfit),
            findings: (0..findings).map(|index| format!("segments[{index}]: {}", "x".repeat(90))).collect(),
        }
    }

    #[test]
    fn findings_are_told_and_cut_to_fit() {
        assert_eq!(answer(&effect(1, 3, 0)).text.as_str(), "");
        let two = answer(&effect(1, PLAN_KIND, 2));
        assert!(two.text.as_str().starts_with("the plan is not fit: segments[0]: xx") && two.accepted == 0);
        assert!(answer(&effect(1, PLAN_KIND, 30)).text.as_str().ends_with('…'));
    }

    #[test]
    fn an_outcome_goes_to_who_waits_and_a_plans_is_kept() {
        let mut acks = Acks::default();
        let peer = Peer { address: ([127, 0, 0, 1], 9).into(), form: Form::Json };
        acks.expect(OrderKey { session: 1, sequence: 7, kind: 3 }, peer);
        assert_eq!(acks.settle(&answer(&effect(8, 3, 0))), None);
        assert_eq!(acks.settle(&answer(&effect(7, 4, 0))), None, "another kind");
        assert_eq!(acks.settle(&answer(&effect(7, 3, 0))), Some(peer));
        assert_eq!(acks.settle(&answer(&effect(7, 3, 0))), None, "told once");
        assert!(acks.outcome(1, Digest::NONE).is_none());
        acks.settle(&answer(&effect(9, PLAN_KIND, 1)));
        assert_eq!(acks.outcome(1, Digest::NONE).map(|ack| ack.accepted), Some(0));
        for sequence in 0..1000 {
            acks.expect(OrderKey { session: 2, sequence, kind: 3 }, peer);
        }
        assert_eq!(acks.waiting.len(), MAX_WAITING);
    }
}
