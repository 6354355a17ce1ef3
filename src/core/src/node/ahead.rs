//! What a law sees of the plan ahead: the plan in force, and those that wait to continue it.

use super::run::Run;
use super::successors::Successors;
use crate::law::Ahead;
use crate::plan::{Plan, Reference};
use crate::time::SpanNs;
use core::cell::Cell;

/// The way ahead at one tick.
pub(super) struct PlanAhead<'a> {
    plan: &'a Plan,
    successors: &'a Successors,
    time: SpanNs,
    rate: f64,
    cursor: Cell<usize>,
}

impl<'a> PlanAhead<'a> {
    pub(super) fn new(plan: &'a Plan, successors: &'a Successors, run: &Run) -> Self {
        let cursor = Cell::new(run.cursor());
        Self { plan, successors, time: run.plan_time(), rate: run.rate(), cursor }
    }
}

impl Ahead for PlanAhead<'_> {
    fn reference(&self, seconds: f64) -> Reference {
        let place_s = |plan: &Plan| (self.time.seconds() - plan.begin().seconds()) + self.rate * seconds;
        let reached = self.time + SpanNs::from_seconds(self.rate * seconds);
        let reference = match self.successors.in_force_at(reached) {
            Some(plan) => plan.at(place_s(plan), &mut 0),
            None => {
                let mut cursor = self.cursor.get();
                let reference = self.plan.at(place_s(self.plan), &mut cursor);
                self.cursor.set(cursor);
                reference
            }
        };
        if self.rate == 1.0 { reference } else { reference.slowed(self.rate, 0.0) }
    }
}
