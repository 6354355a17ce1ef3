//! What jumps from one look to the next: what is left of a change once the rates at both ends have explained their part.

use super::walk::Look;
use crate::math;

/// Slower than this a reference stands, m/s.
const STANDS_M_S: f64 = 1e-9;
/// Slower than this a turn rate is none, rad/s.
const STANDS_RAD_S: f64 = 1e-9;

/// Jump of the position, m: what the mean speed along the mean heading does not explain.
pub(super) fn position(from: &Look, to: &Look) -> f64 {
    let (a, b) = (&from.reference, &to.reference);
    let way = 0.5 * (a.velocity.speed_m_s + b.velocity.speed_m_s) * (to.t_s - from.t_s);
    let cos = 0.5 * (a.direction.cos + b.direction.cos);
    let sin = 0.5 * (a.direction.sin + b.direction.sin);
    math::length(b.pose.x_m - a.pose.x_m - way * cos, b.pose.y_m - a.pose.y_m - way * sin)
}

/// Jump of the heading, rad.
pub(super) fn heading(from: &Look, to: &Look) -> f64 {
    let turned = 0.5 * (turn_rate(from) + turn_rate(to)) * (to.t_s - from.t_s);
    math::wrap(to.reference.pose.heading_rad - from.reference.pose.heading_rad - turned).abs()
}

/// Step of the speed, m/s.
pub(super) fn speed(from: &Look, to: &Look) -> f64 {
    let (a, b) = (&from.reference, &to.reference);
    let gained = 0.5 * (a.accel_m_s2 + b.accel_m_s2) * (to.t_s - from.t_s);
    (b.velocity.speed_m_s - a.velocity.speed_m_s - gained).abs()
}

/// Step of the turn rate, rad/s, where the reference turns on the spot before or after; else 0.
pub(super) fn turn_rate_on_the_spot(from: &Look, to: &Look) -> f64 {
    let (a, b) = (&from.reference, &to.reference);
    if !on_the_spot(from) && !on_the_spot(to) {
        return 0.0;
    }
    let gained = 0.5 * (a.turn_accel_rad_s2 + b.turn_accel_rad_s2) * (to.t_s - from.t_s);
    (b.velocity.turn_rate_rad_s - a.velocity.turn_rate_rad_s - gained).abs()
}

/// Step of the curvature, 1/m.
pub(super) fn curvature(from: &Look, to: &Look) -> f64 {
    let (a, b) = (&from.reference, &to.reference);
    let way = 0.5 * (a.velocity.speed_m_s.abs() + b.velocity.speed_m_s.abs()) * (to.t_s - from.t_s);
    let changed = 0.5 * (a.curvature_rate_1_m2 + b.curvature_rate_1_m2) * way;
    (b.curvature_1_m - a.curvature_1_m - changed).abs()
}

/// True if the reference turns without moving.
pub(super) fn on_the_spot(look: &Look) -> bool {
    let velocity = look.reference.velocity;
    velocity.speed_m_s.abs() < STANDS_M_S && velocity.turn_rate_rad_s.abs() > STANDS_RAD_S
}

/// True if it neither moves nor turns.
pub(super) fn rests(look: &Look) -> bool {
    let velocity = look.reference.velocity;
    velocity.speed_m_s.abs() < STANDS_M_S && velocity.turn_rate_rad_s.abs() <= STANDS_RAD_S
}

/// The turn rate of the path; on the spot the stated one.
fn turn_rate(look: &Look) -> f64 {
    let reference = &look.reference;
    if reference.velocity.speed_m_s == 0.0 {
        reference.velocity.turn_rate_rad_s
    } else {
        reference.velocity.speed_m_s * reference.curvature_1_m
    }
}
