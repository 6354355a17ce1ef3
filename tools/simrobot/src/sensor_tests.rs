use super::*;

const TRUTH: Pose = Pose::new(3.0, -2.0, 0.5);

fn spec(change: impl FnOnce(&mut SensorSpec)) -> SensorSpec {
    let mut spec = SensorSpec::default();
    change(&mut spec);
    spec
}

fn sensor(spec: SensorSpec) -> PoseSensor {
    PoseSensor::new(spec, 5, Mount::default(), TimeNs(1_000_000_000))
}

/// What comes of `count` measurements of one true pose.
fn measure(spec: SensorSpec, count: usize) -> Vec<Option<Seen>> {
    let mut sensor = sensor(spec);
    (0..count).map(|_| sensor.measure(TRUTH)).collect()
}

#[test]
fn an_ideal_estimator_says_what_is_when_it_is() {
    let mut sensor = sensor(spec(|spec| spec.rate_hz = 30.0));
    for k in 0..100_u64 {
        let due = TimeNs(1_000_000_000 + (k as f64 * 1e9 / 30.0).round() as u64);
        assert_eq!(sensor.due(), due);
        let seen = sensor.measure(TRUTH).unwrap();
        assert_eq!(seen, Seen { number: k, measured: due, measured_ns: due.0, arrives: due, pose: TRUTH });
    }
}

#[test]
fn the_mount_is_where_the_estimator_looks_from() {
    // A point 0.5 m ahead and an axis turned by 0.2 rad, on a chassis at (3, −2) that looks along 0.5 rad.
    let mount = Mount { offset_x_m: 0.5, offset_y_m: 0.0, heading_offset_rad: 0.2 };
    let mut sensor = PoseSensor::new(SensorSpec::default(), 0, mount, TimeNs(0));
    let pose = sensor.measure(TRUTH).unwrap().pose;
    assert!((pose.x_m - (3.0 + 0.5 * 0.5_f64.cos())).abs() < 1e-15);
    assert!((pose.y_m - (-2.0 + 0.5 * 0.5_f64.sin())).abs() < 1e-15);
    assert!((pose.heading_rad - 0.7).abs() < 1e-15);
}

#[test]
fn noise_has_the_stated_standard_deviations() {
    let noisy = spec(|spec| (spec.position_sd_m, spec.heading_sd_rad) = (0.02, 0.003));
    let n = 20_000;
    let (mut sums, mut squares) = ([0.0; 3], [0.0; 3]);
    for seen in measure(noisy, n).into_iter().flatten() {
        let off = [seen.pose.x_m - 3.0, seen.pose.y_m + 2.0, seen.pose.heading_rad - 0.5];
        for (index, value) in off.into_iter().enumerate() {
            sums[index] += value;
            squares[index] += value * value;
        }
    }
    let n = n as f64;
    for (index, sd) in [0.02, 0.02, 0.003].into_iter().enumerate() {
        // Five standard errors of mean and of standard deviation.
        assert!((sums[index] / n).abs() < 5.0 * sd / n.sqrt(), "{sums:?}");
        assert!(((squares[index] / n).sqrt() / sd - 1.0).abs() < 5.0 / (2.0 * n).sqrt(), "{squares:?}");
    }
}

#[test]
fn latency_delays_and_jitter_keeps_the_order() {
    let late = spec(|spec| (spec.rate_hz, spec.latency_s, spec.jitter_s) = (100.0, 0.03, 0.05));
    let mut last = TimeNs(0);
    let mut spread = (u64::MAX, 0);
    for seen in measure(late, 500).into_iter().flatten() {
        let delay = seen.arrives.since(seen.measured).0;
        assert!((30_000_000..=80_000_000).contains(&delay), "{delay}");
        assert!(seen.arrives >= last);
        last = seen.arrives;
        spread = (spread.0.min(delay), spread.1.max(delay));
    }
    assert!(spread.1 - spread.0 > 30_000_000, "{spread:?}");
}

#[test]
fn dropouts_come_as_often_as_they_should() {
    let n = 10_000;
    let missing =
        measure(spec(|spec| spec.dropout_probability = 0.1), n).iter().filter(|seen| seen.is_none()).count();
    let (mean, sd) = (0.1 * n as f64, (0.1 * 0.9 * n as f64).sqrt());
    assert!((missing as f64 - mean).abs() < 5.0 * sd, "{missing}");
}

#[test]
fn a_burst_swallows_all_poses_of_its_length() {
    let bursts =
        spec(|spec| (spec.rate_hz, spec.burst_probability, spec.burst_length_s) = (100.0, 0.005, 0.2));
    let seen = measure(bursts, 5000);
    let runs: Vec<usize> = seen.split(Option::is_some).map(<[_]>::len).filter(|run| *run > 0).collect();
    assert!(runs.len() > 5, "{runs:?}");
    // A burst that begins within another, or at its end, makes a longer run; none is shorter.
    assert!(runs[..runs.len() - 1].iter().all(|run| *run >= 20), "{runs:?}");
}

#[test]
fn the_certain_outage_is_where_it_was_put() {
    let outage = spec(|spec| (spec.rate_hz, spec.outage_start_s, spec.outage_length_s) = (10.0, 0.5, 0.35));
    let missing: Vec<usize> =
        measure(outage, 20).iter().enumerate().filter(|(_, seen)| seen.is_none()).map(|(k, _)| k).collect();
    assert_eq!(missing, [5, 6, 7, 8]);
}

#[test]
fn a_jump_lasts_as_long_as_it_should() {
    let jumping = |length_s| {
        spec(|spec| {
            (spec.rate_hz, spec.jump_probability, spec.jump_length_s) = (10.0, 0.02, length_s);
            (spec.jump_m, spec.jump_heading_rad) = (1.5, 0.3);
        })
    };
    for (length_s, least) in [(0.0, 1), (0.5, 6)] {
        let off: Vec<bool> = measure(jumping(length_s), 1000)
            .into_iter()
            .flatten()
            .map(|seen| {
                let distance = seen.pose.distance_to(TRUTH);
                assert!(distance == 0.0 || (distance - 1.5).abs() < 1e-12, "{distance}");
                let turned = (seen.pose.heading_rad - 0.5).abs();
                assert!(turned == 0.0 || (turned - 0.3).abs() < 1e-12, "{turned}");
                distance > 0.0
            })
            .collect();
        let runs: Vec<usize> = off.split(|off| !off).map(<[_]>::len).filter(|run| *run > 0).collect();
        assert!(runs.len() > 5 && runs[..runs.len() - 1].iter().all(|run| *run >= least), "{runs:?}");
        assert!(runs.contains(&least), "{runs:?}");
    }
}

#[test]
fn the_estimators_clock_is_ahead_and_drifts() {
    let sensor = sensor(spec(|spec| (spec.clock_offset_s, spec.clock_drift_ppm) = (5.0, -20.0)));
    assert_eq!(sensor.clock_ns(TimeNs(1_000_000_000)), 6_000_000_000);
    // 100 s later 20 millionths of 100 s less: 2 ms.
    assert_eq!(sensor.clock_ns(TimeNs(101_000_000_000)), 106_000_000_000 - 2_000_000);
}

#[test]
fn seeds_reproduce_bit_for_bit() {
    let all = spec(|spec| {
        (spec.position_sd_m, spec.heading_sd_rad, spec.jitter_s) = (0.02, 0.01, 0.01);
        (spec.dropout_probability, spec.burst_probability, spec.burst_length_s) = (0.1, 0.01, 0.1);
        (spec.jump_probability, spec.jump_m) = (0.05, 1.0);
    });
    assert_eq!(measure(all, 500), measure(all, 500));
    let mut other = PoseSensor::new(all, 6, Mount::default(), TimeNs(1_000_000_000));
    assert_ne!(measure(all, 500), (0..500).map(|_| other.measure(TRUTH)).collect::<Vec<_>>());
}

#[test]
fn changing_one_number_leaves_the_other_chances_as_they_were() {
    let plain = measure(spec(|spec| spec.position_sd_m = 0.02), 200);
    let dropping = measure(spec(|spec| (spec.position_sd_m, spec.dropout_probability) = (0.02, 0.3)), 200);
    let both: Vec<_> =
        plain.iter().zip(&dropping).filter_map(|(a, b)| Some((a.as_ref()?, b.as_ref()?))).collect();
    assert!(both.len() > 100 && both.len() < 200);
    assert!(both.into_iter().all(|(a, b)| a == b));
}
