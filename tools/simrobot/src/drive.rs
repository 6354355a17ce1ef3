//! The drive: how it obeys commands, as `PROTOCOL.md` lists its duties. A pure state machine.
//!
//! Zero until a command was taken; only what is newer; a new session only at rest, beginning with zero, and never one that
//! was left; only finite numbers within its own limits; and zero by itself when a command's time, counted from its
//! reception, is up. Of a burst the last counts: hand in all that has arrived before asking for [`Drive::output`].

use std::collections::VecDeque;
use std::sync::Arc;
use trackhold_core::time::{SpanNs, TimeNs};
use trackhold_core::vehicle::{Vehicle, Wheels};
use trackhold_proto::message::Command;

/// How many sessions the drive remembers having left.
const LEFT_SESSIONS: usize = 16;

/// Room for rounding where a command is compared with a limit, relative.
const ROUNDING: f64 = 1e-9;

/// What became of a command.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Taken {
    /// In force from now on.
    Taken,
    /// A duplicate, or overtaken by a newer one.
    NotNewer,
    /// From a session that was left for a newer one.
    SessionLeft,
    /// From a new session, while the machine moves.
    NotAtRest,
    /// For another kind of drive.
    WrongLayout,
    /// A number is not finite.
    NotFinite,
    /// A number, or the validity, is beyond this drive's limit.
    BeyondLimit,
    /// It asks for motion at the beginning of a session, where zero has to come first.
    BeginsMoving,
}

impl Taken {
    /// All outcomes, in the order of [`DriveCounts`].
    pub const ALL: [Self; 8] = [
        Self::Taken,
        Self::NotNewer,
        Self::SessionLeft,
        Self::NotAtRest,
        Self::WrongLayout,
        Self::NotFinite,
        Self::BeyondLimit,
        Self::BeginsMoving,
    ];

    /// The outcome in words.
    pub const fn words(self) -> &'static str {
        match self {
            Self::Taken => "taken",
            Self::NotNewer => "not newer",
            Self::SessionLeft => "from a session left",
            Self::NotAtRest => "from a new session while moving",
            Self::WrongLayout => "for another kind of drive",
            Self::NotFinite => "not finite",
            Self::BeyondLimit => "beyond a limit",
            Self::BeginsMoving => "asks for motion at the beginning of a session",
        }
    }
}

/// How often each outcome came about.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct DriveCounts {
    outcomes: [u64; Taken::ALL.len()],
    /// How often a command's time ran out while it moved the machine.
    pub ran_out: u64,
}

impl DriveCounts {
    /// How often this outcome came about.
    pub fn of(&self, outcome: Taken) -> u64 {
        self.outcomes[outcome as usize]
    }

    /// Commands that were not taken.
    pub fn refused(&self) -> u64 {
        self.outcomes[1..].iter().sum()
    }
}

/// What the wheels have to do.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Output {
    /// The command; zero on a steered machine keeps the last steering angle commanded.
    pub wheels: Wheels,
    /// A command is in force; otherwise this is the drive's own zero.
    pub commanded: bool,
    /// Leave the steering where it is, whatever `wheels` says of it.
    pub hold_steering: bool,
}

/// The command in force, or the last one.
#[derive(Clone, Copy, Debug)]
struct Held {
    session: u64,
    sequence: u64,
    received: TimeNs,
    valid: SpanNs,
    wheels: Wheels,
    live: bool,
}

/// The drive.
#[derive(Clone, Debug)]
pub struct Drive {
    vehicle: Arc<dyn Vehicle>,
    longest_validity: SpanNs,
    held: Option<Held>,
    left: VecDeque<u64>,
    moving: bool,
    counts: DriveCounts,
}

impl Drive {
    /// A drive at power-up. It refuses commands beyond the machine's limits or valid for longer than
    /// `longest_validity`.
    pub fn new(vehicle: Arc<dyn Vehicle>, longest_validity: SpanNs) -> Self {
        Self {
            vehicle,
            longest_validity,
            held: None,
            left: VecDeque::with_capacity(LEFT_SESSIONS),
            moving: false,
            counts: DriveCounts::default(),
        }
    }

    /// Takes in a command that arrived at a moment, with the session and sequence of its header.
    pub fn on_command(&mut self, at: TimeNs, session: u64, sequence: u64, command: &Command) -> Taken {
        self.expire(at);
        let outcome = self.judge(session, sequence, command);
        self.counts.outcomes[outcome as usize] += 1;
        if outcome == Taken::Taken {
            self.leave_session_for(session);
            self.held = Some(Held {
                session,
                sequence,
                received: at,
                valid: SpanNs(command.valid_ns),
                wheels: in_use(command),
                live: true,
            });
        }
        outcome
    }

    /// What the wheels have to do at a moment. Ask often: nothing else lets a command's time run out.
    pub fn output(&mut self, at: TimeNs) -> Output {
        self.expire(at);
        let steered = self.vehicle.layout().is_steered();
        match self.held {
            Some(held) if held.live => Output { wheels: held.wheels, commanded: true, hold_steering: false },
            held => Output {
                wheels: self.vehicle.zero(&held.map_or([0.0; 4], |held| held.wheels)),
                commanded: false,
                hold_steering: steered,
            },
        }
    }

    /// When the command in force runs out, if nothing newer comes.
    pub fn runs_out(&self) -> Option<TimeNs> {
        self.held.filter(|held| held.live).map(|held| held.received + held.valid)
    }

    /// Says whether the wheels turn, which may go on after a command ran out.
    pub fn set_moving(&mut self, moving: bool) {
        self.moving = moving;
    }

    /// What became of the commands so far.
    pub fn counts(&self) -> DriveCounts {
        self.counts
    }

    /// A clock that went back gives a huge age, hence zero: the safe side.
    fn expire(&mut self, at: TimeNs) {
        let Some(held) = self.held.as_mut().filter(|held| held.live) else { return };
        if at.0.wrapping_sub(held.received.0) >= held.valid.0 {
            held.live = false;
            self.counts.ran_out += u64::from(held.wheels != self.vehicle.zero(&held.wheels));
        }
    }

    fn judge(&self, session: u64, sequence: u64, command: &Command) -> Taken {
        let outcomes = [self.order(session, sequence), self.check(command), self.begin(session, command)];
        outcomes.into_iter().find(|outcome| *outcome != Taken::Taken).unwrap_or(Taken::Taken)
    }

    fn order(&self, session: u64, sequence: u64) -> Taken {
        let Some(held) = &self.held else { return Taken::Taken };
        if session == held.session {
            return if sequence > held.sequence { Taken::Taken } else { Taken::NotNewer };
        }
        if self.left.contains(&session) {
            return Taken::SessionLeft;
        }
        let zero = !held.live || self.is_zero(&held.wheels);
        if zero && !self.moving { Taken::Taken } else { Taken::NotAtRest }
    }

    fn check(&self, command: &Command) -> Taken {
        let layout = self.vehicle.layout();
        if command.layout != layout {
            return Taken::WrongLayout;
        }
        if !command.wheels.iter().all(|value| value.is_finite()) {
            return Taken::NotFinite;
        }
        if command.valid_ns > self.longest_validity.0 || !self.is_within_limits(&in_use(command)) {
            return Taken::BeyondLimit;
        }
        Taken::Taken
    }

    /// A session begins with zero: a drive that restarts while the daemon tracks must not join a motion at full speed.
    /// The daemon sends zero all the time in standby, so an ordinary start costs nothing.
    fn begin(&self, session: u64, command: &Command) -> Taken {
        let goes_on = self.held.is_some_and(|held| held.session == session);
        if goes_on || self.is_zero(&in_use(command)) { Taken::Taken } else { Taken::BeginsMoving }
    }

    /// Whether these numbers ask for zero: on a steered machine a matter of speed alone.
    fn is_zero(&self, wheels: &Wheels) -> bool {
        *wheels == self.vehicle.zero(wheels)
    }

    fn is_within_limits(&self, wheels: &Wheels) -> bool {
        let greatest = self.vehicle.greatest();
        wheels.iter().zip(&greatest).all(|(value, bound)| value.abs() <= bound * (1.0 + ROUNDING))
    }

    fn leave_session_for(&mut self, session: u64) {
        let Some(held) = self.held.filter(|held| held.session != session) else { return };
        if self.left.len() == LEFT_SESSIONS {
            self.left.pop_front();
        }
        self.left.push_back(held.session);
    }
}

/// The numbers that the layout uses; the others are nothing to go by.
fn in_use(command: &Command) -> Wheels {
    let mut wheels = [0.0; 4];
    let count = command.layout.count();
    wheels[..count].copy_from_slice(&command.wheels[..count]);
    wheels
}

#[cfg(test)]
#[path = "drive_tests.rs"]
mod tests;
