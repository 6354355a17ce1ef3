use super::*;
use crate::testing::{car, differential, front_steered, steered_wheel, unicycle};

fn refused(text: &str) -> String {
    RobotSpec::parse(text, "robot.toml").unwrap_err().to_string()
}

#[test]
fn an_empty_file_is_an_ideal_robot() {
    let spec = RobotSpec::parse("", "robot.toml").unwrap();
    assert_eq!(spec, RobotSpec::default());
    for vehicle in [differential(), unicycle(), car()] {
        assert_eq!(spec.check_for(&*vehicle), Ok(()));
    }
    let site = Mount { offset_x_m: 0.3, offset_y_m: 0.0, heading_offset_rad: 3.0 };
    assert_eq!(spec.mount_or(site), site);
}

#[test]
fn all_sections_are_read() {
    let text = "seed = 12\n[drive]\nwheel_lag_s = 0.1\n[chassis]\nslip = 0.02\n[sensor]\nrate_hz = 20\n\
                [pose]\noffset_x_m = 0.5\n";
    let spec = RobotSpec::parse(text, "robot.toml").unwrap();
    assert_eq!(
        (spec.seed, spec.drive.wheel_lag_s, spec.chassis.slip, spec.sensor.rate_hz),
        (12, 0.1, 0.02, 20.0)
    );
    let site = Mount { offset_x_m: 0.3, offset_y_m: 0.1, heading_offset_rad: 0.0 };
    assert_eq!(spec.mount_or(site), Mount { offset_x_m: 0.5, ..site });
}

#[test]
fn every_problem_names_file_line_key_value_bound_and_unit() {
    assert_eq!(
        refused(
            "sead = 1\n[sensor]\nrate_hz = 0\nlatency = 0.1\n[wheels]\nslip = 0\n[drive]\nwheel_lag_s = \"slow\"\ndead_time_s = [1]\n"
        ),
        "robot.toml:1: sead: no such key here; known are seed\n\
         robot.toml:3: sensor.rate_hz: 0 Hz is not at least 0.1 and at most 1000 Hz\n\
         robot.toml:4: sensor.latency: no such key here; known are rate_hz, position_sd_m, heading_sd_rad, latency_s, \
         jitter_s, dropout_probability, burst_probability, burst_length_s, outage_start_s, outage_length_s, \
         jump_probability, jump_m, jump_heading_rad, jump_length_s, clock_offset_s, clock_drift_ppm\n\
         robot.toml:5: wheels: no such section; known are seed, drive, chassis, sensor, pose\n\
         robot.toml:8: drive.wheel_lag_s: the text \"slow\" where a number belongs\n\
         robot.toml:9: drive.dead_time_s: array where a number belongs"
    );
}

#[test]
fn single_problems_are_told() {
    for (text, expected) in [
        ("seed = 1.5", "robot.toml:1: seed: 1.5 is not a whole number"),
        ("seed = -1", "robot.toml:1: seed: -1 is not at least 0 and at most 9007199254740992"),
        (
            "[drive]\nwheel_lag_s = 1e-4",
            "robot.toml:2: drive.wheel_lag_s: 0.0001 s is neither 0 nor at least 0.001 s",
        ),
        (
            "[sensor]\njitter_s = nan",
            "robot.toml:2: sensor.jitter_s: NaN s is not at least 0 and at most 5 s",
        ),
        (
            "[pose]\noffset_x_m = 21",
            "robot.toml:2: pose.offset_x_m: 21 m is not at least -20 and at most 20 m",
        ),
    ] {
        assert_eq!(refused(text), expected);
    }
    assert!(refused("[sensor\n").starts_with("robot.toml:1: "));
    assert!(refused("[sensor]\nrate_hz = 1\nrate_hz = 2\n").starts_with("robot.toml:3: "));
    let missing = RobotSpec::load(Path::new("no/such/robot.toml")).unwrap_err().to_string();
    assert!(missing.starts_with("no/such/robot.toml: cannot be read: "), "{missing}");
}

#[test]
fn what_means_nothing_for_a_machine_is_refused() {
    let key = |text: &str, vehicle: &dyn Vehicle| {
        let spec = RobotSpec::parse(text, "robot.toml").unwrap();
        spec.check_for(vehicle).err().map(|problems| problems[0].key.clone())
    };
    let steer = "[drive]\nsteer_lag_s = 0.1\n";
    assert_eq!(key(steer, &*differential()).as_deref(), Some("drive.steer_lag_s"));
    assert_eq!(key(steer, &*car()), None);
    let offset = "[chassis]\nsteer_offset_rad = 0.1\n";
    assert_eq!(key(offset, &*unicycle()).as_deref(), Some("chassis.steer_offset_rad"));
    let track = "[chassis]\ntrack_error = 0.1\n";
    assert_eq!(key(track, &*car()).as_deref(), Some("chassis.track_error"));
    assert_eq!(key(track, &*unicycle()), None);
    let radius = "[chassis]\nleft_radius_error = 0.1\n";
    assert_eq!(key(radius, &*unicycle()).as_deref(), Some("chassis.left_radius_error"));
    assert_eq!(key(radius, &*car()), None);
    assert_eq!(key(radius, &*steered_wheel()).as_deref(), Some("chassis.left_radius_error"));
    assert_eq!(key(track, &*steered_wheel()).as_deref(), Some("chassis.track_error"));
    assert_eq!(key(steer, &*front_steered()), None);
}

#[test]
fn the_robot_files_of_this_house_are_sound() {
    let folder = Path::new(env!("CARGO_MANIFEST_DIR")).join("../../config/robots");
    let mut names = Vec::new();
    for entry in std::fs::read_dir(folder).unwrap() {
        let path = entry.unwrap().path();
        let spec = RobotSpec::load(&path).unwrap_or_else(|error| panic!("{error}"));
        let name = path.file_stem().unwrap().to_string_lossy().into_owned();
        let vehicle = if name.starts_with("car-") { car() } else { differential() };
        assert_eq!(spec.check_for(&*vehicle), Ok(()), "{name}");
        names.push(name);
    }
    names.sort();
    assert_eq!(names, ["car-worn", "ideal", "laggy", "lost", "worn"]);
    let ideal =
        RobotSpec::load(&Path::new(env!("CARGO_MANIFEST_DIR")).join("../../config/robots/ideal.toml"))
            .unwrap();
    assert_eq!(ideal, RobotSpec::default());
}
