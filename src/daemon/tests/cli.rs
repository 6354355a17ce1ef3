//! The program itself: exit codes, what it prints, and how it ends on a signal.

use std::io::{BufRead, BufReader};
use std::path::PathBuf;
use std::process::{Command, Output, Stdio};
use trackhold::site::Site;
use trackhold_core::geometry::Pose;
use trackhold_core::node::{Event, Node};
use trackhold_core::plan::check::admit;
use trackhold_core::plan::compile;
use trackhold_core::time::TimeNs;
use trackhold_proto::blob::Hex;
use trackhold_proto::journal::{Body, Order, OrderEvent, PlanEvent, PoseEvent};
use trackhold_proto::message::{self, Start};
use trackhold_proto::words::{Cause, Mode, StartAt};

fn trackhold(arguments: &[&str]) -> Output {
    Command::new(env!("CARGO_BIN_EXE_trackhold")).args(arguments).output().unwrap()
}

fn config(name: &str) -> String {
    let path = PathBuf::from(env!("CARGO_MANIFEST_DIR")).join("../../config").join(name);
    path.to_str().unwrap().to_owned()
}

/// The ready site files, each with a plan that fits.
const READY: [(&str, &str); 6] = [
    ("unicycle.toml", "plans/yard-loop.json"),
    ("differential.toml", "plans/yard-loop.json"),
    ("skid-steer.toml", "plans/yard-loop.json"),
    ("car.toml", "plans/delivery-run.json"),
    ("car-ackermann.toml", "plans/delivery-run.json"),
    ("steered-wheel.toml", "plans/delivery-run.json"),
];

#[test]
fn every_ready_site_file_holds_and_its_plan_fits() {
    for (site, plan) in READY {
        let output = trackhold(&["check-config", &config(site)]);
        let said = String::from_utf8(output.stdout).unwrap();
        assert_eq!(output.status.code(), Some(0), "{site}: {}", String::from_utf8_lossy(&output.stderr));
        assert!(said.contains("m  together") && said.contains("[net]"), "{said}");
        let checked = Site::load(config(site).as_ref()).unwrap().checked().unwrap();
        let raw = std::fs::read(config(plan)).unwrap();
        let compiled = admit(&raw, &checked.terms());
        let plan = compiled.unwrap_or_else(|findings| panic!("{site} {plan}: {findings:#?}"));
        assert!((20.0..60.0).contains(&plan.duration_s()), "{}", plan.duration_s());
        assert_eq!(checked.law.domain().unfit_direction(plan.travel()), None, "{site}");
    }
}

/// An ideal machine in a closed loop: what is commanded at a tick is done until the next.
#[test]
fn every_ready_machine_follows_its_plan_to_the_end() {
    for (site, plan) in READY {
        let mut settings = Site::load(config(site).as_ref()).unwrap().settings;
        settings.pose = Default::default();
        let mut entries = Vec::new();
        let mut node = Node::new(&settings, Hex([0; 16]), 1, TimeNs(0), &mut entries).unwrap();
        let raw = std::fs::read(config(plan)).unwrap();
        let compiled = compile(&raw, &**node.vehicle()).unwrap();
        let digest = compiled.digest();
        let end = compiled.at(compiled.duration_s(), &mut 0).pose;
        let event = PlanEvent { session: 1, sequence: 1, digest, raw };
        node.handle(TimeNs(0), Event::Plan(event, Ok(Box::new(compiled))), &mut entries);
        let (mut pose, mut worst_m) = (Pose::new(0.0, 0.0, 0.0), 0.0_f64);
        for k in 1..5000_u64 {
            let at = TimeNs(k * 20_000_000);
            let (x_m, y_m, heading_rad) = (pose.x_m, pose.y_m, pose.heading_rad);
            let seen = message::Pose {
                measured_ns: at.0,
                x_m,
                y_m,
                heading_rad,
                position_sd_m: 0.0,
                heading_sd_rad: 0.0,
            };
            let event = PoseEvent { session: 1, sequence: k, received_ns: at.0, pose: seen };
            node.handle(at, Event::Pose(event), &mut entries);
            if k == 1 {
                let (boot, start_number) = (node.boot(), node.start_number());
                let start =
                    Start { boot, plan: digest, start_number, at: StartAt::Beginning, plan_time_ns: 0 };
                let event =
                    OrderEvent { session: 2, sequence: 1, received_ns: at.0, order: Order::Start(start) };
                node.handle(at, Event::Order(event), &mut entries);
            }
            node.handle(at, Event::Tick, &mut entries);
            let Some(Body::Tick(tick)) =
                entries.iter().rev().map(|entry| &entry.body).find(|body| body.name() == "tick")
            else {
                panic!("a tick gives a record")
            };
            worst_m = worst_m.max(tick.cross_error_m.abs());
            pose = pose.moved(node.vehicle().body(&tick.command.wheels), 0.02);
            entries.clear();
            if node.mode() != Mode::Tracking {
                break;
            }
        }
        assert_eq!((node.mode(), node.cause()), (Mode::Standby, Cause::PlanEnded), "{site}");
        assert!(
            pose.distance_to(end) < 0.02,
            "{site}: ends {:.3} m from the plan's end",
            pose.distance_to(end)
        );
        assert!(worst_m < 0.25, "{site}: {worst_m:.3} m off the path");
    }
}

#[test]
fn exit_codes_tell_a_wrong_file_from_one_that_is_not_there() {
    let missing = trackhold(&["check-config", "no/such/site.toml"]);
    assert_eq!(missing.status.code(), Some(2));
    let plan = config("plans/yard-loop.json");
    for arguments in [["check-config", &plan].as_slice(), &["run", "--config", &plan]] {
        let wrong = trackhold(arguments);
        assert_eq!(wrong.status.code(), Some(1), "{arguments:?}");
        let said = String::from_utf8(wrong.stderr).unwrap();
        assert!(said.starts_with(&format!("{plan}:1: ")), "{said}");
    }
    assert_eq!(trackhold(&["walk"]).status.code(), Some(2));
    assert!(trackhold(&["--version"]).status.success());
}

#[test]
fn it_tells_where_it_listens_and_ends_well_on_a_signal() {
    for signal in [nix::sys::signal::Signal::SIGTERM, nix::sys::signal::Signal::SIGINT] {
        let text = std::fs::read_to_string(config("differential.toml")).unwrap();
        let site = std::env::temp_dir().join(format!("trackhold-{}-{signal}.toml", std::process::id()));
        std::fs::write(&site, text.replace("127.0.0.1:4710", "127.0.0.1:0")).unwrap();
        let mut child = Command::new(env!("CARGO_BIN_EXE_trackhold"))
            .args(["run", "--config", site.to_str().unwrap()])
            .stderr(Stdio::piped())
            .spawn()
            .unwrap();
        let mut lines = BufReader::new(child.stderr.take().unwrap()).lines().map_while(Result::ok);
        let first = lines.next().unwrap();
        assert!(
            first.contains("listening on 127.0.0.1:") && first.contains("vehicle differential, law"),
            "{first}"
        );
        assert!(lines.next().unwrap().contains("A network stop is a request, not a safety function"));
        nix::sys::signal::kill(nix::unistd::Pid::from_raw(child.id() as i32), signal).unwrap();
        assert_eq!(child.wait().unwrap().code(), Some(0), "{:?}", lines.collect::<Vec<_>>());
        std::fs::remove_file(site).unwrap();
    }
}
