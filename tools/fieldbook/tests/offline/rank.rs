//! The command `rank`: every law is told once, the same runs for each, and what is measured is what it says.

use crate::common::scratch;
use serde_json::Value;
use std::path::PathBuf;
use std::process::Command;
use trackhold_core::law;

const DIFFERENTIAL: &str = "kind = \"differential\"\nwheel_radius_m = 0.1\ntrack_width_m = 0.5\n\
                            max_wheel_speed_rad_s = 20\nmax_wheel_accel_rad_s2 = 30\n";
const CAR: &str = "kind = \"car\"\nwheelbase_m = 1.2\nmax_speed_m_s = 2\nmax_accel_m_s2 = 1\n\
                   max_steer_rad = 0.5\nmax_steer_rate_rad_s = 1\n";

/// A site file of this machine and law.
fn site(name: &str, machine: &str, law: &str, rate_hz: u32) -> PathBuf {
    let path = scratch(&format!("rank-{name}.site.toml"));
    let text = format!("[vehicle]\n{machine}\n[law]\n{law}\n[node]\nrate_hz = {rate_hz}\n");
    std::fs::write(&path, text).unwrap();
    path
}

/// A plan file of these segments.
fn plan(name: &str, segments: &str) -> PathBuf {
    let path = scratch(&format!("rank-{name}.plan.json"));
    let text = format!(
        r#"{{"format":"trackhold-plan/1","id":"{name}","revision":1,"start":{{"x_m":1,"y_m":2,"heading_rad":0.5}},"segments":[{segments}]}}"#
    );
    std::fs::write(&path, text).unwrap();
    path
}

fn rank(site: &PathBuf, plan: &PathBuf, args: &[&str]) -> (i32, String, String) {
    let mut command = Command::new(env!("CARGO_BIN_EXE_fieldbook"));
    let output =
        command.arg("rank").arg("--site").arg(site).arg("--plan").arg(plan).args(args).output().unwrap();
    let text = |bytes: &[u8]| String::from_utf8_lossy(bytes).into_owned();
    (output.status.code().unwrap(), text(&output.stdout), text(&output.stderr))
}

fn json(site: &PathBuf, plan: &PathBuf, args: &[&str]) -> Value {
    let (code, out, error) = rank(site, plan, &[args, &["--json"]].concat());
    assert_eq!(code, 0, "{error}");
    serde_json::from_str(&out).unwrap()
}

fn number(value: &Value, key: &str) -> f64 {
    value[key].as_f64().unwrap_or_else(|| panic!("{key} in {value}"))
}

#[test]
fn every_law_is_told_once_the_best_one_first() {
    let site = site("all", DIFFERENTIAL, "name = \"kanayama\"\n[law.gains]\nk_y = 3", 20);
    let plan = plan("all", r#"{"kind":"arc","radius_m":3,"turn_rad":0.7,"speed_m_s":0.6}"#);
    let ranking = json(&site, &plan, &["--seeds", "2"]);
    let (laws, left_out) = (ranking["laws"].as_array().unwrap(), ranking["left_out"].as_array().unwrap());
    let mut told: Vec<&str> = laws.iter().chain(left_out).map(|law| law["law"].as_str().unwrap()).collect();
    let mut known: Vec<&str> = law::KINDS.iter().map(|kind| kind.name).collect();
    told.sort_unstable();
    known.sort_unstable();
    assert_eq!(told, known);
    let stanley = left_out.iter().find(|law| law["law"] == "stanley").unwrap();
    assert!(
        stanley["reason"].as_str().unwrap().starts_with("this law is for machines that steer"),
        "{stanley}"
    );
    assert_eq!(number(&laws[0], "relative_cost"), 1.0);
    for pair in laws.windows(2) {
        let finished = pair.iter().all(|law| law["finished"] == law["runs"]);
        assert!(!finished || number(&pair[0], "cost_m2_s") <= number(&pair[1], "cost_m2_s"), "{pair:?}");
    }
    for law in laws {
        let own = law["law"] == "kanayama";
        assert_eq!(law["gains_of_site"], own);
        assert!(!own || law["gains"]["k_y"] == 3.0, "the site's gains for the site's law: {law}");
    }
    let (code, text, _) = rank(&site, &plan, &["--seeds", "2"]);
    assert_eq!(code, 0);
    assert!(text.contains(&format!("- choose {} (", ranking["choice"].as_str().unwrap())), "{text}");
    assert!(text.contains("kanayama *") && text.contains("stanley left out: this law"), "{text}");
}

#[test]
fn the_measured_run_is_the_simulated_one() {
    // Without offsets the first run is what `simulate` runs from the plan's start on the ideal stand-in robot.
    let site = site("same", CAR, "name = \"stanley\"", 50);
    let plan = plan(
        "same",
        r#"{"kind":"clothoid","curvature_start_1_m":0,"curvature_end_1_m":0.3,"length_m":3,"speed_m_s":0.8}"#,
    );
    let args = ["--seeds", "1", "--offset-m", "0", "--offset-rad", "0", "--law", "stanley"];
    let ranking = json(&site, &plan, &args);
    let laws = ranking["laws"].as_array().unwrap();
    assert_eq!(laws.len(), 1, "only the law that was asked for");
    let csv = scratch("rank-same.csv");
    let robot = scratch("rank-ideal.toml");
    std::fs::write(&robot, "seed = 0\n").unwrap();
    let simulated = Command::new(env!("CARGO_BIN_EXE_fieldbook"))
        .args(["simulate", "--site", &site.display().to_string(), "--plan", &plan.display().to_string()])
        .args(["--robot", &robot.display().to_string(), "--csv", &csv.display().to_string()])
        .output()
        .unwrap();
    assert!(simulated.status.success());
    let table = std::fs::read_to_string(csv).unwrap();
    let rows: Vec<Vec<f64>> = table
        .lines()
        .skip(1)
        .map(|line| line.split(',').map(|cell| cell.parse().unwrap_or(f64::NAN)).collect())
        .collect();
    // Up to the plan's end: then it settles, and neither counts.
    let driven: Vec<&Vec<f64>> =
        rows.iter().filter(|row| row[0] < number(&laws[0], "plan_duration_s")).collect();
    let cost: f64 =
        driven.iter().map(|row| (row[9].powi(2) + row[10].powi(2) + 0.1 * row[11].powi(2)) * 0.02).sum();
    assert!((number(&laws[0], "cost_m2_s") - cost).abs() < 1e-9 * cost, "{cost} {}", laws[0]);
    let last = rows.last().unwrap();
    let end = last[9].hypot(last[10]);
    assert!((number(&laws[0], "worst_final_position_error_m") - end).abs() < 1e-12);
}

#[test]
fn pursuit_bears_the_dead_time_that_its_linear_model_says() {
    // Heredia and Ollero 2007, Advanced Robotics 21: stable for L_d/(v τ) > 1.9213; here L_d = 1 m, v = 1 m/s, less the
    // half tick for which a command is held.
    let site = site(
        "margin",
        DIFFERENTIAL,
        "name = \"pure-pursuit\"\n[law.gains]\nleast_lookahead_m = 1\nlookahead_time_s = 0",
        50,
    );
    let plan = plan("margin", r#"{"kind":"line","length_m":60,"speed_m_s":1}"#);
    let ranking = json(&site, &plan, &["--seeds", "1", "--law", "pure-pursuit"]);
    let borne = number(&ranking["laws"][0], "extra_dead_time_s");
    let expected = 1.0 / 1.9213 - 0.01;
    assert!(borne > 0.9 * expected && borne < 1.15 * expected, "{borne} against {expected}");
}

#[test]
fn where_no_law_fits_the_reasons_are_told_and_the_exit_code_is_1() {
    let site = site("none", CAR, "name = \"kanayama\"", 20);
    let plan = plan("none", r#"{"kind":"arc","radius_m":1,"turn_rad":1,"speed_m_s":0.5}"#);
    let (code, text, _) = rank(&site, &plan, &[]);
    assert_eq!(code, 1, "{text}");
    assert!(text.contains("kanayama left out: segments[0] (arc)") && text.contains("no law fits"), "{text}");
    let back = self::plan("back", r#"{"kind":"line","length_m":1,"speed_m_s":0.5,"reverse":true}"#);
    let (code, text, _) = rank(&site, &back, &["--law", "off-axle"]);
    assert_eq!(code, 1, "{text}");
    assert!(
        text.contains("off-axle left out: it would turn the machine round on the plan's reverse"),
        "{text}"
    );
}

#[test]
fn unknown_laws_and_bad_offsets_are_refused() {
    let (site, plan) = (PathBuf::from("none"), PathBuf::from("none"));
    for (args, said) in [
        (["--law", "nothing"], "known are kanayama"),
        (["--offset-m", "-1"], "not an offset of at least 0"),
        (["--seeds", "0"], "1..=1000"),
    ] {
        let joined = format!("{}={}", args[0], args[1]);
        let (code, _, error) = rank(&site, &plan, &[&joined]);
        assert!(code == 2 && error.contains(said), "{error}");
    }
}
