//! The plan worker: checks a plan's digest, compiles it, checks that it is fit, and frees what the loop is done with. Nothing waits for it.

use crate::intake::transfer::Whole;
use crate::lanes::{Bell, Shared, Waste, push_patiently};
use crate::mail::{Letter, Mail, OrderKey};
use rtrb::{Consumer, Producer};
use std::sync::Arc;
use std::sync::mpsc::{Receiver, RecvTimeoutError};
use std::time::Duration;
use trackhold_core::digest;
use trackhold_core::node::Event;
use trackhold_core::plan::check::{Terms, admit};
use trackhold_proto::journal::PlanEvent;

/// Kind number of the message that carries a plan.
pub const PLAN_KIND: u32 = 2;
/// How often the loop's waste is freed while no plan comes.
const SWEEP: Duration = Duration::from_millis(50);

/// The worker.
#[derive(Debug)]
pub struct Worker {
    /// What plans have to fit.
    pub terms: Terms,
    /// Plans to the loop.
    pub plans: Producer<Event>,
    /// What the loop is done with.
    pub waste: Consumer<Waste>,
    /// Wakes the loop.
    pub bell: Arc<Bell>,
    /// Tells the publisher of plans that go no farther.
    pub mail: Mail,
    /// Tells when to end.
    pub shared: Arc<Shared>,
}

impl Worker {
    /// Works until the intake has ended.
    pub fn run(mut self, jobs: &Receiver<Whole>) {
        loop {
            let job = jobs.recv_timeout(SWEEP);
            while self.waste.pop().is_ok() {}
            match job {
                Ok(whole) => self.work(whole),
                Err(RecvTimeoutError::Timeout) => {}
                Err(RecvTimeoutError::Disconnected) => return,
            }
        }
    }

    fn work(&mut self, whole: Whole) {
        let Whole { session, sequence, digest, raw } = whole;
        let found = digest::of_bytes(&raw);
        if found != digest {
            let text = format!(
                "the plan's {} bytes have the SHA-256 {found}, their parts state {digest}",
                raw.len()
            );
            let order = OrderKey { session, sequence, kind: PLAN_KIND };
            self.mail.post(Letter::PlanRefused { order, digest, text });
            return;
        }
        let compiled = admit(&raw, &self.terms).map(Box::new);
        let event = Event::Plan(PlanEvent { session, sequence, digest, raw }, compiled);
        push_patiently(&mut self.plans, event, &self.shared);
        self.bell.ring();
    }
}
