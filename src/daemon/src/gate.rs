//! The one gate for wheel commands: a sequence number, and a stop latch that is checked last.
//!
//! Two sides send commands to the drives. The *loop* sends what the node computed. The *zero side* (the intake thread on
//! an emergency stop, the supervisor, the end of the program, a panic) sends zero past the loop, at once. A drive obeys
//! only commands that are newer by sequence number than the last it took. What must hold:
//!
//! > Once a zero with number z is out, the loop sends no command with a number greater than z until it has taken in the
//! > event of that trip.
//!
//! How it holds:
//!
//! - zero side: ① `raised += 1`, ② z ← `sequence += 1`, ③ send zero as z, ④ queue the event, with the ticket from ①;
//! - loop: ⓐ n ← `sequence += 1`, ⓑ compare `raised` with the tickets taken in, ⓒ send n only if they are equal.
//!
//! If n > z, then ⓐ comes after ② in the modification order of `sequence`. Both are read-modify-writes, so ⓐ reads from
//! ② or from a later one in ②'s release sequence, and hence synchronises with ②: everything before ②, ① among it, is
//! visible to what comes after ⓐ. So ⓑ sees the raised count, finds it unequal, and n is not sent. If n < z the command
//! may still leave after the zero; the drive passes over it, for it is older. Release and acquire carry this argument;
//! the operations are sequentially consistent all the same, since a stop is no place to save a fence.
//!
//! The order matters on both sides: raising after numbering would let a loop that numbers in between pass with n > z, and
//! so would looking at the latch before numbering.
//!
//! Counts are kept by source, and each source queues its events in order: a ticket that is taken in covers those of the
//! same source before it, and never one of another source whose event is still on its way. An event that was lost (its
//! queue was full) leaves the latch shut; the loop then takes the trip in on its own, see [`Taken::take_outstanding`].
//! Whoever panics queues nothing, so that after a panic the loop never sends again.

use std::sync::atomic::{AtomicU64, Ordering::SeqCst};
use trackhold_core::vehicle::Wheels;

/// Who can send zero past the loop.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Source {
    /// The intake thread, on an emergency stop.
    Intake,
    /// The supervisor, when ticks are missing.
    Supervisor,
    /// The end of the program.
    Shutdown,
    /// A panic; never taken in.
    Panic,
}

/// Sources whose trips the loop takes in; `Source::Panic` comes after them.
const TAKEN_SOURCES: usize = 3;
const SOURCES: usize = TAKEN_SOURCES + 1;

/// A raised trip, to travel with its event.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Ticket {
    source: Source,
    count: u64,
}

/// The shared half: sequence, latch, and the steering to hold in a zero.
#[derive(Debug, Default)]
pub struct Gate {
    sequence: AtomicU64,
    raised: [AtomicU64; SOURCES],
    held: [AtomicU64; 4],
}

impl Gate {
    /// A new number, greater than every one before. Every datagram of the daemon takes its number here.
    pub fn number(&self) -> u64 {
        self.sequence.fetch_add(1, SeqCst) + 1
    }

    /// Zero side: raises the latch and then takes the zero's number.
    pub fn trip(&self, source: Source) -> (Ticket, u64) {
        let count = self.raised[source as usize].fetch_add(1, SeqCst) + 1;
        (Ticket { source, count }, self.number())
    }

    /// Loop: what a zero has to say from now on. The four numbers are independent, so that a zero sent in between may
    /// mix two moments a tick apart.
    pub fn hold(&self, zero: &Wheels) {
        for (held, value) in self.held.iter().zip(zero) {
            held.store(value.to_bits(), SeqCst);
        }
    }

    /// Zero side: speed zero, the steering held where the last command had it.
    pub fn held(&self) -> Wheels {
        std::array::from_fn(|index| f64::from_bits(self.held[index].load(SeqCst)))
    }
}

/// The loop's half: which trips it has taken in as events.
#[derive(Debug, Default)]
pub struct Taken {
    counts: [u64; SOURCES],
}

/// Trips that were raised at some moment.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Outstanding([u64; TAKEN_SOURCES]);

impl Taken {
    /// Takes in a trip whose event the node has handled, and those of the same source before it.
    pub fn take(&mut self, ticket: Ticket) {
        let count = &mut self.counts[ticket.source as usize];
        *count = ticket.count.max(*count);
    }

    /// Whether a command may be sent, its number taken before.
    pub fn is_open(&self, gate: &Gate) -> bool {
        gate.raised.iter().zip(&self.counts).all(|(raised, taken)| raised.load(SeqCst) == *taken)
    }

    /// The trips that were raised and not taken in, if there are any that ever will be.
    pub fn outstanding(&self, gate: &Gate) -> Option<Outstanding> {
        let raised = std::array::from_fn(|source| gate.raised[source].load(SeqCst));
        (raised != self.counts[..TAKEN_SOURCES]).then_some(Outstanding(raised))
    }

    /// Takes in trips whose events were lost. Events that come after all find themselves covered.
    pub fn take_outstanding(&mut self, outstanding: Outstanding) {
        for (taken, raised) in self.counts.iter_mut().zip(outstanding.0) {
            *taken = raised.max(*taken);
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use std::sync::atomic::AtomicBool;
    use std::sync::{Mutex, mpsc};

    #[test]
    fn a_trip_shuts_the_latch_until_its_own_ticket_is_taken() {
        let (gate, mut taken) = (Gate::default(), Taken::default());
        assert!(taken.is_open(&gate));
        let (first, z) = gate.trip(Source::Intake);
        let (second, _) = gate.trip(Source::Supervisor);
        assert!(gate.number() > z && !taken.is_open(&gate));
        taken.take(second);
        assert!(!taken.is_open(&gate), "another source's ticket does not open");
        taken.take(first);
        assert!(taken.is_open(&gate));
    }

    #[test]
    fn a_lost_event_is_covered_and_a_late_one_opens_nothing_too_early() {
        let (gate, mut taken) = (Gate::default(), Taken::default());
        let (late, _) = gate.trip(Source::Intake);
        let lost = taken.outstanding(&gate).unwrap();
        let (newer, _) = gate.trip(Source::Intake);
        taken.take_outstanding(lost);
        assert!(!taken.is_open(&gate), "the newer trip is not covered by what was seen before it");
        taken.take(late);
        assert!(!taken.is_open(&gate));
        taken.take(newer);
        assert!(taken.is_open(&gate) && taken.outstanding(&gate).is_none());
    }

    #[test]
    fn a_panic_shuts_the_latch_for_ever() {
        let (gate, mut taken) = (Gate::default(), Taken::default());
        gate.trip(Source::Panic);
        assert_eq!(taken.outstanding(&gate), None);
        taken.take_outstanding(Outstanding([9; TAKEN_SOURCES]));
        assert!(!taken.is_open(&gate));
    }

    #[test]
    fn zero_holds_what_the_last_command_steered() {
        let gate = Gate::default();
        assert_eq!(gate.held(), [0.0; 4]);
        gate.hold(&[0.0, -0.3, 0.0, 0.0]);
        assert_eq!(gate.held(), [0.0, -0.3, 0.0, 0.0]);
    }

    /// What a loop sent, and which tickets it had taken in by then.
    struct Sent {
        number: u64,
        taken: [u64; SOURCES],
    }

    #[test]
    fn under_contention_no_newer_command_passes_before_the_trip_was_taken_in() {
        const TRIPS: usize = 12_000;
        let (gate, over) = (Gate::default(), AtomicBool::new(false));
        let zeros = Mutex::new(Vec::new());
        let (events, arrived) = mpsc::channel();
        let sent = std::thread::scope(|scope| {
            let (gate, over) = (&gate, &over);
            let running = scope.spawn(move || {
                let (mut taken, mut sent) = (Taken::default(), Vec::new());
                while !over.load(SeqCst) {
                    if let Ok(ticket) = arrived.try_recv() {
                        taken.take(ticket);
                    }
                    let number = gate.number();
                    if taken.is_open(gate) {
                        sent.push(Sent { number, taken: taken.counts });
                    }
                }
                sent
            });
            let trippers = [Source::Intake, Source::Supervisor].map(|source| {
                let (events, zeros) = (events.clone(), &zeros);
                scope.spawn(move || {
                    for round in 0..TRIPS {
                        let (ticket, zero) = gate.trip(source);
                        zeros.lock().unwrap().push((ticket, zero));
                        events.send(ticket).unwrap();
                        for _ in 0..(round % 64) * 8 {
                            std::hint::spin_loop();
                        }
                    }
                })
            });
            trippers.into_iter().for_each(|tripper| tripper.join().unwrap());
            over.store(true, SeqCst);
            running.join().unwrap()
        });
        assert!(!sent.is_empty(), "the loop never found the gate open: the test shows nothing");
        let zeros = zeros.into_inner().unwrap();
        for source in [Source::Intake, Source::Supervisor] {
            // A source's zeros rise like its tickets: so many of them were older than a command as it had to take in.
            let zeros: Vec<u64> =
                zeros.iter().filter(|(ticket, _)| ticket.source == source).map(|(_, zero)| *zero).collect();
            for Sent { number, taken } in &sent {
                let raised = zeros.partition_point(|zero| zero < number) as u64;
                assert!(raised <= taken[source as usize], "{number} passed zero {raised} of {source:?}");
            }
        }
    }
}
