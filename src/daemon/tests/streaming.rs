//! Long plans, lost parts, and plans that continue one another, against a daemon on the loopback.

#[expect(dead_code, reason = "each test program uses its own part of this")]
mod common;

use common::{Client, PLAN, daemon, site, tracking};
use std::time::Duration;
use trackhold::Daemon;
use trackhold_core::digest;
use trackhold_proto::Message;
use trackhold_proto::blob::{Blob, Digest};
use trackhold_proto::message::{PlanMissing, PlanPart};

fn part(raw: &[u8], number: usize) -> Message {
    let bytes = raw.chunks(100).nth(number).unwrap();
    Message::PlanPart(PlanPart {
        digest: digest::of_bytes(raw),
        total_bytes: raw.len() as u32,
        part_bytes: 100,
        part: number as u32,
        bytes: Blob::new(bytes).unwrap(),
    })
}

fn missing(planner: &Client) -> PlanMissing {
    planner.wait("plan-missing", |message| match message {
        Message::PlanMissing(missing) => Some(missing),
        _ => None,
    })
}

#[test]
fn a_plan_over_the_maximum_is_refused_at_its_first_part_with_the_figure() {
    let mut site = site(50, "");
    site.net.max_plan_bytes = 2000;
    let daemon = Daemon::start(site).unwrap();
    let mut planner = Client::new(&daemon, 5);
    let long = format!("{PLAN}{}", " ".repeat(2001 - PLAN.len()));
    planner.send(part(long.as_bytes(), 3));
    let refused = planner.ack();
    assert_eq!((refused.accepted, refused.plan), (0, digest::of_bytes(long.as_bytes())));
    let text = refused.text.as_str();
    assert!(text.starts_with("the plan has 2001 bytes, net.max_plan_bytes allows 2000"), "{text}");
    // Its further parts are answered the same, now and then.
    std::thread::sleep(Duration::from_millis(60));
    planner.send(part(long.as_bytes(), 4));
    assert_eq!(planner.ack(), refused);
    assert_eq!(planner.status().plan, Digest::NONE);
    planner.send_plan(&long[..2000]);
    assert_eq!(planner.ack().accepted, 1, "as long as allowed");
    assert_eq!(planner.status().counters.plans_refused, 1);
    daemon.stop().unwrap();
}

#[test]
fn the_planner_is_told_which_parts_are_missing() {
    let daemon = daemon(50, "");
    let mut planner = Client::new(&daemon, 5);
    let raw = format!("{PLAN}{}", " ".repeat(3000));
    let last = raw.len().div_ceil(100) - 1;
    for number in (0..=last).filter(|number| !matches!(number, 1 | 17)) {
        planner.send(part(raw.as_bytes(), number));
    }
    let told = missing(&planner);
    assert_eq!((told.missing, told.parts().collect::<Vec<_>>()), (2, vec![1, 17]));
    planner.send(part(raw.as_bytes(), 17));
    std::thread::sleep(Duration::from_millis(15));
    planner.send(part(raw.as_bytes(), last));
    assert_eq!(missing(&planner).parts().collect::<Vec<_>>(), [1], "asked again");
    planner.send(part(raw.as_bytes(), 1));
    assert_eq!(planner.ack().accepted, 1);
    daemon.stop().unwrap();
}

#[test]
fn a_plan_continues_the_one_that_is_followed_and_the_status_says_which() {
    let (daemon, _estimator, mut planner, _drive) = tracking(100, "");
    let reached_s = planner.status().plan_time_ns as f64 * 1e-9;
    let next = |revision: u32, at_s: f64, aside_m: f64| {
        PLAN.replace(r#""revision":1"#, &format!(r#""revision":{revision},"continues":{{"at_s":{at_s}}}"#))
            .replace(r#""x_m":0,"y_m":0"#, &format!(r#""x_m":{},"y_m":{aside_m}"#, 0.5 * at_s))
    };
    let refused = [
        (
            next(2, reached_s + 0.5, 0.2),
            "the position steps by 0.2000 m, node.joint_distance_m allows 0.01 m",
        ),
        (next(1, reached_s + 0.5, 0.0), "revision 1 does not lie above 1"),
        (next(2, 0.0, 0.0), "continues.at_s 0.000 s lies before"),
        (PLAN.replace("straight", "other"), "not in mode tracking"),
    ];
    for (plan, expected) in refused {
        planner.send_plan(&plan);
        let text = planner.ack().text;
        assert!(text.as_str().contains(expected), "{}", text.as_str());
    }
    let at_s = planner.status().plan_time_ns as f64 * 1e-9 + 0.3;
    let digest = planner.send_plan(&next(2, at_s, 0.0));
    let taken = planner.ack();
    assert_eq!((taken.accepted, taken.text.as_str()), (1, ""));
    let status = planner.status_that("the next plan", |status| status.plan == digest);
    assert_eq!(status.plan_revision, 2);
    // 100 s at 0.5 m/s and the braking, behind where it begins.
    assert!(status.plan_duration_ns as f64 * 1e-9 > at_s + 100.0, "{status:?}");
    daemon.stop().unwrap();
}
