//! Files that are read, and where the path then goes.

use super::{assert_pose, data, good, json, kinds, make, poses};
use core::f64::consts::{FRAC_PI_2, FRAC_PI_4, PI};
use fieldbook::import::finish::Finished;

fn notes(finished: &Finished) -> String {
    finished.imported.notes.join("\n")
}

#[test]
fn a_path_on_a_circle_stays_on_it() {
    let plan = good("csv", "quarter-circle.csv", &["--speed", "0.5"]);
    assert_eq!(kinds(&plan), ["spline"]);
    assert!((plan.plan.length_m() - 1.5 * PI).abs() < 1e-6, "{}", plan.plan.length_m());
    for pose in poses(&plan, 101) {
        let (x, y) = (pose.x_m, pose.y_m - 3.0);
        assert!(((x * x + y * y).sqrt() - 3.0).abs() < 1e-5, "{pose:?}");
        assert!((pose.heading_rad - x.atan2(-y)).abs() < 1e-3, "{pose:?}");
    }
    assert_pose(poses(&plan, 2)[1], (3.0, 3.0, FRAC_PI_2), 1e-9);
    assert!(notes(&plan).contains("headings by rule"));
    assert_eq!((plan.name.id.as_str(), plan.name.revision), ("quarter-circle", 1));
}

#[test]
fn headings_in_degrees_and_lengths_in_millimetres_drive_forward_and_then_in_reverse() {
    let plan = good("csv", "into-the-bay.csv", &["--speed", "0.5", "--decimal-comma", "--accel", "0.5"]);
    assert_eq!(kinds(&plan), ["spline", "-spline"]);
    assert_pose(poses(&plan, 2)[1], (3.0 - 2.0_f64.sqrt(), 2.0 - 2.0_f64.sqrt(), -FRAC_PI_4), 1e-4);
    assert!((plan.plan.length_m() - (3.0 + FRAC_PI_2)).abs() < 1e-4);
    // From rest to rest in each part, at 0.5 m/s²: a second more than at constant speed.
    assert!((plan.duration_s() - (plan.plan.length_m() / 0.5 + 2.0)).abs() < 1e-6);
    assert!(notes(&plan).contains("columns left out: point"));
}

#[test]
fn stamps_of_an_epoch_become_samples_that_rest_and_drive() {
    let plan = good("csv", "stamped.csv", &["--id", "ring", "--revision", "7"]);
    assert_eq!(kinds(&plan), ["samples"]);
    assert!((plan.duration_s() - 5.0).abs() < 1e-9);
    let at = |t_s: f64| plan.plan.at(t_s, &mut 0);
    assert_pose(at(0.5).pose, (0.0, 0.0, 0.0), 1e-9);
    assert_pose(at(3.05).pose, (2.0 * 1.025_f64.sin(), 2.0 - 2.0 * 1.025_f64.cos(), 1.025), 1e-4);
    assert!((at(3.05).velocity.speed_m_s - 1.0).abs() < 1e-3);
    assert_eq!((plan.name.id.as_str(), plan.name.revision), ("ring", 7));
}

#[test]
fn the_times_are_left_out_if_a_path_is_asked_for() {
    let plan = good("csv", "stamped.csv", &["--columns", "path", "--speed", "0.3"]);
    assert_eq!(kinds(&plan), ["spline"]);
    assert!((plan.plan.length_m() - 4.0).abs() < 1e-4);
}

#[test]
fn a_noisy_track_becomes_a_smooth_path_within_the_tolerance() {
    let plan = good("csv", "noisy.csv", &["--speed", "0.5", "--tolerance", "0.05"]);
    let points = json(&plan)["segments"][0]["points"].as_array().unwrap().len();
    assert!(points < 40, "{points}");
    assert!((plan.plan.length_m() - 40.0).abs() < 0.5);
    assert!(plan.strays().unwrap() <= 0.05, "{:?}", plan.strays());
    assert!(notes(&plan).contains("so that the curve stays within 0.05 m"));
}

#[test]
fn blanks_delimit_and_no_header_is_needed() {
    let plan = good("csv", "blanks.txt", &["--columns", "path", "--speed", "0.5"]);
    assert_pose(poses(&plan, 2)[0], (0.0, 0.0, poses(&plan, 2)[0].heading_rad), 1e-9);
    assert_eq!(json(&plan)["segments"][0]["points"].as_array().unwrap().len(), 4);
}

#[test]
fn a_line_on_earth_lies_in_the_plane_at_its_first_point() {
    let plan = good("geojson", "headland.geojson", &["--speed", "0.4", "--corners", "pivot"]);
    assert_eq!(kinds(&plan), ["line", "pivot", "line", "pivot", "line"]);
    assert_eq!(
        json(&plan)["origin"],
        serde_json::json!({"latitude_deg": 48.137, "longitude_deg": 11.575, "altitude_m": 520.0})
    );
    let end = poses(&plan, 2)[1];
    // 0.00015° of longitude and 0.0002° of latitude here: PROJ's topocentric step says 11.164999 and 22.240424 m.
    assert_pose(end, (11.164_999, 22.240_424, FRAC_PI_2), 1e-5);
    assert!(plan.strays().unwrap() < 1e-9);
}

#[test]
fn an_origin_that_is_no_place_is_refused_by_the_core() {
    let plan = good("geojson", "headland.geojson", &["--speed", "0.4"]);
    let site = trackhold::site::Site::load(&super::in_repository("config/unicycle.toml")).unwrap();
    let machine = site.settings.checked().unwrap().vehicle;
    for (from, to, told) in [
        ("48.137", "98.137", "origin.latitude_deg: 98.137 lies outside ±90"),
        ("\"altitude_m\": 520.0", "\"altitude_m\": 1e9", "origin.altitude_m: 1000000000 lies outside ±20000"),
        (", \"altitude_m\": 520.0", "", "missing field `altitude_m`"),
    ] {
        let findings =
            trackhold_core::plan::compile(plan.json.replace(from, to).as_bytes(), &*machine).unwrap_err();
        assert!(findings[0].contains(told), "{findings:?}");
    }
}

#[test]
fn corners_can_be_cut_by_arcs() {
    let plan =
        good("geojson", "headland.geojson", &["--speed", "0.4", "--corners", "round", "--radius", "3"]);
    assert_eq!(kinds(&plan), ["line", "arc", "line", "arc", "line"]);
    assert_pose(poses(&plan, 2)[1], (11.164_999, 22.240_424, FRAC_PI_2), 1e-5);
    assert!(plan.strays().unwrap() < 0.5, "{:?}", plan.strays());
}

#[test]
fn another_origin_moves_the_path() {
    let options = ["--speed", "0.4", "--origin", "48.1369,11.5749,520"];
    let plan = good("geojson", "headland.geojson", &options);
    let start = poses(&plan, 2)[0];
    assert!((start.x_m - 7.444).abs() < 2e-3 && (start.y_m - 11.120).abs() < 2e-3, "{start:?}");
    assert_eq!(json(&plan)["origin"]["latitude_deg"], 48.1369);
}

#[test]
fn a_track_is_a_path_or_a_timed_one() {
    let path = good("gpx", "field.gpx", &["--pick", "1", "--speed", "0.5"]);
    assert_eq!(kinds(&path), ["spline"]);
    let timed = good("gpx", "field.gpx", &["--pick", "1", "--timed"]);
    assert_eq!(kinds(&timed), ["samples"]);
    assert!((timed.duration_s() - 20.0).abs() < 1e-9);
    let (by_path, by_time) = (poses(&path, 2)[1], poses(&timed, 2)[1]);
    assert_pose(by_time, (by_path.x_m, by_path.y_m, by_path.heading_rad), 1e-9);
    let back = good("gpx", "field.gpx", &["--pick", "2", "--speed", "0.5"]);
    assert!((poses(&back, 2)[1].heading_rad + FRAC_PI_2).abs() < 1e-6);
}

#[test]
fn the_summary_tells_what_came_out_and_what_to_do_next() {
    let plan = good("geojson", "headland.geojson", &["--speed", "0.4"]);
    let output = fieldbook::import::Output {
        out: "headland.json".into(),
        id: None,
        revision: None,
        accel: None,
        pivot_accel: 0.5,
        site: Some("yard.toml".into()),
    };
    let told = plan.summary(&data("headland.geojson"), &output);
    for part in [
        "headland.geojson: 4 points\n",
        "plan      headland revision 1: 1 segment (1 spline)",
        "origin    latitude 48.137°, longitude 11.575°, 520 m; x is east, y is north",
        "strays    at most ",
        "note      headings by rule: tangent of the circle",
        "note      the curve strays far from straight lines between the points; if those are meant",
        "next      fieldbook check --site yard.toml --plan headland.json",
    ] {
        assert!(told.contains(part), "{part} in\n{told}");
    }
}

#[test]
fn the_plan_file_reads_back_to_the_same_plan() {
    let plan = good("csv", "quarter-circle.csv", &["--speed", "0.5"]);
    let again = std::env::temp_dir().join(format!("import-{}.csv", std::process::id()));
    let rows: Vec<String> = json(&plan)["segments"][0]["points"]
        .as_array()
        .unwrap()
        .iter()
        .map(|point| format!("{},{},{}", point["x_m"], point["y_m"], point["heading_rad"]))
        .collect();
    std::fs::write(&again, rows.join("\n")).unwrap();
    let second = make("csv", &again, &["--columns", "path", "--speed", "0.5", "--id", "quarter-circle"]);
    std::fs::remove_file(&again).unwrap();
    assert_eq!(second.unwrap().json, plan.json);
}
