//! The law worker: builds the laws that tunes describe. Nothing waits for it, and it waits for no plan: a long one may take
//! the plan worker seconds.

use crate::lanes::{Bell, Shared, push_patiently};
use rtrb::Producer;
use std::sync::Arc;
use std::sync::mpsc::Receiver;
use trackhold_core::law::Context;
use trackhold_core::node::Event;
use trackhold_core::node::tuning::Tuning;
use trackhold_proto::journal::TuneEvent;

/// The worker.
#[derive(Debug)]
pub struct LawWorker {
    /// What laws are built for.
    pub context: Context,
    /// Laws to the loop.
    pub laws: Producer<Event>,
    /// Wakes the loop.
    pub bell: Arc<Bell>,
    /// Tells when to end.
    pub shared: Arc<Shared>,
}

impl LawWorker {
    /// Works until the intake has ended.
    pub fn run(mut self, tunes: &Receiver<TuneEvent>) {
        while let Ok(tune) = tunes.recv() {
            let built = Tuning::build(&tune.law, &self.context);
            push_patiently(&mut self.laws, Event::Tune(tune, built), &self.shared);
            self.bell.ring();
        }
    }
}
