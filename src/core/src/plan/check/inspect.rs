//! Goes along a plan look by look and judges what it sees: loads, jumps, directions of travel.

use super::super::Plan;
use super::finding::{Fault, Severity};
use super::ledger::{Draft, Ledger, Meaning, place};
use super::steering::{Steering, Swing};
use super::steps;
use super::walk::{Look, MOST_LOOKS, narrow};
use super::{Following, Peak, SegmentReport, Terms, Thresholds, is_rate, loads_at};
use crate::math;
use crate::vehicle::{Load, Loads, Vehicle};
use alloc::vec::Vec;

/// Number of limit names.
const LIMITS: usize = 12;
/// Room for rounding where a value is compared with its threshold.
const ROUNDING: f64 = 1e-9;
/// Likewise for rates, which come from differences.
const ROUNDING_OF_RATES: f64 = 1e-6;
/// A bend that was seen too coarsely is narrowed down; after so many of them a jump is taken as seen.
const MOST_NARROWED: u32 = 10_000;
/// A steering that is late by less is in time, s: a tick is longer.
const SHORTEST_S: f64 = 1e-6;
/// A jerk is measured over no less than this, s.
const JERK_OVER_S: f64 = 0.01;

/// The state of the inspection.
pub(super) struct Inspector<'a> {
    plan: &'a Plan,
    vehicle: &'a dyn Vehicle,
    following: Following,
    thresholds: &'a Thresholds,
    detailed: bool,
    /// Of the looks at a huge plan's way-poses the ones in the middle of each piece tell the loads well enough.
    huge: bool,
    /// The loads of the last look were taken.
    weighed: bool,
    pub(super) ledger: Ledger,
    pub(super) segments: Vec<SegmentReport>,
    previous: Option<Look>,
    /// Direction of the last motion: 1, −1, 0 before any.
    way: f64,
    /// Since when each limit has been exceeded without a break, s of plan time.
    over_since: [Option<f64>; LIMITS],
    /// The greatest share of each limit in the segment at hand, and its load.
    peaks: [Option<(f64, Load, Look)>; LIMITS],
    curvature: f64,
    curvature_rate: f64,
    /// The fastest look of the segment at hand.
    fastest: Option<Look>,
    narrowed: u32,
    /// Only for a machine that steers.
    steering: Option<Steering>,
}

impl<'a> Inspector<'a> {
    pub(super) fn new(plan: &'a Plan, terms: &'a Terms, detailed: bool, samples: u64) -> Self {
        Self {
            plan,
            vehicle: &*terms.vehicle,
            following: terms.following,
            thresholds: &terms.thresholds,
            detailed,
            huge: samples > MOST_LOOKS as u64,
            weighed: false,
            ledger: Ledger::default(),
            segments: Vec::new(),
            previous: None,
            way: 0.0,
            over_since: [None; LIMITS],
            peaks: [None; LIMITS],
            curvature: 0.0,
            curvature_rate: 0.0,
            fastest: None,
            narrowed: 0,
            steering: terms.vehicle.layout().is_steered().then(Steering::default),
        }
    }

    /// Where the machine comes from: at rest before a plan of its own.
    pub(super) fn begin(&mut self, look: Look) {
        self.previous = Some(look);
    }

    pub(super) fn look(&mut self, look: &Look) {
        if let Some(previous) = self.previous {
            if previous.slot != look.slot {
                self.close_segment(previous.slot);
            }
            self.jumps(&previous, look);
        }
        let again =
            self.previous.is_some_and(|previous| previous.slot == look.slot && previous.t_s == look.t_s);
        self.weighed = !(self.huge && (again || self.weighed));
        if self.weighed {
            self.loads(look);
        }
        self.directions(look);
        self.steering(look);
        self.previous = Some(*look);
    }

    /// Where a closed plan ends: at rest.
    pub(super) fn end(&mut self, rest: Option<Look>) {
        let Some(last) = self.previous else { return };
        if let Some(rest) = rest {
            self.jumps(&last, &rest);
        }
        self.close_segment(last.slot);
    }

    pub(super) fn note(
        &mut self,
        fault: Fault,
        severity: Severity,
        look: &Look,
        number: (f64, f64, &'static str),
        meaning: Meaning,
    ) {
        let (value, limit, unit) = number;
        self.ledger.note(Draft { fault, severity, look: *look, value, limit, unit, meaning });
    }

    fn jumps(&mut self, from: &Look, to: &Look) {
        let limits = *self.thresholds;
        if let Some((_, to, value)) = self.jump(from, to, limits.joint_gap_m, steps::position) {
            self.note(Fault::Gap, Severity::Unfit, &to, (value, limits.joint_gap_m, "m"), Meaning::Plain);
        }
        if let Some((_, to, value)) = self.jump(from, to, limits.joint_heading_rad, steps::heading) {
            let number = (value, limits.joint_heading_rad, "rad");
            self.note(Fault::Kink, Severity::Unfit, &to, number, Meaning::Plain);
        }
        if let Some((from, to, value)) = self.jump(from, to, limits.speed_step_m_s, steps::speed) {
            self.speed_step(&from, &to, value);
        }
        let on_the_spot = steps::turn_rate_on_the_spot;
        if let Some((_, to, value)) = self.jump(from, to, limits.turn_rate_step_rad_s, on_the_spot) {
            self.turn_rate_step(&to, value);
        }
        if let Some((from, to, value)) = self.jump(from, to, limits.curvature_step_1_m, steps::curvature) {
            self.curvature_step(&from, &to, value);
        }
        if let Some(max_jerk) = self.vehicle.max_jerk_m_s3() {
            self.jerk(from, to, max_jerk);
        }
    }

    /// The jump between two looks, if there is one above `limit`, and its instant.
    fn jump(
        &mut self,
        from: &Look,
        to: &Look,
        limit: f64,
        excess: impl Fn(&Look, &Look) -> f64,
    ) -> Option<(Look, Look, f64)> {
        let value = excess(from, to);
        if value <= limit * (1.0 + ROUNDING) {
            return None;
        }
        if to.t_s <= from.t_s || self.narrowed >= MOST_NARROWED {
            return Some((*from, *to, value));
        }
        self.narrowed += 1;
        let (from, to) = narrow(self.plan, from, to, &excess);
        let value = excess(&from, &to);
        (value > limit * (1.0 + ROUNDING)).then_some((from, to, value))
    }

    fn speed_step(&mut self, from: &Look, to: &Look, step: f64) {
        let (before, after) = (from.reference.velocity.speed_m_s, to.reference.velocity.speed_m_s);
        let slowest = before.abs().min(after.abs());
        let turns_back = before * after < 0.0 && slowest > self.thresholds.rest_speed_m_s;
        let accel = self.speed_accel(from, to);
        let meaning =
            Meaning::Along { lag_m: step * step / (2.0 * accel), after_s: step / accel, accel_m_s2: accel };
        let fault = if turns_back { Fault::Cusp } else { Fault::SpeedStep };
        self.note(fault, Severity::Warning, to, (step, self.thresholds.speed_step_m_s, "m/s"), meaning);
    }

    /// The acceleration with which the machine catches up with a step of the speed, m/s².
    fn speed_accel(&self, from: &Look, to: &Look) -> f64 {
        let curvature = to.reference.curvature_1_m;
        let (before, after) = (from.reference.velocity.speed_m_s, to.reference.velocity.speed_m_s);
        let (fall, rise) = self.vehicle.accel_bounds_m_s2(0.0, curvature, 0.0, 1.0);
        let accel = if after.abs() >= before.abs() { rise } else { -fall };
        if accel > 0.0 && accel.is_finite() { accel } else { self.vehicle.path_decel_m_s2(curvature) }
    }

    fn turn_rate_step(&mut self, to: &Look, step: f64) {
        let limit = self.thresholds.turn_rate_step_rad_s;
        let Some((_, accel)) = self.vehicle.pivot_bounds(1.0) else { return };
        let meaning = Meaning::Turning {
            lag_rad: step * step / (2.0 * accel),
            after_s: step / accel,
            step_rad_s: step,
        };
        self.note(Fault::TurnRateStep, Severity::Warning, to, (step, limit, "rad/s"), meaning);
    }

    fn curvature_step(&mut self, from: &Look, to: &Look, step: f64) {
        let (before, after) = (from.reference.velocity.speed_m_s, to.reference.velocity.speed_m_s);
        let number = (step, self.thresholds.curvature_step_1_m, "1/m");
        let rests = before.abs().min(after.abs()) <= self.thresholds.rest_speed_m_s;
        let speed = before.abs().max(after.abs());
        let curvatures = (from.reference.curvature_1_m, to.reference.curvature_1_m);
        if let Some(after_s) = self.vehicle.swing_s(curvatures.0, curvatures.1) {
            if rests {
                let meaning = Meaning::SteeringAtRest { after_s };
                self.note(Fault::CurvatureStep, Severity::Information, to, number, meaning);
            } else {
                let way_m = speed * after_s;
                let meaning = Meaning::Steering { after_s, way_m, off_rad: 0.5 * step * way_m };
                self.note(Fault::CurvatureStep, Severity::Unfit, to, number, meaning);
            }
            return;
        }
        let Some((_, accel)) = self.vehicle.pivot_bounds(1.0).filter(|_| !rests) else { return };
        let step_rad_s = speed * step;
        let meaning = Meaning::Turning {
            lag_rad: step_rad_s * step_rad_s / (2.0 * accel),
            after_s: step_rad_s / accel,
            step_rad_s,
        };
        self.note(Fault::CurvatureStep, Severity::Warning, to, number, meaning);
    }

    /// Where a motion begins: is the steering there by then?
    fn steering(&mut self, look: &Look) {
        let (rest_speed, sampled) = (self.thresholds.rest_speed_m_s, self.is_sampled(look));
        let next = self.steering.as_mut().and_then(|steering| steering.next(look, rest_speed, sampled));
        let Some(swing) = next else { return };
        if swing.is_first && self.plan.continues_at().is_some() {
            return;
        }
        let step_1_m = (swing.after_1_m - swing.before_1_m).abs();
        if step_1_m.is_nan() || step_1_m <= self.thresholds.curvature_step_1_m {
            return;
        }
        let Some(needed_s) = self.vehicle.swing_s(swing.before_1_m, swing.after_1_m) else { return };
        let rest_s = swing.rest_s(self.plan);
        let late_s = needed_s - rest_s;
        if late_s > SHORTEST_S {
            self.steering_late(&swing, (needed_s, rest_s), step_1_m);
        }
    }

    fn steering_late(&mut self, swing: &Swing, (needed_s, rest_s): (f64, f64), step_1_m: f64) {
        let late_s = needed_s - rest_s;
        let way = swing.way(self.plan, late_s);
        let (meaning, off, limit) = if swing.after_1_m.is_infinite() {
            (Meaning::SpotLate { late_s, off_rad: way }, way, self.thresholds.joint_heading_rad)
        } else {
            // After a turn on the spot the wheel steers first and drives then.
            let off_rad = if step_1_m.is_finite() { 0.5 * step_1_m * way } else { 0.0 };
            (Meaning::SteeringLate { late_s, way_m: way, off_rad }, off_rad, self.thresholds.steering_off_rad)
        };
        let is_unfit = off > limit && !swing.is_first;
        let severity = match is_unfit {
            true => Severity::Unfit,
            false if late_s > self.thresholds.excess_s => Severity::Warning,
            false => Severity::Information,
        };
        self.note(Fault::SteeringTime, severity, &swing.begin, (needed_s, rest_s, "s"), meaning);
    }

    fn is_sampled(&self, look: &Look) -> bool {
        self.plan.slots[look.slot].kind == "samples"
    }

    fn jerk(&mut self, from: &Look, to: &Look, max_jerk: f64) {
        let (before, after) = (from.reference.accel_m_s2, to.reference.accel_m_s2);
        let jerk = (after - before).abs() / (to.t_s - from.t_s).max(JERK_OVER_S);
        if jerk > max_jerk * (1.0 + 1e-3) {
            self.note(Fault::Jerk, Severity::Warning, to, (jerk, max_jerk, "m/s³"), Meaning::Plain);
        }
    }

    fn loads(&mut self, look: &Look) {
        let Some(loads) = loads_at(self.vehicle, &look.reference, self.is_sampled(look)) else {
            let number = (look.reference.velocity.turn_rate_rad_s.abs(), 0.0, "rad/s");
            self.note(Fault::Pivot, Severity::Unfit, look, number, Meaning::Plain);
            return;
        };
        self.judge(&loads, look);
        if look.reference.velocity.speed_m_s.abs() > self.thresholds.rest_speed_m_s {
            self.curvature = self.curvature.max(look.reference.curvature_1_m.abs());
            self.curvature_rate = self.curvature_rate.max(look.reference.curvature_rate_1_m2.abs());
        }
    }

    fn judge(&mut self, loads: &Loads, look: &Look) {
        let mut over = [None; LIMITS];
        for load in loads {
            let (index, share) = (load.limit as usize, load.share());
            let peak = &mut self.peaks[index];
            if peak.is_none_or(|(greatest, ..)| share > greatest) {
                *peak = Some((share, *load, *look));
            }
            let (warn, unfit) = (self.thresholds.share_warn, self.thresholds.share_unfit);
            let rounding = if is_rate(load.limit) { ROUNDING_OF_RATES } else { ROUNDING };
            if share > unfit * (1.0 + rounding) {
                let since = self.over_since[index].unwrap_or(look.t_s);
                over[index] = Some(since);
                self.excess(load, look, look.t_s - since);
            } else if share > warn * (1.0 + rounding) {
                let number = (load.value, load.bound, load.unit);
                let meaning = if self.is_braked(look) { Meaning::BrakedEnd } else { Meaning::Plain };
                self.note(Fault::Limit(load.limit), Severity::Warning, look, number, meaning);
            }
        }
        self.over_since = over;
    }

    fn is_braked(&self, look: &Look) -> bool {
        let slot = &self.plan.slots[look.slot];
        slot.brake.as_ref().is_some_and(|brake| look.t_s >= slot.begin_s + brake.from_s)
    }

    fn excess(&mut self, load: &Load, look: &Look, seconds: f64) {
        let number = (load.value, load.bound * self.thresholds.share_unfit, load.unit);
        let fault = Fault::Limit(load.limit);
        if !is_rate(load.limit) {
            self.note(fault, Severity::Unfit, look, number, Meaning::Plain);
        } else if seconds < self.thresholds.excess_s {
            self.note(fault, Severity::Warning, look, number, Meaning::Lasts { seconds });
        } else {
            self.note(fault, Severity::Unfit, look, number, Meaning::Lasts { seconds });
        }
    }

    fn directions(&mut self, look: &Look) {
        let speed = look.reference.velocity.speed_m_s;
        if steps::on_the_spot(look) || steps::rests(look) {
            return;
        }
        let way = if speed < 0.0 { -1.0 } else { 1.0 };
        if self.way * way < 0.0
            && self.previous.is_none_or(|previous| self.slow(&previous) || self.slow(look))
        {
            let number = (speed.abs(), self.thresholds.speed_step_m_s, "m/s");
            self.note(Fault::Cusp, Severity::Information, look, number, Meaning::Plain);
        }
        self.way = way;
        if self.fastest.is_none_or(|fastest| speed.abs() > fastest.reference.velocity.speed_m_s.abs()) {
            self.fastest = Some(*look);
        }
        let follows = if way > 0.0 { self.following.forward } else { self.following.reverse };
        if !follows {
            let number = (speed.abs(), 0.0, "m/s");
            self.note(Fault::LawDirection, Severity::Unfit, look, number, Meaning::Plain);
        }
    }

    fn slow(&self, look: &Look) -> bool {
        look.reference.velocity.speed_m_s.abs() <= self.thresholds.rest_speed_m_s
    }

    /// A segment that is slower than the law steers for by itself.
    fn crawling(&mut self) {
        let Some(look) = self.fastest.take() else { return };
        let (speed, least) = (look.reference.velocity.speed_m_s.abs(), self.following.least_speed_m_s);
        if speed < least {
            let number = (speed, least, "m/s");
            self.note(Fault::LawSpeed, Severity::Information, &look, number, Meaning::Plain);
        }
    }

    fn close_segment(&mut self, index: usize) {
        self.crawling();
        self.sideways(index);
        self.ledger.close_segment(self.plan);
        let peaks = core::mem::replace(&mut self.peaks, [None; LIMITS]);
        let (curvature, curvature_rate) = (self.curvature, self.curvature_rate);
        (self.curvature, self.curvature_rate) = (0.0, 0.0);
        if !self.detailed {
            return;
        }
        let slot = &self.plan.slots[index];
        let peaks: Vec<Peak> = peaks
            .into_iter()
            .flatten()
            .map(|(_, load, look)| Peak { load, place: place(self.plan, &look) })
            .collect();
        self.segments.push(SegmentReport {
            index,
            kind: slot.kind,
            begin_s: slot.begin_s,
            duration_s: slot.duration_s(),
            length_m: slot.stretch.path_length_m(),
            authority_left: 1.0 - peaks.iter().map(|peak| peak.load.share()).fold(0.0, f64::max),
            peaks,
            peak_curvature_1_m: curvature,
            peak_curvature_rate_1_m2: curvature_rate,
        });
    }

    /// Looks at the way-poses as they were stated: does the way from one to the next lie along the headings?
    fn sideways(&mut self, index: usize) {
        let slot = &self.plan.slots[index];
        let limit = self.thresholds.sideways_rad;
        let mut ways = super::sideways::Ways::default();
        let mut worst: Option<(f64, f64)> = None;
        let mut places = 0_u64;
        slot.stretch.way_poses(&mut |t_s, pose| {
            if let Some(angle) = ways.next(pose).filter(|angle| *angle > limit) {
                places += 1;
                if worst.is_none_or(|(most, _)| angle > most) {
                    worst = Some((angle, t_s));
                }
            }
        });
        let Some((angle, t_s)) = worst else { return };
        let look = Look { slot: index, t_s: slot.begin_s + t_s, reference: slot.at(t_s) };
        for _ in 0..places.min(1_000_000) {
            self.note(Fault::Sideways, Severity::Unfit, &look, (angle, limit, "rad"), Meaning::Plain);
        }
    }
}

/// The stretch of heading between two angles, folded so that forward and reverse are both 0, rad.
pub(super) fn off_the_line(way: f64, heading: f64) -> f64 {
    let angle = math::wrap(way - heading).abs();
    angle.min(math::PI - angle)
}
