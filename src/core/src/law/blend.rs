//! Bumpless change from one feedback to another: what the new one adds to the reference's motion begins with what the
//! old one added, and the difference decays in a given time.

use crate::geometry::BodyVelocity;
use crate::time::{SpanNs, TimeNs};

/// A change that may still be under way.
#[derive(Clone, Copy, Debug, Default)]
pub(super) struct Blend {
    state: State,
}

#[derive(Clone, Copy, Debug, Default)]
enum State {
    #[default]
    Done,
    /// A change happened; the next tick tells by how much.
    Begins,
    /// The difference at a moment.
    Decays { difference: BodyVelocity, since: TimeNs },
}

impl Blend {
    /// A change happens: whatever the next tick wants begins where the last one was.
    pub(super) fn begin(&mut self) {
        self.state = State::Begins;
    }

    /// What is wanted in this tick, given what the feedback wants, what it would want without feedback, and what the last
    /// tick's feedback added.
    pub(super) fn apply(
        &mut self,
        at: TimeNs,
        wanted: BodyVelocity,
        reference: BodyVelocity,
        added_before: BodyVelocity,
        length: SpanNs,
    ) -> BodyVelocity {
        if let State::Begins = self.state {
            let difference = minus(plus(reference, added_before), wanted);
            self.state = State::Decays { difference, since: at };
        }
        let State::Decays { difference, since } = self.state else { return wanted };
        let elapsed = at.since(since);
        if elapsed >= length {
            self.state = State::Done;
            return wanted;
        }
        plus(wanted, difference.scaled(1.0 - elapsed.seconds() / length.seconds()))
    }
}

fn plus(a: BodyVelocity, b: BodyVelocity) -> BodyVelocity {
    BodyVelocity {
        speed_m_s: a.speed_m_s + b.speed_m_s,
        turn_rate_rad_s: a.turn_rate_rad_s + b.turn_rate_rad_s,
    }
}

pub(super) fn minus(a: BodyVelocity, b: BodyVelocity) -> BodyVelocity {
    plus(a, b.scaled(-1.0))
}
