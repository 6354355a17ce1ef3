//! `import gpx`: a track or a route of a GPX file (version 1.0 or 1.1), geographic coordinates in WGS 84.

use super::geographic::{Origin, all_to_site, parse_origin};
use super::path::{self, PathOptions};
use super::stamp::Stamp;
use super::track::{Place, Refused, Spot, points};
use super::{Imported, Output};
use roxmltree::{Document, Node};
use std::path::PathBuf;

/// The arguments.
#[derive(Debug, clap::Args)]
pub struct Args {
    /// The GPX file.
    pub file: PathBuf,
    /// Take the times of the points: stamped way-poses, and no --speed. Without it, the path alone counts.
    #[arg(long)]
    pub timed: bool,
    /// Which track or route, counted from 1 in the file's order, where there are several.
    #[arg(long, value_name = "N")]
    pub pick: Option<usize>,
    /// Where the site frame's origin lies: degrees, degrees, metres above the ellipsoid. Without it, the first point. x is
    /// east, y is north. Write --origin=-33.9,151.2,20 with the =.
    #[arg(long, value_name = "LAT,LON,ALT", value_parser = parse_origin, allow_hyphen_values = true)]
    pub origin: Option<Origin>,
    /// How the track becomes a path.
    #[command(flatten)]
    pub path: PathOptions,
    /// What comes out.
    #[command(flatten)]
    pub output: Output,
}

pub(super) fn import(args: &Args, text: &str) -> Result<Imported, Refused> {
    let mut notes = Vec::new();
    let fixes = read(text, args.pick, args.timed, &mut notes)?;
    let places: Vec<(Place, Origin)> = fixes.iter().map(|fix| (fix.place, fix.position)).collect();
    let what = points(places.len());
    let (origin, sites) = all_to_site(&places, args.origin, &mut notes)?;
    let begin = fixes[0].time;
    let spots: Vec<Spot> = fixes
        .iter()
        .zip(sites)
        .map(|(fix, (x_m, y_m))| Spot {
            t_s: fix.time.zip(begin).map(|(time, begin)| time.since(begin)),
            ..Spot::at(fix.place, x_m, y_m)
        })
        .collect();
    let drafted = path::draft(&spots, Some(origin), &args.path, &mut notes)?;
    Ok(Imported::of_path(drafted, what, notes))
}

/// A point of a track or route.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Fix {
    /// Its line in the file.
    pub place: Place,
    /// Where it is.
    pub position: Origin,
    /// Its time, where times were asked for.
    pub time: Option<Stamp>,
}

/// Reads the points of one track or route.
///
/// # Errors
/// What cannot be read, with its line.
pub fn read(
    text: &str,
    pick: Option<usize>,
    timed: bool,
    notes: &mut Vec<String>,
) -> Result<Vec<Fix>, Refused> {
    let document = Document::parse(text.trim_start_matches('\u{feff}'))
        .map_err(|error| Refused::because(format!("not XML: {error}")))?;
    let root = document.root_element();
    if root.tag_name().name() != "gpx" {
        return Err(Refused::because(format!("the file's element is {:?}, not gpx", root.tag_name().name())));
    }
    let ways: Vec<Node<'_, '_>> =
        root.children().filter(|node| matches!(node.tag_name().name(), "trk" | "rte")).collect();
    let way = choose(&ways, pick)?;
    let parts = way.children().filter(|node| node.has_tag_name_here("trkseg")).count();
    if parts > 1 {
        notes.push(format!("the track's {parts} parts are joined; reception was lost between them"));
    }
    let mut findings = Vec::new();
    let mut fixes = Vec::new();
    let mut altitude = None;
    for node in way.descendants().filter(|node| matches!(node.tag_name().name(), "trkpt" | "rtept")) {
        let place = Place::Line(document.text_pos_at(node.range().start).row as usize);
        match read_point(&node, timed, &mut altitude) {
            Ok((position, time)) => fixes.push(Fix { place, position, time }),
            Err(what) => findings.push(format!("{place}: {what}")),
        }
    }
    Refused::unless_none(findings)?;
    if fixes.len() < 2 {
        return Err(Refused::because(format!(
            "{} in this {}; a path needs at least two",
            points(fixes.len()),
            way.tag_name().name()
        )));
    }
    Ok(fixes)
}

/// Names compared whatever the namespace: versions 1.0 and 1.1 have different ones.
trait Named {
    fn has_tag_name_here(&self, name: &str) -> bool;
}

impl Named for Node<'_, '_> {
    fn has_tag_name_here(&self, name: &str) -> bool {
        self.tag_name().name() == name
    }
}

fn choose<'a, 'input>(ways: &[Node<'a, 'input>], pick: Option<usize>) -> Result<Node<'a, 'input>, Refused> {
    let list = || {
        let name = |(index, way): (usize, &Node<'_, '_>)| {
            let kind = if way.has_tag_name_here("trk") { "track" } else { "route" };
            let name = child_text(way, "name").unwrap_or("without a name");
            format!("{} {kind} {name}", index + 1)
        };
        ways.iter().enumerate().map(name).collect::<Vec<_>>().join(", ")
    };
    match (ways, pick) {
        ([], _) => Err(Refused::because("the file has no track (trk) and no route (rte)")),
        ([only], None) => Ok(*only),
        (_, None) => {
            Err(Refused::because(format!("{} tracks and routes; choose with --pick: {}", ways.len(), list())))
        }
        (_, Some(number)) => {
            number.checked_sub(1).and_then(|index| ways.get(index).copied()).ok_or_else(|| {
                Refused::because(format!("--pick {number}: there are {}: {}", ways.len(), list()))
            })
        }
    }
}

fn child_text<'a>(node: &Node<'a, '_>, name: &str) -> Option<&'a str> {
    node.children().find(|child| child.has_tag_name_here(name)).and_then(|child| child.text()).map(str::trim)
}

/// Position and time. A point without elevation has that of the one before, the first one 0.
fn read_point(
    node: &Node<'_, '_>,
    timed: bool,
    altitude: &mut Option<f64>,
) -> Result<(Origin, Option<Stamp>), String> {
    let degrees = |name: &str| {
        let text = node.attribute(name).ok_or_else(|| format!("{name} is missing"))?;
        text.trim().parse::<f64>().map_err(|_| format!("{name} {text:?} is not a number"))
    };
    if let Some(text) = child_text(node, "ele") {
        *altitude = Some(text.parse().map_err(|_| format!("ele {text:?} is not a number"))?);
    }
    let position = Origin::new(degrees("lat")?, degrees("lon")?, altitude.unwrap_or(0.0))?;
    if !timed {
        return Ok((position, None));
    }
    let text = child_text(node, "time").ok_or("no time; leave --timed out and give --speed")?;
    let time = Stamp::parse_date(text)
        .ok_or_else(|| format!("time {text:?} is not a date like 2026-05-04T10:00:00Z (RFC 3339)"))?;
    Ok((position, Some(time)))
}

#[cfg(test)]
mod tests {
    use super::*;

    const TRACK: &str = "<?xml version=\"1.0\"?>\n<gpx version=\"1.1\" xmlns=\"http://www.topografix.com/GPX/1/1\">\n\
        <trk><name>north field</name><trkseg>\n\
        <trkpt lat=\"48.1\" lon=\"11.5\"><ele>520</ele><time>2026-05-04T10:00:00Z</time></trkpt>\n\
        <trkpt lat=\"48.1001\" lon=\"11.5\"><time>2026-05-04T10:00:10.5Z</time></trkpt>\n\
        </trkseg></trk>\n</gpx>\n";

    fn refused(text: &str, timed: bool) -> String {
        read(text, None, timed, &mut Vec::new()).unwrap_err().to_string()
    }

    #[test]
    fn a_track_is_read_with_lines_and_times() {
        let fixes = read(TRACK, None, true, &mut Vec::new()).unwrap();
        assert_eq!(fixes.iter().map(|fix| fix.place).collect::<Vec<_>>(), [Place::Line(4), Place::Line(5)]);
        assert_eq!(fixes[1].position, Origin::new(48.1001, 11.5, 520.0).unwrap());
        assert_eq!(fixes[1].time.unwrap().since(fixes[0].time.unwrap()), 10.5);
        assert_eq!(read(TRACK, Some(1), false, &mut Vec::new()).unwrap()[0].time, None);
    }

    #[test]
    fn several_ways_are_listed() {
        let two = TRACK.replace("</gpx>", "<rte><rtept lat=\"1\" lon=\"1\"/></rte></gpx>");
        assert_eq!(
            refused(&two, false),
            "2 tracks and routes; choose with --pick: 1 track north field, 2 route without a name"
        );
    }

    #[test]
    fn what_does_not_hold_is_refused_by_line() {
        for (from, to, told) in [
            ("48.1001", "148.1", "line 5: latitude 148.1 lies outside"),
            ("lon=\"11.5\"><time>", "><time>", "line 5: lon is missing"),
            ("<ele>520", "<ele>high", "line 4: ele \"high\" is not a number"),
            ("10:00:10.5Z", "later", "line 5: time \"2026-05-04Tlater\" is not a date"),
            ("<time>2026-05-04T10:00:10.5Z</time>", "", "line 5: no time; leave --timed out"),
            ("trk>", "path>", "the file has no track"),
            ("<gpx ", "<kml ", "not XML"),
        ] {
            let told_here = refused(&TRACK.replace(from, to), true);
            assert!(told_here.starts_with(told), "{to}: {told_here}");
        }
    }
}
