//! VDA 5050 orders: good ones as paths, and every way in which one can be wrong.

use super::{assert_pose, data, good, in_repository, json, kinds, make, poses};
use core::f64::consts::{FRAC_PI_2, PI};
use serde_json::{Value, json};

/// The quarter circle of The NURBS Book (Piegl and Tiller, 7.3): degree 2, weights 1, √½, 1. Length and curvature are a
/// unit circle's; parameter ¼ lies at (0.9297883, 0.36809471).
#[test]
fn the_quarter_circle_is_one() {
    let plan = good("vda5050", "quarter-circle.vda5050.json", &[]);
    assert_eq!(kinds(&plan), ["nurbs"]);
    assert!((plan.plan.length_m() - FRAC_PI_2).abs() < 1e-9);
    let stretch = plan.plan.stretches().next().unwrap().stretch;
    for step in 0..=100 {
        let angle = FRAC_PI_2 * f64::from(step) / 100.0;
        let progress = trackhold_core::plan::segment::Progress::resting(angle);
        let reference = stretch.at_progress(progress);
        assert_pose(reference.pose, (angle.cos(), angle.sin(), angle + FRAC_PI_2), 1e-9);
        assert!((reference.curvature_1_m - 1.0).abs() < 1e-9);
    }
    let published =
        stretch.at_progress(trackhold_core::plan::segment::Progress::resting(0.368_094_71_f64.asin())).pose;
    assert!((published.x_m - 0.929_788_3).abs() < 5e-8 && (published.y_m - 0.368_094_71).abs() < 5e-8);
}

#[test]
fn a_full_circle_with_double_knots_is_one_too() {
    let plan = good("vda5050", "full-circle.vda5050.json", &["--speed", "0.5"]);
    assert!((plan.plan.length_m() - 2.0 * PI).abs() < 1e-8);
    for pose in poses(&plan, 201) {
        assert!((pose.x_m.hypot(pose.y_m) - 1.0).abs() < 1e-9, "{pose:?}");
    }
}

#[test]
fn a_tour_goes_to_its_decision_point_and_rests_there() {
    let plan = good("vda5050", "tour.vda5050.json", &["--speed", "0.6", "--accel", "0.5"]);
    assert_eq!(kinds(&plan), ["line", "nurbs", "line", "pivot", "line", "-line"]);
    let file = json(&plan);
    let speeds: Vec<f64> =
        [0, 1, 2, 4, 5].map(|index| file["segments"][index]["speed_m_s"].as_f64().unwrap()).to_vec();
    assert_eq!(speeds, [0.6, 0.4, 0.6, 0.6, 0.2]);
    assert_eq!(file["segments"][3]["rate_rad_s"], 0.3);
    assert_eq!((file["id"].as_str(), file["revision"].as_u64()), (Some("tour"), Some(3)));
    let begins: Vec<f64> = plan.plan.segment_begins().collect();
    let at = |t_s: f64| plan.plan.at(t_s, &mut 0).pose;
    for (index, pose) in [
        (0, (0.0, 0.0, 0.0)),
        (1, (4.0, 0.0, 0.0)),
        (2, (5.0, 1.0, FRAC_PI_2)),
        (3, (5.0, 3.0, FRAC_PI_2)),
        (4, (5.0, 3.0, PI)),
        (5, (2.0, 3.0, PI)),
    ] {
        assert_pose(at(begins[index]), pose, 1e-9);
    }
    let end = plan.plan.at(plan.plan.duration_s(), &mut 0);
    assert_pose(end.pose, (3.0, 3.0, PI), 1e-5);
    assert_eq!(end.velocity.speed_m_s, 0.0);
    let notes = plan.imported.notes.join("\n");
    for part in [
        "edges of the horizon, not released and left out: 2",
        "1 at n3",
        "in reverse by their orientation: edges[4] (e4)",
    ] {
        assert!(notes.contains(part), "{part} in {notes}");
    }
}

#[test]
fn a_trajectory_without_degree_is_a_polyline_with_turns() {
    let plan = good("vda5050", "polyline.vda5050.json", &[]);
    assert_eq!(kinds(&plan), ["line", "pivot", "line"]);
    assert_pose(poses(&plan, 2)[1], (2.0, 1.0, FRAC_PI_2), 1e-9);
}

#[test]
fn a_car_cannot_turn_at_a_node() {
    let site = in_repository("config/car.toml");
    let file = data("good/tour.vda5050.json");
    let refused = make("vda5050", &file, &["--speed", "0.6", "--site", site.to_str().unwrap()]).unwrap_err();
    assert!(
        refused.to_string().contains("node n3: the heading must change there by 1.571 rad (90.0°)"),
        "{refused}"
    );
}

/// The tour with one value replaced (or, for null, taken away).
fn tour_with(pointer: &str, value: Value) -> std::path::PathBuf {
    let text = std::fs::read_to_string(data("good/tour.vda5050.json")).unwrap();
    let mut order: Value = serde_json::from_str(&text).unwrap();
    let (parent, key) = pointer.rsplit_once('/').unwrap();
    match order.pointer_mut(parent).unwrap() {
        Value::Object(map) if value.is_null() => drop(map.remove(key)),
        Value::Object(map) => drop(map.insert(key.to_owned(), value)),
        Value::Array(list) if value.is_null() => drop(list.remove(key.parse().unwrap())),
        Value::Array(list) => list[key.parse::<usize>().unwrap()] = value,
        other => panic!("{other}"),
    }
    let name = format!("order-{}-{}.json", std::process::id(), pointer.replace('/', "-"));
    let path = std::path::Path::new(env!("CARGO_TARGET_TMPDIR")).join(name);
    std::fs::write(&path, order.to_string()).unwrap();
    path
}

#[test]
fn every_fault_in_an_order_is_told_with_its_place() {
    let trajectory = "/edges/1/trajectory";
    let knots = |list: &[f64]| json!(list);
    let cases: Vec<(String, Value, &str)> = vec![
        ("/version".into(), json!("3.0.0"), "version: \"3.0.0\""),
        ("/nodes/7".into(), Value::Null, "7 nodes and 7 edges; an order has one node more"),
        ("/nodes/1/sequenceId".into(), json!(13), "nodes[1] (n1).sequenceId: 13, due is 12"),
        ("/edges/2/sequenceId".into(), json!(13), "edges[2] (e2).sequenceId: 13, due is 15"),
        (
            "/edges/0/startNodeId".into(),
            json!("nx"),
            "edges[0] (e0).startNodeId: \"nx\", but the node there is \"n0\"",
        ),
        ("/edges/3/endNodeId".into(), json!("n3"), "edges[3] (e3).endNodeId: \"n3\""),
        ("/nodes/6/released".into(), json!(true), "nodes[6] (n6).released: true after"),
        ("/edges/5/released".into(), json!(true), "6 nodes and 6 edges are released"),
        ("/nodes/2/nodePosition".into(), Value::Null, "nodes[2] (n2).nodePosition: missing"),
        (
            "/nodes/2/nodePosition/x".into(),
            json!(1e9),
            "nodes[2] (n2).nodePosition.x: 1000000000 lies outside",
        ),
        ("/nodes/2/nodePosition/theta".into(), json!(90), "nodePosition.theta: 90 lies outside ±7"),
        ("/nodes/2/nodePosition/mapId".into(), json!("yard"), "mapId: \"hall\" and \"yard\""),
        ("/edges/0/maxSpeed".into(), json!(0), "edges[0] (e0).maxSpeed: 0 is not greater than 0"),
        ("/edges/0/orientation".into(), json!(1.0), "edges[0] (e0).orientation: 1 rad from the path"),
        ("/edges/3/orientation".into(), json!(1.5), "edges[3] (e3).orientation: 1.5 rad in the map"),
        ("/edges/3/orientationType".into(), json!("LOCAL"), "orientationType: \"LOCAL\" is neither"),
        (format!("{trajectory}/degree"), json!(0), "edges[1] (e1).trajectory.degree: 0 is not 1 to 10"),
        (format!("{trajectory}/degree"), json!(3), "controlPoints: 3 of them; degree 3 needs at least 4"),
        (
            format!("{trajectory}/controlPoints/1"),
            Value::Null,
            "controlPoints: 2 of them; degree 2 needs at least 3",
        ),
        (
            format!("{trajectory}/knotVector"),
            knots(&[0.0, 0.0, 1.0, 1.0]),
            "4 knots; 3 control points of degree 2 need 6",
        ),
        (format!("{trajectory}/knotVector/2"), json!(0.1), "must begin with 3 times 0"),
        (format!("{trajectory}/knotVector/3"), json!(0.9), "must end with 3 times 1"),
        (format!("{trajectory}/knotVector/5"), json!(2), "must end with 3 times 1"),
        (format!("{trajectory}/knotVector/1"), json!(-1), "knotVector[1]: -1 after 0; knots may not fall"),
        (
            format!("{trajectory}/controlPoints/1/weight"),
            json!(0),
            "controlPoints[1].weight: 0 is not 1e-6 to 1e6",
        ),
        (format!("{trajectory}/controlPoints/1/weight"), json!(-1), "controlPoints[1].weight: -1"),
        (format!("{trajectory}/controlPoints/1/x"), json!("5"), "not an order: invalid type: string"),
        (format!("{trajectory}/controlPoints/0/x"), json!(4.5), "controlPoints[0]: 0.500 m from node n1"),
        (format!("{trajectory}/controlPoints/2/y"), json!(1.1), "controlPoints[2]: 0.100 m from node n2"),
        (
            "/nodes/5/nodePosition".into(),
            json!({"x": 2, "y": 3}),
            "edges[4] (e4): both its nodes lie in one place",
        ),
        ("/nodes".into(), json!([]), "0 nodes and 7 edges"),
        ("/edges".into(), Value::Null, "not an order: missing field `edges`"),
    ];
    for (pointer, value, told) in cases {
        let path = tour_with(&pointer, value);
        let refused = make("vda5050", &path, &["--speed", "0.6"]).expect_err(&pointer).to_string();
        std::fs::remove_file(path).unwrap();
        assert!(refused.contains(told), "{pointer}: {told} in\n{refused}");
    }
}

#[test]
fn an_edge_without_a_speed_asks_for_one() {
    let refused = make("vda5050", &data("good/tour.vda5050.json"), &[]).unwrap_err();
    assert_eq!(refused.to_string(), "edges[2] (e2).maxSpeed: missing; give --speed, in m/s");
}

#[test]
fn a_node_that_wants_another_heading_gets_it() {
    let path = tour_with("/nodes/1/nodePosition/theta", json!(-1.0));
    let plan = make("vda5050", &path, &["--speed", "0.6"]).unwrap();
    std::fs::remove_file(path).unwrap();
    assert_eq!(kinds(&plan)[..4], ["line", "pivot", "pivot", "nurbs"]);
    let path = tour_with("/nodes/0/nodePosition/theta", json!(0.5));
    let plan = make("vda5050", &path, &["--speed", "0.6"]).unwrap();
    std::fs::remove_file(path).unwrap();
    assert_eq!(kinds(&plan)[..2], ["pivot", "line"]);
    assert_pose(poses(&plan, 2)[0], (0.0, 0.0, 0.5), 1e-12);
}
