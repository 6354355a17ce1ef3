//! How a closed plan that ends at speed comes to rest: it brakes along its own geometry over its last metres.

use super::segment::Progress;
use super::{Reference, Slot};
use crate::math;
use crate::vehicle::Vehicle;

/// Two rates closer than this are one: nothing to brake for, m/s or rad/s.
const SAME_RATE: f64 = 1e-12;

/// The part of a segment that is braked instead of timed literally.
#[derive(Clone, Copy, Debug)]
pub(super) struct Brake {
    /// Begin, from the segment's beginning, s.
    pub(super) from_s: f64,
    /// End of the segment, s.
    pub(super) end_s: f64,
    at: f64,
    rate: f64,
    decel: f64,
}

impl Brake {
    fn new(from_s: f64, at: f64, rate: f64, exit: f64, decel: f64) -> Self {
        Self { from_s, end_s: from_s + (rate - exit) / decel, at, rate, decel }
    }

    pub(super) fn progress(&self, t_s: f64) -> Progress {
        let braked_s = t_s - self.from_s;
        Progress {
            at: self.at + braked_s * (self.rate - 0.5 * self.decel * braked_s),
            rate: (self.rate - self.decel * braked_s).max(0.0),
            accel: -self.decel,
        }
    }
}

/// Goes backwards from a rest at the end of `slots` and lays the braking curve over the literal timing wherever that is
/// faster, up to the first instant at which it is not, or to a change of direction.
pub(super) fn bring_to_rest(slots: &mut [Slot], vehicle: &dyn Vehicle) {
    let mut exit = 0.0;
    let mut way_out = None;
    for slot in slots.iter_mut().rev() {
        let stretch = &slot.stretch;
        let duration_s = stretch.duration_s();
        let literal_exit = stretch.timing(duration_s).rate;
        let way = way(stretch.at(duration_s));
        let joins = way_out.is_none_or(|next| next == way && next != 0);
        if !joins || literal_exit <= exit + SAME_RATE {
            return;
        }
        let decel = stretch.brake_decel(vehicle, exit);
        if let Some(from_s) = stretch.brake_from_s(exit, decel) {
            let begin = stretch.timing(from_s);
            slot.brake = Some(Brake::new(from_s, begin.at, begin.rate, exit, decel));
            return;
        }
        let entry = math::sqrt(exit * exit + 2.0 * decel * stretch.extent());
        slot.brake = Some(Brake::new(0.0, 0.0, entry, exit, decel));
        way_out = Some(self::way(stretch.at(0.0)));
        exit = entry;
    }
}

/// 1 forward, −1 in reverse, 0 on the spot.
fn way(reference: Reference) -> i8 {
    let speed = reference.velocity.speed_m_s;
    i8::from(speed > 0.0) - i8::from(speed < 0.0)
}
