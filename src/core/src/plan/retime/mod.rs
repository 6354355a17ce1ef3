//! The fastest timing of a path within a machine's limits.
//!
//! A path's timing is a curve in the plane of distance s and squared speed x = ṡ². There s̈ = x'/2, and every limit of a
//! wheeled machine is a bound on x (speeds, steering rate, lateral acceleration) or, at a given x, an interval for s̈
//! (wheel accelerations, where κ' brings a share of x). The fastest curve is the highest one that keeps within both
//! (Bobrow, Dubowsky and Gibson, International Journal of Robotics Research 4(3), 1985; Shin and McKay, IEEE
//! Transactions on Automatic Control 30(6), 1985; the same problem in convex form: Verscheure, Demeulenaere, Swevers,
//! De Schutter and Diehl, IEEE Transactions on Automatic Control 54(10), 2009). It is found on a grid by two passes: from
//! the end backwards, the highest x from which the rest of the path can still be driven; then forwards, as high as the
//! acceleration reaches under that. So it slows before a bend.
//!
//! | file | what it does |
//! | --- | --- |
//! | `grid` | cuts the path into cells, keeps the curvature at five points of each |
//! | `passes` | the two passes |
//! | `knots` | from the grid to pieces of constant acceleration, few of them |
//! | `blocks`, `jerk`, `barrier`, `average` | under a jerk limit: long runs cut up; the grid, its optimum there, and what makes that smooth |
//! | `verify` | dense sampling: nothing leaves here that goes beyond a limit |
//! | `runs` | a whole plan: where it rests, what is driven in one go, the vehicle's limits |
//! | `swings` | how long a steered machine has to rest there |
//!
//! Grid step: [`STEP_M`] on paths of varying curvature, finer on short ones; lines and arcs are solved exactly, whatever
//! their length.

mod average;
mod barrier;
mod blocks;
mod grid;
mod jerk;
mod knots;
mod passes;
mod runs;
mod swings;
mod verify;

pub use runs::{NewTiming, Options, Rest, Retimed, StepRule, of_plan};
pub use swings::Dwell;

use alloc::vec::Vec;
use core::fmt;
use grid::{Cutting, Grid};
use knots::Knot;

/// Grid step where the curvature varies, m.
pub const STEP_M: f64 = 0.02;

/// Rounds of the loop that lowers a cell's share of the limits where dense sampling finds an excess.
const MAX_ROUNDS: usize = 60;

/// Curvature and its derivative along the path, as the machine moves on it: per metre of progress.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Bend {
    /// Curvature, 1/m.
    pub curvature_1_m: f64,
    /// Curvature's derivative with respect to progress, 1/m².
    pub curvature_rate_1_m2: f64,
}

/// A piece of path, driven in one direction, of continuous curvature.
pub trait Path {
    /// Length, m.
    fn length_m(&self) -> f64;

    /// Curvature and its rate at `s_m` from the piece's beginning.
    fn bend(&self, s_m: f64) -> Bend;

    /// True if the curvature is the same everywhere: a line or an arc.
    fn is_uniform(&self) -> bool;

    /// Greatest speed wanted here, whatever the limits, m/s.
    fn top_speed_m_s(&self) -> f64 {
        f64::INFINITY
    }
}

/// A machine's limits, as bounds on progress. All bounds must be finite, and leave s̈ = 0 allowed at rest.
pub trait Limits {
    /// Greatest speed within `share` of every limit on speeds, m/s; 0 where the curvature cannot be followed.
    fn speed_bound_m_s(&self, bend: Bend, share: f64) -> f64;

    /// Least and greatest s̈ within `share` of every limit on accelerations, m/s². At a given bend the least must be
    /// convex and the greatest concave in the squared speed, as limits linear in (s̈, ṡ²) are.
    fn accel_bounds_m_s2(&self, speed_m_s: f64, bend: Bend, share: f64) -> (f64, f64);

    /// Greatest speed at which a joint between these two curvatures (1/m) may be passed, m/s.
    fn step_speed_m_s(&self, before_1_m: f64, after_1_m: f64, share: f64) -> f64;

    /// Greatest jerk of the progress, m/s³; none if it is not limited.
    fn jerk_m_s3(&self) -> Option<f64>;
}

/// One instant of a timing: between two of them s(t) is the cubic with these speeds.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct TimingPoint {
    /// Time from the piece's beginning, s.
    pub t_s: f64,
    /// Progress from the piece's beginning, m.
    pub s_m: f64,
    /// Its rate, m/s.
    pub speed_m_s: f64,
}

/// Why there is no timing.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Unsolvable {
    /// No speed at all is within the limits there.
    NoSpeed {
        /// Index of the piece.
        piece: usize,
        /// Distance from the piece's beginning, m.
        at_m: f64,
        /// The curvature there, 1/m.
        curvature_1_m: f64,
    },
    /// The start speed is beyond what the limits and what lies ahead allow.
    StartSpeed {
        /// Greatest start speed, m/s.
        greatest_m_s: f64,
    },
    /// The end speed is beyond what the limits allow, or cannot be reached on this path.
    EndSpeed {
        /// Greatest end speed, m/s.
        greatest_m_s: f64,
    },
    /// The path is too short to hold the start or end speed for half the averaging time of the jerk limit.
    TooShortForJerk {
        /// Length needed, m.
        needed_m: f64,
    },
    /// Found no way from the start speed to the end speed within the jerk limit.
    EndsWithinJerk,
    /// The limits could not be kept by dense sampling: the curvature changes too wildly for the grid.
    TooRough {
        /// Index of the piece.
        piece: usize,
        /// Distance from the piece's beginning, m.
        at_m: f64,
    },
}

impl fmt::Display for Unsolvable {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::NoSpeed { at_m, curvature_1_m, .. } => write!(
                f,
                "at {at_m:.3} m the curvature is {curvature_1_m:.4} 1/m, which this machine cannot follow at any speed; turn wider"
            ),
            Self::StartSpeed { greatest_m_s } => write!(
                f,
                "the start speed is too high: with what lies ahead the limits allow {greatest_m_s:.4} m/s; lower --start-speed or the reserve"
            ),
            Self::EndSpeed { greatest_m_s } => write!(
                f,
                "the end speed is too high: the limits allow {greatest_m_s:.4} m/s there; lower --end-speed or the reserve"
            ),
            Self::TooShortForJerk { needed_m } => write!(
                f,
                "too short to begin or end at speed within the jerk limit: it needs {needed_m:.3} m; begin and end slower"
            ),
            Self::EndsWithinJerk => write!(
                f,
                "found no way from the start speed to the end speed within the jerk limit; begin and end slower"
            ),
            Self::TooRough { at_m, .. } => write!(
                f,
                "at {at_m:.3} m the curvature changes too wildly to keep the limits; smooth the path there"
            ),
        }
    }
}

impl core::error::Error for Unsolvable {}

/// What to solve: pieces driven in one go, without a rest between.
#[derive(Clone, Copy)]
pub struct Run<'a> {
    /// The pieces, in order; at least one, each longer than 0 m.
    pub pieces: &'a [&'a dyn Path],
    /// Speed at the beginning, m/s.
    pub start_speed_m_s: f64,
    /// Speed at the end, m/s.
    pub end_speed_m_s: f64,
    /// Share of every limit that may be used, in (0, 1].
    pub share: f64,
}

/// The fastest timing of a run: one list of points a piece, of at least two each. The speed is continuous where pieces
/// join. Dense sampling (five points a cell) found no limit exceeded by more than a billionth.
///
/// # Errors
/// Why there is none.
pub fn fastest(run: &Run<'_>, limits: &dyn Limits) -> Result<Vec<Vec<TimingPoint>>, Unsolvable> {
    if let Some(jerk_m_s3) = limits.jerk_m_s3() {
        return blocks::solve(run, limits, jerk_m_s3);
    }
    let mut grid = Grid::new(run, limits, &Cutting::Even);
    let points: Vec<TimingPoint> = solve(run, limits, &mut grid)?.iter().map(Knot::timed).collect();
    Ok(knots::by_piece(run, &points))
}

/// Passes, pieces of constant acceleration and their check, until the check finds nothing.
fn solve(run: &Run<'_>, limits: &dyn Limits, grid: &mut Grid) -> Result<Vec<Knot>, Unsolvable> {
    for _ in 0..MAX_ROUNDS {
        let squares = passes::fastest(run, limits, grid)?;
        let found = knots::thin(run, limits, grid, &knots::fill(run, limits, grid, &squares));
        let excesses = verify::excesses(run, limits, grid, &found);
        if excesses.is_empty() {
            return Ok(knots::with_times(&found));
        }
        grid.tighten(&excesses, 5e-4);
    }
    let squares = passes::fastest(run, limits, grid)?;
    let found = knots::fill(run, limits, grid, &squares);
    let (piece, at_m) = verify::excesses(run, limits, grid, &found)
        .first()
        .map_or((0, 0.0), |excess| grid.place(excess.cell));
    Err(Unsolvable::TooRough { piece, at_m })
}

#[cfg(test)]
mod tests;
