//! Rows held back until the moment that their reference means: a tick's command acts the dead time later, and where the
//! machine truly is then is what the reference is held against.

use super::observe::{Observer, Row};
use super::world::World;
use std::collections::VecDeque;
use trackhold_core::geometry::{Direction, Pose, TrackingError};
use trackhold_core::node::params::Params;
use trackhold_core::time::{SpanNs, TimeNs};
use trackhold_proto::journal::{TickRecord, flag};

/// A tick whose command has not acted yet.
#[derive(Debug)]
struct Held {
    acts: TimeNs,
    t: SpanNs,
    record: TickRecord,
}

/// The rows of a run on their way to its observer.
#[derive(Debug)]
pub(super) struct Due {
    dead_time: SpanNs,
    held: VecDeque<Held>,
    last: Pose,
}

impl Due {
    /// For a node with these numbers. Allocates all that is needed for a run.
    pub(super) fn new(params: &Params) -> Self {
        let ticks = (params.dead_time.seconds() * params.rate_hz).ceil() as usize;
        Self { dead_time: params.dead_time, held: VecDeque::with_capacity(ticks + 2), last: Pose::default() }
    }

    /// Takes in a tick of a moment, `t` after the first.
    pub(super) fn tick(&mut self, at: TimeNs, t: SpanNs, record: TickRecord) {
        self.held.push_back(Held { acts: at + self.dead_time, t, record });
    }

    /// Gives the observer the rows whose commands act by a moment, that moment included.
    pub(super) fn give<W: World>(&mut self, world: &mut W, until: TimeNs, observer: &mut impl Observer) {
        while let Some(Held { acts, t, record }) = self.held.pop_front_if(|held| held.acts <= until) {
            let truth = world.truth_at(acts);
            self.last = truth;
            // A node that sees the true pose at once has written the true error down.
            let exact = W::EXACT && self.dead_time == SpanNs(0);
            observer.row(&Row { t, truth, error: error(&record, truth, exact), record: &record });
        }
    }

    /// Gives the rows that are left, the last command holding on. Returns the true pose at the last one.
    pub(super) fn finish<W: World>(mut self, world: &mut W, observer: &mut impl Observer) -> Pose {
        self.give(world, TimeNs(u64::MAX), observer);
        self.last
    }
}

/// The true tracking error; none where the tick has no reference. `exact`: its record has that error already.
fn error(record: &TickRecord, truth: Pose, exact: bool) -> Option<TrackingError> {
    if !record.has(flag::HAS_REFERENCE) {
        return None;
    }
    if exact {
        let (along_m, cross_m) = (record.along_error_m, record.cross_error_m);
        return Some(TrackingError { along_m, cross_m, heading_rad: record.heading_error_rad });
    }
    let reference = Pose::new(record.ref_x_m, record.ref_y_m, record.ref_heading_rad);
    Some(TrackingError::between(truth, reference, Direction::of(reference.heading_rad)))
}
