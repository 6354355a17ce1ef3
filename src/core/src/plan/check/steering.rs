//! Where the steering has to swing from one thing to the next: whether the reference rests long enough for it.

use super::super::Plan;
use super::ledger::place;
use super::steps;
use super::walk::Look;

/// Slower than this the wheels have all their time for the steering, m/s.
const STANDS_M_S: f64 = 1e-3;

/// What the steering has to do between two motions.
#[derive(Clone, Copy, Debug)]
pub(super) struct Swing {
    /// What it was steered for, 1/m; ±∞ on the spot.
    pub(super) before_1_m: f64,
    /// What it has to be steered for, 1/m; ±∞ on the spot.
    pub(super) after_1_m: f64,
    /// How long the reference rests between, s.
    pub(super) rest_s: f64,
    /// Where the later motion begins.
    pub(super) begin: Look,
    /// True at the beginning of a plan, where straight ahead is only the likely angle.
    pub(super) is_first: bool,
}

impl Swing {
    /// True between a path and a turn on the spot.
    pub(super) fn changes_kind(&self) -> bool {
        self.before_1_m.is_finite() != self.after_1_m.is_finite()
    }

    /// How far the reference gets in its first `seconds`, m or rad; no farther than the segment's end.
    pub(super) fn way(&self, plan: &Plan, seconds: f64) -> f64 {
        let slot = &plan.slots[self.begin.slot];
        let t_s = (self.begin.t_s + seconds).min(slot.begin_s + slot.duration_s());
        let end = Look { t_s, reference: slot.at(t_s - slot.begin_s), ..self.begin };
        place(plan, &end).progress - place(plan, &self.begin).progress
    }
}

/// Goes from look to look.
#[derive(Clone, Copy, Debug, Default)]
pub(super) struct Steering {
    /// What the last motion was steered for, 1/m, and its segment; none before the first.
    held: Option<(f64, usize)>,
    /// The last look at the rest at hand.
    rest: Option<Look>,
    /// When the reference stands in it, s of plan time: from, to.
    stands: Option<(f64, f64)>,
}

impl Steering {
    /// The swing that a look completes: a motion begins. `rest_speed_m_s` is the threshold of the site file; `sampled`:
    /// near rest the curvature is noise.
    pub(super) fn next(&mut self, look: &Look, rest_speed_m_s: f64, sampled: bool) -> Option<Swing> {
        let on_the_spot = steps::on_the_spot(look);
        if !on_the_spot && look.reference.velocity.speed_m_s.abs() <= rest_speed_m_s {
            self.rests(look, sampled);
            return None;
        }
        let (rest, stands, held) = (self.rest.take(), self.stands.take(), self.held);
        // A path that begins at rest is steered for its own beginning.
        let own = rest.filter(|last| last.slot == look.slot && !sampled);
        let begin = own.unwrap_or(*look);
        let steered_for = |look: &Look| match on_the_spot {
            true => f64::INFINITY.copysign(look.reference.velocity.turn_rate_rad_s),
            false => look.reference.curvature_1_m,
        };
        self.held = Some((steered_for(look), look.slot));
        let swing = Swing {
            before_1_m: held.map_or(0.0, |(curvature, _)| curvature),
            after_1_m: if on_the_spot { steered_for(look) } else { steered_for(&begin) },
            rest_s: stands.map_or(0.0, |(from_s, to_s)| to_s - from_s),
            begin,
            is_first: held.is_none(),
        };
        // From path to path without a rest is a step of the curvature under way.
        let is_one = rest.is_some() || swing.is_first || swing.changes_kind();
        is_one.then_some(swing)
    }

    fn rests(&mut self, look: &Look, sampled: bool) {
        // A path that ends at rest is steered for its own end.
        if self.rest.is_none()
            && !sampled
            && let Some((held_1_m, slot)) = &mut self.held
            && *slot == look.slot
            && held_1_m.is_finite()
        {
            *held_1_m = look.reference.curvature_1_m;
        }
        self.rest = Some(*look);
        if sampled || look.reference.velocity.speed_m_s.abs() <= STANDS_M_S {
            let from_s = self.stands.map_or(look.t_s, |(from_s, _)| from_s);
            self.stands = Some((from_s, look.t_s));
        }
    }
}
