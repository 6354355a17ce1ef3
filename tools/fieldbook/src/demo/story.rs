//! What happened in the demo, from the log and from what only a simulation knows: where the machine truly was.

use super::scenario::{Scenario, Stretch};
use super::stage::Ended;
use crate::log::LogReader;
use crate::stats::Spread;
use anyhow::{Context, Result};
use simrobot::TruePoint;
use std::path::Path;
use trackhold_core::geometry::{Direction, Pose, TrackingError};
use trackhold_core::math;
use trackhold_proto::journal::{Body, Note, TickRecord, flag};
use trackhold_proto::words::{Cause, Mode, Refusal};

/// What the errors were on one kind of stretch.
#[derive(Clone, Copy, Debug, Default)]
struct Errors {
    seen_cross_m: Spread,
    true_cross_m: Spread,
    true_along_m: Spread,
    true_heading_rad: Spread,
}

/// Numbers gathered from the log.
#[derive(Debug, Default)]
pub(super) struct Story {
    stretches: [Errors; Stretch::ALL.len()],
    all: Errors,
    estimate_m: Spread,
    ticks: u64,
    tracked: u64,
    step_limited: u64,
    speed_limited: u64,
    pose_age_ms: Spread,
    poses_refused: u64,
    poses_not_newer: u64,
    worst_lateness_ns: u64,
}

impl Story {
    /// Reads the log.
    ///
    /// # Errors
    /// If the log cannot be read.
    pub(super) fn read(log: &Path, scenario: &Scenario, truth: &[TruePoint]) -> Result<Self> {
        let mut story = Self::default();
        for entry in LogReader::open(log).context("the log cannot be read again")? {
            match entry.context("the log cannot be read again")?.body {
                Body::Tick(record) => story.tick(&record, scenario, truth),
                Body::PoseRefused(refused) => {
                    story.poses_refused += 1;
                    story.poses_not_newer +=
                        u64::from(matches!(refused.refusal, Refusal::StampNotRising { .. }));
                }
                Body::Note(Note::Lateness { worst_ns, .. }) => {
                    story.worst_lateness_ns = story.worst_lateness_ns.max(worst_ns);
                }
                _ => {}
            }
        }
        Ok(story)
    }

    fn tick(&mut self, record: &TickRecord, scenario: &Scenario, truth: &[TruePoint]) {
        self.ticks += 1;
        if record.mode != Mode::Tracking || !record.has(flag::HAS_REFERENCE | flag::HAS_POSE) {
            return;
        }
        self.tracked += 1;
        self.step_limited += u64::from(record.has(flag::STEP_LIMITED));
        self.speed_limited += u64::from(record.has(flag::SPEED_LIMITED));
        self.pose_age_ms.add(record.pose_age_ns as f64 / 1e6);
        let Some(pose) = true_pose(truth, record.at_ns) else { return };
        let reference = Pose::new(record.ref_x_m, record.ref_y_m, record.ref_heading_rad);
        let error = TrackingError::between(pose, reference, Direction::of(reference.heading_rad));
        self.estimate_m.add(pose.distance_to(Pose::new(record.x_m, record.y_m, record.heading_rad)));
        let stretch = scenario.stretch_at(record.plan_time_ns as f64 / 1e9);
        for errors in [&mut self.stretches[stretch as usize], &mut self.all] {
            errors.seen_cross_m.add(record.cross_error_m);
            errors.true_cross_m.add(error.cross_m);
            errors.true_along_m.add(error.along_m);
            errors.true_heading_rad.add(error.heading_rad);
        }
    }

    /// The story in an engineer's words.
    pub(super) fn told(&self, scenario: &Scenario, ended: &Ended) -> String {
        let sections = [
            self.tracking_told(),
            self.machine_told(scenario, ended),
            self.timing_told(scenario, ended),
            links_told(ended),
        ];
        sections.concat()
    }

    fn tracking_told(&self) -> String {
        let mut text = String::from(
            "tracking errors by stretch, rms and (greatest); \"seen\" is by the estimate, \"true\" only a simulation knows\n\
             \x20             cross, seen m     cross, true m     along, true m     heading, true rad\n",
        );
        let rows = Stretch::ALL.iter().map(|stretch| (stretch.name(), &self.stretches[*stretch as usize]));
        for (name, errors) in
            rows.chain([("all", &self.all)]).filter(|(_, errors)| errors.true_cross_m.count() > 0)
        {
            text.push_str(&format!("  {name:9}"));
            for spread in
                [&errors.seen_cross_m, &errors.true_cross_m, &errors.true_along_m, &errors.true_heading_rad]
            {
                text.push_str(&format!("   {:6.4} ({:6.4})", spread.rms(), spread.greatest()));
            }
            text.push('\n');
        }
        text
    }

    fn machine_told(&self, scenario: &Scenario, ended: &Ended) -> String {
        let goal = scenario.plan.at(f64::INFINITY, &mut 0).pose;
        let end = ended.robot.end.pose;
        let turned = math::wrap(end.heading_rad - goal.heading_rad);
        format!(
            "final pose     truly {:.3} m and {turned:+.3} rad off the plan's end\n\
             limits         acceleration limits cut the command in {:.1} % of the ticks, speed limits in {:.1} %\n\
             machine        {:.1} m driven, at most {:.2} m/s; its wheels are smaller than the site file says, it slips and \
             drifts: the estimate closes the loop\n",
            end.distance_to(goal),
            percent(self.step_limited, self.tracked),
            percent(self.speed_limited, self.tracked),
            ended.robot.end.travelled_m,
            ended.robot.top_speed_m_s,
        )
    }

    fn timing_told(&self, scenario: &Scenario, ended: &Ended) -> String {
        let params = &scenario.site.settings.node;
        let counters = &ended.status.counters;
        // Only what was seen: the run went on to its end, and a pose as old as the gap was used in it.
        let went_on = ended.status.cause == Cause::PlanEnded;
        let outage_ms = 1e3 * scenario.robot.sensor.outage_length_s;
        let in_gap = if went_on && self.pose_age_ms.greatest() >= outage_ms {
            format!(": the estimator's gap of {outage_ms:.0} ms was ridden through")
        } else {
            String::new()
        };
        format!(
            "poses          {} taken, {} refused, {} of them doubled or overtaken on the link; the oldest one used was {:.0} ms old, the \
             timeout is {:.0} ms{in_gap}\n\
             estimate       {:.1} mm rms, {:.1} mm at most, between the pose used and the true one: noise, and the way driven \
             while the pose was under way\n\
             loop           {} ticks at {} Hz; the latest came {:.2} ms late, {} a whole period or more\n",
            counters.poses,
            self.poses_refused,
            self.poses_not_newer,
            self.pose_age_ms.greatest(),
            1e3 * params.get("pose_timeout_s"),
            1e3 * self.estimate_m.rms(),
            1e3 * self.estimate_m.greatest(),
            self.ticks,
            params.get("rate_hz"),
            self.worst_lateness_ns as f64 / 1e6,
            counters.ticks_late,
        )
    }
}

fn links_told(ended: &Ended) -> String {
    let (poses, commands, radio) = (&ended.robot.poses_link, &ended.robot.commands_link, &ended.radio);
    format!(
        "links          on board {} of {} pose datagrams and {} of {} to the drive were lost; the radio to the recorder lost \
         {} of {}\n\
         log            {} entries, {:.1} MB; {} numbers were asked for again, {} are missing\n",
        poses.lost,
        poses.sent,
        commands.lost,
        commands.sent,
        radio.lost,
        radio.sent,
        ended.recording.entries,
        ended.recording.bytes as f64 / 1e6,
        ended.recording.tally.asked_again,
        ended.recording.lost,
    )
}

fn percent(part: u64, whole: u64) -> f64 {
    if whole == 0 { 0.0 } else { 100.0 * part as f64 / whole as f64 }
}

/// The true pose at a moment, between two measurements on a straight line: some tenths of a millimetre from the arc.
fn true_pose(truth: &[TruePoint], at_ns: u64) -> Option<Pose> {
    let after = truth.partition_point(|point| point.at.0 <= at_ns);
    let (before, after) = (truth.get(after.checked_sub(1)?)?, truth.get(after)?);
    let share = (at_ns - before.at.0) as f64 / (after.at.0 - before.at.0).max(1) as f64;
    let (from, to) = (before.pose, after.pose);
    Some(Pose {
        x_m: from.x_m + share * (to.x_m - from.x_m),
        y_m: from.y_m + share * (to.y_m - from.y_m),
        heading_rad: math::wrap(from.heading_rad + share * math::wrap(to.heading_rad - from.heading_rad)),
    })
}

#[cfg(test)]
mod tests {
    use super::*;
    use trackhold_core::geometry::BodyVelocity;
    use trackhold_core::time::TimeNs;

    fn point(at: u64, x_m: f64, heading_rad: f64) -> TruePoint {
        TruePoint {
            at: TimeNs(at),
            pose: Pose::new(x_m, 0.0, heading_rad),
            velocity: BodyVelocity::ZERO,
            wheels: [0.0; 4],
            travelled_m: 0.0,
            commanded: true,
        }
    }

    #[test]
    fn the_true_pose_lies_between_two_measurements_across_the_seam_of_headings_too() {
        let truth = [point(100, 1.0, 3.1), point(200, 3.0, -3.1)];
        assert_eq!(true_pose(&truth, 50), None);
        assert_eq!(true_pose(&truth, 200), None);
        let pose = true_pose(&truth, 150).unwrap();
        assert_eq!(pose.x_m, 2.0);
        assert!((pose.heading_rad.abs() - core::f64::consts::PI).abs() < 1e-12, "{}", pose.heading_rad);
    }
}
