//! `import geojson`: a LineString in geographic coordinates (RFC 7946), alone, in a Feature or in a FeatureCollection.

use super::geographic::{Origin, all_to_site, parse_origin};
use super::path::{self, PathOptions};
use super::track::{Place, Refused, Spot, points};
use super::{Imported, Output};
use serde_json::Value;
use std::path::PathBuf;

/// The arguments.
#[derive(Debug, clap::Args)]
pub struct Args {
    /// The GeoJSON file, WGS 84: longitude, latitude, and altitude if it has one.
    pub file: PathBuf,
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
    let places = read(text)?;
    let mut notes = Vec::new();
    let what = points(places.len());
    let (origin, sites) = all_to_site(&places, args.origin, &mut notes)?;
    let spots: Vec<Spot> =
        places.iter().zip(sites).map(|((place, _), (x_m, y_m))| Spot::at(*place, x_m, y_m)).collect();
    let drafted = path::draft(&spots, Some(origin), &args.path, &mut notes)?;
    Ok(Imported::of_path(drafted, what, notes))
}

/// Reads the one LineString of a file.
///
/// # Errors
/// What cannot be read: line and column in text that is no JSON, the index of a position that does not hold.
pub fn read(text: &str) -> Result<Vec<(Place, Origin)>, Refused> {
    let file: Value = serde_json::from_str(text.trim_start_matches('\u{feff}'))
        .map_err(|error| Refused::because(format!("not JSON: {error}")))?;
    if !file["crs"].is_null() {
        return Err(Refused::because(
            "crs: other coordinate systems than WGS 84 are not read; RFC 7946 knows no such member",
        ));
    }
    let mut lines = Vec::new();
    let mut others = Vec::new();
    collect(&file, &mut lines, &mut others).map_err(Refused::because)?;
    let [line] = lines[..] else {
        let others = if others.is_empty() { String::new() } else { format!(" (and {})", others.join(", ")) };
        return Err(Refused::because(format!(
            "{} LineStrings{others} in the file; a path is one LineString: keep the one that counts",
            lines.len()
        )));
    };
    let Some(positions) = line["coordinates"].as_array() else {
        return Err(Refused::because("coordinates: not a list of positions"));
    };
    if positions.len() < 2 {
        return Err(Refused::because(format!(
            "coordinates: {}; a LineString has at least two",
            points(positions.len())
        )));
    }
    let mut findings = Vec::new();
    let mut places = Vec::with_capacity(positions.len());
    let mut altitude = None;
    for (index, position) in positions.iter().enumerate() {
        match read_position(position, &mut altitude) {
            Ok(found) => places.push((Place::Item(index), found)),
            Err(what) => findings.push(format!("{}: {what}", Place::Item(index))),
        }
    }
    Refused::unless_none(findings)?;
    Ok(places)
}

fn collect<'a>(value: &'a Value, lines: &mut Vec<&'a Value>, others: &mut Vec<String>) -> Result<(), String> {
    match value["type"].as_str() {
        Some("LineString") => lines.push(value),
        Some("Feature") => collect(&value["geometry"], lines, others)?,
        Some("FeatureCollection") => {
            let features = value["features"].as_array().ok_or("features: not a list")?;
            for feature in features {
                collect(feature, lines, others)?;
            }
        }
        Some("GeometryCollection") => {
            for geometry in value["geometries"].as_array().ok_or("geometries: not a list")? {
                collect(geometry, lines, others)?;
            }
        }
        Some(other @ ("Point" | "MultiPoint" | "MultiLineString" | "Polygon" | "MultiPolygon")) => {
            others.push(format!("a {other}"));
        }
        Some(other) => return Err(format!("type: {other:?} is no GeoJSON object")),
        // A feature may have no geometry (RFC 7946, 3.2).
        None if value.is_null() => {}
        None => return Err("type: missing; this is no GeoJSON object".to_owned()),
    }
    Ok(())
}

/// Longitude, latitude, altitude. A position without altitude has that of the one before, the first one 0.
fn read_position(position: &Value, altitude: &mut Option<f64>) -> Result<Origin, String> {
    let numbers: Option<Vec<f64>> =
        position.as_array().and_then(|list| list.iter().map(Value::as_f64).collect());
    match numbers.as_deref() {
        Some([longitude, latitude, rest @ ..]) if rest.len() <= 1 => {
            if let [height] = rest {
                *altitude = Some(*height);
            }
            Origin::new(*latitude, *longitude, altitude.unwrap_or(0.0))
        }
        _ => Err(format!("{position} is not [longitude, latitude] or [longitude, latitude, altitude]")),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    const LINE: &str = r#"{"type": "LineString", "coordinates": [[11.5, 48.1, 520], [11.501, 48.1], [11.502, 48.101, 521]]}"#;

    #[test]
    fn a_line_is_found_alone_in_a_feature_and_in_a_collection() {
        let alone = read(LINE).unwrap();
        assert_eq!(alone[1], (Place::Item(1), Origin::new(48.1, 11.501, 520.0).unwrap()));
        let feature = format!(r#"{{"type": "Feature", "properties": {{}}, "geometry": {LINE}}}"#);
        let collection = format!(
            r#"{{"type": "FeatureCollection", "features": [{feature}, {{"type": "Feature", "geometry": {{"type": "Point", "coordinates": [0, 0]}}}}]}}"#
        );
        assert_eq!(read(&feature).unwrap(), alone);
        assert_eq!(read(&collection).unwrap(), alone);
    }

    #[test]
    fn what_is_no_line_is_refused_with_its_place() {
        for (text, told) in [
            ("{", "not JSON: EOF while parsing an object at line 1 column 1"),
            (r#"{"type": "Polygon", "coordinates": []}"#, "0 LineStrings (and a Polygon) in the file"),
            (r#"{"type": "Line"}"#, "type: \"Line\" is no GeoJSON object"),
            (r#"{"coordinates": []}"#, "type: missing"),
            (r#"{"type": "LineString", "coordinates": [[1, 2]]}"#, "coordinates: 1 point;"),
            (
                r#"{"type": "LineString", "coordinates": [[1, 2], [3]]}"#,
                "coordinates[1]: [3] is not [longitude",
            ),
            (
                r#"{"type": "LineString", "coordinates": [[1, 2], [3, 95]]}"#,
                "coordinates[1]: latitude 95 lies outside ±90°; are",
            ),
            (r#"{"type": "LineString", "crs": {"type": "name"}, "coordinates": [[1, 2], [3, 4]]}"#, "crs:"),
        ] {
            let refused = read(text).unwrap_err().to_string();
            assert!(refused.starts_with(told), "{text}: {refused}");
        }
    }
}
