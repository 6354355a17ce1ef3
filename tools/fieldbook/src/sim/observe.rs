//! Who watches a simulated run: anything that takes its entries or its rows, alone or together.

use crate::log::LogWriter;
use std::io;
use trackhold_core::digest::ResultDigest;
use trackhold_core::geometry::{Pose, TrackingError};
use trackhold_core::time::SpanNs;
use trackhold_proto::journal::{Entry, TickRecord};

/// One tick of a run.
#[derive(Clone, Copy, Debug)]
pub struct Row<'a> {
    /// When the tick was, since the first one.
    pub t: SpanNs,
    /// Where the chassis point truly is when the tick's command acts, `node.dead_time_s` after the tick.
    pub truth: Pose,
    /// That pose minus the reference, which means the same moment, in the reference's frame; none where the tick has no reference.
    pub error: Option<TrackingError>,
    /// The node's own record: what it saw, wanted and commanded.
    pub record: &'a TickRecord,
}

/// Watches a run. What it does not care for costs nothing.
pub trait Observer {
    /// An entry of the journal.
    fn entry(&mut self, _entry: &Entry) {}

    /// A tick, after its entries; with dead time also after those of the ticks until its command acts.
    fn row(&mut self, _row: &Row<'_>) {}
}

/// Watches nothing.
impl Observer for () {}

impl<A: Observer, B: Observer> Observer for (A, B) {
    fn entry(&mut self, entry: &Entry) {
        self.0.entry(entry);
        self.1.entry(entry);
    }

    fn row(&mut self, row: &Row<'_>) {
        self.0.row(row);
        self.1.row(row);
    }
}

impl<O: Observer> Observer for &mut O {
    fn entry(&mut self, entry: &Entry) {
        (**self).entry(entry);
    }

    fn row(&mut self, row: &Row<'_>) {
        (**self).row(row);
    }
}

impl<O: Observer> Observer for Option<O> {
    fn entry(&mut self, entry: &Entry) {
        if let Some(observer) = self {
            observer.entry(entry);
        }
    }

    fn row(&mut self, row: &Row<'_>) {
        if let Some(observer) = self {
            observer.row(row);
        }
    }
}

impl Observer for ResultDigest {
    fn entry(&mut self, entry: &Entry) {
        self.add(&entry.body);
    }
}

/// Keeps a run as a track log. The first error is kept and told at the end.
#[derive(Debug)]
pub struct Logging {
    writer: LogWriter,
    failed: Option<io::Error>,
}

impl Logging {
    /// Into a log.
    pub fn new(writer: LogWriter) -> Self {
        Self { writer, failed: None }
    }

    /// Writes the end mark.
    ///
    /// # Errors
    /// If anything could not be written.
    pub fn finish(self) -> io::Result<()> {
        match self.failed {
            Some(error) => Err(error),
            None => self.writer.finish().map(drop),
        }
    }
}

impl Observer for Logging {
    fn entry(&mut self, entry: &Entry) {
        if self.failed.is_none() {
            self.failed = self.writer.write_entry(entry).err();
        }
    }
}
