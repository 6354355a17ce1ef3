//! Laws against values from outside: `tests/reference/laws` (mpmath, NumPy), and for the off-axle point
//! `tests/reference/zoh/check_values.json` (SciPy).

use super::*;
use crate::geometry::TrackingError;
use serde_json::Value;

pub(super) const VALUES: &str = include_str!("../../../../../tests/reference/laws/check_values.json");

pub(super) fn parsed(text: &str) -> Value {
    serde_json::from_str(text).expect("the script writes JSON")
}

/// The gains of a case, by name.
pub(super) fn gains_of(case: &Value) -> Vec<(&str, f64)> {
    let object = case["gains"].as_object().expect("an object of gains");
    object.iter().map(|(name, value)| (name.as_str(), value.as_f64().expect("a number"))).collect()
}

pub(super) fn number(case: &Value, key: &str) -> f64 {
    case[key].as_f64().expect("a number")
}

pub(super) fn cases(text: &str, key: Option<&str>) -> Vec<Value> {
    let value = parsed(text);
    let list = key.map_or(&value, |key| &value[key]);
    list.as_array().expect("a list of cases").clone()
}

// Robot-frame error (0.10 m, −0.05 m, 0.20 rad): the machine is at the origin, the reference ahead of it.
#[test]
fn single_results_are_those_of_the_formulas() {
    let cases = cases(VALUES, Some("laws"));
    assert_eq!(cases.len(), 8);
    for case in &cases {
        let name = case["law"].as_str().expect("a name");
        let (speed, turn_rate) = (number(case, "ref_speed_m_s"), number(case, "ref_turn_rate_rad_s"));
        let reference = moving(Pose::new(0.10, -0.05, 0.20), speed, turn_rate);
        let mut law = law_on("differential", name, &gains_of(case));
        let wanted = ask(&mut *law, reference, Pose::new(0.0, 0.0, 0.0));
        assert_close(wanted, number(case, "speed_m_s"), number(case, "turn_rate_rad_s"));
        assert!(!wanted.fallback);
    }
}

#[test]
fn samsons_error_is_seen_from_the_reference() {
    let reference = moving(Pose::new(0.10, -0.05, 0.20), 0.5, 0.2);
    let error = TrackingError::between(Pose::new(0.0, 0.0, 0.0), reference.pose, reference.direction);
    assert!((error.along_m + 0.088_073_191_244).abs() < 1e-11);
    assert!((error.cross_m - 0.068_870_261_971_6).abs() < 1e-11);
}

#[test]
fn off_axle_check_value() {
    // Input–output linearisation of a point 0.1 m ahead: heading 0.3, its wanted velocity (0.4, 0.1) in the site
    // frame. A reference at rest with the point 1 m away along that vector and k_p = 1 asks for just that.
    let pose = Pose::new(0.0, 0.0, 0.3);
    let reference = Reference::at_rest(Pose::new(0.4, 0.1, 0.3), 0.0);
    let mut law = law_on("differential", "off-axle", &[("x_p_m", 0.1), ("y_p_m", 0.0), ("k_p", 1.0)]);
    assert_close(ask(&mut *law, reference, pose), 0.411_686_616_316_376_4, -0.226_744_337_519_752_3);
}
