//! Every kind of mistake in a site file, and what is said about it.

use super::{Net, Site};

const GOOD: &str = r#"
[vehicle]
kind = "differential"
wheel_radius_m = 0.1
track_width_m = 0.5
max_wheel_speed_rad_s = 10
max_wheel_accel_rad_s2 = 20

[law]
name = "kanayama"
"#;

fn refused(text: &str) -> String {
    Site::parse(text, "site.toml").unwrap_err().to_string()
}

/// The good file with some more lines at its end, line 12 on.
fn refused_with(more: &str) -> String {
    refused(&format!("{GOOD}\n{more}"))
}

#[test]
fn vehicle_and_law_are_enough_and_whole_numbers_are_numbers() {
    let site = Site::parse(GOOD, "site.toml").unwrap();
    assert_eq!(site.net, Net::default());
    assert_eq!(site.settings.vehicle.values.get("max_wheel_speed_rad_s"), 10.0);
    assert_eq!(site.settings.node.get("rate_hz"), 50.0);
    assert!(site.settings.law.gains.iter().count() > 0, "default gains are filled in");
}

#[test]
fn every_net_key_is_read() {
    let net = "[net]\nlisten = \"[::1]:0\"\nring_bytes = 0x200000\nmax_plan_bytes = 50000\nrealtime_priority = 80\ncpu = 1\nlock_memory = true\n";
    let site = Site::parse(&format!("{GOOD}\n{net}"), "site.toml").unwrap();
    let expected = Net {
        listen: "[::1]:0".parse().unwrap(),
        ring_bytes: 2 << 20,
        max_plan_bytes: 50_000,
        realtime_priority: Some(80),
        cpu: Some(1),
        lock_memory: true,
    };
    assert_eq!(site.net, expected);
}

#[test]
fn a_value_outside_its_bound_is_named_with_line_key_value_bound_and_unit() {
    let text = GOOD.replace("track_width_m = 0.5", "track_width_m = -0.5");
    assert_eq!(
        refused(&text),
        "site.toml:5: vehicle.track_width_m: -0.5 m is not greater than 0 and at most 5 m"
    );
    assert_eq!(
        refused_with("[node]\nrate_hz = inf"),
        "site.toml:13: node.rate_hz: inf Hz is not at least 10 and at most 1000 Hz"
    );
    assert_eq!(
        refused_with("[net]\nrealtime_priority = 99"),
        "site.toml:13: net.realtime_priority: 99 is not at least 1 and at most 98"
    );
    assert!(refused_with("[law.gains]\nk_x = -1").starts_with("site.toml:13: law.gains.k_x: -1"));
    let said = refused(&GOOD.replace("wheel_radius_m", "left_wheel_radius_m"));
    assert!(
        said.contains("vehicle.right_wheel_radius_m: missing; left_wheel_radius_m is given, give both"),
        "{said}"
    );
}

#[test]
fn unknown_keys_and_sections_are_refused_with_those_known() {
    let text = GOOD.replace("track_width_m", "track_with_m");
    let said = refused(&text);
    let known = "kind, wheel_radius_m, left_wheel_radius_m, right_wheel_radius_m, track_width_m,";
    assert!(
        said.contains(&format!("site.toml:5: vehicle.track_with_m: no such key here; known are {known}")),
        "{said}"
    );
    assert!(
        said.contains("vehicle.track_width_m: missing; give a value greater than 0 and at most 5 m"),
        "{said}"
    );
    assert_eq!(
        refused_with("[radio]\nchannel = 1"),
        "site.toml:12: radio: no such section; known are vehicle, law, node, pose, check, net"
    );
    assert!(
        refused(&format!("rate_hz = 50\n{GOOD}"))
            .starts_with("site.toml:1: rate_hz: stands outside every section")
    );
    assert_eq!(
        refused_with("[net]\nport = 4710"),
        "site.toml:13: net.port: no such key here; known are listen, lock_memory, ring_bytes, max_plan_bytes, realtime_priority, cpu"
    );
}

#[test]
fn a_design_key_that_does_not_hold_is_named_with_its_line() {
    let gains = |lines: &str| refused_with(&format!("[law.gains]\n{lines}"));
    assert_eq!(
        gains("settling_distance_m = 2\nk_y = 4"),
        "site.toml:14: law.gains.k_y: given together with settling_distance_m, which determines it; give one of the two"
    );
    assert_eq!(
        gains("settling_distance_m = 0.05"),
        "site.toml:13: law.gains.settling_distance_m: 0.05 m asks for k_y = 10000 1/m², which is not greater than 0 and at most 1000 1/m²"
    );
    assert_eq!(
        gains("setling_distance_m = 2"),
        "site.toml:13: law.gains.setling_distance_m: no such key here; known are k_x, k_y, k_heading, k_i, damping, settling_distance_m, bandwidth_rad_s, design_speed_m_s"
    );
}

#[test]
fn wrong_types_are_refused_with_what_is_wanted() {
    for (more, said) in [
        ("[node]\nrate_hz = \"fast\"", "site.toml:13: node.rate_hz: \"fast\" is a text, give a number"),
        ("[node]\nrate_hz = [50]", "site.toml:13: node.rate_hz: [50] is an array, give a number"),
        (
            "[net]\nlisten = 4710",
            "site.toml:13: net.listen: 4710 is a number, give a text such as \"127.0.0.1:4710\"",
        ),
        ("[net]\nlock_memory = 1", "site.toml:13: net.lock_memory: 1 is a number, give true or false"),
        ("[net]\ncpu = 1.5", "site.toml:13: net.cpu: 1.5 is not a whole number"),
        ("[[pose]]\noffset_x_m = 1", "site.toml:12: pose: an array; write it as a section, [pose]"),
    ] {
        assert_eq!(refused_with(more), said);
    }
    let said = refused(&GOOD.replace("\"differential\"", "3"));
    assert!(
        said.starts_with("site.toml:3: vehicle.kind: 3 is a number, give a text, one of unicycle,"),
        "{said}"
    );
}

#[test]
fn missing_and_unknown_names_are_refused_with_those_known() {
    let said = refused("[law]\nname = \"pure\"\n");
    assert!(
        said.contains("site.toml:1: vehicle.kind: missing; give one of unicycle, differential, skid-steer,"),
        "{said}"
    );
    assert!(
        said.contains("site.toml:2: law.name: no law \"pure\"; known are kanayama, samson, off-axle"),
        "{said}"
    );
}

#[test]
fn a_key_given_twice_is_refused_where_it_stands() {
    let said = refused(&GOOD.replace("track_width_m = 0.5", "track_width_m = 0.5\ntrack_width_m = 0.6"));
    assert_eq!(said, "site.toml:6: track_width_m: given twice; keep one of them");
}

#[test]
fn what_is_no_toml_is_refused_with_its_line() {
    let said = refused(&GOOD.replace("track_width_m = 0.5", "track_width_m 0.5"));
    assert!(said.starts_with("site.toml:5: ") && said.contains("not TOML: "), "{said}");
    refused("[vehicle");
    refused(&"[".repeat(100_000));
}

#[test]
fn an_address_that_others_can_reach_is_refused_until_datagrams_are_authenticated() {
    let said = refused_with("[net]\nlisten = \"0.0.0.0:4710\"");
    assert!(said.starts_with("site.toml:13: net.listen: 0.0.0.0:4710 can be reached"), "{said}");
    assert!(said.contains("datagrams are not authenticated yet: listen on a loopback address"), "{said}");
    assert!(refused_with("[net]\nlisten = \"robot:4710\"").contains("not an address and port"));
}

#[test]
fn values_that_do_not_go_together_and_all_problems_at_once() {
    let said = refused(
        &(GOOD.replace("0.5", "50").replace("kanayama", "nobody")
            + "[node]\nrate_hz = 10\ncommand_validity_s = 0.1\n[pose]\nyaw = 1\n"),
    );
    let lines: Vec<&str> = said.lines().collect();
    assert_eq!(lines.len(), 4, "{said}");
    assert!(
        lines[2].starts_with("site.toml:13: node.command_validity_s: 0.1 s is shorter than 2 periods"),
        "{said}"
    );
}

#[test]
fn a_file_that_is_not_there_is_another_error_than_one_that_is_wrong() {
    let error = Site::load(std::path::Path::new("/no/such/site.toml")).unwrap_err();
    assert!(matches!(error, super::SiteError::Unreadable { .. }), "{error}");
}
