//! What a simulated run came to, for people and for programs.

use crate::open_loop::law_text;
use crate::sim::Outcome;
use crate::stats::Errors;
use serde_json::json;
use trackhold_core::settings::Settings;
use trackhold_proto::blob::Digest;
use trackhold_proto::words::{Cause, Mode};

/// From this share of limited ticks on the summary says what to do about it.
const MUCH: f64 = 0.2;
/// An error left at the end that an engineer wants to hear of, m.
const LEFT_M: f64 = 0.005;
/// Likewise, rad.
const LEFT_RAD: f64 = 0.02;

/// What a run came to.
pub(super) struct Summary {
    pub(super) outcome: Outcome,
    pub(super) errors: Errors,
    pub(super) digest: Digest,
    pub(super) settings: Settings,
}

impl Summary {
    /// As one JSON object.
    pub(super) fn json(&self) -> anyhow::Result<String> {
        let mut object = serde_json::to_value(self.errors)?;
        let head = json!({
            "ticks": self.outcome.ticks,
            "duration_s": self.outcome.duration.seconds(),
            "digest": self.digest.to_string(),
            "law": self.settings.law.name,
            "gains": self.settings.law.gains,
            "mode_at_end": self.outcome.mode.name(),
            "cause": self.outcome.cause.name(),
        });
        if let (Some(object), serde_json::Value::Object(head)) = (object.as_object_mut(), head) {
            object.extend(head);
        }
        Ok(format!("{object}\n"))
    }

    /// As a short table with advice.
    pub(super) fn text(&self) -> String {
        let Self { outcome, errors, .. } = self;
        let row = |name: &str, rms: f64, max: f64, last: Option<f64>, unit: &str| {
            let last = last.map_or_else(String::new, |last| format!("{last:12.4}"));
            format!("  {name:<13}{rms:12.4}{max:12.4}{last:12} {unit}\n")
        };
        let advice: String = self.advice().iter().map(|line| format!("- {line}\n")).collect();
        [
            format!(
                "{}: {} ticks, {:.3} s, {}\n",
                ending(outcome),
                outcome.ticks,
                outcome.duration.seconds(),
                law_text(&self.settings)
            ),
            format!("  {:<13}{:>12}{:>12}{:>12}\n", "error", "rms", "greatest", "at the end"),
            row("along track", errors.rms_along_m, errors.max_along_m, None, "m"),
            row("cross track", errors.rms_cross_m, errors.max_cross_m, None, "m"),
            row("position", rms_position(errors), f64::NAN, Some(errors.final_position_error_m), "m")
                .replace("NaN", "   "),
            row(
                "heading",
                errors.rms_heading_rad,
                errors.max_heading_rad,
                Some(errors.final_heading_error_rad),
                "rad",
            ),
            format!(
                "  limits acted in {:.1} % of the ticks (speed or steering {:.1} %, acceleration {:.1} %)\n",
                100.0 * errors.limited_share,
                100.0 * errors.speed_limited_share,
                100.0 * errors.step_limited_share
            ),
            advice,
            format!("digest {}\n", self.digest),
        ]
        .concat()
    }

    /// What an engineer may want to change.
    fn advice(&self) -> Vec<String> {
        let Self { errors, .. } = self;
        let mut advice: Vec<String> = self.advice_on_the_end().into_iter().collect();
        if errors.step_limited_share > MUCH {
            advice.push(
                "acceleration limits act much of the time: weaker feedback, a start nearer to the plan, or a plan \
                 without steps in speed and curvature"
                    .to_owned(),
            );
        }
        if errors.speed_limited_share > MUCH {
            advice.push(
                "speed or steering limits act much of the time: the plan leaves the law no authority. Slow it down \
                 or turn wider"
                    .to_owned(),
            );
        }
        advice
    }

    fn advice_on_the_end(&self) -> Option<String> {
        let Self { outcome, errors, settings, .. } = self;
        let (law, left_m, left_rad) =
            (&settings.law.name, errors.final_position_error_m, errors.final_heading_error_rad);
        let much_left = left_m > LEFT_M || left_rad.abs() > LEFT_RAD;
        match outcome.cause {
            Cause::NotSettled => Some(format!(
                "the final pose was not reached within node.settle_time_s = {} s: {left_m:.3} m and {left_rad:.3} rad \
                 are left. Stronger feedback, a slower or longer last stretch, or more settling time may help",
                settings.node.get("settle_time_s"),
            )),
            Cause::PlanEnded if much_left => Some(format!(
                "the law wants no more motion, and {left_m:.3} m and {left_rad:.3} rad are left: {law} has little or \
                 no feedback where the reference rests. A slower last stretch leaves less"
            )),
            Cause::OutsideLawDomain => Some(format!(
                "the heading error left the domain of {law}: begin nearer to the plan's heading (--start), or take a \
                 law with a wider domain"
            )),
            Cause::StalePose => Some(format!(
                "no fresh pose for node.pose_timeout_s = {} s: look at the robot file's dropouts and latency",
                settings.node.get("pose_timeout_s")
            )),
            Cause::PlanRanDry | Cause::RampEnded => {
                Some("an open plan ends in a controlled stop: it expects more segments".to_owned())
            }
            _ => None,
        }
    }
}

fn rms_position(errors: &Errors) -> f64 {
    trackhold_core::math::length(errors.rms_along_m, errors.rms_cross_m)
}

fn ending(outcome: &Outcome) -> String {
    match (outcome.mode, outcome.cause) {
        (Mode::Standby, Cause::PlanEnded) => "plan done, settled".to_owned(),
        (Mode::Standby, Cause::NotSettled) => "plan done, not settled".to_owned(),
        (Mode::Standby, cause) => format!("stopped ({cause})"),
        (Mode::Tracking | Mode::ControlledStop, _) => format!("ended under way, in mode {}", outcome.mode),
        (mode, cause) => format!("stopped by a guard: {mode} ({cause})"),
    }
}
