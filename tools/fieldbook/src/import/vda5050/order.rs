//! The order message: what of it a path needs, read and checked.

use super::super::track::Refused;
use serde::Deserialize;
use std::fmt::Display;

/// Two ends that should meet may lie this far apart, m: half of what a plan's joints may.
const JOIN_M: f64 = 0.01;
/// The highest degree of a trajectory.
const MAX_DEGREE: usize = 10;
/// The greatest coordinate, m.
const MAX_COORDINATE_M: f64 = 1e7;

/// An order. Names are the interface's own; what a path does not need is not read.
#[derive(Clone, Debug, Deserialize)]
#[serde(rename_all = "camelCase")]
pub struct Order {
    /// The interface's version, like 2.0.0.
    pub version: Option<String>,
    /// The order's id.
    #[serde(default)]
    pub order_id: String,
    /// Counts the updates of the order.
    #[serde(default)]
    pub order_update_id: u32,
    nodes: Vec<Node>,
    edges: Vec<Edge>,
}

/// A node.
#[derive(Clone, Debug, Deserialize)]
#[serde(rename_all = "camelCase")]
pub struct Node {
    /// Its id.
    pub node_id: String,
    sequence_id: u64,
    released: bool,
    /// Where it is.
    pub node_position: Option<NodePosition>,
    #[serde(default)]
    actions: Vec<serde_json::Value>,
}

/// Where a node is, in the map's frame.
#[derive(Clone, Debug, Deserialize)]
#[serde(rename_all = "camelCase")]
pub struct NodePosition {
    /// Position, m.
    pub x: f64,
    /// Position, m.
    pub y: f64,
    /// The heading that the machine must have at the node, if any, rad.
    pub theta: Option<f64>,
    /// How far the heading may be off, rad.
    pub allowed_deviation_theta: Option<f64>,
    map_id: Option<String>,
}

/// An edge.
#[derive(Clone, Debug, Deserialize)]
#[serde(rename_all = "camelCase")]
pub struct Edge {
    /// Its id.
    pub edge_id: String,
    sequence_id: u64,
    released: bool,
    start_node_id: String,
    end_node_id: String,
    /// Greatest speed, m/s.
    pub max_speed: Option<f64>,
    /// Heading of the machine on the edge, rad.
    pub orientation: Option<f64>,
    /// Whether it counts from the map's x axis or from the path; from the path if it is not given.
    pub orientation_type: Option<String>,
    /// Greatest turn rate, rad/s.
    pub max_rotation_speed: Option<f64>,
    /// The path; a straight line if there is none.
    pub trajectory: Option<Trajectory>,
    #[serde(default)]
    actions: Vec<serde_json::Value>,
}

/// A path as a rational B-spline.
#[derive(Clone, Debug, Deserialize)]
#[serde(rename_all = "camelCase")]
pub struct Trajectory {
    /// Its degree.
    #[serde(default = "one")]
    pub degree: usize,
    /// Knots from 0 to 1.
    pub knot_vector: Vec<f64>,
    /// The control points, the first and the last on the path's ends.
    pub control_points: Vec<ControlPoint>,
}

/// A control point.
#[derive(Clone, Copy, Debug, Deserialize)]
pub struct ControlPoint {
    /// Position, m.
    pub x: f64,
    /// Position, m.
    pub y: f64,
    /// Its pull.
    #[serde(default = "one_f64")]
    pub weight: f64,
}

fn one() -> usize {
    1
}

fn one_f64() -> f64 {
    1.0
}

/// The released part, checked: one more node than edges, every node with a position.
#[derive(Clone, Debug)]
pub struct Base<'a> {
    /// Its nodes.
    pub nodes: Vec<&'a Node>,
    /// Its edges.
    pub edges: Vec<&'a Edge>,
}

impl Order {
    /// Reads an order and checks what holds for all of it.
    ///
    /// # Errors
    /// What does not hold: line and column in text that is no order, ids and sequence numbers.
    pub fn read(text: &str) -> Result<Self, Refused> {
        let order: Self = serde_json::from_str(text.trim_start_matches('\u{feff}'))
            .map_err(|error| Refused::because(format!("not an order: {error}")))?;
        let mut findings = Vec::new();
        order.check_version(&mut findings);
        if order.nodes.len() != order.edges.len() + 1 {
            findings.push(format!(
                "{} nodes and {} edges; an order has one node more than edges",
                order.nodes.len(),
                order.edges.len()
            ));
        }
        Refused::unless_none(findings)?;
        Refused::unless_none(order.check_chain())?;
        Ok(order)
    }

    fn check_version(&self, findings: &mut Vec<String>) {
        let Some(version) = &self.version else { return };
        if !matches!(version.split('.').next(), Some("1" | "2")) {
            findings.push(format!("version: {version:?}; versions 1 and 2 of the interface are read"));
        }
    }

    /// Sequence numbers rise by one from node to edge to node; edges lead from node to node; nothing is released after
    /// something that is not.
    fn check_chain(&self) -> Vec<String> {
        let mut findings = Vec::new();
        let begin = self.nodes[0].sequence_id;
        let mut open = true;
        let mut element = |place: String,
                           offset: usize,
                           sequence: u64,
                           released: bool,
                           out: &mut Vec<String>| {
            let due = begin.saturating_add(offset as u64);
            if sequence != due {
                out.push(format!(
                    "{place}.sequenceId: {sequence}, due is {due}; node, edge and node follow each other one by one"
                ));
            }
            if released && !open {
                out.push(format!("{place}.released: true after an element that is not released"));
            }
            open = released;
        };
        for (index, node) in self.nodes.iter().enumerate() {
            let place = format!("nodes[{index}] ({})", node.node_id);
            element(place, 2 * index, node.sequence_id, node.released, &mut findings);
            let Some(edge) = self.edges.get(index) else { continue };
            let place = format!("edges[{index}] ({})", edge.edge_id);
            element(place.clone(), 2 * index + 1, edge.sequence_id, edge.released, &mut findings);
            for (key, given, node) in [
                ("startNodeId", &edge.start_node_id, node),
                ("endNodeId", &edge.end_node_id, &self.nodes[index + 1]),
            ] {
                if *given != node.node_id {
                    findings
                        .push(format!("{place}.{key}: {given:?}, but the node there is {:?}", node.node_id));
                }
            }
        }
        findings
    }

    /// The released part. What is left out is told in `notes`.
    ///
    /// # Errors
    /// If it holds no way to go, or its positions and paths do not hold.
    pub fn base(&self, notes: &mut Vec<String>) -> Result<Base<'_>, Refused> {
        let base = Base {
            nodes: self.nodes.iter().filter(|node| node.released).collect(),
            edges: self.edges.iter().filter(|edge| edge.released).collect(),
        };
        if base.edges.is_empty() || base.nodes.len() != base.edges.len() + 1 {
            return Err(Refused::because(format!(
                "{} nodes and {} edges are released; the base ends at a node and needs at least one edge",
                base.nodes.len(),
                base.edges.len()
            )));
        }
        let mut findings = Vec::new();
        base.nodes.iter().enumerate().for_each(|(index, node)| node.check(index, &mut findings));
        check_maps(&base, &mut findings);
        Refused::unless_none(findings)?;
        let mut findings = Vec::new();
        for (index, edge) in base.edges.iter().enumerate() {
            edge.check(index, [base.nodes[index], base.nodes[index + 1]], &mut findings);
        }
        Refused::unless_none(findings)?;
        self.tell(&base, notes);
        Ok(base)
    }

    fn tell(&self, base: &Base<'_>, notes: &mut Vec<String>) {
        let horizon = self.edges.len() - base.edges.len();
        if horizon > 0 {
            notes.push(format!("edges of the horizon, not released and left out: {horizon}"));
        }
        let with_actions: Vec<String> = base
            .nodes
            .iter()
            .map(|node| (&node.node_id, node.actions.len()))
            .chain(base.edges.iter().map(|edge| (&edge.edge_id, edge.actions.len())))
            .filter(|(_, count)| *count > 0)
            .map(|(id, count)| format!("{count} at {id}"))
            .collect();
        if !with_actions.is_empty() {
            notes.push(format!(
                "actions are no part of a plan and were left out: {}",
                with_actions.join(", ")
            ));
        }
        if self.version.is_none() {
            notes.push("no version in the order; read as version 2 of the interface".to_owned());
        }
    }
}

fn check_maps(base: &Base<'_>, findings: &mut Vec<String>) {
    let mut maps = base.nodes.iter().filter_map(|node| node.node_position.as_ref()?.map_id.as_ref());
    if let Some(first) = maps.next()
        && let Some(other) = maps.find(|map| *map != first)
    {
        findings.push(format!("nodePosition.mapId: {first:?} and {other:?}; a plan lies in one map"));
    }
}

/// A finding if a number is not finite and within ± its bound.
fn check_number(place: &impl Display, key: &str, value: f64, bound: f64, findings: &mut Vec<String>) {
    if !value.is_finite() || value.abs() > bound {
        findings.push(format!("{place}.{key}: {value} lies outside ±{bound}"));
    }
}

impl Node {
    fn check(&self, index: usize, findings: &mut Vec<String>) {
        let place = format!("nodes[{index}] ({}).nodePosition", self.node_id);
        let Some(position) = &self.node_position else {
            findings.push(format!("{place}: missing; without it the way to the node is unknown"));
            return;
        };
        check_number(&place, "x", position.x, MAX_COORDINATE_M, findings);
        check_number(&place, "y", position.y, MAX_COORDINATE_M, findings);
        check_number(&place, "theta", position.theta.unwrap_or(0.0), 7.0, findings);
        let deviation = position.allowed_deviation_theta.unwrap_or(0.0);
        check_number(&place, "allowedDeviationTheta", deviation, 7.0, findings);
    }

    /// Its position, m; the base's nodes all have one.
    pub(super) fn xy(&self) -> (f64, f64) {
        self.node_position.as_ref().map_or((0.0, 0.0), |position| (position.x, position.y))
    }
}

impl Edge {
    fn check(&self, index: usize, ends: [&Node; 2], findings: &mut Vec<String>) {
        let place = format!("edges[{index}] ({})", self.edge_id);
        for (key, value) in [("maxSpeed", self.max_speed), ("maxRotationSpeed", self.max_rotation_speed)] {
            if let Some(value) = value.filter(|value| !value.is_finite() || *value <= 0.0) {
                findings.push(format!("{place}.{key}: {value} is not greater than 0"));
            }
        }
        check_number(&place, "orientation", self.orientation.unwrap_or(0.0), 7.0, findings);
        if let Some(kind) =
            self.orientation_type.as_deref().filter(|kind| !matches!(*kind, "GLOBAL" | "TANGENTIAL"))
        {
            findings.push(format!("{place}.orientationType: {kind:?} is neither GLOBAL nor TANGENTIAL"));
        }
        match &self.trajectory {
            Some(trajectory) => trajectory.check(&format!("{place}.trajectory"), ends, findings),
            None if distance(ends[0].xy(), ends[1].xy()) < JOIN_M => {
                findings.push(format!("{place}: both its nodes lie in one place; there is nothing to drive"));
            }
            None => {}
        }
    }
}

impl Trajectory {
    fn check(&self, place: &str, ends: [&Node; 2], findings: &mut Vec<String>) {
        let (points, knots) = (&self.control_points, &self.knot_vector);
        if self.degree < 1 || self.degree > MAX_DEGREE {
            findings.push(format!("{place}.degree: {} is not 1 to {MAX_DEGREE}", self.degree));
            return;
        }
        if points.len() <= self.degree {
            findings.push(format!(
                "{place}.controlPoints: {} of them; degree {} needs at least {}",
                points.len(),
                self.degree,
                self.degree + 1
            ));
            return;
        }
        let due = points.len() + self.degree + 1;
        if knots.len() != due {
            findings.push(format!(
                "{place}.knotVector: {} knots; {} control points of degree {} need {due}",
                knots.len(),
                points.len(),
                self.degree
            ));
            return;
        }
        self.check_knots(place, findings);
        self.check_points(place, ends, findings);
    }

    fn check_knots(&self, place: &str, findings: &mut Vec<String>) {
        let (degree, knots) = (self.degree, &self.knot_vector);
        for (index, pair) in knots.windows(2).enumerate() {
            if pair[1] < pair[0] {
                findings.push(format!(
                    "{place}.knotVector[{}]: {} after {}; knots may not fall",
                    index + 1,
                    pair[1],
                    pair[0]
                ));
            }
        }
        let clamped = |ends: &[f64], value: f64| ends.iter().all(|knot| *knot == value);
        for (side, ends, value) in
            [("begin", &knots[..=degree], 0.0), ("end", &knots[knots.len() - degree - 1..], 1.0)]
        {
            if !clamped(ends, value) {
                findings.push(format!(
                    "{place}.knotVector: must {side} with {} times {value}, so that the path {side}s on its control point; it has {ends:?}",
                    degree + 1
                ));
            }
        }
        let interior = &knots[degree + 1..knots.len() - degree - 1];
        for (index, knot) in interior.iter().enumerate() {
            if !(*knot > 0.0 && *knot < 1.0) {
                findings.push(format!(
                    "{place}.knotVector[{}]: {knot} is not between 0 and 1",
                    index + degree + 1
                ));
            }
        }
        for chunk in interior.chunk_by(|a, b| a == b).filter(|chunk| chunk.len() > degree) {
            findings.push(format!(
                "{place}.knotVector: {} stands there {} times, more than the degree {degree}: the path is torn",
                chunk[0],
                chunk.len()
            ));
        }
    }

    fn check_points(&self, place: &str, ends: [&Node; 2], findings: &mut Vec<String>) {
        for (index, point) in self.control_points.iter().enumerate() {
            let place = format!("{place}.controlPoints[{index}]");
            check_number(&place, "x", point.x, MAX_COORDINATE_M, findings);
            check_number(&place, "y", point.y, MAX_COORDINATE_M, findings);
            if !(point.weight >= 1e-6 && point.weight <= 1e6) {
                findings.push(format!(
                    "{place}.weight: {} is not 1e-6 to 1e6; weights are positive",
                    point.weight
                ));
            }
        }
        let xy = |point: &ControlPoint| (point.x, point.y);
        let last = self.control_points.len() - 1;
        for (index, node) in [(0, ends[0]), (last, ends[1])] {
            let off = distance(xy(&self.control_points[index]), node.xy());
            if off > JOIN_M {
                findings.push(format!(
                    "{place}.controlPoints[{index}]: {off:.3} m from node {}; the path must begin and end at its nodes, within {JOIN_M} m",
                    node.node_id
                ));
            }
        }
        if self.control_points.iter().all(|point| distance(xy(point), xy(&self.control_points[0])) < 1e-6) {
            findings.push(format!("{place}.controlPoints: all in one place"));
        }
    }
}

/// Distance of two points, m.
pub(super) fn distance(a: (f64, f64), b: (f64, f64)) -> f64 {
    trackhold_core::math::length(b.0 - a.0, b.1 - a.1)
}
