//! The report on a plan, for people and for programs.

use serde_json::{Value, json};
use std::fmt::Write as _;
use trackhold_core::plan::check::{Finding, Peak, Place, Report, SegmentReport, Severity, Where, limit_name};
use trackhold_core::vehicle::LimitName;

/// The text names no more segments than this; JSON has them all.
const MOST_ROWS: usize = 60;

/// The report as one JSON object. What is absent is null.
pub(super) fn json(report: &Report, file: &str) -> String {
    let plan = report.plan.as_ref();
    let [information, warnings, unfit] = report.counts;
    let object = json!({
        "plan": file,
        "id": plan.map(|plan| plan.id()),
        "revision": plan.map(|plan| plan.revision()),
        "verdict": report.verdict(),
        "duration_s": plan.map(|plan| plan.duration_s()),
        "length_m": plan.map(|plan| plan.length_m()),
        "authority_left": authority(report),
        "counts": { "information": information, "warning": warnings, "unfit": unfit },
        "findings": report.findings.iter().map(finding_json).collect::<Vec<_>>(),
        "segments": report.segments.iter().map(segment_json).collect::<Vec<_>>(),
    });
    format!("{object}\n")
}

fn finding_json(finding: &Finding) -> Value {
    let mut object = json!({
        "name": finding.fault.name(),
        "severity": finding.severity.name(),
        "segment": null, "kind": null, "t_s": null, "progress": null, "x_m": null, "y_m": null, "heading_rad": null,
        "key": null,
        "places": finding.places,
        "value": finding.value.map(|(value, _)| value),
        "limit": finding.value.map(|(_, limit)| limit),
        "unit": finding.unit,
        "what": finding.line(),
        "meaning": finding.meaning,
        "remedy": finding.remedy,
    });
    match &finding.place {
        Where::Plan => {}
        Where::Key(key) => {
            object["key"] = json!(key);
            object["segment"] = json!(segment_of(key));
        }
        Where::At(place) => merge(&mut object, place_json(place)),
    }
    object
}

/// The segment that a key of the plan file lies in: 2 in `segments[2] (arc).radius_m`.
fn segment_of(key: &str) -> Option<usize> {
    key.strip_prefix("segments[")?.split_once(']')?.0.parse().ok()
}

fn place_json(place: &Place) -> Value {
    json!({
        "segment": place.segment,
        "kind": place.kind,
        "t_s": place.t_s,
        "progress": place.progress,
        "x_m": place.pose.x_m,
        "y_m": place.pose.y_m,
        "heading_rad": place.pose.heading_rad,
    })
}

fn segment_json(segment: &SegmentReport) -> Value {
    json!({
        "index": segment.index,
        "kind": segment.kind,
        "begin_s": segment.begin_s,
        "duration_s": segment.duration_s,
        "length_m": segment.length_m,
        "authority_left": segment.authority_left,
        "peak_curvature_1_m": segment.peak_curvature_1_m,
        "peak_curvature_rate_1_m2": segment.peak_curvature_rate_1_m2,
        "peak_steering_rate_rad_s": steering_rate(segment),
        "shares": segment.peaks.iter().map(peak_json).collect::<Vec<_>>(),
    })
}

fn peak_json(peak: &Peak) -> Value {
    let mut object = json!({
        "limit": limit_name(peak.load.limit),
        "share": peak.load.share(),
        "value": peak.load.value,
        "bound": peak.load.bound,
        "unit": peak.load.unit,
    });
    merge(&mut object, place_json(&peak.place));
    object
}

fn merge(object: &mut Value, more: Value) {
    if let (Some(object), Value::Object(more)) = (object.as_object_mut(), more) {
        object.extend(more);
    }
}

fn steering_rate(segment: &SegmentReport) -> Option<f64> {
    let peak = segment.peaks.iter().find(|peak| peak.load.limit == LimitName::SteeringRate);
    peak.map(|peak| peak.load.value)
}

/// The least authority left in any segment.
fn authority(report: &Report) -> Option<f64> {
    report.segments.iter().map(|segment| segment.authority_left).reduce(f64::min)
}

/// The report as text: verdict, findings, a line a segment.
pub(super) fn text(report: &Report, file: &str) -> String {
    let mut text = String::new();
    let said = write_text(&mut text, report, file);
    debug_assert!(said.is_ok(), "writing to a string cannot fail");
    text
}

fn write_text(text: &mut String, report: &Report, file: &str) -> std::fmt::Result {
    let [information, warnings, unfit] = report.counts;
    write!(text, "{}: {file}", report.verdict())?;
    if let Some(plan) = &report.plan {
        write!(
            text,
            ", plan {:?} revision {}, {:.3} s, {:.3} m",
            plan.id(),
            plan.revision(),
            plan.duration_s(),
            plan.length_m()
        )?;
    }
    let many = if warnings == 1 { "" } else { "s" };
    writeln!(text, "\n{unfit} unfit, {warnings} warning{many}, {information} for information")?;
    for (number, finding) in report.findings.iter().enumerate() {
        write_finding(text, number + 1, finding)?;
    }
    for (severity, count) in
        [Severity::Information, Severity::Warning, Severity::Unfit].iter().zip(report.counts)
    {
        let told = report.findings.iter().filter(|finding| finding.severity == *severity).count() as u64;
        if count > told {
            writeln!(text, "and {} more: {severity}", count - told)?;
        }
    }
    write_segments(text, &report.segments)
}

fn write_finding(text: &mut String, number: usize, finding: &Finding) -> std::fmt::Result {
    writeln!(text, "\n{number:3}. {} ({}): {}", finding.severity, finding.fault.name(), finding.line())?;
    if let Some(place) = finding.at() {
        let unit = if place.kind == "pivot" { "rad" } else { "m" };
        write!(
            text,
            "     {:.3} {unit} into the segment, at x {:.3} m, y {:.3} m",
            place.progress, place.pose.x_m, place.pose.y_m
        )?;
        if finding.places > 1 {
            write!(text, "; the worst of {} places", finding.places)?;
        }
        writeln!(text)?;
    }
    // A place in the file has told its meaning in its line.
    if !finding.meaning.is_empty() && !matches!(finding.place, Where::Key(_)) {
        writeln!(text, "     {}", finding.meaning)?;
    }
    Ok(())
}

fn write_segments(text: &mut String, segments: &[SegmentReport]) -> std::fmt::Result {
    if segments.is_empty() {
        return Ok(());
    }
    writeln!(
        text,
        "\n{:>7} {:<9}{:>9} {:>9} {:>9} {:>10} {:>10}  greatest shares",
        "segment", "kind", "begin s", "lasts s", "length m", "curv. 1/m", "authority"
    )?;
    for segment in segments.iter().take(MOST_ROWS) {
        write!(
            text,
            "{:7} {:<9}{:9.3} {:9.3} {:9.3} {:10.4} {:9.1}% ",
            segment.index,
            segment.kind,
            segment.begin_s,
            segment.duration_s,
            segment.length_m,
            segment.peak_curvature_1_m,
            100.0 * segment.authority_left
        )?;
        let mut peaks: Vec<&Peak> = segment.peaks.iter().filter(|peak| peak.load.share() > 0.0005).collect();
        peaks.sort_by(|one, other| other.load.share().total_cmp(&one.load.share()));
        let shares: Vec<String> = peaks
            .iter()
            .map(|peak| format!("{} {:.1}%", limit_name(peak.load.limit), 100.0 * peak.load.share()))
            .collect();
        writeln!(text, " {}", if shares.is_empty() { "rests".to_owned() } else { shares.join(", ") })?;
    }
    if segments.len() > MOST_ROWS {
        writeln!(text, "and {} segments more; --json has all of them", segments.len() - MOST_ROWS)?;
    }
    Ok(())
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_key_tells_its_segment() {
        assert_eq!(segment_of("segments[12] (arc).radius_m"), Some(12));
        assert_eq!(segment_of("start.x_m"), None);
    }
}
