//! What an operator changes while the machine runs.

use super::*;

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
