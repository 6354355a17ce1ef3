//! Orders: one acknowledgement each, one effect each, and what a start has to quote.

use super::{Asked, Broken, Heard, Judge, Rule};
use crate::setup::POSE_TIMEOUT;
use trackhold_proto::blob::{BootId, Digest};
use trackhold_proto::journal::{Body, Order, OrderEvent};
use trackhold_proto::words::{Mode, Refusal, StopKind};

/// So many orders are remembered, see the core's `node/orders.rs`.
const REMEMBERED: usize = 16;

/// An order that was given before.
#[derive(Clone, Copy, Debug)]
struct Given {
    sequence: u64,
    /// None for a law.
    order: Option<Order>,
    refusal: Option<Refusal>,
}

#[derive(Debug)]
pub(super) struct Orders {
    boot: BootId,
    plan: Option<Digest>,
    /// Every sequence number's first order, oldest first.
    given: Vec<Given>,
    pub(super) last_refusal: Option<Refusal>,
}

impl Orders {
    pub(super) fn new(boot: BootId) -> Self {
        Self { boot, plan: None, given: Vec::new(), last_refusal: None }
    }

    fn remembered(&self, sequence: u64) -> Option<&Given> {
        self.given.iter().rev().take(REMEMBERED).find(|given| given.sequence == sequence)
    }

    /// The order before under the same sequence number, as far back as the node has to remember.
    fn before(&self, heard: &Heard<'_>) -> Option<(OrderEvent, &Given)> {
        let Asked::Order(event) = heard.asked else { return None };
        self.remembered(event.sequence).map(|given| (*event, given))
    }

    /// True for an order whose sequence number is remembered; never for an emergency stop, which always acts.
    pub(super) fn repeats(&self, heard: &Heard<'_>) -> bool {
        heard.order() != Some(Order::Stop(StopKind::Emergency)) && self.before(heard).is_some()
    }
}

impl Judge {
    /// One acknowledgement for an order, a plan, a law; none for anything else.
    pub(super) fn judge_acks(&mut self, heard: &Heard<'_>) -> Result<(), Broken> {
        let due = match heard.asked {
            Asked::Order(event) => Some((event.session, event.sequence)),
            Asked::Long(session, sequence) => Some((*session, *sequence)),
            _ => None,
        };
        self.orders.last_refusal = heard.refusal();
        let told = heard.ack.map(|ack| (ack.session, ack.sequence));
        let about = || format!("{:?} is answered by {:?}", heard.asked, heard.ack);
        Broken::unless(told == due, Rule::Acknowledged, about)
    }

    /// What was refused changes nothing, nor does what comes again.
    pub(super) fn judge_once(&mut self, heard: &Heard<'_>) -> Result<(), Broken> {
        let changed = heard.change.is_some() || heard.loaded().is_some();
        let refused = heard.refusal().is_some();
        Broken::unless(!(refused && changed), Rule::Once, || format!("refused, and yet: {:?}", heard.out))?;
        self.judge_repeated(heard)
    }

    fn judge_repeated(&mut self, heard: &Heard<'_>) -> Result<(), Broken> {
        if let Some((event, given)) = self.orders.before(heard).filter(|_| self.orders.repeats(heard)) {
            let first =
                if given.order == Some(event.order) { given.refusal } else { Some(Refusal::SequenceReused) };
            let kept = heard.refusal() == first && heard.change.is_none();
            return Broken::unless(kept, Rule::Once, || format!("{event:?} again: {:?}", heard.out));
        }
        self.keep(heard);
        Ok(())
    }

    /// Remembers an order under a new number.
    fn keep(&mut self, heard: &Heard<'_>) {
        let (sequence, order) = match heard.asked {
            Asked::Order(event) => (event.sequence, Some(event.order)),
            Asked::Long(_, sequence) if matches!(heard.out[0].body, Body::Tune(_)) => (*sequence, None),
            _ => return,
        };
        if self.orders.remembered(sequence).is_none() {
            self.orders.given.push(Given { sequence, order, refusal: heard.refusal() });
        }
    }

    /// A start that was taken quotes what is in force, and there is a fresh pose.
    pub(super) fn judge_start(&mut self, heard: &Heard<'_>) -> Result<(), Broken> {
        if let Some(digest) = heard.loaded() {
            self.orders.plan = Some(digest);
        }
        let Some(Order::Start(start)) = heard.order().filter(|_| heard.after == Mode::Tracking) else {
            return Ok(());
        };
        if heard.change.is_none() {
            return Ok(());
        }
        let quoted = start.boot == self.orders.boot
            && Some(start.plan) == self.orders.plan
            && start.start_number == self.number();
        let fresh = self.causes.is_fresh(heard.at, POSE_TIMEOUT);
        let told = || format!("taken: {start:?}; number in force {}, fresh pose: {fresh}", self.number());
        Broken::unless(quoted && fresh && heard.before == Mode::Standby, Rule::Start, told)
    }

    /// What the node has to remember under this sequence number: the order's kind (none for a law), and its refusal.
    pub(crate) fn remembers(&self, sequence: u64) -> Option<(Option<u32>, Option<&'static str>)> {
        let kind = |given: &Given| given.order.map(|order| order.kind());
        let given = self.orders.remembered(sequence);
        given.map(|given| (kind(given), given.refusal.as_ref().map(Refusal::name)))
    }

    /// True if this is the start number in force.
    pub(crate) fn is_current(&self, number: u64) -> bool {
        number == self.number()
    }

    /// The digest of the plan in force.
    pub(crate) fn plan(&self) -> Option<Digest> {
        self.orders.plan
    }
}
