//! What the wheels are told: authority, limits, zero at once, ramps.

use super::{Asked, Broken, Heard, Judge, Rule, drives};
use crate::setup::{Bounds, PERIOD, Setup};
use trackhold_core::time::{SpanNs, TimeNs};
use trackhold_proto::journal::{Body, Order, TickRecord};
use trackhold_proto::message::Command;
use trackhold_proto::words::{Mode, StopKind};

/// Room for rounding, in shares of a bound.
const ROUNDING: f64 = 1e-9;

#[derive(Debug)]
pub(super) struct Motion {
    bounds: [Bounds; 2],
    steers: bool,
    ramp: SpanNs,
    /// A start was taken, and the machine has not stopped since.
    authority: bool,
    /// The last command's numbers.
    wheels: [f64; 4],
    last_tick: Option<TimeNs>,
    /// When the protective stop in force began to ramp, and from which speed; none once it is over.
    ramping: Option<(TimeNs, f64)>,
}

impl Motion {
    pub(super) fn new(setup: &Setup) -> Self {
        Self {
            bounds: setup.bounds,
            steers: setup.steers,
            ramp: setup.ramp,
            authority: false,
            wheels: [0.0; 4],
            last_tick: None,
            ramping: None,
        }
    }

    /// Zero: no speed; a steering angle is held.
    fn is_zero(&self, wheels: &[f64; 4]) -> bool {
        wheels[0] == 0.0 && (self.steers || wheels[1] == 0.0)
    }

    fn within_limits(&self, wheels: &[f64; 4]) -> bool {
        let within = |(value, bound): (&f64, &Bounds)| value.abs() <= bound.greatest * (1.0 + ROUNDING);
        wheels.iter().zip(&self.bounds).all(within) && wheels[2..] == [0.0; 2]
    }

    /// Whether each number changed no farther than it may in `seconds`; the speeds are free in a stop.
    fn within_steps(&self, wheels: &[f64; 4], seconds: f64, stops: bool) -> bool {
        (0..2).all(|index| {
            let free = stops && !(self.steers && index == 1);
            let step = (wheels[index] - self.wheels[index]).abs();
            free || step <= self.bounds[index].change_1_s * seconds + ROUNDING
        })
    }
}

/// The numbers of a record besides its command.
fn numbers(record: &TickRecord) -> [f64; 17] {
    [
        record.plan_rate,
        record.speed_cap,
        record.x_m,
        record.y_m,
        record.heading_rad,
        record.ref_x_m,
        record.ref_y_m,
        record.ref_heading_rad,
        record.ref_speed_m_s,
        record.ref_turn_rate_rad_s,
        record.ref_curvature_1_m,
        record.ref_accel_m_s2,
        record.along_error_m,
        record.cross_error_m,
        record.heading_error_rad,
        record.wanted_speed_m_s,
        record.wanted_turn_rate_rad_s,
    ]
}

impl Judge {
    pub(super) fn judge_motion(&mut self, heard: &Heard<'_>) -> Result<(), Broken> {
        if let Some(change) = heard.change {
            let started = change.to == Mode::Tracking;
            self.motion.authority = started || self.motion.authority && drives(change.to);
            self.motion.ramping = None;
            if change.to == Mode::ProtectiveStop && heard.is_tick() && self.motion.ramp > SpanNs(0) {
                self.motion.ramping = Some((heard.at, self.motion.wheels[0].abs()));
            }
        }
        self.judge_zero_at_once(heard)?;
        for entry in heard.out {
            match &entry.body {
                Body::Command(command) => {
                    self.judge_command(heard, command, 0.0)?;
                    self.motion.wheels = command.wheels;
                }
                Body::Tick(record) => {
                    let told = || format!("{record:?}");
                    Broken::unless(
                        numbers(record).iter().all(|value| value.is_finite()),
                        Rule::Finite,
                        told,
                    )?;
                    let since = self.motion.last_tick.map_or(PERIOD, |last| heard.at.since(last));
                    self.judge_command(heard, &record.command, since.min(PERIOD).seconds())?;
                    self.motion.wheels = record.command.wheels;
                    self.motion.last_tick = Some(heard.at);
                    if self.motion.is_zero(&record.command.wheels) {
                        self.motion.ramping = None;
                    }
                }
                _ => (),
            }
        }
        Ok(())
    }

    fn judge_zero_at_once(&mut self, heard: &Heard<'_>) -> Result<(), Broken> {
        let stops =
            matches!(heard.asked, Asked::Trip(_)) || heard.order() == Some(Order::Stop(StopKind::Emergency));
        if stops {
            self.motion.ramping = None;
        }
        let mut commands = heard.out.iter().filter_map(|entry| match &entry.body {
            Body::Command(command) => Some(command),
            _ => None,
        });
        let first = commands.next();
        let kept = match first {
            Some(command) => stops && command.mode == heard.after && self.motion.is_zero(&command.wheels),
            None => !stops,
        };
        let told = || format!("{:?} commands {first:?}", heard.asked);
        Broken::unless(kept && commands.next().is_none(), Rule::ZeroAtOnce, told)
    }

    fn judge_command(&self, heard: &Heard<'_>, command: &Command, seconds: f64) -> Result<(), Broken> {
        let Command { wheels, speed_m_s, turn_rate_rad_s, .. } = command;
        let finite = wheels.iter().chain([speed_m_s, turn_rate_rad_s]).all(|value| value.is_finite());
        let motion = &self.motion;
        let told =
            || format!("{:?} in {} commands {wheels:?} after {:?}", heard.asked, heard.after, motion.wheels);
        Broken::unless(finite, Rule::Finite, told)?;
        Broken::unless(command.mode == heard.after, Rule::Told, told)?;
        Broken::unless(motion.within_limits(wheels), Rule::Limits, told)?;
        Broken::unless(motion.within_steps(wheels, seconds, !drives(heard.after)), Rule::Steps, told)?;
        if motion.is_zero(wheels) {
            let still = *speed_m_s == 0.0 && *turn_rate_rad_s == 0.0;
            return Broken::unless(still, Rule::Told, told);
        }
        if heard.after == Mode::ProtectiveStop {
            return Broken::unless(self.is_on_ramp(heard.at, wheels), Rule::Ramp, told);
        }
        Broken::unless(drives(heard.after) && motion.authority, Rule::Authority, told)
    }

    /// On or below the straight ramp from the speed at the trip to zero, and falling.
    fn is_on_ramp(&self, at: TimeNs, wheels: &[f64; 4]) -> bool {
        let Some((from, speed_m_s)) = self.motion.ramping else { return false };
        let left = 1.0 - at.since(from).seconds() / self.motion.ramp.seconds();
        let (now, before) = (wheels[0].abs(), self.motion.wheels[0].abs());
        now <= speed_m_s * left + ROUNDING && now <= before && wheels[0] * self.motion.wheels[0] >= 0.0
    }

    /// Since when the ramp under way goes down.
    pub(crate) fn ramping(&self) -> Option<TimeNs> {
        self.motion.ramping.map(|(from, _)| from)
    }

    /// In how many ticks each number of the last command can be zero, with its sign.
    pub(crate) fn ticks_to_zero(&self) -> [i64; 2] {
        let motion = &self.motion;
        [0, 1].map(|index| {
            let step = motion.bounds[index].change_1_s * PERIOD.seconds();
            let ticks = (motion.wheels[index].abs() / step - ROUNDING).ceil();
            (ticks * motion.wheels[index].signum()) as i64
        })
    }
}
