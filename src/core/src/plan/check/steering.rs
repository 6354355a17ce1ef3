//! Where the steering has to swing from one thing to the next: whether the reference rests long enough for it.

use super::super::Plan;
use super::ledger::place;
use super::steps;
use super::walk::Look;

/// Slower than this the wheels have all their time for the steering, m/s.
const STANDS_M_S: f64 = 1e-6;
/// An interval between two looks that is halved so often is a nanosecond.
const HALVINGS: usize = 30;

/// What the steering has to do between two motions.
#[derive(Clone, Copy, Debug)]
pub(super) struct Swing {
    /// What it was steered for, 1/m; ±∞ on the spot.
    pub(super) before_1_m: f64,
    /// What it has to be steered for, 1/m; ±∞ on the spot.
    pub(super) after_1_m: f64,
    /// When the reference stands between, if it does.
    stands: Option<Stand>,
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

    /// How long the reference rests between, s.
    pub(super) fn rest_s(&self, plan: &Plan) -> f64 {
        self.stands.map_or(0.0, |stand| stand.seconds(plan))
    }

    /// How far the reference gets in its first `seconds`, m or rad; no farther than the segment's end.
    pub(super) fn way(&self, plan: &Plan, seconds: f64) -> f64 {
        let slot = &plan.slots[self.begin.slot];
        let t_s = (self.begin.t_s + seconds).min(slot.begin_s + slot.duration_s());
        let end = Look { t_s, reference: slot.at(t_s - slot.begin_s), ..self.begin };
        place(plan, &end).progress - place(plan, &self.begin).progress
    }
}

/// A time in which the reference stands, from look to look.
#[derive(Clone, Copy, Debug)]
struct Stand {
    from: Look,
    to: Look,
    /// The look before and the one after, where it still moves and moves again within the segment.
    before: Option<Look>,
    after: Option<Look>,
}

impl Stand {
    /// How long it stands, its ends narrowed down between the looks.
    fn seconds(&self, plan: &Plan) -> f64 {
        edge(plan, self.after, &self.to) - edge(plan, self.before, &self.from)
    }
}

fn stands(look: &Look) -> bool {
    look.reference.velocity.speed_m_s.abs() <= STANDS_M_S && !steps::on_the_spot(look)
}

/// The instant between two looks at which the one motion ends, or the other begins.
fn edge(plan: &Plan, moving: Option<Look>, standing: &Look) -> f64 {
    let mut stands_s = standing.t_s;
    let Some(moving) = moving.filter(|moving| moving.slot == standing.slot) else { return stands_s };
    let (slot, mut moves_s) = (&plan.slots[standing.slot], moving.t_s);
    for _ in 0..HALVINGS {
        let t_s = 0.5 * (stands_s + moves_s);
        let middle = Look { t_s, reference: slot.at(t_s - slot.begin_s), ..moving };
        *(if stands(&middle) { &mut stands_s } else { &mut moves_s }) = t_s;
    }
    stands_s
}

/// Goes from look to look.
#[derive(Clone, Copy, Debug, Default)]
pub(super) struct Steering {
    /// What the last motion was steered for, 1/m, and its segment; none before the first.
    held: Option<(f64, usize)>,
    /// The last look at the rest at hand.
    rest: Option<Look>,
    /// When the reference stands in it.
    stands: Option<Stand>,
    previous: Option<Look>,
}

impl Steering {
    /// The swing that a look completes: a motion begins. `rest_speed_m_s` is the threshold of the site file; `sampled`:
    /// near rest the curvature is noise.
    pub(super) fn next(&mut self, look: &Look, rest_speed_m_s: f64, sampled: bool) -> Option<Swing> {
        let on_the_spot = steps::on_the_spot(look);
        let previous = self.previous.replace(*look);
        if !on_the_spot && look.reference.velocity.speed_m_s.abs() <= rest_speed_m_s {
            self.rests(look, previous, sampled);
            return None;
        }
        let (rest, mut stands, held) = (self.rest.take(), self.stands.take(), self.held);
        if let Some(stand) = stands.as_mut().filter(|_| !sampled) {
            stand.after.get_or_insert(*look);
        }
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
            stands,
            begin,
            is_first: held.is_none(),
        };
        // From path to path without a rest is a step of the curvature under way.
        let is_one = rest.is_some() || swing.is_first || swing.changes_kind();
        is_one.then_some(swing)
    }

    fn rests(&mut self, look: &Look, previous: Option<Look>, sampled: bool) {
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
        let stands = sampled || stands(look);
        match &mut self.stands {
            Some(stand) if stands => (stand.to, stand.after) = (*look, None),
            Some(stand) => _ = stand.after.get_or_insert(*look),
            None if stands => {
                let before = previous.filter(|_| !sampled);
                self.stands = Some(Stand { from: *look, to: *look, before, after: None });
            }
            None => {}
        }
    }
}
