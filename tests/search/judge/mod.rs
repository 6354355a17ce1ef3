//! The judge: reads what went in and what came out, nothing of the node's inside, and says which rule was broken.
//!
//! | file | rules |
//! | --- | --- |
//! | here | entries numbered without a gap, the event first; no value that is no number |
//! | `modes` | the mode table; who may change the mode; one-time start numbers |
//! | `orders` | each order acknowledged once; a repeated one acts once; a start quotes what is in force |
//! | `motion` | no motion without authority; limits; zero at once; ramps |
//! | `causes` | no motion on a stale pose, after a jump, without a plan, or on a ramp without end |

mod causes;
mod modes;
mod motion;
mod orders;

use crate::setup::Setup;
use crate::table::{Cells, ModeTable};
use causes::Causes;
use motion::Motion;
use orders::Orders;
use std::sync::Arc;
use trackhold_core::node::Event;
use trackhold_core::time::TimeNs;
use trackhold_proto::blob::{BootId, Digest};
use trackhold_proto::journal::{
    AckEffect, Body, Entry, ModeChange, Order, OrderEvent, PoseEvent, TickRecord, TripEvent,
};
use trackhold_proto::words::{Cause, Mode, Refusal};

/// The rules.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord)]
pub(crate) enum Rule {
    /// Entries are numbered without a gap, and the event comes first.
    Numbered,
    /// A record holds no value that is no number.
    Finite,
    /// Modes follow from one another as the table says, and by nothing that the table does not name.
    Table,
    /// What a tick says of mode, cause and start number is what was told.
    Told,
    /// Every leaving of tracking renews the start number, nothing else does, and none comes again.
    Renewal,
    /// Each order is acknowledged once, nothing else is.
    Acknowledged,
    /// An order that comes again gets its first outcome and does nothing; a refused one does nothing either.
    Once,
    /// A start is taken in standby alone, and only if it quotes boot, plan and start number in force, with a fresh pose.
    Start,
    /// Emergency stop and trip put zero out at once, outside any tick; nothing else commands outside a tick.
    ZeroAtOnce,
    /// Without a start since the machine last stopped nothing moves.
    Authority,
    /// A protective stop is zero, or on a ramp that falls to zero in its time.
    Ramp,
    /// No command exceeds a limit.
    Limits,
    /// No command but a stop exceeds the acceleration limits, none at all those of the steering.
    Steps,
    /// Without a fresh pose the machine is stopped.
    Fresh,
    /// A jump of the pose beyond its limit stops the machine.
    Jump,
    /// When the plan is over the machine is stopped.
    RunsOut,
    /// A controlled stop ends.
    RampEnds,
}

/// A rule that was broken.
#[derive(Clone, Debug, PartialEq)]
pub(crate) struct Broken {
    /// Which.
    pub(crate) rule: Rule,
    /// By what.
    pub(crate) told: String,
}

impl Broken {
    fn unless(kept: bool, rule: Rule, told: impl FnOnce() -> String) -> Result<(), Self> {
        if kept { Ok(()) } else { Err(Self { rule, told: told() }) }
    }
}

/// An event as it was meant, whatever became of it.
#[derive(Clone, Debug)]
pub(crate) enum Asked {
    Tick,
    Pose(PoseEvent),
    Order(OrderEvent),
    /// A plan or a law, by session and sequence number.
    Long(u64, u64),
    Trip(TripEvent),
    /// An event that asks for nothing.
    Quiet,
}

impl Asked {
    pub(crate) fn of(event: &Event) -> Self {
        match event {
            Event::Tick => Self::Tick,
            Event::Pose(event) => Self::Pose(*event),
            Event::Order(event) => Self::Order(*event),
            Event::Plan(event, _) => Self::Long(event.session, event.sequence),
            Event::Tune(event, _) => Self::Long(event.session, event.sequence),
            Event::Trip(event) => Self::Trip(*event),
            Event::Exchange(_) | Event::Note(_) => Self::Quiet,
        }
    }
}

/// What the judge reads of one event's entries.
#[derive(Debug)]
struct Heard<'a> {
    at: TimeNs,
    asked: &'a Asked,
    out: &'a [Entry],
    change: Option<ModeChange>,
    ack: Option<&'a AckEffect>,
    record: Option<&'a TickRecord>,
    /// The mode before and after.
    before: Mode,
    after: Mode,
}

/// The judge's memory.
#[derive(Debug)]
pub(crate) struct Judge {
    table: Arc<ModeTable>,
    /// The table's cells that were asked.
    pub(crate) asked: Cells,
    next_entry: u64,
    pub(crate) mode: Mode,
    pub(crate) cause: Cause,
    number: u64,
    used_numbers: Vec<u64>,
    orders: Orders,
    motion: Motion,
    causes: Causes,
    last: Option<TickRecord>,
}

impl Judge {
    /// A judge of a node that has just begun: its boot identity and its first start number, as its status tells them.
    pub(crate) fn new(setup: &Setup, boot: BootId, number: u64) -> Self {
        Self {
            table: Arc::clone(&setup.table),
            asked: Cells::default(),
            next_entry: 1,
            mode: Mode::Standby,
            cause: Cause::Boot,
            number,
            used_numbers: Vec::new(),
            orders: Orders::new(boot),
            motion: Motion::new(setup),
            causes: Causes::new(),
            last: None,
        }
    }

    /// Judges what came of an event.
    pub(crate) fn take(&mut self, asked: &Asked, out: &[Entry]) -> Result<(), Broken> {
        self.numbered(asked, out)?;
        let heard = self.hear(asked, out)?;
        self.judge_acks(&heard)?;
        self.judge_modes(&heard)?;
        self.judge_once(&heard)?;
        self.judge_start(&heard)?;
        self.judge_numbers(&heard)?;
        self.judge_motion(&heard)?;
        self.judge_causes(&heard)?;
        (self.mode, self.cause) = (heard.after, heard.change.map_or(self.cause, |change| change.cause));
        self.last = heard.record.copied().or(self.last);
        Ok(())
    }

    fn numbered(&mut self, asked: &Asked, out: &[Entry]) -> Result<(), Broken> {
        for entry in out {
            let told = || format!("entry {} where {} is due", entry.number, self.next_entry);
            Broken::unless(entry.number == self.next_entry, Rule::Numbered, told)?;
            self.next_entry += 1;
        }
        let first = out.first().map(|entry| &entry.body);
        let echoed = match (asked, first) {
            (Asked::Tick, Some(Body::Tick(_)))
            | (Asked::Long(..), Some(Body::Plan(_) | Body::Tune(_)))
            | (Asked::Quiet, Some(Body::Exchange(_) | Body::Note(_))) => true,
            (Asked::Pose(sent), Some(Body::Pose(echo))) => sent == echo,
            (Asked::Order(sent), Some(Body::Order(echo))) => sent == echo,
            (Asked::Trip(sent), Some(Body::Trip(echo))) => sent == echo,
            _ => false,
        };
        Broken::unless(echoed, Rule::Numbered, || format!("{asked:?} is told as {first:?}"))
    }

    fn hear<'a>(&self, asked: &'a Asked, out: &'a [Entry]) -> Result<Heard<'a>, Broken> {
        let (mut change, mut ack, mut record) = (None::<ModeChange>, None, None);
        for entry in out {
            let told = || format!("told twice: {out:?}");
            match &entry.body {
                Body::ModeChange(new) => Broken::unless(change.replace(*new).is_none(), Rule::Table, told)?,
                Body::Ack(new) => Broken::unless(ack.replace(new).is_none(), Rule::Acknowledged, told)?,
                Body::Tick(new) => Broken::unless(record.replace(new).is_none(), Rule::Numbered, told)?,
                _ => (),
            }
        }
        let at = TimeNs(out[0].at_ns);
        let after = change.map_or(self.mode, |change| change.to);
        Ok(Heard { at, asked, out, change, ack, record, before: self.mode, after })
    }

    /// Why what the last event ordered was refused.
    pub(crate) fn refusal(&self) -> Option<Refusal> {
        self.orders.last_refusal
    }

    /// A new move begins.
    pub(crate) fn begin(&mut self) {
        self.orders.last_refusal = None;
    }

    /// The last tick's record.
    pub(crate) fn last(&self) -> Option<&TickRecord> {
        self.last.as_ref()
    }
}

impl Heard<'_> {
    /// The order's, the plan's or the law's refusal.
    fn refusal(&self) -> Option<Refusal> {
        self.ack.and_then(|ack| ack.refusal)
    }

    fn order(&self) -> Option<Order> {
        if let Asked::Order(event) = self.asked { Some(event.order) } else { None }
    }

    fn is_tick(&self) -> bool {
        matches!(self.asked, Asked::Tick)
    }

    /// The digest of the plan that is in force from this event on.
    fn loaded(&self) -> Option<Digest> {
        self.out.iter().rev().find_map(|entry| match &entry.body {
            Body::PlanLoaded(loaded) => Some(loaded.digest),
            _ => None,
        })
    }
}

/// True in the modes in which a machine is driven along its plan.
pub(crate) fn drives(mode: Mode) -> bool {
    matches!(mode, Mode::Tracking | Mode::ControlledStop)
}
