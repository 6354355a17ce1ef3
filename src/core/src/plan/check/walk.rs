//! Looks at a plan from beginning to end, dense and bounded.
//!
//! The step rule: a segment is looked at every 20 ms and every 2 cm, whichever is closer, at least 64 times and at most
//! 4096; in a plan of more than a few thousand segments fewer times, so that all looks together stay below
//! [`MOST_LOOKS`] and each segment keeps eight. A segment of samples is looked at on both sides of every way-pose and in
//! between. What is found to jump from one look to the next is narrowed down to the instant ([`narrow`]).

use super::super::{Plan, Reference, Slot};

/// Looks at segments, together, unless eight a segment are more.
pub(super) const MOST_LOOKS: usize = 400_000;
/// Fewest looks at a segment.
const FEWEST: usize = 8;
/// Wanted at least, where the plan is not too long for it.
const AT_LEAST: usize = 64;
/// Most looks at a segment.
const AT_MOST: usize = 4096;
/// Looks at a braked end.
const BRAKE_LOOKS: usize = 64;
/// Looks lie no farther apart than this, s, within the bounds above.
const SPACING_S: f64 = 0.02;
/// Likewise, m or rad.
const SPACING: f64 = 0.02;
/// An interval that is halved so often has no width left.
const HALVINGS: usize = 60;

/// The plan at one instant.
#[derive(Clone, Copy, Debug)]
pub(super) struct Look {
    /// Index of the segment.
    pub(super) slot: usize,
    /// Plan time, s.
    pub(super) t_s: f64,
    /// What is wanted then.
    pub(super) reference: Reference,
}

/// Visits the plan from beginning to end; at a joint first the earlier segment's end, then the later one's beginning.
pub(super) fn walk(plan: &Plan, visit: &mut dyn FnMut(&Look)) {
    let share = MOST_LOOKS / plan.slots.len().max(1);
    let most = share.clamp(FEWEST, AT_MOST);
    for (index, slot) in plan.slots.iter().enumerate() {
        let literal_end_s = slot.brake.as_ref().map_or(f64::INFINITY, |brake| brake.from_s);
        let steps = steps(slot, most, share);
        slot.stretch.sweep(steps, &mut |t_s, reference| {
            if t_s < literal_end_s {
                visit(&Look { slot: index, t_s: slot.begin_s + t_s, reference: *reference });
            }
        });
        if let Some(brake) = &slot.brake {
            for step in 0..=BRAKE_LOOKS {
                let t_s = brake.from_s + (brake.end_s - brake.from_s) * step as f64 / BRAKE_LOOKS as f64;
                visit(&Look { slot: index, t_s: slot.begin_s + t_s, reference: slot.at(t_s) });
            }
        }
    }
}

/// How many intervals a segment is divided into. Samples divide their share of all looks among their pieces.
fn steps(slot: &Slot, most: usize, share: usize) -> usize {
    if slot.kind == "samples" {
        return share;
    }
    let wanted = (slot.duration_s() / SPACING_S).max(slot.stretch.extent() / SPACING);
    (wanted as usize).clamp(AT_LEAST.min(most), most)
}

/// Halves the interval between two looks of one segment, each time keeping the half with the greater `excess`, until
/// nothing is left between them. What then still is an excess is a jump; a bend that was seen too coarsely is none.
pub(super) fn narrow(
    plan: &Plan,
    from: &Look,
    to: &Look,
    excess: &dyn Fn(&Look, &Look) -> f64,
) -> (Look, Look) {
    let (mut from, mut to) = (*from, *to);
    if from.slot != to.slot {
        return (from, to);
    }
    let slot = &plan.slots[from.slot];
    for _ in 0..HALVINGS {
        let t_s = 0.5 * (from.t_s + to.t_s);
        if t_s <= from.t_s || t_s >= to.t_s {
            break;
        }
        let middle = Look { slot: from.slot, t_s, reference: slot.at(t_s - slot.begin_s) };
        if excess(&from, &middle) >= excess(&middle, &to) {
            to = middle;
        } else {
            from = middle;
        }
    }
    (from, to)
}
