//! Files that are refused: each with what must be told.

use super::{data, make};

#[test]
fn every_bad_file_is_refused_with_its_place() {
    let path = &["--speed", "0.5"][..];
    for (source, name, options, told) in [
        ("csv", "empty.csv", path, "the file has no line with content"),
        ("csv", "no-header.csv", path, "the file has no header; say what its columns are"),
        ("csv", "word.csv", path, "line 4: column 2 (y): \"o.5\" is not a number"),
        ("csv", "nan.csv", path, "line 3: column 1 (x): \"NaN\" is not a number"),
        ("csv", "short-row.csv", path, "line 3: 1 columns, the first line has 2"),
        (
            "csv",
            "decimal-comma.csv",
            path,
            "line 2: column 1 (x): \"0,5\" is not a number; with a decimal comma?",
        ),
        ("csv", "one-point.csv", path, "1 point in the file; a path needs at least two"),
        ("csv", "same-place.csv", path, "1 point after those closer than 0.001 m were left out"),
        ("csv", "no-y.csv", path, "column y: is missing"),
        ("csv", "two-x.csv", path, "column x: is there more than once"),
        ("csv", "unit.csv", path, "column \"x [inch]\": no unit \"inch\" for x; known are m, cm, mm, km"),
        ("csv", "spike.csv", path, "line 5: the path turns back by 180°"),
        (
            "csv",
            "sideways.csv",
            path,
            "line 2: heading 1.571 rad (90°) lies across the way from line 2 to line 3",
        ),
        (
            "csv",
            "contradiction.csv",
            path,
            "line 3: headings 0.000 rad here and 3.142 rad on line 4 contradict",
        ),
        (
            "csv",
            "turn-in-path.csv",
            path,
            "line 4: in one place with line 3 but its heading differs by 1.571 rad",
        ),
        ("csv", "speed-without-time.csv", path, "column speed: without times only --speed counts"),
        ("csv", "time-back.csv", &[], "line 4: time 0.9 s does not rise from 1 s, line 3"),
        ("csv", "same-time.csv", &[], "line 4: time 1 s does not rise from 1 s, line 3"),
        ("csv", "jump.csv", &[], "line 4: a jump: 50.00 m in 1.000 s"),
        (
            "csv",
            "wrong-sign.csv",
            &[],
            "line 2: speed 1 m/s, but by its headings the machine goes in reverse",
        ),
        ("csv", "same-time.csv", path, "line 4: time 1 s does not rise"),
        (
            "csv",
            "sideways.csv",
            &["--speed", "1", "--corners", "pivot"],
            "--corners is for paths without times",
        ),
        (
            "geojson",
            "swapped.geojson",
            path,
            "coordinates[0]: latitude 111.5 lies outside ±90°; are latitude",
        ),
        ("geojson", "two-lines.geojson", path, "2 LineStrings in the file; a path is one LineString"),
        ("geojson", "torn.geojson", path, "not JSON: EOF while parsing"),
        ("geojson", "far.geojson", path, "coordinates[1]: 111.2 km from the origin"),
        ("geojson", "far.geojson", &["--speed", "0.5", "--origin", "0,0,0"], "coordinates[0]: "),
        ("gpx", "torn.gpx", path, "not XML: "),
        ("gpx", "no-track.gpx", path, "the file has no track (trk) and no route (rte)"),
        ("gpx", "two-tracks.gpx", path, "2 tracks and routes; choose with --pick: 1 track out, 2 track home"),
        ("gpx", "two-tracks.gpx", &["--pick", "3"], "--pick 3: there are 2: 1 track out"),
        ("gpx", "no-time.gpx", &["--timed"], "line 5: no time; leave --timed out"),
        ("gpx", "no-time.gpx", &[], "a path without times needs a speed: give --speed"),
        ("gpx", "no-time.gpx", &["--timed", "--speed", "1"], "line 5: no time"),
    ] {
        let refused = match make(source, &data("bad").join(name), options) {
            Ok(_) => panic!("{name} {options:?} was taken"),
            Err(refused) => refused.to_string(),
        };
        assert!(refused.starts_with(told) || refused.contains(&format!("\n  {told}")), "{name}: {refused}");
    }
}

#[test]
fn a_car_is_given_no_turn_on_the_spot() {
    let site = super::in_repository("config/car.toml");
    let options = ["--speed", "0.5", "--corners", "pivot", "--site", site.to_str().unwrap()];
    let refused = make("geojson", &data("good/headland.geojson"), &options).unwrap_err().to_string();
    assert!(
        refused.starts_with("the corner at coordinates[1]: the heading must change there by"),
        "{refused}"
    );
}

#[test]
fn options_that_would_do_nothing_are_refused() {
    let stamped = data("good/stamped.csv");
    for (options, told) in [
        (&["--speed", "0.5"][..], "--speed is for paths"),
        (&["--accel", "0.5"][..], "--accel is for paths"),
        (&["--corners", "pivot"][..], "--corners is for paths"),
    ] {
        let refused = make("csv", &stamped, options).unwrap_err().to_string();
        assert!(refused.starts_with(told), "{refused}");
    }
}

#[test]
fn what_the_core_refuses_names_the_place_in_the_source() {
    let file = data("good/quarter-circle.csv");
    let refused = make("csv", &file, &["--speed", "0.5", "--id", &"x".repeat(65)]).unwrap_err().to_string();
    assert!(refused.starts_with("id: 65 bytes long"), "{refused}");
    let refused = make("csv", &file, &["--speed", "50"]).unwrap_err().to_string();
    assert!(
        refused.starts_with("line 3 to line 19: segments[0] (spline).speed_m_s: 50 m/s is not"),
        "{refused}"
    );
}
