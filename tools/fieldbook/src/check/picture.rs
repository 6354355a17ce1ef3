//! The picture of a checked plan: head line, path to scale with the findings beside it, shares of the limits below.
//! Everything is told by shape, dash and number as well, so that it reads in black and white.

use super::axes::{label, step, ticks};
use super::shares;
use super::trace::{Instant, trace};
use std::fmt::Write as _;
use trackhold_core::plan::Plan;
use trackhold_core::plan::check::{Finding, Report, Severity};
use trackhold_core::vehicle::Vehicle;

/// Width of the picture, px.
pub(super) const WIDTH: f64 = 1080.0;
/// Left edge of both panels, px.
pub(super) const LEFT: f64 = 64.0;
/// Upper edge of the path's panel, px.
const TOP: f64 = 84.0;
/// Greatest size of the path's panel, px.
const PANEL: (f64, f64) = (640.0, 460.0);
/// Least height of the path's panel: the findings need room beside it, px.
const LEAST_HEIGHT: f64 = 220.0;
/// Left edge of the list of findings, px.
const LIST: f64 = LEFT + PANEL.0 + 32.0;
/// Letters in a line of the list.
const LETTERS: usize = 54;
/// Distance of the list's lines, px.
const LINE: f64 = 14.0;
/// Distance of direction marks along the path, px.
const MARKS: f64 = 64.0;

/// The finding's colour, dark enough to read without.
pub(super) const fn colour(severity: Severity) -> &'static str {
    match severity {
        Severity::Unfit => "#8c1d18",
        Severity::Warning => "#7a5200",
        Severity::Information => "#33506b",
    }
}

/// Text that XML takes as it is.
pub(super) fn escaped(text: &str) -> String {
    let mut safe = String::with_capacity(text.len());
    for letter in text.chars() {
        match letter {
            '<' => safe.push_str("&lt;"),
            '>' => safe.push_str("&gt;"),
            '&' => safe.push_str("&amp;"),
            '"' => safe.push_str("&quot;"),
            control if control.is_control() => safe.push(' '),
            other => safe.push(other),
        }
    }
    safe
}

/// Draws the report on a plan.
pub(super) fn draw(report: &Report, plan: &Plan, vehicle: &dyn Vehicle) -> String {
    let instants = trace(plan, vehicle);
    let frame = Frame::around(&instants);
    let mut body = String::new();
    head(&mut body, report, plan);
    path_panel(&mut body, &frame, &instants, report);
    let listed = list(&mut body, report);
    let below = (TOP + frame.height + 40.0).max(listed + 16.0);
    let height = shares::draw(&mut body, report, plan, &instants, below);
    format!(
        "<svg xmlns=\"http://www.w3.org/2000/svg\" width=\"{WIDTH}\" height=\"{height:.0}\" viewBox=\"0 0 {WIDTH} {height:.0}\" \
         font-family=\"'DejaVu Sans', Verdana, sans-serif\" font-size=\"11\" fill=\"#1b1b1b\">\n\
         <rect width=\"100%\" height=\"100%\" fill=\"#fff\"/>\n{body}</svg>\n"
    )
}

fn head(body: &mut String, report: &Report, plan: &Plan) {
    let least = report.segments.iter().map(|segment| segment.authority_left).fold(1.0, f64::min);
    let [information, warnings, unfit] = report.counts;
    let many = if warnings == 1 { "" } else { "s" };
    put(
        body,
        format_args!(
            "<text x=\"{LEFT}\" y=\"34\" font-size=\"19\" font-weight=\"bold\">{} — {}</text>\n\
         <text x=\"{LEFT}\" y=\"56\" font-size=\"12\" fill=\"#444\">revision {}, {:.2} s, {:.2} m, authority left {:.1} %; {unfit} unfit (diamond), {warnings} warning{many} (box), {information} for information (circle)</text>\n",
            escaped(plan.id()),
            report.verdict(),
            plan.revision(),
            plan.duration_s(),
            plan.length_m(),
            100.0 * least,
        ),
    );
}

/// Writing to a string cannot fail.
pub(super) fn put(body: &mut String, what: std::fmt::Arguments<'_>) {
    let done = body.write_fmt(what);
    debug_assert!(done.is_ok(), "writing to a string cannot fail");
}

/// From the site frame to the panel, one scale for both axes.
struct Frame {
    low: (f64, f64),
    high: (f64, f64),
    /// px/m.
    scale: f64,
    height: f64,
}

impl Frame {
    fn around(instants: &[Instant]) -> Self {
        let mut low = (f64::INFINITY, f64::INFINITY);
        let mut high = (f64::NEG_INFINITY, f64::NEG_INFINITY);
        for Instant { pose, .. } in instants {
            low = (low.0.min(pose.x_m), low.1.min(pose.y_m));
            high = (high.0.max(pose.x_m), high.1.max(pose.y_m));
        }
        let span = (high.0 - low.0).max(high.1 - low.1).max(1.0);
        let room = 0.06 * span;
        (low, high) = ((low.0 - room, low.1 - room), (high.0 + room, high.1 + room));
        let scale = (PANEL.0 / (high.0 - low.0)).min(PANEL.1 / (high.1 - low.1));
        let height = ((high.1 - low.1) * scale).max(LEAST_HEIGHT);
        // What is left of the panel lies evenly on both sides.
        let (wide, tall) = (PANEL.0 / scale, height / scale);
        let middle = (0.5 * (low.0 + high.0), 0.5 * (low.1 + high.1));
        Self {
            low: (middle.0 - 0.5 * wide, middle.1 - 0.5 * tall),
            high: (middle.0 + 0.5 * wide, middle.1 + 0.5 * tall),
            scale,
            height,
        }
    }

    fn at(&self, x_m: f64, y_m: f64) -> (f64, f64) {
        (LEFT + (x_m - self.low.0) * self.scale, TOP + (self.high.1 - y_m) * self.scale)
    }
}

fn path_panel(body: &mut String, frame: &Frame, instants: &[Instant], report: &Report) {
    grid(body, frame);
    ways(body, frame, instants);
    pivots(body, frame, report);
    ends(body, frame, instants);
    marks(body, frame, report);
}

fn grid(body: &mut String, frame: &Frame) {
    let (right, bottom) = (LEFT + PANEL.0, TOP + frame.height);
    let apart = step((frame.high.0 - frame.low.0).max(frame.high.1 - frame.low.1), 9.0);
    for x in ticks(frame.low.0, frame.high.0, apart) {
        let (px, _) = frame.at(x, 0.0);
        put(
            body,
            format_args!(
                "<line x1=\"{px:.1}\" y1=\"{TOP}\" x2=\"{px:.1}\" y2=\"{bottom:.1}\" stroke=\"#d9d9d9\" stroke-dasharray=\"1 3\"/>\
             <text x=\"{px:.1}\" y=\"{:.1}\" text-anchor=\"middle\">{}</text>\n",
                bottom + 14.0,
                label(x, apart)
            ),
        );
    }
    for y in ticks(frame.low.1, frame.high.1, apart) {
        let (_, py) = frame.at(0.0, y);
        put(
            body,
            format_args!(
                "<line x1=\"{LEFT}\" y1=\"{py:.1}\" x2=\"{right}\" y2=\"{py:.1}\" stroke=\"#d9d9d9\" stroke-dasharray=\"1 3\"/>\
             <text x=\"{:.1}\" y=\"{:.1}\" text-anchor=\"end\">{}</text>\n",
                LEFT - 6.0,
                py + 4.0,
                label(y, apart)
            ),
        );
    }
    put(
        body,
        format_args!(
            "<rect x=\"{LEFT}\" y=\"{TOP}\" width=\"{}\" height=\"{:.1}\" fill=\"none\" stroke=\"#1b1b1b\"/>\n\
         <text x=\"{:.1}\" y=\"{:.1}\" text-anchor=\"end\">x, m</text>\
         <text x=\"{:.1}\" y=\"{:.1}\">y, m; solid: forward, dashed on a band: reverse, ring: pivot, circle: start, square: end</text>\n",
            PANEL.0,
            frame.height,
            right,
            bottom + 28.0,
            LEFT,
            TOP - 6.0
        ),
    );
}

/// The path, a line for each stretch of one direction, and marks that point the way of travel.
fn ways(body: &mut String, frame: &Frame, instants: &[Instant]) {
    let (mut line, mut reverse) = (String::new(), false);
    let (mut last, mut since) = (None::<(f64, f64)>, 0.5 * MARKS);
    let mut arrows = String::new();
    for instant in instants {
        let (x, y) = frame.at(instant.pose.x_m, instant.pose.y_m);
        if instant.speed_m_s != 0.0 && (instant.speed_m_s < 0.0) != reverse {
            close_line(body, &mut line, reverse);
            reverse = instant.speed_m_s < 0.0;
            if let Some((x, y)) = last {
                put(&mut line, format_args!("M{x:.1} {y:.1}"));
            }
        }
        let moved = last.map_or(f64::INFINITY, |(px, py)| (x - px).hypot(y - py));
        if moved < 0.4 {
            continue;
        }
        let pen = if line.is_empty() { 'M' } else { 'L' };
        put(&mut line, format_args!("{pen}{x:.1} {y:.1}"));
        if let Some((px, py)) = last {
            since += moved;
            if since > MARKS {
                since = 0.0;
                arrow(&mut arrows, (x, y), (y - py).atan2(x - px).to_degrees());
            }
        }
        last = Some((x, y));
    }
    close_line(body, &mut line, reverse);
    body.push_str(&arrows);
}

fn close_line(body: &mut String, line: &mut String, reverse: bool) {
    if !line.is_empty() {
        let dash = if reverse { " stroke-dasharray=\"7 4\"" } else { "" };
        if reverse {
            // A pale band, so that a way back along the way there shows.
            put(
                body,
                format_args!(
                    "<path d=\"{line}\" fill=\"none\" stroke=\"#9fb3c8\" stroke-opacity=\"0.45\" stroke-width=\"8\"/>\n"
                ),
            );
        }
        put(
            body,
            format_args!(
                "<path d=\"{line}\" fill=\"none\" stroke=\"#24476b\" stroke-width=\"2.4\"{dash}/>\n"
            ),
        );
        line.clear();
    }
}

fn arrow(body: &mut String, (x, y): (f64, f64), degrees: f64) {
    put(
        body,
        format_args!(
            "<path d=\"M-4 -5L5 0L-4 5\" fill=\"none\" stroke=\"#24476b\" stroke-width=\"1.8\" transform=\"translate({x:.1} {y:.1}) rotate({degrees:.1})\"/>\n"
        ),
    );
}

fn pivots(body: &mut String, frame: &Frame, report: &Report) {
    for segment in report.segments.iter().filter(|segment| segment.kind == "pivot") {
        let Some(peak) = segment.peaks.first() else { continue };
        let (x, y) = frame.at(peak.place.pose.x_m, peak.place.pose.y_m);
        put(
            body,
            format_args!(
                "<circle cx=\"{x:.1}\" cy=\"{y:.1}\" r=\"9\" fill=\"none\" stroke=\"#24476b\" stroke-width=\"1.6\"/>\n"
            ),
        );
    }
}

/// Start and end, each with the heading.
fn ends(body: &mut String, frame: &Frame, instants: &[Instant]) {
    let (Some(first), Some(last)) = (instants.first(), instants.last()) else { return };
    for (instant, start) in [(first, true), (last, false)] {
        let (x, y) = frame.at(instant.pose.x_m, instant.pose.y_m);
        let (sin, cos) = instant.pose.heading_rad.sin_cos();
        put(
            body,
            format_args!(
                "<line x1=\"{x:.1}\" y1=\"{y:.1}\" x2=\"{:.1}\" y2=\"{:.1}\" stroke=\"#1b1b1b\" stroke-width=\"1.5\"/>",
                x + 17.0 * cos,
                y - 17.0 * sin
            ),
        );
        if start {
            put(
                body,
                format_args!(
                    "<circle cx=\"{x:.1}\" cy=\"{y:.1}\" r=\"5.5\" fill=\"#fff\" stroke=\"#1b1b1b\" stroke-width=\"2\"/>\n"
                ),
            );
        } else {
            put(
                body,
                format_args!(
                    "<rect x=\"{:.1}\" y=\"{:.1}\" width=\"9\" height=\"9\" fill=\"#1b1b1b\"/>\n",
                    x - 4.5,
                    y - 4.5
                ),
            );
        }
    }
}

/// The findings' numbers at their places; those at one place stand side by side.
fn marks(body: &mut String, frame: &Frame, report: &Report) {
    let mut taken: Vec<(f64, f64)> = Vec::new();
    for (number, finding) in report.findings.iter().enumerate() {
        let Some(place) = finding.at() else { continue };
        let (x, y) = frame.at(place.pose.x_m, place.pose.y_m);
        let (mut mx, mut my) = (x + 13.0, y - 13.0);
        while taken.iter().any(|(tx, ty)| (tx - mx).abs() < 17.0 && (ty - my).abs() < 14.0) {
            mx += 18.0;
            if mx > LEFT + PANEL.0 - 8.0 {
                (mx, my) = (x + 13.0, my - 15.0);
            }
        }
        taken.push((mx, my));
        put(
            body,
            format_args!(
                "<line x1=\"{x:.1}\" y1=\"{y:.1}\" x2=\"{mx:.1}\" y2=\"{my:.1}\" stroke=\"#777\" stroke-width=\"0.7\"/><circle cx=\"{x:.1}\" cy=\"{y:.1}\" r=\"1.8\"/>"
            ),
        );
        mark(body, (mx, my), number + 1, finding.severity);
    }
}

/// A number in a diamond (unfit), a box (warning) or a circle (information).
pub(super) fn mark(body: &mut String, (x, y): (f64, f64), number: usize, severity: Severity) {
    let dark = colour(severity);
    match severity {
        Severity::Unfit => put(
            body,
            format_args!(
                "<path d=\"M{:.1} {y:.1}L{x:.1} {:.1}L{:.1} {y:.1}L{x:.1} {:.1}Z\" fill=\"{dark}\"/>",
                x - 11.0,
                y - 10.0,
                x + 11.0,
                y + 10.0
            ),
        ),
        Severity::Warning => put(
            body,
            format_args!(
                "<rect x=\"{:.1}\" y=\"{:.1}\" width=\"17\" height=\"13\" fill=\"#fff\" stroke=\"{dark}\" stroke-width=\"1.6\"/>",
                x - 8.5,
                y - 6.5
            ),
        ),
        Severity::Information => put(
            body,
            format_args!(
                "<circle cx=\"{x:.1}\" cy=\"{y:.1}\" r=\"7.5\" fill=\"#fff\" stroke=\"{dark}\" stroke-dasharray=\"2 1.5\"/>"
            ),
        ),
    }
    let ink = if severity == Severity::Unfit { "#fff" } else { dark };
    put(
        body,
        format_args!(
            "<text x=\"{x:.1}\" y=\"{:.1}\" text-anchor=\"middle\" font-size=\"9\" font-weight=\"bold\" fill=\"{ink}\">{number}</text>\n",
            y + 3.3
        ),
    );
}

/// The findings in words beside the path; returns where the list ends.
fn list(body: &mut String, report: &Report) -> f64 {
    const MOST: usize = 14;
    let mut y = TOP + 2.0;
    if report.findings.is_empty() {
        put(body, format_args!("<text x=\"{LIST}\" y=\"{:.1}\">no findings</text>\n", y + 8.0));
    }
    for (number, finding) in report.findings.iter().enumerate().take(MOST) {
        mark(body, (LIST + 4.0, y + 4.0), number + 1, finding.severity);
        for (index, line) in wrapped(&sentence(finding), LETTERS).iter().enumerate() {
            put(
                body,
                format_args!(
                    "<text x=\"{:.1}\" y=\"{:.1}\" font-size=\"9.6\">{}</text>\n",
                    LIST + 20.0,
                    y + 7.5 + LINE * index as f64,
                    escaped(line)
                ),
            );
        }
        y += LINE * wrapped(&sentence(finding), LETTERS).len() as f64 + 7.0;
    }
    if report.findings.len() > MOST {
        put(
            body,
            format_args!(
                "<text x=\"{:.1}\" y=\"{:.1}\" font-size=\"9.6\">and {} more: see the report</text>\n",
                LIST + 20.0,
                y + 7.5,
                report.findings.len() - MOST
            ),
        );
        y += LINE;
    }
    y
}

fn sentence(finding: &Finding) -> String {
    let line = finding.line();
    // What would mend it stands in the report.
    let short = line.strip_suffix(finding.remedy).unwrap_or(&line);
    format!("{}: {}", finding.fault.name(), short.trim_end_matches(": "))
}

/// The text in lines of at most so many letters, broken between words, three lines at most.
fn wrapped(text: &str, letters: usize) -> Vec<String> {
    let mut lines = vec![String::new()];
    for word in text.split(' ') {
        let last = lines.len() - 1;
        if lines[last].chars().count() + word.chars().count() + 1 > letters && !lines[last].is_empty() {
            lines.push(String::new());
        }
        let last = lines.len() - 1;
        if !lines[last].is_empty() {
            lines[last].push(' ');
        }
        lines[last].push_str(word);
    }
    if lines.len() > 3 {
        lines.truncate(3);
        lines[2].push('…');
    }
    lines
}
