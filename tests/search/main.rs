//! The mode machine, searched exhaustively: the node's own transition function, `Node::handle`, which the daemon, the
//! simulator and every replay call, under every event in every state that can be reached from the first.
//!
//! | file | what it holds |
//! | --- | --- |
//! | `moves` | the alphabet: every event that is tried, and the parts of it that are searched together |
//! | `setup` | the machines, numbers and plans that are searched |
//! | `world` | one node, and the events that moves stand for |
//! | `state` | the abstract state, and why it is enough |
//! | `explore` | the search, breadth first |
//! | `judge` | the rules, kept by what goes in and what comes out alone |
//! | `table` | the mode table as the core documents it |
//! | `defects` | nodes that do wrong on purpose and must be caught |
//!
//! All events together would multiply what has little to do with each other, such as where the pose is by how many
//! orders are remembered; so each search tries the common events with one part of the others, to the end. All of them
//! together are tried too, where that is asked for, but not to the end.

mod defects;
mod explore;
mod judge;
mod moves;
mod setup;
mod state;
mod table;
mod world;

use defects::Defect;
use explore::{Found, explore, explore_up_to};
use judge::Rule;
use moves::{Move, Place, PlanKind, Scope, StartKind};
use setup::Setup;
use std::collections::BTreeSet;
use std::sync::Mutex;
use table::{Cells, ModeTable};
use trackhold_core::node::mode::{Trigger, Verdict};
use trackhold_proto::words::{Cause, Mode};
use world::World;

/// Causes that no event of the alphabet can bring about.
const OUT_OF_REACH: &[(Cause, &str)] =
    &[(Cause::LawNotFinite, "no law gives a result that is not finite, see the core's law/tests/bounded.rs")];

/// All causes.
const CAUSES: &[Cause] = &[
    Cause::Boot,
    Cause::Operator,
    Cause::PlanEnded,
    Cause::NotSettled,
    Cause::PlanRanDry,
    Cause::RampEnded,
    Cause::StalePose,
    Cause::OutsideLawDomain,
    Cause::LawNotFinite,
    Cause::StalledLoop,
    Cause::LostTrip,
    Cause::Shutdown,
    Cause::PoseJump,
];

/// Searches each of the jobs, as many at a time as there are processors.
fn search_all(jobs: &[(Setup, Scope)]) -> Vec<(String, Found)> {
    let (next, found) = (Mutex::new(0), Mutex::new(Vec::new()));
    let threads = std::thread::available_parallelism().map_or(1, usize::from);
    let work = || {
        loop {
            let job = {
                let mut next = next.lock().unwrap();
                *next += 1;
                *next - 1
            };
            let Some((setup, scope)) = jobs.get(job) else { break };
            let result = explore(setup, *scope, Defect::None);
            found.lock().unwrap().push((format!("{}, {scope:?}", setup.name), result));
        }
    };
    std::thread::scope(|scope| (0..threads).for_each(|_| drop(scope.spawn(work))));
    found.into_inner().unwrap()
}

fn assert_sound(name: &str, found: &Found) {
    println!(
        "{name}: {} states, {} transitions, up to {} moves; two pasts of {} states; {:?}",
        found.states, found.transitions, found.depth, found.twice, found.modes
    );
    if let Some((moves, broken)) = &found.broken {
        panic!("{name}: {:?} is broken after {moves:?}: {}", broken.rule, broken.told);
    }
    if let Some(first) = found.differences.first() {
        panic!(
            "{name}: the abstract state leaves something out, {} differences: {first}",
            found.differences.len()
        );
    }
}

/// Every cell that asks something of the machine was asked; where only a tick can ask, those that change the mode.
fn assert_table_covered(asked: Cells) {
    for (mode, trigger, verdict) in ModeTable::read().cells() {
        let tick_alone = matches!(trigger, Trigger::GuardControlled | Trigger::CameToRest);
        let due = !tick_alone || matches!(verdict, Verdict::To(_));
        assert!(!due || asked.has(mode, trigger), "{trigger:?} was never asked in {mode}");
    }
}

#[test]
fn the_rules_hold_in_every_reachable_state() {
    let scopes = [Scope::Orders, Scope::Places, Scope::Times, Scope::Plans, Scope::Paces];
    let jobs: Vec<(Setup, Scope)> =
        scopes.iter().flat_map(|scope| [(Setup::cart(), *scope), (Setup::car(), *scope)]).collect();
    let all = search_all(&jobs);
    let (mut asked, mut modes) = (Cells::default(), BTreeSet::new());
    let (mut causes, mut refusals) = (BTreeSet::<Cause>::new(), BTreeSet::<&str>::new());
    for (name, found) in &all {
        assert_sound(name, found);
        assert!(found.complete, "{name}: nothing is left to try");
        asked.join(found.asked);
        causes.extend(&found.causes);
        modes.extend(found.modes.keys().copied());
        refusals.extend(&found.refusals);
    }
    let sum = |count: fn(&Found) -> usize| all.iter().map(|(_, found)| count(found)).sum::<usize>();
    println!("in all {} states, {} transitions", sum(|found| found.states), sum(|found| found.transitions));
    println!("causes {causes:?}\nrefusals {refusals:?}");
    for cause in CAUSES {
        let excused = OUT_OF_REACH.iter().any(|(other, _)| other == cause);
        assert_ne!(causes.contains(cause), excused, "{cause}: reached, or excused, but not both");
    }
    assert_table_covered(asked);
    assert_eq!(modes.into_iter().collect::<Vec<_>>(), Mode::ALL);
}

/// All events together, as far as a million transitions lead: every state within so many moves of the first, and part of
/// those one move farther.
#[test]
#[ignore = "takes a minute"]
fn the_rules_hold_under_all_events_together() {
    for setup in [Setup::cart(), Setup::car()] {
        let found = explore_up_to(1_000_000, &setup, Scope::All, Defect::None);
        assert_sound(&format!("{}, all events", setup.name), &found);
        assert_table_covered(found.asked);
    }
}

/// Every defect is caught, by the rule that it breaks.
#[test]
fn nodes_that_do_wrong_are_caught() {
    let cart = [
        (Defect::SoftEmergency, Scope::Orders, Rule::Table),
        (Defect::ZeroAtNextTick, Scope::Orders, Rule::ZeroAtOnce),
        (Defect::DeafToTrip, Scope::Orders, Rule::ZeroAtOnce),
        (Defect::KeepsNumber, Scope::Orders, Rule::Renewal),
        (Defect::AnyNumber, Scope::Orders, Rule::Start),
        (Defect::AnyBoot, Scope::Orders, Rule::Start),
        (Defect::AnyPlan, Scope::Orders, Rule::Start),
        (Defect::StartsAgain, Scope::Orders, Rule::Once),
        (Defect::ResetStarts, Scope::Orders, Rule::Table),
        (Defect::PoseResets, Scope::Orders, Rule::Table),
        (Defect::AcksTwice, Scope::Orders, Rule::Acknowledged),
        (Defect::AcksNever, Scope::Orders, Rule::Acknowledged),
        (Defect::LeavesNumberOut, Scope::Orders, Rule::Numbered),
        (Defect::TellsNoNumber, Scope::Orders, Rule::Finite),
        (Defect::TooFast, Scope::Orders, Rule::Limits),
        (Defect::TooSudden, Scope::Orders, Rule::Steps),
        (Defect::Creeps, Scope::Orders, Rule::Authority),
        (Defect::StopsLate, Scope::Orders, Rule::Ramp),
        (Defect::BlindToSilence, Scope::Orders, Rule::Fresh),
        (Defect::BlindToJump, Scope::Places, Rule::Jump),
        (Defect::BlindToEnd, Scope::Plans, Rule::RunsOut),
        // With poses it lasts for ever, see below; the shortest way to tell is to take them away.
        (Defect::StopsForever, Scope::Orders, Rule::Fresh),
    ];
    let car = [(Defect::RampStays, Scope::Orders, Rule::Ramp)];
    let all = cart.map(|case| (Setup::cart(), case)).into_iter().chain(car.map(|case| (Setup::car(), case)));
    for (setup, (defect, scope, rule)) in all {
        let caught = explore(&setup, scope, defect).broken;
        let (moves, broken) = caught.unwrap_or_else(|| panic!("{defect:?} was not caught"));
        println!("{defect:?}: {:?} after {moves:?}", broken.rule);
        assert_eq!(broken.rule, rule, "{defect:?}, after {moves:?}: {}", broken.told);
    }
}

#[test]
fn a_controlled_stop_that_never_ends_is_caught() {
    let setup = Setup::cart();
    let mut world = World::new(&setup, Defect::StopsForever);
    let pose = Move::Pose(Place::On);
    for step in [pose, Move::Plan(PlanKind::Closed), Move::Start(StartKind::Good), Move::ControlledStop] {
        assert_eq!(world.make(step), Ok(()));
    }
    let broken = (0..20).find_map(|_| world.make(pose).and_then(|()| world.make(Move::Tick)).err());
    assert_eq!(broken.map(|broken| broken.rule), Some(Rule::RampEnds));
}
