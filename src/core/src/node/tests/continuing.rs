//! Plans that continue the one in force: appended, replacing, refused, and what becomes of them at stops.

use super::*;
use alloc::format;

const CIRCLE: &str = r#"{"kind":"arc","radius_m":2,"turn_rad":3,"speed_m_s":1}"#;

/// A plan that goes on at `at_s` at a place on the circle about (0, 2), which a run at 1 m/s reaches after so many seconds.
fn on_circle(revision: u32, at_s: f64, open: bool, segments: &str) -> alloc::string::String {
    let pose = Pose::default().along_arc(at_s, at_s / 2.0);
    from(revision, at_s, open, pose, segments)
}

fn from(revision: u32, at_s: f64, open: bool, pose: Pose, segments: &str) -> alloc::string::String {
    let Pose { x_m, y_m, heading_rad } = pose;
    format!(
        r#"{{"format":"trackhold-plan/1","id":"t","revision":{revision},"open":{open},"continues":{{"at_s":{at_s}}},
        "start":{{"x_m":{x_m},"y_m":{y_m},"heading_rad":{heading_rad}}},"segments":[{segments}]}}"#
    )
}

/// Tracks an open plan on the circle, and has done so for a second.
fn on_the_way(node: &[(&str, f64)]) -> Rig {
    let mut rig = Rig::new(&[&[("rate_hz", RATE_HZ)], node].concat());
    assert_eq!(rig.load(CIRCLE, true), None);
    rig.send_pose(1);
    assert_eq!(rig.start(), None);
    rig.ticks(50);
    rig
}

/// No reference lies farther from the one before than its speed allows.
fn assert_no_jump(records: &[TickRecord]) {
    for pair in records.windows(2) {
        let place = |record: &TickRecord| Pose::new(record.ref_x_m, record.ref_y_m, record.ref_heading_rad);
        let (before, now) = (place(&pair[0]), place(&pair[1]));
        let step = now.distance_to(before);
        let allowed = pair[0].ref_speed_m_s.abs().max(pair[1].ref_speed_m_s.abs()) / RATE_HZ;
        assert!(step <= allowed * (1.0 + 1e-9), "{step} m at tick {}", pair[1].tick);
        assert!(crate::math::wrap(now.heading_rad - before.heading_rad).abs() <= 0.5 / RATE_HZ + 1e-9);
    }
}

fn loaded(rig: &Rig) -> Vec<u32> {
    let revisions = rig.log.iter().filter_map(|entry| match &entry.body {
        Body::PlanLoaded(loaded) => Some(loaded.revision),
        _ => None,
    });
    revisions.collect()
}

#[test]
fn a_plan_appended_to_an_open_ones_end_goes_on_without_a_jump() {
    let mut rig = on_the_way(&[]);
    // The end of 2 m · 3 rad at 1 m/s.
    assert_eq!(rig.send(&on_circle(2, 6.0, true, CIRCLE)), None);
    assert_eq!(loaded(&rig), [1], "it waits");
    let first = rig.node.plan().map(Plan::digest);
    let records = rig.ticks(400);
    assert_no_jump(&records);
    assert_eq!(loaded(&rig), [1, 2]);
    assert!(records.iter().all(|record| record.mode == Mode::Tracking));
    assert_ne!(rig.node.plan().map(Plan::digest), first);
    assert_eq!(rig.node.plan().map(|plan| (plan.begin().seconds(), plan.end().seconds())), Some((6.0, 12.0)));
    let last = records.last().unwrap();
    let exact = Pose::default().along_arc(last.plan_time_ns as f64 * 1e-9, last.plan_time_ns as f64 * 0.5e-9);
    assert!(Pose::new(last.ref_x_m, last.ref_y_m, 0.0).distance_to(exact) < 1e-9, "one clock: {last:?}");
    assert_eq!(rig.until_standby().last().unwrap().cause, Cause::RampEnded);
}

#[test]
fn a_plan_replaces_the_rest_from_its_plan_time_on() {
    let mut rig = on_the_way(&[]);
    let line = r#"{"kind":"line","length_m":1,"speed_m_s":1},{"kind":"arc","radius_m":2,"turn_rad":-2,"speed_m_s":1}"#;
    // Between two ticks of 20 ms.
    assert_eq!(rig.send(&on_circle(2, 1.513, false, line)), None);
    let records = rig.until_standby();
    assert_eq!(records.last().unwrap().cause, Cause::PlanEnded);
    assert_no_jump(&records);
    let switched = records.iter().position(|record| record.plan_time_ns >= 1_513_000_000).unwrap();
    assert!(records[switched].ref_curvature_1_m == 0.0 && records[switched - 1].ref_curvature_1_m == 0.5);
    let order: Vec<&str> = rig.log.iter().map(|entry| entry.body.name()).collect();
    let at = order.iter().rposition(|name| *name == "plan-loaded").unwrap();
    assert_eq!(order[at - 1], "tick", "told after the tick that took over");
}

#[test]
fn a_chain_of_plans_waits_and_a_newer_one_takes_the_place_of_all_that_begin_later() {
    let mut rig = on_the_way(&[]);
    for (revision, at_s) in [(2, 2.0), (3, 2.5), (4, 3.0)] {
        assert_eq!(rig.send(&on_circle(revision, at_s, true, CIRCLE)), None);
    }
    assert_eq!(rig.send(&on_circle(4, 3.0, true, CIRCLE)), None, "the same again is no change");
    assert_eq!(rig.send(&on_circle(6, 2.5, true, CIRCLE)), None);
    assert_eq!(
        rig.send(&on_circle(5, 3.0, true, CIRCLE)),
        Some(Refusal::RevisionNotRising { revision: 5, last: 6 }),
        "overtaken on the way"
    );
    assert_no_jump(&rig.ticks(150));
    assert_eq!(loaded(&rig), [1, 2, 6]);
    // A loop that stalls over two beginnings goes on with the later plan.
    assert_eq!(rig.send(&on_circle(7, 4.1, true, CIRCLE)), None);
    assert_eq!(rig.send(&on_circle(8, 4.2, true, CIRCLE)), None);
    rig.at = rig.at + SpanNs(400_000_000);
    rig.tick();
    assert_eq!(loaded(&rig), [1, 2, 6, 8]);
}

#[test]
fn what_does_not_fit_is_refused_with_place_value_and_limit() {
    let mut rig = on_the_way(&[("continue_lead_s", 0.1)]);
    let mut refused = |raw: &str| rig.send(raw).map(|refusal| refusal.to_string()).unwrap_or_default();
    let here = Pose::default().along_arc(2.0, 1.0);
    let aside = Pose { x_m: here.x_m + 0.02, ..here };
    let turned = Pose { heading_rad: here.heading_rad + 0.03, ..here };
    let fast = CIRCLE.replace("\"speed_m_s\":1", "\"speed_m_s\":1.2");
    for (raw, expected) in [
        (on_circle(2, 1.05, true, CIRCLE), "continues.at_s 1.050 s lies before 1.080 s"),
        (on_circle(2, 6.1, true, CIRCLE), "plan time 6.100 s lies outside the plan, which ends at 6.000 s"),
        (
            from(2, 2.0, true, aside, CIRCLE),
            "at plan time 2.000 s the position steps by 0.0200 m, node.joint_distance_m allows 0.01 m",
        ),
        (
            from(2, 2.0, true, turned, CIRCLE),
            "the heading steps by 0.0300 rad, node.joint_heading_rad allows 0.01 rad",
        ),
        (
            from(2, 2.0, true, here, &fast),
            "the speed steps by 0.2000 m/s, node.joint_speed_m_s allows 0.1 m/s",
        ),
        (on_circle(1, 2.0, true, CIRCLE), "revision 1 does not lie above 1"),
        (on_circle(2, 2.0, true, CIRCLE).replace("\"t\"", "\"u\""), "another plan is followed"),
        (on_circle(2, -1.0, true, CIRCLE), "the plan is not fit"),
    ] {
        let text = refused(&raw);
        assert!(text.contains(expected), "{text}\nexpected: {expected}");
    }
    assert!(rig.last_ack().findings[0].starts_with("continues.at_s: -1 s lies outside 0 to"));
    assert_eq!(rig.node.successors.count(), 0, "nothing changed");
    assert_eq!(rig.send(&on_circle(2, 2.0, true, CIRCLE)), None);
}

#[test]
fn a_plan_without_end_of_successors_is_bounded() {
    let mut rig = on_the_way(&[]);
    for revision in 2..18 {
        assert_eq!(rig.send(&on_circle(revision, 2.0 + 0.1 * f64::from(revision), true, CIRCLE)), None);
    }
    assert_eq!(rig.send(&on_circle(18, 4.0, true, CIRCLE)), Some(Refusal::TooManyWaiting { limit: 16 }));
    assert_eq!(rig.send(&on_circle(18, 3.0, true, CIRCLE)), None, "from an earlier plan time on");
}

#[test]
fn a_controlled_stop_goes_over_to_the_plan_that_waits_and_every_other_end_drops_it() {
    let mut rig = on_the_way(&[]);
    let line = r#"{"kind":"line","length_m":9,"speed_m_s":1}"#;
    assert_eq!(rig.send(&on_circle(2, 1.2, true, line)), None);
    assert_eq!(rig.order(Order::Stop(StopKind::Controlled)), None);
    let refused = rig.send(&on_circle(3, 3.0, true, CIRCLE));
    assert_eq!(refused, Some(Refusal::NothingToContinue { mode: Mode::ControlledStop }));
    let records = rig.until_standby();
    assert_no_jump(&records);
    assert!(records.last().unwrap().ref_curvature_1_m == 0.0, "it stops on the line");
    assert!(rig.pose.distance_to(Pose::default().along_arc(1.2, 0.6)) < 0.6);

    let mut rig = on_the_way(&[]);
    assert_eq!(rig.send(&on_circle(2, 2.0, true, line)), None);
    rig.order(Order::Stop(StopKind::Emergency));
    assert_eq!(rig.node.successors.count(), 0);
    rig.order(Order::Reset);
    assert_eq!(
        rig.send(&on_circle(3, 3.0, true, CIRCLE)),
        Some(Refusal::NothingToContinue { mode: Mode::Standby })
    );
    let mut resume = rig.start_order();
    resume.at = StartAt::Nearest;
    assert_eq!(rig.order(Order::Start(resume)), None, "the plan in force is still the first");
}

#[test]
fn a_run_is_resumed_within_a_plan_that_continued_another() {
    let mut rig = on_the_way(&[]);
    assert_eq!(rig.send(&on_circle(2, 2.0, true, CIRCLE)), None);
    let reached = rig.ticks(150).last().unwrap().plan_time_ns;
    rig.order(Order::Stop(StopKind::Controlled));
    rig.until_standby();
    let digest = rig.node.plan().unwrap().digest();
    let mut resume = Start { plan: digest, at: StartAt::Nearest, ..rig.start_order() };
    assert_eq!(rig.order(Order::Start(resume)), None);
    let record = rig.tick();
    assert!(record.plan_time_ns > reached && record.plan_time_ns < reached + 1_000_000_000, "{record:?}");
    assert!(record.cross_error_m.abs() < 0.01 && record.along_error_m.abs() < 0.03, "{record:?}");
    rig.order(Order::Stop(StopKind::Controlled));
    rig.until_standby();
    (resume.at, resume.plan_time_ns) = (StartAt::PlanTime, 1_900_000_000);
    resume.start_number = rig.node.start_number();
    let before = Refusal::PlanTime { plan_time_ns: 1_900_000_000, duration_ns: 8_000_000_000 };
    assert_eq!(rig.order(Order::Start(resume)), Some(before));
}

#[test]
fn a_closed_plan_is_continued_from_its_rest() {
    let mut rig = Rig::started(LINE);
    // 4 m at 1 m/s with the last half metre braked at 1 m/s²: 4.5 s.
    let end = Pose::new(4.0, 0.0, 0.0);
    let back = r#"{"kind":"arc","radius_m":1,"turn_rad":1,"speed_m_s":0,"end_speed_m_s":0.5,"reverse":true}"#;
    assert_eq!(rig.send(&from(2, 4.5, false, end, back)), None);
    let records = rig.until_standby();
    assert_eq!(records.last().unwrap().cause, Cause::PlanEnded);
    assert!(rig.pose.distance_to(end.along_arc(-1.0, 1.0)) < 0.01, "{:?}", rig.pose);
    assert_no_jump(&records);
}
