//! What an operator changes while the machine runs.

use super::*;
use crate::math;
use trackhold_proto::journal::{LawChanged, TuneEvent};

#[test]
fn a_cap_is_acknowledged_and_outlasts_stop_and_start() {
    let mut rig = Rig::started(LINE);
    assert_eq!(rig.tick().speed_cap, 1.0);
    assert_eq!(rig.order(Order::Cap { share: 0.4 }), None);
    assert_eq!(rig.last_ack().order_kind, 10);
    assert_eq!(rig.tick().speed_cap, 0.4);
    assert_eq!(rig.order(Order::Stop(StopKind::Emergency)), None);
    assert_eq!(rig.order(Order::Cap { share: 0.5 }), None, "taken in every mode");
    assert_eq!(rig.order(Order::Reset), None);
    assert_eq!(rig.start(), None);
    assert_eq!((rig.tick().speed_cap, rig.node.mode()), (0.5, Mode::Tracking));
}

#[test]
fn a_cap_out_of_bounds_or_repeated_changes_nothing() {
    let mut rig = Rig::started(LINE);
    assert_eq!(rig.order(Order::Cap { share: 0.4 }), None);
    for share in [0.0, 0.049, 1.001, -0.5, f64::NAN, f64::INFINITY] {
        assert_eq!(rig.order(Order::Cap { share }), Some(Refusal::CapOutOfRange), "{share}");
    }
    assert_eq!(rig.order(Order::Cap { share: 0.05 }), None);
    assert_eq!(rig.tick().speed_cap, 0.05);
    // A repetition hears the first outcome; another order under the number is refused.
    assert_eq!(rig.order_again(Order::Cap { share: 0.05 }), None);
    assert_eq!(rig.order_again(Order::Cap { share: 0.8 }), Some(Refusal::SequenceReused));
    assert_eq!(rig.tick().speed_cap, 0.05);
}

#[test]
fn a_cap_at_a_crawl_leaves_the_record_finite_however_near_two_ticks_are() {
    for later_ns in [0, 1, 1000] {
        let mut rig = Rig::new(&[("rate_hz", RATE_HZ)]);
        let line = r#"{"kind":"line","length_m":4,"profile":"trapezoid","speed_m_s":1,"accel_m_s2":0.5}"#;
        assert_eq!(rig.load(line, false), None);
        rig.send_pose(1);
        // A microsecond after its beginning the reference moves with 0.5 µm/s.
        let start = Start { at: StartAt::PlanTime, plan_time_ns: 1000, ..rig.start_order() };
        rig.event(Event::Tick);
        assert_eq!(rig.order(Order::Start(start)), None);
        assert_eq!(rig.order(Order::Cap { share: 0.5 }), None);
        rig.at = TimeNs(rig.at.0 + later_ns);
        rig.event(Event::Tick);
        let record = rig.records().next_back().unwrap();
        assert!(record.ref_speed_m_s > 0.0, "{}", record.ref_speed_m_s);
        assert!(record.ref_accel_m_s2.abs() < 1.0, "{} m/s² after {later_ns} ns", record.ref_accel_m_s2);
    }
}

impl Rig {
    fn tune(&mut self, law: &str) -> Option<Refusal> {
        self.sequence += 1;
        self.tune_again(law)
    }

    fn tune_again(&mut self, law: &str) -> Option<Refusal> {
        let built = Tuning::build(law, self.node.law_context());
        let law = law.to_string();
        let event = TuneEvent { session: 6, sequence: self.sequence, received_ns: self.at.0, law };
        self.event(Event::Tune(event, built));
        self.last_ack().refusal
    }

    fn laws(&self) -> Vec<LawChanged> {
        let bodies = self.log.iter().map(|entry| &entry.body);
        bodies
            .filter_map(|body| if let Body::LawChanged(law) = body { Some(law.clone()) } else { None })
            .collect()
    }
}

const STIFF: &str = r#"{"name":"kanayama","gains":{"k_x":2,"k_y":25,"k_heading":10}}"#;

#[test]
fn a_law_changes_while_tracking_is_told_and_takes_over() {
    let mut rig = Rig::started(LINE);
    rig.ticks(60);
    rig.pose.y_m += 0.1;
    let before = rig.tick();
    assert_eq!(rig.tune(STIFF), None);
    assert_eq!((rig.last_ack().order_kind, rig.node.mode()), (11, Mode::Tracking));
    let [law] = &rig.laws()[..] else { panic!("{:?}", rig.laws()) };
    assert_eq!(law.name.as_str(), "kanayama");
    let gains: Values = serde_json::from_str(&law.gains).unwrap();
    assert_eq!((gains.get("k_x"), gains.get("k_y"), gains.get("k_heading")), (2.0, 25.0, 10.0));
    // The machine's 2 m/s times √k_y.
    assert_eq!((law.speed_m_s, law.bandwidth_rad_s), (2.0, 10.0));
    let settled = rig.ticks(30).pop().unwrap();
    // Kanayama's turn rate on a straight line, from the errors in the record.
    let differs = |record: &TickRecord, k_y: f64, k_heading: f64| {
        let (cos, sin) = math::cos_sin(record.heading_error_rad);
        let e_y = record.along_error_m * sin - record.cross_error_m * cos;
        record.wanted_turn_rate_rad_s - record.ref_speed_m_s * (k_y * e_y - k_heading * sin)
    };
    assert!(differs(&before, 4.0, 4.0).abs() < 1e-9, "{before:?}");
    assert!(differs(&settled, 25.0, 10.0).abs() < 1e-9, "{settled:?}");
    let records: Vec<_> = rig.records().collect();
    assert_within_steps(&records);
}

#[test]
fn a_law_is_taken_in_standby_and_while_tracking_only() {
    let mut rig = Rig::new(&[("rate_hz", RATE_HZ)]);
    assert_eq!(rig.tune(STIFF), None);
    assert_eq!(rig.load(LINE, false), None);
    rig.send_pose(1);
    assert_eq!(rig.start(), None);
    rig.ticks(60);
    let brakes = rig.order(Order::Stop(StopKind::Controlled));
    assert_eq!((brakes, rig.node.mode()), (None, Mode::ControlledStop));
    assert_eq!(rig.tune(STIFF), Some(Refusal::Mode { mode: Mode::ControlledStop }));
    rig.order(Order::Stop(StopKind::Emergency));
    assert_eq!(rig.tune(STIFF), Some(Refusal::Mode { mode: Mode::EmergencyStop }));
    assert_eq!(rig.laws().len(), 1);
}

#[test]
fn a_law_that_cannot_follow_the_plan_is_refused_and_so_is_a_plan_that_the_new_law_cannot_follow() {
    const AHEAD: &str = r#"{"name":"off-axle","gains":{"x_p_m":0.3}}"#;
    const BEHIND: &str = r#"{"name":"off-axle","gains":{"x_p_m":-0.3}}"#;
    let mut rig = Rig::started(LINE);
    rig.ticks(10);
    assert_eq!(rig.tune(BEHIND), Some(Refusal::LawDirection { reverse: false }));
    assert_eq!(rig.tune(AHEAD), None);
    assert!(!rig.node.terms().following.reverse);
    rig.until_standby();
    let back = r#"{"kind":"line","length_m":2,"speed_m_s":0.5,"reverse":true}"#;
    assert_eq!(rig.load(back, false), Some(Refusal::LawDirection { reverse: true }));
    assert_eq!(rig.tune(r#"{"name":"kanayama"}"#), None);
    assert_eq!(rig.load(back, false), None);
    assert_eq!(rig.tune(AHEAD), Some(Refusal::LawDirection { reverse: true }));
    assert_eq!(rig.laws().len(), 2);
}

#[test]
fn an_unfit_law_is_refused_with_findings_and_a_repetition_hears_the_first_outcome() {
    let mut rig = Rig::started(LINE);
    assert_eq!(rig.tune(r#"{"name":"kanayama","gains":{"k_q":1}}"#), Some(Refusal::LawUnfit));
    let findings = rig.last_ack().findings;
    assert!(findings[0].starts_with("law.gains.k_q: no such key here"), "{findings:?}");
    assert_eq!(rig.tune(STIFF), None);
    assert_eq!(rig.tune_again(STIFF), None);
    assert_eq!(rig.laws().len(), 1, "carried out once");
    assert_eq!(rig.tune_again(r#"{"name":"kanayama"}"#), Some(Refusal::SequenceReused));
    assert_eq!(rig.order_again(Order::Reset), Some(Refusal::SequenceReused));
    assert_eq!(rig.laws().len(), 1);
}

#[test]
fn a_cap_slows_a_machine_on_its_way_and_lifting_it_brings_it_back() {
    let mut rig = Rig::started(r#"{"kind":"line","length_m":40,"speed_m_s":1}"#);
    rig.ticks(100);
    assert_eq!(rig.order(Order::Cap { share: 0.4 }), None);
    let slowed = rig.ticks(150).pop().unwrap();
    assert_eq!((slowed.plan_rate, slowed.speed_cap), (0.4, 0.4));
    assert!((slowed.command.speed_m_s - 0.4).abs() < 0.02, "{slowed:?}");
    assert_eq!(rig.order(Order::Cap { share: 1.0 }), None);
    let back = rig.ticks(150).pop().unwrap();
    assert_eq!(back.plan_rate, 1.0);
    assert!((back.command.speed_m_s - 1.0).abs() < 0.02, "{back:?}");
    let records: Vec<_> = rig.records().collect();
    assert_within_steps(&records);
    let last = rig.until_standby().pop().unwrap();
    assert_eq!(last.cause, Cause::PlanEnded);
}

#[test]
fn a_law_that_is_too_fast_for_the_dead_time_is_flagged_at_speed() {
    // Kanayama with k_y = 4: 2 rad/s at 1 m/s, times 0.1 s and half a period of 20 ms: 0.22.
    let mut rig = Rig::new(&[("rate_hz", RATE_HZ), ("dead_time_s", 0.1)]);
    assert_eq!(rig.load(r#"{"kind":"line","length_m":40,"speed_m_s":1}"#, false), None);
    rig.send_pose(1);
    assert_eq!(rig.start(), None);
    let is_thin = |record: &TickRecord| record.has(flag::THIN_MARGIN);
    assert!(rig.ticks(100).iter().all(is_thin));
    rig.order(Order::Cap { share: 0.5 });
    rig.ticks(100);
    assert!(!rig.ticks(50).iter().any(is_thin), "within at half the speed");
    assert_eq!(rig.tune(r#"{"name":"kanayama","gains":{"k_y":20,"k_heading":9}}"#), None);
    assert!(rig.ticks(50).iter().all(is_thin), "and beyond again with stiffer gains");
    rig.order(Order::Stop(StopKind::Emergency));
    assert!(!rig.ticks(50).iter().any(is_thin), "at rest nothing can weave");
}
