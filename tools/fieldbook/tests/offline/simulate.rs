//! The command `simulate`: what it prints, what it refuses.

use crate::common::{case_named, reference, scratch};
use std::process::Command;

fn simulate(name: &str, args: &[&str]) -> (i32, String, String) {
    let (site, plan) = (reference(&format!("{name}.site.toml")), reference(&format!("{name}.plan.json")));
    let output = Command::new(env!("CARGO_BIN_EXE_fieldbook"))
        .args(["simulate", "--site"])
        .arg(site)
        .arg("--plan")
        .arg(plan)
        .args(args)
        .output()
        .unwrap();
    let text = |bytes: &[u8]| String::from_utf8_lossy(bytes).into_owned();
    (output.status.code().unwrap(), text(&output.stdout), text(&output.stderr))
}

fn json(name: &str, args: &[&str]) -> serde_json::Value {
    let (code, out, error) = simulate(name, &[args, &["--json"]].concat());
    assert_eq!(code, 0, "{error}");
    serde_json::from_str(&out).unwrap()
}

#[test]
fn json_and_table_say_the_same() {
    let csv = scratch("same.csv");
    let object =
        json("kanayama-differential", &["--start=-0.6,0.7,-0.9", "--csv", &csv.display().to_string()]);
    let table = std::fs::read_to_string(csv).unwrap();
    let header = table.lines().next().unwrap();
    assert_eq!(
        header,
        "t_s,x_m,y_m,heading_rad,ref_x_m,ref_y_m,ref_heading_rad,ref_speed_m_s,ref_turn_rate_rad_s,along_error_m,\
         cross_error_m,heading_error_rad,speed_m_s,turn_rate_rad_s,mode,left_wheel_rad_s,right_wheel_rad_s"
    );
    let rows: Vec<Vec<&str>> = table.lines().skip(1).map(|line| line.split(',').collect()).collect();
    assert_eq!(object["ticks"].as_u64().unwrap(), rows.len() as u64);
    let last = rows.last().unwrap();
    assert_eq!(object["duration_s"].as_f64().unwrap(), last[0].parse::<f64>().unwrap());
    assert_eq!(object["mode_at_end"], last[14]);
    let column = |place: usize| rows.iter().map(move |row| row[place].parse::<f64>().unwrap());
    let rms =
        |place: usize| (column(place).map(|value| value * value).sum::<f64>() / rows.len() as f64).sqrt();
    for (key, place) in [("rms_along_m", 9), ("rms_cross_m", 10), ("rms_heading_rad", 11)] {
        assert!((object[key].as_f64().unwrap() - rms(place)).abs() < 1e-12, "{key}");
    }
    let greatest = column(10).fold(0.0, |most: f64, value| most.max(value.abs()));
    assert_eq!(object["max_cross_m"].as_f64().unwrap(), greatest);
    let at_end = |place: usize| last[place].parse::<f64>().unwrap();
    let away = at_end(9).hypot(at_end(10));
    assert!((object["final_position_error_m"].as_f64().unwrap() - away).abs() < 1e-12);
    assert_eq!(object["final_heading_error_rad"].as_f64().unwrap(), at_end(11));
    assert_eq!(object["digest"].as_str().unwrap().len(), 64);
}

#[test]
fn numbers_in_the_table_read_back_to_the_same_bits() {
    let csv = scratch("bits.csv");
    simulate("samson-car", &["--csv", &csv.display().to_string()]);
    let table = std::fs::read_to_string(csv).unwrap();
    let case = case_named("samson-car");
    let mut rows = crate::common::Rows::default();
    fieldbook::sim::simulate(&case.settings, &case.plan, &Default::default(), &mut rows).unwrap();
    assert_eq!(table.lines().count(), rows.0.len() + 1);
    for (line, row) in table.lines().skip(1).zip(&rows.0) {
        let cells: Vec<&str> = line.split(',').collect();
        let read = |place: usize| cells[place].parse::<f64>().unwrap().to_bits();
        assert_eq!(read(1), row.truth.x_m.to_bits());
        assert_eq!(read(13), row.record.command.turn_rate_rad_s.to_bits());
        assert_eq!(read(16), row.record.command.wheels[1].to_bits());
    }
}

#[test]
fn law_and_gain_choose_what_follows() {
    let site = json("kanayama-unicycle", &[]);
    assert_eq!((&site["law"], &site["gains"]["k_y"]), (&"kanayama".into(), &12.0.into()));
    let own = json("kanayama-unicycle", &["--law", "kanayama", "--gain", "k_y=5"]);
    assert_eq!((&own["gains"]["k_y"], &own["gains"]["k_x"]), (&5.0.into(), &2.0.into()));
    let other = json("kanayama-unicycle", &["--law", "samson", "--gain", "k_2=5"]);
    assert_eq!((&other["gains"]["k_2"], &other["gains"]["k_x"]), (&5.0.into(), &serde_json::Value::Null));
    assert_ne!(site["digest"], own["digest"]);
    let (code, _, error) = simulate("kanayama-unicycle", &["--gain", "k_2=5"]);
    assert!(code == 2 && error.contains("known are k_x, k_y, k_heading"), "{error}");
    let (code, _, error) = simulate("kanayama-unicycle", &["--gain", "k_y=-5"]);
    assert!(code == 2 && error.contains("-5 1/m² is not greater than 0"), "{error}");
}

#[test]
fn a_run_can_be_cut_short_and_a_far_start_is_refused() {
    let object = json("kanayama-unicycle", &["--seconds", "2"]);
    assert_eq!((&object["ticks"], &object["duration_s"]), (&101.into(), &2.0.into()));
    assert_eq!(object["mode_at_end"], "tracking");
    let (code, _, error) = simulate("kanayama-unicycle", &["--start=50,0,0"]);
    assert!(code == 2 && error.contains("start_distance_m"), "{error}");
    for wrong in ["--start=1,2", "--start=1,2,x", "--start=1,2,3,4", "--seconds=-1", "--gain=k_y"] {
        assert_eq!(simulate("kanayama-unicycle", &[wrong]).0, 2, "{wrong}");
    }
}

#[test]
fn a_guard_that_stops_the_run_is_named() {
    let (code, out, error) =
        simulate("samson-car", &["--start=5.3,-3.1,2.9", "--gain", "k_3=0.01", "--gain", "k_2=900"]);
    assert_eq!(code, 0, "{error}");
    assert!(out.contains("stopped by a guard: protective-stop (outside-law-domain)"), "{out}");
}
