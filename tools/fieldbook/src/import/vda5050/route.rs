//! From a checked order to the pieces of a plan.

use super::super::draft::{Draft, Nurbs, Pace, Piece, Shape};
use super::super::track::Refused;
use super::order::{Base, Edge, Node, Trajectory, distance};
use core::f64::consts::PI;
use trackhold_core::geometry::Pose;
use trackhold_core::math;

/// A machine's heading and a path's may differ this much, rad; also what an orientation may be off the path.
const KINK_RAD: f64 = 0.01;
/// Below this a difference of headings is rounding, rad.
const ROUNDING_RAD: f64 = 1e-9;
/// Points this close are one place, m.
const SAME_M: f64 = 1e-6;

/// What the caller asks for.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Wishes {
    /// Speed where an edge has no maxSpeed, and the most anywhere, m/s.
    pub speed: Option<f64>,
    /// Turn rate on the spot, rad/s.
    pub pivot_rate: f64,
}

/// An edge, or a straight part of one.
struct Leg {
    /// None if it is straight.
    curve: Option<Nurbs>,
    from: (f64, f64),
    to: (f64, f64),
    /// Directions along its control points, the first and the last those of the path at its ends, rad.
    bearings: Vec<f64>,
}

impl Leg {
    /// The machine's headings at its ends.
    fn headings(&self, reverse: bool) -> (f64, f64) {
        let driven = |path_rad: f64| if reverse { math::wrap(path_rad + PI) } else { path_rad };
        (driven(self.bearings[0]), driven(self.bearings[self.bearings.len() - 1]))
    }
}

/// Makes the pieces of a plan from the released part of an order.
///
/// # Errors
/// Edges without a speed, with an orientation that is not along the path.
pub fn draft(base: &Base<'_>, wishes: &Wishes, notes: &mut Vec<String>) -> Result<Draft, Refused> {
    let mut findings = Vec::new();
    let mut drafting = Drafting {
        wishes,
        heading: None,
        position: None,
        start: None,
        pieces: Vec::new(),
        findings: &mut findings,
    };
    for (index, edge) in base.edges.iter().enumerate() {
        drafting.edge(index, edge, [base.nodes[index], base.nodes[index + 1]], turn_limit(base, index));
    }
    let last = base.nodes.len() - 1;
    drafting.at_last_node(base.nodes[last], turn_limit(base, last));
    let Drafting { start, pieces, .. } = drafting;
    Refused::unless_none(findings)?;
    tell(&pieces, notes);
    let start = start.ok_or_else(|| Refused::because("the base has no edge"))?;
    Ok(Draft { start, origin: None, pieces })
}

/// The lowest maxRotationSpeed of the edges at a node.
fn turn_limit(base: &Base<'_>, node: usize) -> Option<f64> {
    let edges = [node.checked_sub(1).and_then(|before| base.edges.get(before)), base.edges.get(node)];
    edges.into_iter().flatten().filter_map(|edge| edge.max_rotation_speed).min_by(f64::total_cmp)
}

fn tell(pieces: &[Piece], notes: &mut Vec<String>) {
    let pivots = pieces.iter().filter(|piece| matches!(piece.shape, Shape::Pivot(_))).count();
    if pivots > 0 {
        notes.push(format!("turns on the spot put in where headings differ at a node or a corner: {pivots}"));
    }
    let reverse: Vec<&str> =
        pieces.iter().filter(|piece| piece.reverse).map(|piece| piece.place.as_str()).collect();
    if !reverse.is_empty() {
        notes.push(format!("driven in reverse by their orientation: {}", reverse.join(", ")));
    }
}

struct Drafting<'a> {
    wishes: &'a Wishes,
    /// The machine's heading at the end of what is drafted.
    heading: Option<f64>,
    /// Its position there; none before the first edge.
    position: Option<(f64, f64)>,
    start: Option<Pose>,
    pieces: Vec<Piece>,
    findings: &'a mut Vec<String>,
}

impl Drafting<'_> {
    fn edge(&mut self, index: usize, edge: &Edge, [from, to]: [&Node; 2], turn_limit: Option<f64>) {
        let place = format!("edges[{index}] ({})", edge.edge_id);
        let legs = legs(edge, self.position.unwrap_or(from.xy()), to.xy());
        let reverse = match driven_in_reverse(edge, &legs) {
            Ok(reverse) => reverse,
            Err(what) => {
                self.findings.push(format!("{place}.orientation: {what}"));
                self.skip_to(to);
                return;
            }
        };
        let speed = match (edge.max_speed, self.wishes.speed) {
            (Some(most), Some(wish)) => most.min(wish),
            (Some(speed), None) | (None, Some(speed)) => speed,
            (None, None) => {
                self.findings.push(format!("{place}.maxSpeed: missing; give --speed, in m/s"));
                self.skip_to(to);
                return;
            }
        };
        for (number, leg) in legs.iter().enumerate() {
            let (begin, _) = leg.headings(reverse);
            if number == 0 {
                self.at_node(from, leg.from, begin, turn_limit);
            } else {
                self.turn_to(begin, &format!("the corner {number} of {place}"), turn_limit);
            }
            self.leg(leg, reverse, speed, &place);
        }
    }

    /// After an edge that was refused the next ones are still looked at, from their own node.
    fn skip_to(&mut self, node: &Node) {
        self.heading = None;
        self.position = Some(node.xy());
    }

    fn leg(&mut self, leg: &Leg, reverse: bool, speed: f64, place: &str) {
        let (begin, end) = leg.headings(reverse);
        // A straight piece that goes on with a slightly different heading is laid through its own ends.
        let straight_on =
            self.heading.is_some_and(|heading| math::wrap(begin - heading).abs() <= ROUNDING_RAD);
        let shape = match &leg.curve {
            Some(curve) => Shape::Nurbs(curve.clone()),
            None if straight_on => Shape::Line(distance(leg.from, leg.to)),
            None => Shape::Spline([leg.from, leg.to].map(|(x, y)| Pose::new(x, y, begin)).to_vec()),
        };
        let pace = Some(Pace { rate: speed, ramp: None });
        self.pieces.push(Piece { place: place.to_owned(), shape, pace, reverse });
        self.heading = Some(end);
        self.position = Some(leg.to);
    }

    /// Brings the machine from the heading it comes with to the one it leaves with, over the one that the node wants.
    fn at_node(&mut self, node: &Node, at: (f64, f64), leaves: f64, turn_limit: Option<f64>) {
        let place = format!("node {}", node.node_id);
        let wanted = wanted_heading(node);
        let Some(comes) = self.heading else {
            let off = wanted.map_or(0.0, |(theta, within)| {
                if math::wrap(theta - leaves).abs() > within { math::wrap(theta - leaves) } else { 0.0 }
            });
            self.start = Some(Pose::new(at.0, at.1, math::wrap(leaves + off)));
            self.heading = Some(math::wrap(leaves + off));
            self.turn_to(leaves, &place, turn_limit);
            return;
        };
        if let Some((theta, within)) = wanted {
            let off = |heading: f64| math::wrap(theta - heading).abs() > within;
            if off(comes) && off(leaves) {
                self.turn_to(theta, &place, turn_limit);
            }
        }
        self.turn_to(leaves, &place, turn_limit);
    }

    fn at_last_node(&mut self, node: &Node, turn_limit: Option<f64>) {
        if let (Some((theta, within)), Some(comes)) = (wanted_heading(node), self.heading)
            && math::wrap(theta - comes).abs() > within
        {
            self.turn_to(theta, &format!("node {}", node.node_id), turn_limit);
        }
    }

    fn turn_to(&mut self, heading: f64, place: &str, turn_limit: Option<f64>) {
        let Some(comes) = self.heading else { return };
        let turn = math::wrap(heading - comes);
        if turn.abs() <= KINK_RAD {
            return;
        }
        let rate = turn_limit.map_or(self.wishes.pivot_rate, |limit| limit.min(self.wishes.pivot_rate));
        self.pieces.push(Piece {
            place: place.to_owned(),
            shape: Shape::Pivot(turn),
            pace: Some(Pace { rate, ramp: None }),
            reverse: false,
        });
        self.heading = Some(heading);
    }
}

/// The heading that a node wants, and within what.
fn wanted_heading(node: &Node) -> Option<(f64, f64)> {
    let position = node.node_position.as_ref()?;
    let within = position.allowed_deviation_theta.unwrap_or(0.0).abs().max(KINK_RAD);
    position.theta.map(|theta| (theta, within))
}

/// The legs of an edge: one, or one for each piece of a polyline. A straight one begins at `joint`, where the machine is.
fn legs(edge: &Edge, joint: (f64, f64), end: (f64, f64)) -> Vec<Leg> {
    match &edge.trajectory {
        None => polyline(&[joint, end]),
        Some(trajectory) => {
            let mut points: Vec<(f64, f64)> =
                trajectory.control_points.iter().map(|point| (point.x, point.y)).collect();
            if trajectory.degree > 1 {
                return vec![curve(trajectory, points)];
            }
            points[0] = joint;
            polyline(&points)
        }
    }
}

fn bearing(from: (f64, f64), to: (f64, f64)) -> f64 {
    math::atan2(to.1 - from.1, to.0 - from.0)
}

/// The directions from point to point, those in one place left out.
fn bearings(points: &[(f64, f64)]) -> Vec<f64> {
    let apart = points.windows(2).filter(|pair| distance(pair[0], pair[1]) > SAME_M);
    apart.map(|pair| bearing(pair[0], pair[1])).collect()
}

fn polyline(points: &[(f64, f64)]) -> Vec<Leg> {
    let apart = points.windows(2).filter(|pair| distance(pair[0], pair[1]) > SAME_M);
    apart
        .map(|pair| {
            let along = bearing(pair[0], pair[1]);
            Leg { curve: None, from: pair[0], to: pair[1], bearings: vec![along] }
        })
        .collect()
}

/// A clamped spline begins along the first leg of its control points and ends along the last (The NURBS Book, 4.2).
fn curve(trajectory: &Trajectory, points: Vec<(f64, f64)>) -> Leg {
    let (from, to) = (points[0], points[points.len() - 1]);
    let bearings = bearings(&points);
    let weights = trajectory.control_points.iter().map(|point| point.weight).collect();
    let (degree, knots) = (trajectory.degree, trajectory.knot_vector.clone());
    Leg { curve: Some(Nurbs { degree, knots, points, weights }), from, to, bearings }
}

/// Whether an edge's orientation means forward or reverse.
fn driven_in_reverse(edge: &Edge, legs: &[Leg]) -> Result<bool, String> {
    let Some(orientation) = edge.orientation else { return Ok(false) };
    let of_map = edge.orientation_type.as_deref() == Some("GLOBAL");
    let ways =
        if of_map { legs.iter().flat_map(|leg| leg.bearings.iter().copied()).collect() } else { vec![0.0] };
    let ahead = |way: &f64| math::wrap(orientation - way).abs() <= KINK_RAD;
    let astern = |way: &f64| math::wrap(orientation - way - PI).abs() <= KINK_RAD;
    if ways.iter().all(ahead) {
        return Ok(false);
    }
    if ways.iter().all(astern) {
        return Ok(true);
    }
    let worst = ways.iter().find(|way| !ahead(way) && !astern(way)).or(ways.first()).copied().unwrap_or(0.0);
    Err(if of_map {
        format!(
            "{orientation} rad in the map, where the path goes along {worst:.3} rad; this machine drives along its heading: give a heading along the whole path, or opposite to it for reverse"
        )
    } else {
        format!(
            "{orientation} rad from the path; this machine drives along its heading: give 0, or π for reverse"
        )
    })
}
