//! The program's command line: what it prints, what it refuses, how it ends.

use std::net::UdpSocket;
use std::path::PathBuf;
use std::process::{Command, Output};

const SITE: &str = "[vehicle]\nkind = \"differential\"\nwheel_radius_m = 0.1\ntrack_width_m = 0.5\n\
                    max_wheel_speed_rad_s = 10\nmax_wheel_accel_rad_s2 = 20\n\n[law]\nname = \"kanayama\"\n";

fn file(name: &str, text: &str) -> PathBuf {
    let path = PathBuf::from(env!("CARGO_TARGET_TMPDIR")).join(name);
    std::fs::write(&path, text).unwrap();
    path
}

fn simrobot(site: &str, more: &[&str]) -> Output {
    let site = file(site, SITE);
    let mut command = Command::new(env!("CARGO_BIN_EXE_simrobot"));
    command.arg("--site").arg(site).args(more).output().unwrap()
}

fn text(bytes: &[u8]) -> String {
    String::from_utf8(bytes.to_vec()).unwrap()
}

#[test]
fn it_runs_for_its_time_and_tells_where_it_is() {
    let socket = UdpSocket::bind("127.0.0.1:0").unwrap();
    let to = socket.local_addr().unwrap().to_string();
    let run = simrobot("runs.toml", &["--to", &to, "--seconds", "0.3", "--start=-1.5,2,0.25", "--json"]);
    assert!(run.status.success(), "{}", text(&run.stderr));
    let lines: Vec<serde_json::Value> =
        text(&run.stdout).lines().map(|line| serde_json::from_str(line).unwrap()).collect();
    assert_eq!(lines.len(), 2);
    assert_eq!((&lines[0]["x_m"], &lines[0]["heading_rad"]), (&(-1.5).into(), &0.25.into()));
    assert_eq!(lines[1]["summary"]["y_m"], 2.0);
    assert!(lines[1]["summary"]["poses_sent"].as_u64().unwrap() > 0);
    let run = simrobot("runs.toml", &["--to", &to, "--seconds", "0.1", "--loss", "1"]);
    assert!(text(&run.stdout).contains("truly at x 0.000 m"), "{}", text(&run.stdout));
}

#[test]
fn what_does_not_hold_is_refused_with_a_reason() {
    let robot = file("bad-robot.toml", "[sensor]\nrate_hz = -1\n");
    for (arguments, code, expected) in [
        (vec!["--to", "127.0.0.1:9", "--loss", "1.5"], 2, "link.loss: 1.5 is not at least 0 and at most 1"),
        (
            vec!["--to", "127.0.0.1:9", "--robot", robot.to_str().unwrap()],
            2,
            "bad-robot.toml:2: sensor.rate_hz: -1 Hz",
        ),
        (vec!["--to", "127.0.0.1"], 2, "give host and port"),
        (vec!["--to", "127.0.0.1:9", "--start=1,2"], 2, "give three finite numbers"),
        (vec!["--to", "127.0.0.1:9", "--seconds=-1"], 2, "greater than 0"),
        (vec!["--to", "127.0.0.1:9", "--robot", "no/such.toml"], 2, "no/such.toml: cannot be read"),
    ] {
        let run = simrobot("refused.toml", &arguments);
        assert_eq!(run.status.code(), Some(code), "{arguments:?}");
        assert!(text(&run.stderr).contains(expected), "{arguments:?}: {}", text(&run.stderr));
    }
}
