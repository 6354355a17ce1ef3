//! What was refused and dropped, summed up for a note a second.

use crate::lanes::Shared;
use std::sync::atomic::Ordering::SeqCst;
use trackhold_proto::blob::Text;
use trackhold_proto::journal::Note;

/// Sums since the last notes.
#[derive(Debug, Default)]
pub(super) struct Tally {
    malformed: u64,
    last: String,
    dropped: u64,
    socket_errors: u64,
    unsent_logged: u64,
}

impl Tally {
    /// A datagram was refused.
    pub(super) fn malformed(&mut self, what: &str) {
        self.malformed += 1;
        what.clone_into(&mut self.last);
    }

    /// An event was dropped because its queue was full.
    pub(super) fn dropped(&mut self) {
        self.dropped += 1;
    }

    /// The socket said something else than a datagram; the first of each second is logged.
    pub(super) fn socket_error(&mut self, error: &std::io::Error) {
        if self.socket_errors == 0 {
            tracing::warn!("receiving failed: {error}");
        }
        self.socket_errors += 1;
    }

    /// Logs what the system did not take, and how many more receptions failed than were logged.
    pub(super) fn log(&mut self, shared: &Shared) {
        if std::mem::take(&mut self.socket_errors) > 1 {
            tracing::warn!("receiving failed more than once in the last second");
        }
        let (commands, answers) = (shared.commands_unsent.load(SeqCst), shared.answers_unsent.load(SeqCst));
        if commands + answers > self.unsent_logged {
            self.unsent_logged = commands + answers;
            tracing::warn!("since boot {commands} commands and {answers} answers could not be sent");
        }
    }

    /// A note to be journaled, if there is any.
    pub(super) fn next_note(&self) -> Option<Note> {
        if self.malformed > 0 {
            return Some(Note::Malformed { count: self.malformed, last: Text::cut(&self.last) });
        }
        (self.dropped > 0).then_some(Note::EventsDropped { count: self.dropped })
    }

    /// The note is on its way.
    pub(super) fn told(&mut self, note: &Note) {
        match note {
            Note::Malformed { .. } => self.malformed = 0,
            _ => self.dropped = 0,
        }
    }
}
