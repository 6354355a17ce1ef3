//! Gains as an engineer thinks: how strongly damped, and in what way or how fast an error falls. Each law tells what
//! raw gains follow; what is built, printed and kept in a journal are raw gains only.
//!
//! Textbook, for a lateral motion of the natural frequency a (per metre travelled: a_m = a/v) and the damping ζ: the
//! envelope e^(−ζ a_m s) falls to e^(−4) = 1.8 % in the way 4/(ζ a_m), which counts as settled. Up to ζ = 0.8 that is
//! about the way to 2 %; beyond, the slower of two real poles takes longer, at ζ = 1 5.83/a_m instead of 4/a_m.

use super::{Context, Kind};
use crate::keys::{Bound, Key, Problem, Unit, Values};
use alloc::format;
use alloc::vec;
use alloc::vec::Vec;

const DAMPING: &str = "damping";
const SETTLING: &str = "settling_distance_m";
const BANDWIDTH: &str = "bandwidth_rad_s";
const SPEED: &str = "design_speed_m_s";

/// Damping where none is given: little overshoot, and room for some dead time (common practice).
const DEFAULT_DAMPING: f64 = 0.8;
/// A first-order error falls as a damped one with ζ = 1 would: in the way 4/a_m to e^(−4).
const FIRST_ORDER: f64 = 1.0;

/// Keys that stand beside a law's raw gains.
pub const KEYS: &[Key] = &[
    Key::optional(
        DAMPING,
        "",
        Bound::within(0.1, 2.0),
        "instead of raw gains: damping ratio of the motion across the path, 0.8 if not given; below 0.5 the machine weaves",
    ),
    Key::optional(
        SETTLING,
        "m",
        Bound::within(0.01, 1000.0),
        "instead of raw gains: the way in which the cross-track error falls to 2 %; a short one leaves no room for dead time",
    ),
    Key::optional(
        BANDWIDTH,
        "rad/s",
        Bound::within(0.001, 1000.0),
        "instead of settling_distance_m: natural frequency at design_speed_m_s; times the dead time it should stay below 0.2",
    ),
    Key::optional(
        SPEED,
        "m/s",
        Bound::within(0.001, 100.0),
        "the speed that joins bandwidth and settling distance; half the machine's top speed if not given",
    ),
];

/// What is asked of a law.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Design {
    /// Damping ratio.
    pub damping: f64,
    /// Natural frequency per metre travelled, 1/m. For a first-order law the inverse of the way in which its error
    /// falls to 1/e.
    pub per_metre_1_m: f64,
    /// The same in time at the design speed, rad/s.
    pub bandwidth_rad_s: f64,
}

impl Design {
    /// The design speed, at which the other two mean the same, m/s.
    pub fn speed_m_s(&self) -> f64 {
        self.bandwidth_rad_s / self.per_metre_1_m
    }
}

/// From what is asked to the raw gains that it determines, by name. A recipe that does not look at the damping is one of
/// a law of first order, or of fixed damping.
pub type Recipe = fn(&Design) -> Vec<(&'static str, f64)>;

impl Kind {
    /// The keys of the section `law.gains`: the raw gains, and for a law with a recipe the design keys.
    pub fn keys(&self) -> Vec<Key> {
        let design: &[Key] = if self.design.is_some() { KEYS } else { &[] };
        self.gains.iter().chain(design).copied().collect()
    }

    /// The raw gains that the design keys determine.
    pub fn designed(&self) -> Vec<&'static str> {
        let any = Design { damping: 1.0, per_metre_1_m: 1.0, bandwidth_rad_s: 1.0 };
        self.design.map(|recipe| recipe(&any)).unwrap_or_default().into_iter().map(|(name, _)| name).collect()
    }
}

/// What a section gives: raw gains with their defaults, and what is asked instead.
#[derive(Debug)]
pub(super) struct Given {
    raw: Values,
    asked: Option<Asked>,
}

/// What is asked, as the section has it.
#[derive(Clone, Copy, Debug)]
struct Asked {
    recipe: Recipe,
    /// [`SETTLING`] or [`BANDWIDTH`], and its value.
    size: (&'static str, f64),
    damping: f64,
    damping_given: bool,
    speed_m_s: Option<f64>,
}

impl Given {
    /// Checks names, bounds, and what excludes what.
    pub(super) fn read(kind: &Kind, given: &Values) -> Result<Self, Vec<Problem>> {
        let whole = given.checked(&kind.keys())?;
        let mut raw = Values::default();
        for key in kind.gains {
            whole.find(key.name).into_iter().for_each(|value| raw.set(key.name, value));
        }
        match kind.design {
            None => Ok(Self { raw, asked: None }),
            Some(recipe) => Ok(Self { raw, asked: Asked::read(kind, recipe, given)? }),
        }
    }

    /// The raw gains for a machine, every design key resolved.
    pub(super) fn resolve(self, kind: &Kind, context: &Context) -> Result<Values, Vec<Problem>> {
        let Self { mut raw, asked } = self;
        let Some(asked) = asked else { return Ok(raw) };
        let design = asked.design(context)?;
        let mut problems = Vec::new();
        for (name, value) in (asked.recipe)(&design) {
            let Some(key) = kind.gains.iter().find(|key| key.name == name) else {
                unreachable!("the recipe of {} gives {name}, which is none of its gains", kind.name)
            };
            if key.bound.holds(value) {
                raw.set(name, value);
            } else {
                problems.push(asked.out_of_bound(&design, key, value));
            }
        }
        if problems.is_empty() { Ok(raw) } else { Err(problems) }
    }
}

impl Asked {
    fn read(kind: &Kind, recipe: Recipe, given: &Values) -> Result<Option<Self>, Vec<Problem>> {
        let (settling, bandwidth) = (given.find(SETTLING), given.find(BANDWIDTH));
        let size = settling.map(|way| (SETTLING, way)).or(bandwidth.map(|rate| (BANDWIDTH, rate)));
        let mut problems = Vec::new();
        if settling.is_some() && bandwidth.is_some() {
            let what = format!(
                "given together with {SETTLING}, which determines the same gains; give one of the two"
            );
            problems.push(Problem::new(BANDWIDTH, what));
        }
        let fixed = ignores_damping(recipe);
        if fixed && given.find(DAMPING).is_some() {
            let what = format!("the damping of {} cannot be chosen; leave it out", kind.name);
            problems.push(Problem::new(DAMPING, what));
        }
        let Some(size) = size else {
            for key in [DAMPING, SPEED].into_iter().filter(|key| given.find(key).is_some()) {
                let what = format!("determines nothing by itself; give {SETTLING} or {BANDWIDTH} with it");
                problems.push(Problem::new(key, what));
            }
            return if problems.is_empty() { Ok(None) } else { Err(problems) };
        };
        for name in kind.designed().into_iter().filter(|name| given.find(name).is_some()) {
            let what = format!("given together with {}, which determines it; give one of the two", size.0);
            problems.push(Problem::new(name, what));
        }
        if !problems.is_empty() {
            return Err(problems);
        }
        Ok(Some(Self {
            recipe,
            size,
            damping: given.find(DAMPING).unwrap_or(if fixed { FIRST_ORDER } else { DEFAULT_DAMPING }),
            damping_given: given.find(DAMPING).is_some(),
            speed_m_s: given.find(SPEED),
        }))
    }

    fn design(&self, context: &Context) -> Result<Design, Vec<Problem>> {
        let top = context.vehicle.top_speed_m_s();
        let speed = self.speed_m_s.unwrap_or(0.5 * top);
        if speed > top {
            let what = format!(
                "{speed} m/s is more than the machine's top speed, {} m/s; give at most that",
                shown(top)
            );
            return Err(vec![Problem::new(SPEED, what)]);
        }
        let per_metre_1_m = match self.size {
            (SETTLING, way) => 4.0 / (self.damping * way),
            (_, rate) => rate / speed,
        };
        Ok(Design { damping: self.damping, per_metre_1_m, bandwidth_rad_s: per_metre_1_m * speed })
    }

    /// The problem of a raw gain outside its bound, in terms of the key that asks for it: the damping, if another one
    /// would do with the same frequency.
    fn out_of_bound(&self, design: &Design, key: &Key, value: f64) -> Problem {
        let damped = Design { damping: 1.0, ..*design };
        let with_another = (self.recipe)(&damped).into_iter().find(|(name, _)| *name == key.name);
        let by_damping = self.damping_given && with_another.is_some_and(|(_, value)| key.bound.holds(value));
        let (name, asked) = if by_damping { (DAMPING, self.damping) } else { self.size };
        let unit = KEYS.iter().find(|key| key.name == name).map_or("", |key| key.unit);
        let what = format!(
            "{asked}{} asks for {} = {}{}, which is not {}",
            Unit(unit),
            key.name,
            shown(value),
            Unit(key.unit),
            key.in_bound()
        );
        Problem::new(name, what)
    }
}

/// A computed number as it is shown: six digits, without what rounding left behind them.
fn shown(value: f64) -> f64 {
    format!("{value:.5e}").parse().unwrap_or(value)
}

fn ignores_damping(recipe: Recipe) -> bool {
    let with = |damping| recipe(&Design { damping, per_metre_1_m: 2.0, bandwidth_rad_s: 3.0 });
    with(0.5) == with(1.0)
}

/// Raw gains, with `over` laid over them: where that gives a design key, the raw gains that it determines go.
pub(super) fn overlaid(kind: &Kind, raw: &Values, over: &Values) -> Values {
    let sized = over.find(SETTLING).or(over.find(BANDWIDTH)).is_some();
    let gone = if sized { kind.designed() } else { Vec::new() };
    let mut whole = Values::default();
    for (name, value) in raw.iter().filter(|(name, _)| !gone.contains(name)).chain(over.iter()) {
        whole.set(name, value);
    }
    whole
}
