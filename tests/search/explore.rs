//! The search: breadth first over abstract states, every move in every state.
//!
//! A node cannot be copied, so a state is kept as the shortest moves that lead to it, and made again from the
//! beginning for each move that is tried. Of each state a second past is kept too, one that came another way, and
//! tried in the same way: its successors have to be those of the first, or the abstraction leaves something out.

use crate::defects::Defect;
use crate::judge::Broken;
use crate::moves::{Move, Scope};
use crate::setup::Setup;
use crate::state::State;
use crate::table::Cells;
use crate::world::World;
use std::collections::{BTreeMap, BTreeSet, HashMap};
use trackhold_proto::words::{Cause, Mode, Refusal};

/// So many pasts of a state are tried.
const PASTS: usize = 2;

/// What came of a move.
#[derive(Clone, Debug, PartialEq)]
struct Outcome {
    next: usize,
    refusal: Option<&'static str>,
}

/// A past: the one before, and a move.
#[derive(Clone, Copy, Debug)]
struct Past {
    before: Option<usize>,
    step: Option<Move>,
    state: usize,
}

/// What was found.
#[derive(Debug, Default)]
pub(crate) struct Found {
    pub(crate) states: usize,
    pub(crate) transitions: usize,
    /// True if nothing was left to try.
    pub(crate) complete: bool,
    /// The longest of the shortest ways to a state, moves.
    pub(crate) depth: usize,
    /// States of which a second past was tried.
    pub(crate) twice: usize,
    /// The mode table's cells that were asked.
    pub(crate) asked: Cells,
    pub(crate) causes: BTreeSet<Cause>,
    pub(crate) modes: BTreeMap<Mode, usize>,
    /// Why orders, plans and laws were refused.
    pub(crate) refusals: BTreeSet<&'static str>,
    /// Pasts of one state after which a move has different outcomes.
    pub(crate) differences: Vec<String>,
    /// The first rule that was broken, and after which moves.
    pub(crate) broken: Option<(Vec<Move>, Broken)>,
}

/// A search under way.
struct Search<'a> {
    setup: &'a Setup,
    moves: Vec<Move>,
    defect: Defect,
    found: Found,
    index: HashMap<State, usize>,
    states: Vec<State>,
    /// How many pasts of each state are kept, and the first one's outcomes.
    pasts_of: Vec<usize>,
    outcomes: Vec<Vec<Outcome>>,
    pasts: Vec<Past>,
}

/// Searches until nothing new is found or a rule is broken.
pub(crate) fn explore(setup: &Setup, scope: Scope, defect: Defect) -> Found {
    explore_up_to(usize::MAX, setup, scope, defect)
}

/// The same, but no further once so many transitions were tried.
pub(crate) fn explore_up_to(most: usize, setup: &Setup, scope: Scope, defect: Defect) -> Found {
    let mut search = Search {
        setup,
        moves: scope.moves(),
        defect,
        found: Found::default(),
        index: HashMap::new(),
        states: Vec::new(),
        pasts_of: Vec::new(),
        outcomes: Vec::new(),
        pasts: Vec::new(),
    };
    let first = World::new(setup, defect);
    search.arrive(&first, None, None);
    let mut next = 0;
    while next < search.pasts.len() && search.found.broken.is_none() && search.found.transitions < most {
        search.try_all(next);
        next += 1;
    }
    search.found.complete = next == search.pasts.len();
    search.finish()
}

impl Search<'_> {
    /// The moves of a past, in order.
    fn way(&self, past: usize) -> Vec<Move> {
        let mut way = Vec::new();
        let mut here = Some(past);
        while let Some(index) = here {
            way.extend(self.pasts[index].step);
            here = self.pasts[index].before;
        }
        way.reverse();
        way
    }

    /// Notes where a world has arrived, and keeps its past if it is one of the first ones there.
    fn arrive(&mut self, world: &World<'_>, before: Option<usize>, step: Option<Move>) -> usize {
        let state = State::of(world);
        let known = self.index.get(&state).copied();
        let place = known.unwrap_or_else(|| {
            self.index.insert(state.clone(), self.states.len());
            self.states.push(state);
            self.pasts_of.push(0);
            self.outcomes.push(Vec::new());
            self.states.len() - 1
        });
        if self.pasts_of[place] < PASTS {
            self.pasts_of[place] += 1;
            self.pasts.push(Past { before, step, state: place });
        }
        place
    }

    fn try_all(&mut self, past: usize) {
        let way = self.way(past);
        self.found.depth = self.found.depth.max(way.len());
        let mut outcomes = Vec::with_capacity(self.moves.len());
        for step in self.moves.clone() {
            let mut world = World::new(self.setup, self.defect);
            for before in &way {
                if world.make(*before).is_err() {
                    unreachable!("a way that was found is walked again as it was: {way:?}");
                }
            }
            self.found.transitions += 1;
            let made = world.make(step);
            self.found.asked.join(world.judge.asked);
            if let Err(broken) = made {
                let moves = way.iter().copied().chain([step]).collect();
                self.found.broken = Some((moves, broken));
                return;
            }
            let refusal = world.judge.refusal().as_ref().map(Refusal::name);
            self.found.refusals.extend(refusal);
            let next = self.arrive(&world, Some(past), Some(step));
            outcomes.push(Outcome { next, refusal });
        }
        self.compare(past, &way, outcomes);
    }

    fn compare(&mut self, past: usize, way: &[Move], outcomes: Vec<Outcome>) {
        let state = self.pasts[past].state;
        let first = &self.outcomes[state];
        if first.is_empty() {
            self.outcomes[state] = outcomes;
            return;
        }
        self.found.twice += 1;
        for ((step, first), second) in self.moves.iter().zip(first).zip(&outcomes) {
            if first != second {
                let told = format!(
                    "after {way:?}, {step:?} gives {:?} {:#?},\nbut {:?} {:#?}\nafter a shorter way to the same state, {:#?}",
                    second.refusal,
                    self.states[second.next],
                    first.refusal,
                    self.states[first.next],
                    self.states[state]
                );
                self.found.differences.push(told);
            }
        }
    }

    fn finish(self) -> Found {
        let mut found = self.found;
        found.states = self.states.len();
        found.causes = self.states.iter().map(|state| state.cause).collect();
        for state in &self.states {
            *found.modes.entry(state.mode).or_default() += 1;
        }
        found
    }
}
