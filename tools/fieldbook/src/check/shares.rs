//! The shares of the limits along plan time: a panel with axes, the limit itself, the segments, the findings, a legend.

use super::axes::{label, step, ticks};
use super::picture::{LEFT, WIDTH, escaped, mark, put};
use super::trace::Instant;
use trackhold_core::plan::Plan;
use trackhold_core::plan::check::Report;
use trackhold_core::vehicle::LimitName;

/// Right edge of the panel, px.
const RIGHT: f64 = WIDTH - 28.0;
/// Its height, px.
const HEIGHT: f64 = 240.0;
/// A share above this is cut off in the picture, and said so.
const HIGHEST: f64 = 2.0;
/// Rows for the findings' numbers above the panel, and their height, px.
const ROWS: usize = 3;
const ROW: f64 = 16.0;
/// A limit whose share stays below this everywhere is not drawn.
const LEAST: f64 = 0.005;
/// Segments with numbers, unless there are more.
const MOST_NUMBERED: usize = 60;

/// How each line is drawn: dash and colour, so that either tells it apart.
const STYLES: [(&str, &str); 8] = [
    ("", "#24476b"),
    ("9 4", "#8a3b12"),
    ("2 3", "#14635a"),
    ("9 3 2 3", "#5b2a6e"),
    ("5 5", "#6b6b00"),
    ("14 4", "#444444"),
    ("2 6", "#9c1f45"),
    ("9 3 2 3 2 3", "#1b1b1b"),
];

/// From plan time and share to the panel.
struct Frame {
    duration_s: f64,
    top: f64,
    highest: f64,
}

impl Frame {
    fn x(&self, t_s: f64) -> f64 {
        LEFT + (RIGHT - LEFT) * t_s / self.duration_s.max(1e-9)
    }

    fn y(&self, share: f64) -> f64 {
        self.top + HEIGHT * (1.0 - share.min(self.highest) / self.highest)
    }
}

/// Draws the panel with its upper edge a little below `above`; returns the height of the picture.
pub(super) fn draw(body: &mut String, report: &Report, plan: &Plan, instants: &[Instant], above: f64) -> f64 {
    let lines = lines(instants);
    let most = lines.iter().map(|(_, most)| *most).fold(0.0, f64::max);
    let highest = if most <= 1.08 { 1.1 } else { (most * 1.05).min(HIGHEST) };
    let frame = Frame { duration_s: plan.duration_s(), top: above + 14.0 + ROW * ROWS as f64, highest };
    put(
        body,
        format_args!(
            "<text x=\"{LEFT}\" y=\"{:.1}\" font-size=\"12\" font-weight=\"bold\">share of each limit along plan time</text>\n",
            above + 4.0
        ),
    );
    segments(body, &frame, plan);
    axes(body, &frame);
    for (index, (limit, _)) in lines.iter().enumerate() {
        curve(body, &frame, instants, *limit, STYLES[index % STYLES.len()]);
    }
    findings(body, &frame, report);
    let y = legend(body, &lines, frame.top + HEIGHT + 50.0);
    if most > highest {
        put(
            body,
            format_args!(
                "<text x=\"{LEFT}\" y=\"{:.1}\">the greatest share is {most:.2}; the picture ends at {highest:.2}</text>\n",
                y + 16.0
            ),
        );
        return y + 34.0;
    }
    y + 18.0
}

/// The limits that are drawn, with their greatest shares, greatest first.
fn lines(instants: &[Instant]) -> Vec<(LimitName, f64)> {
    let mut lines: Vec<(LimitName, f64)> = Vec::new();
    for (limit, share) in instants.iter().flat_map(|instant| &instant.shares) {
        match lines.iter_mut().find(|(known, _)| known == limit) {
            Some((_, most)) => *most = most.max(*share),
            None => lines.push((*limit, *share)),
        }
    }
    lines.retain(|(_, most)| *most >= LEAST);
    lines.sort_by(|(_, one), (_, other)| other.total_cmp(one));
    lines
}

fn segments(body: &mut String, frame: &Frame, plan: &Plan) {
    let count = plan.segment_begins().count();
    if count > MOST_NUMBERED {
        return;
    }
    let mut last = f64::NEG_INFINITY;
    for placed in plan.stretches() {
        let x = frame.x(placed.begin_s);
        let middle = frame.x(placed.begin_s + 0.5 * placed.duration_s);
        put(
            body,
            format_args!(
                "<line x1=\"{x:.1}\" y1=\"{:.1}\" x2=\"{x:.1}\" y2=\"{:.1}\" stroke=\"#bdbdbd\"/>",
                frame.top,
                frame.top + HEIGHT
            ),
        );
        if middle - last > 22.0 {
            last = middle;
            put(
                body,
                format_args!(
                    "<text x=\"{middle:.1}\" y=\"{:.1}\" text-anchor=\"middle\" font-size=\"9\" fill=\"#555\">{}</text>\n",
                    frame.top + HEIGHT - 4.0,
                    placed.index
                ),
            );
        }
    }
}

fn axes(body: &mut String, frame: &Frame) {
    let bottom = frame.top + HEIGHT;
    let apart = step(frame.duration_s, 14.0);
    for t in ticks(0.0, frame.duration_s, apart) {
        let x = frame.x(t);
        put(
            body,
            format_args!(
                "<line x1=\"{x:.1}\" y1=\"{bottom:.1}\" x2=\"{x:.1}\" y2=\"{:.1}\" stroke=\"#1b1b1b\"/><text x=\"{x:.1}\" y=\"{:.1}\" text-anchor=\"middle\">{}</text>\n",
                bottom + 4.0,
                bottom + 16.0,
                label(t, apart)
            ),
        );
    }
    for share in ticks(0.0, frame.highest, 0.2) {
        let y = frame.y(share);
        put(
            body,
            format_args!(
                "<line x1=\"{:.1}\" y1=\"{y:.1}\" x2=\"{LEFT}\" y2=\"{y:.1}\" stroke=\"#1b1b1b\"/><text x=\"{:.1}\" y=\"{:.1}\" text-anchor=\"end\">{}</text>\n",
                LEFT - 4.0,
                LEFT - 7.0,
                y + 4.0,
                label(share, 0.2)
            ),
        );
    }
    let limit = frame.y(1.0);
    put(
        body,
        format_args!(
            "<rect x=\"{LEFT}\" y=\"{:.1}\" width=\"{:.1}\" height=\"{HEIGHT}\" fill=\"none\" stroke=\"#1b1b1b\"/>\n\
         <line x1=\"{LEFT}\" y1=\"{limit:.1}\" x2=\"{RIGHT}\" y2=\"{limit:.1}\" stroke=\"#1b1b1b\" stroke-width=\"2\"/>\
         <text x=\"{:.1}\" y=\"{:.1}\" font-size=\"9.6\">limit</text>\n\
         <text x=\"{RIGHT}\" y=\"{:.1}\" text-anchor=\"end\">plan time, s</text>\
         <text x=\"18\" y=\"{:.1}\" text-anchor=\"middle\" transform=\"rotate(-90 18 {:.1})\">share of the limit</text>\n",
            frame.top,
            RIGHT - LEFT,
            RIGHT + 3.0,
            limit + 3.5,
            bottom + 30.0,
            frame.top + 0.5 * HEIGHT,
            frame.top + 0.5 * HEIGHT
        ),
    );
}

fn curve(
    body: &mut String,
    frame: &Frame,
    instants: &[Instant],
    limit: LimitName,
    (dash, colour): (&str, &str),
) {
    let mut line = String::new();
    let (mut last, mut held) = (None::<(f64, f64)>, None::<f64>);
    let mut drawn = false;
    for instant in instants {
        let share = instant.shares.iter().find(|(known, _)| *known == limit).map_or(0.0, |(_, share)| *share);
        let (x, y) = (frame.x(instant.t_s), frame.y(share));
        // On a level stretch only its ends are drawn.
        if last.is_some_and(|(_, before)| (before - y).abs() < 0.05) {
            held = Some(x);
            continue;
        }
        if let (Some(x), Some((_, y))) = (held.take(), last) {
            put(&mut line, format_args!("L{x:.1} {y:.1}"));
        }
        put(&mut line, format_args!("{}{x:.1} {y:.1}", if drawn { 'L' } else { 'M' }));
        drawn = true;
        last = Some((x, y));
    }
    if let (Some(x), Some((_, y))) = (held, last) {
        put(&mut line, format_args!("L{x:.1} {y:.1}"));
    }
    put(
        body,
        format_args!(
            "<path d=\"{line}\" fill=\"none\" stroke=\"{colour}\" stroke-width=\"1.7\" stroke-dasharray=\"{}\"/>\n",
            if dash.is_empty() { "none" } else { dash }
        ),
    );
}

/// The findings' numbers above the panel, at their times.
fn findings(body: &mut String, frame: &Frame, report: &Report) {
    let mut taken: Vec<(f64, f64)> = Vec::new();
    for (number, finding) in report.findings.iter().enumerate() {
        let Some(place) = finding.at() else { continue };
        let at = frame.x(place.t_s);
        let (x, y) = free_place(&taken, at, frame.top);
        taken.push((x, y));
        put(
            body,
            format_args!(
                "<line x1=\"{at:.1}\" y1=\"{:.1}\" x2=\"{at:.1}\" y2=\"{:.1}\" stroke=\"#777\" stroke-width=\"0.7\" stroke-dasharray=\"3 3\"/>",
                frame.top,
                frame.top + HEIGHT
            ),
        );
        mark(body, (x, y), number + 1, finding.severity);
    }
}

/// Where a number finds room: in the rows above the panel, else beside them, turning back at the right edge.
fn free_place(taken: &[(f64, f64)], at: f64, top: f64) -> (f64, f64) {
    let is_free =
        |x: f64, y: f64| taken.iter().all(|(tx, ty)| (tx - x).abs() >= 20.0 || (ty - y).abs() >= 0.9 * ROW);
    let way = if at > 0.5 * (LEFT + RIGHT) { -20.0 } else { 20.0 };
    let columns = (0..40).map(|column| at + way * f64::from(column));
    columns
        .flat_map(|x| (0..ROWS).map(move |row| (x, top - ROW * (row as f64 + 0.6))))
        .find(|(x, y)| is_free(*x, *y))
        .unwrap_or((at, top - 0.6 * ROW))
}

/// The lines' names, in columns; returns where it ends.
fn legend(body: &mut String, lines: &[(LimitName, f64)], top: f64) -> f64 {
    const COLUMNS: usize = 3;
    for (index, (limit, most)) in lines.iter().enumerate() {
        let (dash, colour) = STYLES[index % STYLES.len()];
        let x = LEFT + (RIGHT - LEFT) / COLUMNS as f64 * (index % COLUMNS) as f64;
        let y = top + 17.0 * (index / COLUMNS) as f64;
        put(
            body,
            format_args!(
                "<line x1=\"{x:.1}\" y1=\"{:.1}\" x2=\"{:.1}\" y2=\"{:.1}\" stroke=\"{colour}\" stroke-width=\"1.7\" stroke-dasharray=\"{}\"/><text x=\"{:.1}\" y=\"{y:.1}\">{}, at most {:.0} %</text>\n",
                y - 4.0,
                x + 46.0,
                y - 4.0,
                if dash.is_empty() { "none" } else { dash },
                x + 53.0,
                escaped(limit.words()),
                100.0 * most
            ),
        );
    }
    top + 17.0 * lines.len().div_ceil(COLUMNS) as f64
}
