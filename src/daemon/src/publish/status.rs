//! The status: what the entries say the daemon is doing.

use crate::lanes::Shared;
use std::sync::atomic::Ordering::SeqCst;
use trackhold_proto::blob::{BootId, Digest, Text};
use trackhold_proto::journal::{Body, Entry, LawChanged, PlanLoaded, TickRecord, flag};
use trackhold_proto::message::{Counters, GAINS_BYTES, Status, WheelLayout};
use trackhold_proto::words::{Cause, Mode};

/// Keeps the newest of everything.
#[derive(Debug)]
pub struct Summary {
    boot: BootId,
    mode: Mode,
    cause: Cause,
    start_number: u64,
    plan: Option<PlanLoaded>,
    law: LawChanged,
    tick: TickRecord,
    ticks: u64,
    poses: u64,
    poses_refused: u64,
    orders_refused: u64,
    plans_refused: u64,
    ticks_thin: u64,
    /// Pose source in force, and the one before the newest pose, should that one be refused.
    source: u64,
    source_before: u64,
}

impl Summary {
    /// Before the first entry; the start number is the node's first, and so is the law.
    pub fn new(boot: BootId, layout: WheelLayout, start_number: u64, law: LawChanged) -> Self {
        Self {
            boot,
            mode: Mode::Standby,
            cause: Cause::Boot,
            start_number,
            plan: None,
            law,
            tick: TickRecord::blank(layout),
            ticks: 0,
            poses: 0,
            poses_refused: 0,
            orders_refused: 0,
            plans_refused: 0,
            ticks_thin: 0,
            source: 0,
            source_before: 0,
        }
    }

    /// The daemon's boot identity.
    pub fn boot(&self) -> BootId {
        self.boot
    }

    /// Takes an entry in.
    pub fn add(&mut self, entry: &Entry) {
        match &entry.body {
            Body::Tick(record) => {
                (self.mode, self.cause, self.start_number) = (record.mode, record.cause, record.start_number);
                self.ticks = record.tick + 1;
                self.ticks_thin += u64::from(record.has(flag::THIN_MARGIN));
                self.tick = *record;
            }
            Body::ModeChange(change) => {
                (self.mode, self.cause, self.start_number) = (change.to, change.cause, change.start_number);
            }
            Body::Pose(event) => {
                self.poses += 1;
                self.source_before = std::mem::replace(&mut self.source, event.session);
            }
            Body::PoseRefused(_) => {
                self.poses -= 1;
                self.poses_refused += 1;
                self.source = self.source_before;
            }
            Body::LawChanged(law) => self.law.clone_from(law),
            Body::PlanLoaded(loaded) => self.plan = Some(*loaded),
            Body::Ack(ack) if ack.refusal.is_some() && ack.order_kind == crate::worker::PLAN_KIND => {
                self.plans_refused += 1;
            }
            Body::Ack(ack) if ack.refusal.is_some() => self.orders_refused += 1,
            _ => {}
        }
    }

    /// A plan was refused before it came to the node.
    pub fn count_broken_plan(&mut self) {
        self.plans_refused += 1;
    }

    /// Session of the pose source in force; 0 without one.
    pub fn pose_source(&self) -> u64 {
        self.source
    }

    /// The status, but for who listens and what the ring holds.
    pub fn status(&self, shared: &Shared) -> Status {
        let tick = &self.tick;
        let plan = self.plan.as_ref();
        let following = tick.has(flag::HAS_REFERENCE);
        Status {
            boot: self.boot,
            start_number: self.start_number,
            mode: self.mode,
            cause: self.cause,
            plan: plan.map_or(Digest::NONE, |plan| plan.digest),
            plan_id: plan.map_or(Text::cut(""), |plan| plan.id),
            plan_revision: plan.map_or(0, |plan| plan.revision),
            plan_duration_ns: plan.map_or(0, |plan| plan.duration_ns),
            plan_time_ns: tick.plan_time_ns,
            tick: self.ticks,
            has_pose: u32::from(tick.has(flag::HAS_POSE)),
            x_m: tick.x_m,
            y_m: tick.y_m,
            heading_rad: tick.heading_rad,
            pose_age_ns: tick.pose_age_ns,
            clock_offset_ns: tick.clock_offset_ns,
            along_error_m: if following { tick.along_error_m } else { 0.0 },
            cross_error_m: if following { tick.cross_error_m } else { 0.0 },
            heading_error_rad: if following { tick.heading_error_rad } else { 0.0 },
            command_subscribers: shared.command_subscribers.load(SeqCst),
            journal_subscribers: 0,
            oldest_entry: 0,
            next_entry: 0,
            counters: self.counters(shared),
            regime: tick.regime,
            plan_rate: tick.plan_rate,
            speed_cap: tick.speed_cap,
            bandwidth_rad_s: self.law.bandwidth_rad_s,
            law: self.law.name,
            gains: Text::cut(if self.law.gains.len() <= GAINS_BYTES { &self.law.gains } else { "" }),
        }
    }

    fn counters(&self, shared: &Shared) -> Counters {
        Counters {
            datagrams: shared.datagrams.load(SeqCst),
            malformed: shared.malformed.load(SeqCst),
            misdirected: shared.misdirected.load(SeqCst),
            poses: self.poses,
            poses_refused: self.poses_refused,
            orders_refused: self.orders_refused,
            plans_refused: self.plans_refused,
            events_dropped: shared.events_dropped.load(SeqCst),
            entries_lost: shared.entries_lost.load(SeqCst),
            ticks_late: shared.ticks_late.load(SeqCst),
            ticks_thin: self.ticks_thin,
        }
    }
}
