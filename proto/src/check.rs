//! What a payload may hold: finite numbers and bounds that need no context. Refusals name the field and its bound.

use crate::codec::DecodeError;
use crate::journal::MAX_PLAN_BYTES;
use crate::message::{
    Ack, Cap, Command, JournalGone, JournalPart, JournalRequest, LEAST_SHARE, PART_BYTES, PlanMissing,
    PlanPart, Pose, Status, Subscribe, WANT_COMMANDS, WANT_JOURNAL, WANT_STATUS,
};

type Checked = Result<(), DecodeError>;

fn finite(fields: &[(&'static str, f64)]) -> Checked {
    match fields.iter().find(|(_, value)| !value.is_finite()) {
        Some(&(field, _)) => Err(DecodeError::NotFinite { field }),
        None => Ok(()),
    }
}

fn demand(holds: bool, field: &'static str, bound: &'static str) -> Checked {
    if holds { Ok(()) } else { Err(DecodeError::Value { field, bound }) }
}

pub(crate) fn pose(pose: &Pose) -> Checked {
    finite(&[("x_m", pose.x_m), ("y_m", pose.y_m), ("heading_rad", pose.heading_rad)])?;
    finite(&[("position_sd_m", pose.position_sd_m), ("heading_sd_rad", pose.heading_sd_rad)])?;
    demand(pose.position_sd_m >= 0.0, "position_sd_m", "at least 0")?;
    demand(pose.heading_sd_rad >= 0.0, "heading_sd_rad", "at least 0")
}

pub(crate) fn plan_part(part: &PlanPart) -> Checked {
    let (total, size) = (u64::from(part.total_bytes), u64::from(part.part_bytes));
    demand((1..=MAX_PLAN_BYTES as u64).contains(&total), "total_bytes", "1 to 67108864")?;
    demand((1..=PART_BYTES as u64).contains(&size), "part_bytes", "1 to 1024")?;
    let begin = u64::from(part.part) * size;
    demand(begin < total, "part", "below total_bytes / part_bytes, rounded up")?;
    let held = part.bytes.as_slice().len() as u64;
    demand(held == (total - begin).min(size), "bytes", "part_bytes long, or what is left in the last part")
}

pub(crate) fn plan_missing(missing: &PlanMissing) -> Checked {
    demand(missing.missing >= 1, "missing", "at least 1")
}

pub(crate) fn cap(cap: &Cap) -> Checked {
    finite(&[("share", cap.share)])?;
    demand((LEAST_SHARE..=1.0).contains(&cap.share), "share", "0.05 to 1")
}

pub(crate) fn subscribe(subscribe: &Subscribe) -> Checked {
    let all = WANT_COMMANDS | WANT_JOURNAL | WANT_STATUS;
    demand(subscribe.want <= all, "want", "a sum of 1 (commands), 2 (journal), 4 (status)")?;
    demand((100..=60_000).contains(&subscribe.lease_ms), "lease_ms", "100 to 60000")
}

pub(crate) fn journal_request(request: &JournalRequest) -> Checked {
    demand(request.first <= request.last, "first", "at most last")
}

pub(crate) fn ack(ack: &Ack) -> Checked {
    demand(ack.accepted <= 1, "accepted", "0 or 1")
}

pub(crate) fn command(command: &Command) -> Checked {
    let [a, b, c, d] = command.wheels;
    finite(&[("speed_m_s", command.speed_m_s), ("turn_rate_rad_s", command.turn_rate_rad_s)])?;
    finite(&[("wheels", a), ("wheels", b), ("wheels", c), ("wheels", d)])
}

pub(crate) fn journal_part(part: &JournalPart) -> Checked {
    demand(part.entries >= 1, "entries", "at least 1")?;
    demand(part.part < part.parts, "part", "below parts")?;
    demand(part.parts == 1 || part.entries == 1, "entries", "1 where an entry travels in several parts")
}

pub(crate) fn journal_gone(gone: &JournalGone) -> Checked {
    demand(gone.first <= gone.last, "first", "at most last")
}

pub(crate) fn status(status: &Status) -> Checked {
    demand(status.has_pose <= 1, "has_pose", "0 or 1")?;
    finite(&[("x_m", status.x_m), ("y_m", status.y_m), ("heading_rad", status.heading_rad)])?;
    finite(&[
        ("along_error_m", status.along_error_m),
        ("cross_error_m", status.cross_error_m),
        ("heading_error_rad", status.heading_error_rad),
    ])?;
    finite(&[
        ("plan_rate", status.plan_rate),
        ("speed_cap", status.speed_cap),
        ("bandwidth_rad_s", status.bandwidth_rad_s),
    ])
}
