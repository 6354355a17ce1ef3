//! The command `retime`: against optima of a general solver, exact trapezoids, what it refuses.

use crate::common::scratch;
use std::path::{Path, PathBuf};
use std::process::Command;
use trackhold::site::Site;
use trackhold_core::plan::Plan;
use trackhold_core::plan::check::{Fault, Report, check, loads_at};
use trackhold_core::vehicle::Vehicle;

/// Values of `tests/reference/retime`, made by its script.
fn reference(name: &str) -> PathBuf {
    Path::new(concat!(env!("CARGO_MANIFEST_DIR"), "/../../tests/reference/retime")).join(name)
}

fn config(name: &str) -> PathBuf {
    Path::new(concat!(env!("CARGO_MANIFEST_DIR"), "/../../config")).join(name)
}

/// Runs it: exit code, standard output, standard error.
fn run(site: &Path, plan: &Path, out: &Path, args: &[&str]) -> (i32, String, String) {
    let output = Command::new(env!("CARGO_BIN_EXE_fieldbook"))
        .args(["retime", "--site"])
        .arg(site)
        .arg("--plan")
        .arg(plan)
        .arg("--out")
        .arg(out)
        .args(args)
        .output()
        .unwrap();
    let text = |bytes: &[u8]| String::from_utf8_lossy(bytes).into_owned();
    (output.status.code().unwrap(), text(&output.stdout), text(&output.stderr))
}

fn checked(site: &Path, plan: &Path) -> Report {
    check(&std::fs::read(plan).unwrap(), &Site::load(site).unwrap().checked().unwrap().terms())
}

fn vehicle(site: &Path) -> std::sync::Arc<dyn Vehicle> {
    Site::load(site).unwrap().checked().unwrap().vehicle
}

/// Looks at a plan every tenth of a millisecond: the greatest share of any limit.
fn greatest_share(plan: &Plan, vehicle: &dyn Vehicle) -> f64 {
    let mut greatest: f64 = 0.0;
    for placed in plan.stretches() {
        let count = (placed.duration_s * 1e4).ceil();
        for index in 0..=count as u64 {
            let reference = placed.stretch.at(placed.duration_s * index as f64 / count);
            let loads = loads_at(vehicle, &reference, false).unwrap();
            for load in loads.iter().filter(|load| load.unit != "rad") {
                greatest = greatest.max(load.share());
            }
        }
    }
    greatest
}

/// The greatest jerk of the cubics between a file's timing points, and the greatest step of the acceleration between them.
fn jerk_and_step(out: &Path) -> (f64, f64) {
    let file: serde_json::Value = serde_json::from_slice(&std::fs::read(out).unwrap()).unwrap();
    let (mut jerk, mut step, mut last): (f64, f64, f64) = (0.0, 0.0, 0.0);
    for segment in file["segments"].as_array().unwrap() {
        let points = segment["timing"].as_array().unwrap();
        for pair in points.windows(2) {
            let number = |index: usize, key: &str| pair[index][key].as_f64().unwrap();
            let dt = number(1, "t_s") - number(0, "t_s");
            let mean = (number(1, "s_m") - number(0, "s_m")) / dt;
            let (v0, v1) = (number(0, "speed_m_s"), number(1, "speed_m_s"));
            let begin = (6.0 * mean - 4.0 * v0 - 2.0 * v1) / dt;
            let end = (2.0 * v0 + 4.0 * v1 - 6.0 * mean) / dt;
            jerk = jerk.max((end - begin).abs() / dt);
            step = step.max((begin - last).abs());
            last = end;
        }
    }
    (jerk, step.max(last.abs()))
}

fn written(name: &str, text: &str) -> PathBuf {
    let path = scratch(name);
    std::fs::write(&path, text).unwrap();
    path
}

fn plan_file(name: &str, more: &str, segments: &str) -> PathBuf {
    written(
        name,
        &format!(
            r#"{{"format":"trackhold-plan/1","id":"r","revision":1,{more}"start":{{"x_m":0,"y_m":0,"heading_rad":0}},"segments":[{segments}]}}"#
        ),
    )
}

fn unicycle(name: &str, more: &str) -> PathBuf {
    written(
        name,
        &format!(
            "[vehicle]\nkind = \"unicycle\"\nmax_speed_m_s = 1.0\nmax_turn_rate_rad_s = 2.0\nmax_accel_m_s2 = 0.5\nmax_turn_accel_rad_s2 = 1.0\n{more}\n[law]\nname = \"samson\"\n[net]\nlisten = \"127.0.0.1:4710\"\n"
        ),
    )
}

#[test]
fn five_plans_are_within_two_percent_of_the_optimum_and_never_beyond_a_limit() {
    let table: serde_json::Value =
        serde_json::from_slice(&std::fs::read(reference("optima.json")).unwrap()).unwrap();
    let share = table["share"].as_f64().unwrap();
    let optima = table["optima"].as_array().unwrap();
    assert_eq!(optima.len(), 5);
    for entry in optima {
        let name = entry["name"].as_str().unwrap();
        let (site, plan) = (reference(&format!("{name}.site.toml")), reference(&format!("{name}.plan.json")));
        let out = scratch(&format!("retimed-{name}.json"));
        let (code, told, error) = run(&site, &plan, &out, &[]);
        assert_eq!(code, 0, "{name}: {told}{error}");
        let report = checked(&site, &out);
        assert!(report.is_fit(), "{name}: {:?}", report.findings);
        let retimed = report.plan.unwrap();
        let optimum_s = entry["optimum_s"].as_f64().unwrap();
        // The reference's own error is below a ten-thousandth, by its two steps.
        let ratio = retimed.duration_s() / optimum_s;
        assert!(ratio > 0.9999 && ratio < 1.02, "{name}: {ratio} of the optimum");
        let peak = greatest_share(&retimed, &*vehicle(&site));
        // A hundred-millionth: the rounding of times and distances in the file, in its shortest pieces.
        assert!(peak <= share * (1.0 + 1e-8) && peak > 0.99 * share, "{name}: {peak}");
    }
}

#[test]
fn with_a_jerk_limit_they_are_within_four_percent_of_what_a_general_solver_finds() {
    let table: serde_json::Value =
        serde_json::from_slice(&std::fs::read(reference("optima.json")).unwrap()).unwrap();
    let (share, jerk) = (table["share"].as_f64().unwrap(), table["jerk_m_s3"].as_f64().unwrap());
    for entry in table["optima"].as_array().unwrap() {
        let name = entry["name"].as_str().unwrap();
        let text = std::fs::read_to_string(reference(&format!("{name}.site.toml"))).unwrap();
        let text = text.replace("[law]", &format!("max_jerk_m_s3 = {jerk}\n[law]"));
        let site = written(&format!("jerk-{name}.toml"), &text);
        let out = scratch(&format!("jerk-{name}.json"));
        let (code, told, error) = run(&site, &reference(&format!("{name}.plan.json")), &out, &[]);
        assert_eq!(code, 0, "{name}: {told}{error}");
        let retimed = checked(&site, &out).plan.unwrap();
        // The reference is a local optimum on a coarse grid: it may lie a little above the true one.
        let ratio = retimed.duration_s() / entry["with_jerk_s"].as_f64().unwrap();
        assert!(ratio > 0.995 && ratio < 1.04, "{name}: {ratio}");
        let peak = greatest_share(&retimed, &*vehicle(&site));
        assert!(peak <= share * (1.0 + 1e-8), "{name}: {peak}");
        let (found, step) = jerk_and_step(&out);
        // A step of what the jerk does in 5 ms, so that few points say it all.
        assert!(found <= jerk * (1.0 + 1e-5) && step < 0.005 * jerk, "{name}: {found} {step}");
    }
}

#[test]
fn lines_have_the_trapezoids_of_the_textbook_exactly() {
    // Trapezoid D 10, v 1, a 0.5: T 12 s; D 1: triangular, T 2.828427 s (computed with SciPy 1.17).
    let site = unicycle("trapezoid.toml", "");
    for (length, expected_s) in [(10.0, 12.0), (1.0, 8.0_f64.sqrt())] {
        let segment = format!(r#"{{"kind":"line","length_m":{length},"speed_m_s":0.3}}"#);
        let plan = plan_file("trapezoid.json", "", &segment);
        let out = scratch("trapezoid-out.json");
        assert_eq!(run(&site, &plan, &out, &["--reserve", "0"]).0, 0);
        let duration_s = checked(&site, &out).plan.unwrap().duration_s();
        assert!((duration_s - expected_s).abs() < 1e-9, "{length}: {duration_s}");
    }
}

#[test]
fn a_jerk_limit_holds_and_costs_what_it_must() {
    let site = unicycle("jerk.toml", "max_jerk_m_s3 = 1.0\nmax_lateral_accel_m_s2 = 0.2");
    let segments = r#"{"kind":"line","length_m":4,"speed_m_s":0.3},
        {"kind":"clothoid","curvature_start_1_m":0,"curvature_end_1_m":0.8,"length_m":0.8,"speed_m_s":0.3},
        {"kind":"arc","radius_m":1.25,"turn_rad":1,"speed_m_s":0.3},
        {"kind":"clothoid","curvature_start_1_m":0.8,"curvature_end_1_m":0,"length_m":0.8,"speed_m_s":0.3},
        {"kind":"line","length_m":3,"speed_m_s":0.3}"#;
    let (plan, out) = (plan_file("jerk.json", "", segments), scratch("jerk-out.json"));
    let (code, told, error) = run(&site, &plan, &out, &[]);
    assert_eq!(code, 0, "{told}{error}");
    assert!(told.contains("jerk for"), "{told}");
    let retimed = checked(&site, &out).plan.unwrap();
    assert!(greatest_share(&retimed, &*vehicle(&site)) <= 0.8 * (1.0 + 1e-9));
    let (found, step) = jerk_and_step(&out);
    assert!(found <= 1.0 + 1e-5 && step < 0.005, "{found} {step}");
}

#[test]
fn shipped_plans_become_faster_and_stay_fit() {
    for (site, plan) in
        [("differential.toml", "plans/yard-loop.json"), ("car.toml", "plans/delivery-run.json")]
    {
        let (site, plan, out) = (config(site), config(plan), scratch("shipped-out.json"));
        let (code, told, error) = run(&site, &plan, &out, &["--reserve", "0.3"]);
        assert_eq!(code, 0, "{told}{error}");
        let (before, after) = (checked(&site, &plan).plan.unwrap(), checked(&site, &out));
        assert!(after.is_fit(), "{:?}", after.findings);
        let after = after.plan.unwrap();
        assert!(
            after.duration_s() < 0.9 * before.duration_s()
                && (after.length_m() - before.length_m()).abs() < 1e-9
        );
        assert!(greatest_share(&after, &*vehicle(&site)) <= 0.7 * (1.0 + 1e-9));
        for words in ["duration", "bounded by", "next       fieldbook check", "fieldbook simulate"] {
            assert!(told.contains(words), "{words}: {told}");
        }
    }
}

#[test]
fn a_steered_machine_rests_at_a_curvature_step_and_is_told_so() {
    let segments = r#"{"kind":"line","length_m":3,"speed_m_s":1},{"kind":"arc","radius_m":4,"turn_rad":0.5,"speed_m_s":1},
        {"kind":"line","length_m":2,"speed_m_s":1,"reverse":true}"#;
    let (plan, out) = (plan_file("steps.json", "", segments), scratch("steps-out.json"));
    let (code, told, error) = run(&config("car.toml"), &plan, &out, &[]);
    assert_eq!(code, 0, "{told}{error}");
    assert!(
        told.contains("rests at 0.000 m of segments[1]: the curvature steps from 0.0000 to 0.2500 1/m"),
        "{told}"
    );
    assert!(told.contains("rests at 0.000 m of segments[2]: the direction of travel changes"), "{told}");
    // atan(1.2/4) rad at 80 % of 0.9 rad/s, to the next millisecond.
    for index in [1, 2] {
        let words = format!("a dwell of 0.405 s is put in before segments[{index}]");
        assert!(told.contains(&words), "{words}: {told}");
    }
    assert!(steering_times(&config("car.toml"), &out).is_empty());
    let retimed = checked(&config("car.toml"), &out).plan.unwrap();
    assert_eq!(
        retimed.stretches().map(|placed| placed.kind).collect::<Vec<_>>(),
        ["line", "dwell", "arc", "dwell", "line"]
    );
    for begin_s in retimed.segment_begins() {
        assert!(retimed.at(begin_s, &mut 0).velocity.speed_m_s.abs() < 1e-9);
    }
}

/// What the check says of rests too short for the steering, at the beginning of the plan too.
fn steering_times(site: &Path, plan: &Path) -> Vec<String> {
    let findings = checked(site, plan).findings;
    let of_time = findings.iter().filter(|finding| finding.fault == Fault::SteeringTime);
    of_time.map(|finding| finding.line()).collect()
}

#[test]
fn rests_last_as_long_as_the_steering_needs_whatever_the_reserve() {
    let segments = r#"{"kind":"arc","radius_m":2.5,"turn_rad":0.3,"speed_m_s":0.5},{"kind":"dwell","duration_s":0.2},
        {"kind":"arc","radius_m":2.5,"turn_rad":-0.3,"speed_m_s":0.5},{"kind":"dwell","duration_s":9},
        {"kind":"line","length_m":2,"speed_m_s":0.5,"reverse":true}"#;
    let (site, plan, out) =
        (config("car-ackermann.toml"), plan_file("rests.json", "", segments), scratch("rests-out.json"));
    for reserve in ["0", "0.2", "0.5"] {
        let (code, told, error) = run(&site, &plan, &out, &["--reserve", reserve]);
        assert_eq!(code, 0, "{told}{error}");
        assert!(
            told.contains("is put in before segments[0]") && told.contains("the dwell segments[1] lasts"),
            "{told}"
        );
        assert_eq!(steering_times(&site, &out), [] as [&str; 0], "{reserve}");
        let retimed = checked(&site, &out).plan.unwrap();
        let lasts: Vec<f64> = retimed.stretches().map(|placed| placed.duration_s).collect();
        // Both front wheels go by way of straight ahead, so that it takes twice as long as from there.
        assert!((lasts[2] - 2.0 * lasts[0]).abs() < 0.002 && lasts[4] == 9.0, "{lasts:?}");
    }
    // A plan that continues another one begins steered as that one ended.
    let plan = plan_file("rests-on.json", r#""continues":{"at_s":4},"open":true,"#, segments);
    let (code, told, error) = run(&site, &plan, &out, &["--start-speed", "0.2"]);
    assert!(code == 0 && !told.contains("before segments[0]"), "{told}{error}");
    assert_eq!(steering_times(&site, &out), [] as [&str; 0]);
}

#[test]
fn samples_become_a_spline_through_their_way_poses() {
    let points: Vec<String> = (0..=40)
        .map(|index| {
            let angle = 0.05 * f64::from(index);
            format!(
                r#"{{"t_s":{},"x_m":{},"y_m":{},"heading_rad":{angle}}}"#,
                0.2 * f64::from(index),
                2.0 * angle.sin(),
                2.0 - 2.0 * angle.cos()
            )
        })
        .collect();
    let segments = format!(r#"{{"kind":"samples","points":[{}]}}"#, points.join(","));
    let (plan, out) = (plan_file("samples.json", "", &segments), scratch("samples-out.json"));
    let site = config("differential.toml");
    let (code, told, error) = run(&site, &plan, &out, &[]);
    assert_eq!(code, 0, "{told}{error}");
    assert!(told.contains("through 41 of the 41 way-poses; none lies farther than 0.00"), "{told}");
    let retimed = checked(&site, &out).plan.unwrap();
    assert!((retimed.length_m() - 4.0).abs() < 1e-3 && retimed.duration_s() < 6.0);
    assert!(greatest_share(&retimed, &*vehicle(&site)) <= 0.8 * (1.0 + 1e-6));
}

#[test]
fn speeds_at_the_ends_are_kept() {
    let (site, out) = (unicycle("ends.toml", ""), scratch("ends-out.json"));
    let segment = r#"{"kind":"line","length_m":4,"speed_m_s":0.3}"#;
    let open = plan_file("ends.json", r#""open":true,"#, segment);
    assert_eq!(run(&site, &open, &out, &["--start-speed", "0.2", "--end-speed", "0.5"]).0, 0);
    let retimed = checked(&site, &out).plan.unwrap();
    assert!((retimed.at(0.0, &mut 0).velocity.speed_m_s - 0.2).abs() < 1e-12);
    assert!((retimed.at(retimed.duration_s() - 1e-9, &mut 0).velocity.speed_m_s - 0.5).abs() < 1e-6);
    let (code, _, error) = run(&site, &open, &out, &["--start-speed", "0.9"]);
    assert!(code == 1 && error.contains("the limits allow 0.8000 m/s"), "{error}");
    let closed = plan_file("closed.json", "", segment);
    let (code, _, error) = run(&site, &closed, &out, &["--end-speed", "0.5"]);
    assert!(code == 2 && error.contains("is closed and rests at its end"), "{error}");
}

#[test]
fn what_cannot_be_retimed_is_refused_with_its_place() {
    let out = scratch("refused-out.json");
    let car = config("car.toml");
    for (name, segments, expected) in [
        (
            "tight.json",
            r#"{"kind":"clothoid","curvature_start_1_m":0,"curvature_end_1_m":2,"length_m":2,"speed_m_s":1}"#,
            "segments[0] (clothoid): at 0.5",
        ),
        (
            "pivot.json",
            r#"{"kind":"pivot","turn_rad":1,"rate_rad_s":1}"#,
            "segments[0] (pivot): this machine cannot turn on the spot",
        ),
        (
            "back.json",
            r#"{"kind":"samples","points":[{"t_s":0,"x_m":0,"y_m":0,"heading_rad":0},{"t_s":1,"x_m":1,"y_m":0,"heading_rad":0},{"t_s":2,"x_m":0.5,"y_m":0,"heading_rad":0}]}"#,
            "points[2]: the direction of travel changes",
        ),
        ("none.json", r#"{"kind":"line"}"#, "length_m: missing"),
    ] {
        let _ = std::fs::remove_file(&out);
        let (code, _, error) = run(&car, &plan_file(name, "", segments), &out, &[]);
        assert!(code == 1 && error.contains(expected), "{name}: {code} {error}");
        assert!(!out.exists(), "{name}");
    }
    let line = plan_file("line.json", "", r#"{"kind":"line","length_m":1,"speed_m_s":1}"#);
    let (code, _, error) = run(&car, &line, &out, &["--reserve", "1.5"]);
    assert!(code == 2 && error.contains("--reserve: 1.5 lies outside 0 to 0.95"), "{error}");
    let (code, _, error) = run(&car, &written("no.json", "{"), &out, &[]);
    assert!(code == 2 && error.contains("not a plan file"), "{error}");
}

#[test]
fn a_curvature_step_inside_a_nurbs_is_passed_slowly_or_at_rest() {
    // A quarter circle of radius 4 and a line, in one curve: its curvature steps by 0.25 1/m after 2π m.
    let segments = r#"{"kind":"pivot","turn_rad":1.5707963267948966,"rate_rad_s":0.5},
        {"kind":"nurbs","degree":2,"knots":[0,0,0,0.5,0.5,1,1,1],"weights":[1,0.7071067811865476,1,1,1],"speed_m_s":0.3,
         "points":[{"x_m":0,"y_m":0},{"x_m":0,"y_m":4},{"x_m":-4,"y_m":4},{"x_m":-6,"y_m":4},{"x_m":-8,"y_m":4}]}"#;
    let (site, out) = (config("differential.toml"), scratch("nurbs-out.json"));
    let (code, told, error) = run(&site, &plan_file("nurbs.json", "", segments), &out, &[]);
    assert_eq!(code, 0, "{told}{error}");
    let retimed = checked(&site, &out).plan.unwrap();
    let placed = retimed.stretches().nth(1).unwrap();
    let speed_at = |s_m: f64| {
        let (mut low, mut high) = (0.0, placed.duration_s);
        for _ in 0..60 {
            let middle = 0.5 * (low + high);
            if placed.stretch.timing(middle).at < s_m { low = middle } else { high = middle }
        }
        placed.stretch.timing(low).rate
    };
    // The wheel speeds step by v Δκ W/2; 1.2 m/s² make up for that in the 0.1 s of check.excess_s: no slower than the bend.
    let step = std::f64::consts::TAU;
    assert!(speed_at(step - 0.5) > 0.85 && speed_at(step) <= 0.12 / (0.25 * 0.25) + 1e-6);
    let car = config("car.toml");
    let only = segments.split_once('\n').unwrap().1;
    let plan = plan_file("nurbs-car.json", "", only).display().to_string();
    let text = std::fs::read_to_string(&plan)
        .unwrap()
        .replace(r#""heading_rad":0}"#, r#""heading_rad":1.5707963267948966}"#);
    std::fs::write(&plan, text).unwrap();
    let (code, told, error) = run(&car, Path::new(&plan), &out, &[]);
    assert_eq!(code, 0, "{told}{error}");
    assert!(told.contains("rests at 6.283 m of segments[0]: the curvature steps from 0.2500 to"), "{told}");
    // The wheels turn while it rests on the seam: there it is steered for what comes after it.
    assert!(told.contains("0.405 s of it at 6.283 m of segments[0]"), "{told}");
    assert_eq!(steering_times(&car, &out), [] as [&str; 0]);
    let retimed = checked(&car, &out).plan.unwrap();
    let resting: Vec<f64> = (0..20_000)
        .map(|index| retimed.at(1e-3 * f64::from(index), &mut 0))
        .filter(|reference| {
            reference.velocity.is_zero() && reference.pose.x_m < -1.0 && reference.pose.x_m > -7.0
        })
        .map(|reference| reference.rest_curvature_1_m)
        .collect();
    assert!((400..410).contains(&resting.len()) && resting.iter().all(|curvature| curvature.abs() < 1e-6));
}

#[test]
fn speeds_of_the_plan_or_one_speed_can_be_the_most() {
    let segments = r#"{"kind":"line","length_m":4,"speed_m_s":0.7},{"kind":"line","length_m":4,"speed_m_s":0.3},
        {"kind":"clothoid","curvature_start_1_m":0,"curvature_end_1_m":0.5,"length_m":2,"speed_m_s":0.5}"#;
    for more in ["", "max_jerk_m_s3 = 1.0"] {
        let (site, plan, out) =
            (unicycle("tops.toml", more), plan_file("tops.json", "", segments), scratch("tops-out.json"));
        assert_eq!(run(&site, &plan, &out, &["--keep-speeds", "--max-speed", "0.45"]).0, 0);
        let retimed = checked(&site, &out).plan.unwrap();
        for (placed, top) in retimed.stretches().zip([0.45, 0.3, 0.45]) {
            let speeds = (0..=1000)
                .map(|index| placed.stretch.timing(placed.duration_s * f64::from(index) * 1e-3).rate);
            let fastest = speeds.fold(0.0, f64::max);
            assert!(
                fastest <= top * (1.0 + 1e-9) && fastest > 0.98 * top,
                "{}: {fastest} of {top}",
                placed.index
            );
        }
    }
}
