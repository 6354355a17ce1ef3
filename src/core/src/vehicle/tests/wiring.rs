//! The drive map.

use super::*;
use proptest::prelude::*;

#[test]
fn left_and_right_sign_and_ratio() {
    let map = [("swap_left_right", 1.0), ("left_gear_ratio", -20.0), ("right_gear_ratio", 30.0)];
    let (plain, wired) =
        (machine("differential", &DIFFERENTIAL), machine("differential", &with(&DIFFERENTIAL, &map)));
    let velocity = BodyVelocity { speed_m_s: 0.5, turn_rate_rad_s: 0.4 };
    // Rims 0.4 and 0.6 m/s over 0.1 m: 4 and 6 rad/s; the left one's number goes out second, turned and geared.
    let wheels = wired.wheels(velocity, 0.0, &[0.0; 4]);
    assert!((wheels[0] - 180.0).abs() < 1e-12 && (wheels[1] + 80.0).abs() < 1e-12, "{wheels:?}");
    let body = wired.body(&[180.0, -80.0, 0.0, 0.0]);
    assert!((body.speed_m_s - 0.5).abs() < 1e-15 && (body.turn_rate_rad_s - 0.4).abs() < 1e-15, "{body:?}");
    assert_eq!(wired.greatest(), [300.0, 200.0, 0.0, 0.0]);
    assert_eq!(wired.largest_steps(&[0.0; 4], &wheels, 0.1), [60.0, 40.0, 0.0, 0.0]);
    assert_eq!(wired.loads(&PathState::default()), plain.loads(&PathState::default()));
    assert_eq!(wired.top_speed_m_s(), plain.top_speed_m_s());
}

#[test]
fn zero_stays_zero_and_a_held_angle_is_held_to_the_bit() {
    let map =
        [("speed_ratio", -7.0), ("steer_ratio", -0.3), ("front_track_m", 0.8), ("swap_left_right", 1.0)];
    let wired = machine("car", &with(&CAR, &map));
    for wheels in [wired.to_drive(&[0.0; 4]), wired.wheels(BodyVelocity::ZERO, 0.0, &[0.0; 4])] {
        assert!(
            wheels.iter().all(|value| value.to_bits() == 0),
            "a plain zero, not a negative one: {wheels:?}"
        );
    }
    let held = [3.3, 0.123_456_789, 0.1, 0.0];
    assert_eq!(wired.zero(&held), [0.0, held[1], held[2], 0.0]);
    // The machine's left angle goes out third, turned and scaled.
    let out = wired.to_drive(&[1.0, 0.2, 0.1, 0.0]);
    assert_eq!(out, [-7.0, -0.3 * 0.1, -0.3 * 0.2, 0.0]);
}

#[test]
fn without_a_map_nothing_changes() {
    let one = [("left_gear_ratio", 1.0), ("right_gear_ratio", 1.0), ("swap_left_right", 0.0)];
    let (plain, mapped) =
        (machine("differential", &DIFFERENTIAL), machine("differential", &with(&DIFFERENTIAL, &one)));
    assert_eq!(format!("{plain:?}"), format!("{mapped:?}"), "no map, no detour");
}

proptest! {
    #[test]
    fn a_wired_machine_moves_like_a_plain_one(
        wanted in prop::collection::vec((-2.0..2.0_f64, -2.0..2.0_f64), 1..40),
    ) {
        let map = [("left_gear_ratio", -18.5), ("right_gear_ratio", 18.5), ("swap_left_right", 1.0)];
        let steer = [("speed_ratio", -11.0), ("steer_ratio", 57.3)];
        let pairs = [
            (machine("differential", &DIFFERENTIAL), machine("differential", &with(&DIFFERENTIAL, &map))),
            (machine("car", &CAR), machine("car", &with(&CAR, &steer))),
            (machine("steered-wheel", &STEERED_WHEEL), machine("steered-wheel", &with(&STEERED_WHEEL, &steer))),
            (machine("unicycle", &UNICYCLE), machine("unicycle", &with(&UNICYCLE, &[("turn_ratio", -1.0)]))),
        ];
        for (plain, wired) in pairs {
            let (mut one, mut other) = ([0.0; 4], [0.0; 4]);
            for &(speed_m_s, turn_rate_rad_s) in &wanted {
                let wanted = BodyVelocity { speed_m_s, turn_rate_rad_s };
                one = limit(&*plain, wanted, 0.1, &one, 0.02).wheels;
                other = limit(&*wired, wanted, 0.1, &other, 0.02).wheels;
                let back = wired.to_machine(&other);
                for index in 0..4 {
                    prop_assert!((one[index] - back[index]).abs() < 1e-9, "{plain:?}: {one:?} {back:?}");
                }
            }
        }
    }
}
