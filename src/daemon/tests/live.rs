//! Tunes and caps over the wire, in both forms; hostile ones are refused by name, and the machine goes on.

#[expect(dead_code, reason = "each test program uses its own part of this")]
mod common;

use common::{Client, PATIENCE, tracking};
use std::net::UdpSocket;
use std::time::{Duration, Instant};
use trackhold_proto::Message;
use trackhold_proto::blob::Text;
use trackhold_proto::message::{Ack, Cap, Tune};
use trackhold_proto::words::Mode;

fn tune(operator: &mut Client, law: &str) -> Ack {
    operator.send(Message::Tune(Tune { law: Text::cut(law) }));
    let ack = operator.ack();
    assert_eq!(ack.order_kind, 11);
    ack
}

#[test]
fn hostile_tunes_are_refused_by_name_while_the_machine_goes_on() {
    let (daemon, _estimator, mut operator, _drive) = tracking(50, "");
    let before = operator.status();
    assert_eq!((before.law.as_str(), before.bandwidth_rad_s), ("kanayama", 2.0), "1 m/s times √4");
    let deep = format!(r#"{{"name":"kanayama","gains":{{"k_x":{}"#, "[".repeat(850));
    let cases = [
        ("", "law: EOF"),
        ("\u{0}\u{1}\u{7f}", "law: expected value"),
        (deep.as_str(), "law: recursion limit exceeded"),
        (r#"{"name":"nobody"}"#, "law.name: no law \"nobody\""),
        (r#"{"name":"stanley"}"#, "law.name: stanley: "),
        (r#"{"name":"kanayama","gains":{"k_y":1e6}}"#, "law.gains.k_y: 1000000 1/m²"),
        (r#"{"name":"kanayama","gains":{"k_y":4,"k_y":4}}"#, "gains.k_y is given twice"),
        (r#"{"name":"kanayama","gains":{"K_Y":4}}"#, "law.gains.K_Y: no such key here; known are"),
        (r#"{"name":"off-axle","gains":{"x_p_m":-0.3}}"#, "on the plan's forward stretches"),
    ];
    for (law, expected) in cases {
        let ack = tune(&mut operator, law);
        assert!(ack.accepted == 0 && ack.text.as_str().contains(expected), "{law:.60}: {:?}", ack.text);
    }
    let after = operator.status();
    assert_eq!((after.mode, after.law, after.gains), (Mode::Tracking, before.law, before.gains));
    assert_eq!(after.counters.orders_refused - before.counters.orders_refused, cases.len() as u64);
    let good = tune(&mut operator, r#"{"name":"kanayama","gains":{"k_y":9,"k_heading":6}}"#);
    assert_eq!((good.accepted, good.text.as_str()), (1, ""));
    assert_eq!(operator.status().bandwidth_rad_s, 3.0, "1 m/s times √9");
    daemon.stop().unwrap();
}

#[test]
fn a_cap_outside_its_bounds_is_malformed_and_one_within_slows_the_plan() {
    let (daemon, _estimator, mut operator, _drive) = tracking(50, "");
    let before = operator.status();
    for share in [0.0, 0.049, 1.5, -1.0] {
        operator.send(Message::Cap(Cap { share }));
    }
    let after = operator.status_that("counted", |status| status.counters.malformed >= 4);
    assert_eq!((after.counters.malformed, after.speed_cap), (before.counters.malformed + 4, 1.0));
    operator.send(Message::Cap(Cap { share: 0.5 }));
    assert_eq!(operator.ack().order_kind, 10);
    operator.status_that("slowed down", |status| status.speed_cap == 0.5 && status.plan_rate <= 0.5);
    daemon.stop().unwrap();
}

#[test]
fn a_shell_can_tune_and_cap_in_json() {
    let (daemon, _estimator, mut operator, _drive) = tracking(50, "");
    let socket = UdpSocket::bind("127.0.0.1:0").unwrap();
    socket.set_read_timeout(Some(Duration::from_millis(20))).unwrap();
    let answer = |order: &str| {
        let mut bytes = [0; 9000];
        socket.send_to(order.as_bytes(), daemon.address()).unwrap();
        let begun = Instant::now();
        while begun.elapsed() < PATIENCE {
            if let Ok(length) = socket.recv(&mut bytes) {
                return String::from_utf8(bytes[..length].to_vec()).unwrap();
            }
        }
        panic!("no answer to {order}");
    };
    let said = answer(
        r#"{"kind":"tune","session":7,"sequence":1,"stamp_ns":0,"law":"{\"name\":\"samson\",\"gains\":{\"k_2\":9}}"}"#,
    );
    assert!(said.contains("\"accepted\":1"), "{said}");
    let said = answer(r#"{"kind":"cap","session":7,"sequence":2,"stamp_ns":0,"share":0.6}"#);
    assert!(said.contains("\"accepted\":1"), "{said}");
    let status = operator.status_that("capped", |status| status.speed_cap == 0.6);
    assert_eq!(status.law.as_str(), "samson");
    assert!(status.gains.as_str().contains("\"k_2\":9.0"), "{:?}", status.gains);
    // The same number again: answered, and carried out once.
    let again = answer(r#"{"kind":"cap","session":7,"sequence":2,"stamp_ns":0,"share":0.9}"#);
    assert!(again.contains("\"accepted\":0") && again.contains("count up"), "{again}");
    daemon.stop().unwrap();
}
