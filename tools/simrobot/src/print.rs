//! What the program prints: a line a second, and a summary; for people or as JSON.

use serde_json::json;
use simrobot::drive::Taken;
use simrobot::{Control, Machine, Summary, TruePoint};
use std::io::{self, Write};
use std::sync::Arc;
use trackhold_core::time::TimeNs;

/// Prints to stdout. A reader that goes away ends the run.
#[derive(Clone, Debug)]
pub(crate) struct Printer {
    json: bool,
    control: Arc<Control>,
    begin: Option<TimeNs>,
    printed: u64,
}

impl Printer {
    pub(crate) fn new(json: bool, control: Arc<Control>) -> Self {
        Self { json, control, begin: None, printed: 0 }
    }

    /// Prints the first point of each second.
    pub(crate) fn point(&mut self, point: &TruePoint, machine: &Machine) {
        let begin = *self.begin.get_or_insert(point.at);
        let seconds = point.at.since(begin).seconds();
        if seconds < self.printed as f64 {
            return;
        }
        self.printed = seconds as u64 + 1;
        let (counts, drive) = (machine.counts(), machine.drive_counts());
        self.line(&if self.json {
            json!({
                "t_s": seconds,
                "at_ns": point.at.0,
                "x_m": point.pose.x_m,
                "y_m": point.pose.y_m,
                "heading_rad": point.pose.heading_rad,
                "speed_m_s": point.velocity.speed_m_s,
                "turn_rate_rad_s": point.velocity.turn_rate_rad_s,
                "commanded": point.commanded,
                "poses_sent": counts.poses_sent,
                "commands_taken": drive.of(Taken::Taken),
                "commands_refused": drive.refused(),
            })
            .to_string()
        } else {
            format!(
                "{seconds:7.1} s  truly at x {:.3} m, y {:.3} m, heading {:.4} rad; {:.3} m/s, {:.4} rad/s; {}; {} poses sent, {} commands taken",
                point.pose.x_m,
                point.pose.y_m,
                point.pose.heading_rad,
                point.velocity.speed_m_s,
                point.velocity.turn_rate_rad_s,
                if point.commanded { "commanded" } else { "no command in force, zero by itself" },
                counts.poses_sent,
                drive.of(Taken::Taken),
            )
        });
    }

    pub(crate) fn summary(&self, summary: &Summary) {
        self.line(&if self.json { summary_json(summary) } else { summary_text(summary) });
    }

    fn line(&self, line: &str) {
        if let Err(error) = writeln!(io::stdout(), "{line}") {
            if error.kind() != io::ErrorKind::BrokenPipe {
                eprintln!("simrobot: stdout: {error}");
            }
            self.control.stop();
        }
    }
}

fn summary_json(summary: &Summary) -> String {
    let end = &summary.end;
    let (poses, commands) = (&summary.poses_link, &summary.commands_link);
    json!({ "summary": {
        "duration_s": summary.seconds,
        "x_m": end.pose.x_m,
        "y_m": end.pose.y_m,
        "heading_rad": end.pose.heading_rad,
        "travelled_m": end.travelled_m,
        "top_speed_m_s": summary.top_speed_m_s,
        "poses_sent": summary.counts.poses_sent,
        "poses_missing": summary.counts.poses_missing,
        "poses_lost": poses.lost,
        "time_requests": summary.counts.time_requests,
        "subscriptions": summary.counts.subscriptions,
        "commands_arrived": commands.sent,
        "commands_lost": commands.lost,
        "commands_taken": summary.drive.of(Taken::Taken),
        "commands_refused": summary.drive.refused(),
        "ran_out": summary.drive.ran_out,
        "malformed": summary.counts.malformed,
        "unsent": summary.unsent,
    }})
    .to_string()
}

fn summary_text(summary: &Summary) -> String {
    let end = &summary.end;
    let (poses, commands) = (&summary.poses_link, &summary.commands_link);
    let refused: Vec<String> = Taken::ALL[1..]
        .iter()
        .filter(|outcome| summary.drive.of(**outcome) > 0)
        .map(|outcome| format!(", {} {}", summary.drive.of(*outcome), outcome.words()))
        .collect();
    let mut text = format!(
        "After {:.1} s truly at x {:.4} m, y {:.4} m, heading {:.4} rad; {:.2} m travelled, {:.3} m/s at most.\n\
         Poses: {} sent, {} missing by dropouts, {} lost on the link; {} time requests answered.\n\
         Datagrams to the drive: {} arrived, {} lost on the link; commands: {} taken{}.",
        summary.seconds,
        end.pose.x_m,
        end.pose.y_m,
        end.pose.heading_rad,
        end.travelled_m,
        summary.top_speed_m_s,
        summary.counts.poses_sent,
        summary.counts.poses_missing,
        poses.lost,
        summary.counts.time_requests,
        commands.sent,
        commands.lost,
        summary.drive.of(Taken::Taken),
        refused.concat(),
    );
    if summary.drive.ran_out > 0 {
        text += &format!(
            "\nThe drive went to zero by itself {} times, because nothing newer came within a command's validity.",
            summary.drive.ran_out
        );
    }
    if summary.counts.malformed + summary.unsent > 0 {
        text += &format!(
            "\n{} datagrams did not decode; {} could not be sent, or found nobody at the daemon's address.",
            summary.counts.malformed, summary.unsent
        );
    }
    text
}
