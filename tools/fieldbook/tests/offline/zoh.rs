//! The closed loop against SciPy: the tables of `tests/reference/zoh`, made by `zoh_loop.py` there, which integrates the
//! same zero-order-hold loop numerically (DOP853, rtol 1e-13) with laws, limits and plan written anew.

use crate::common::{Case, Kept, Rows, cases, reference};
use fieldbook::sim::{self, Options};
use trackhold_core::digest::ResultDigest;
use trackhold_core::math::wrap;
use trackhold_proto::words::Mode;

/// The table holds every 25th tick.
const EVERY: usize = 25;

fn run(case: &Case) -> (Vec<Kept>, String) {
    let options = Options { start: Some(case.start), seconds: None };
    let mut watching = (Rows::default(), ResultDigest::default());
    sim::simulate(&case.settings, &case.plan, &options, &mut watching).unwrap();
    (watching.0.0, watching.1.finish().to_string())
}

fn table(name: &str) -> Vec<Vec<f64>> {
    let text = std::fs::read_to_string(reference(&format!("{name}.csv"))).unwrap();
    text.lines().skip(1).map(|line| line.split(',').map(|cell| cell.parse().unwrap()).collect()).collect()
}

/// The table's columns of a row; which of them are angles is known by place.
fn columns(row: &Kept) -> [f64; 14] {
    let (record, error) = (&row.record, row.error.unwrap());
    [
        row.t_s,
        row.truth.x_m,
        row.truth.y_m,
        row.truth.heading_rad,
        record.ref_x_m,
        record.ref_y_m,
        record.ref_heading_rad,
        record.ref_speed_m_s,
        record.ref_turn_rate_rad_s,
        error.along_m,
        error.cross_m,
        error.heading_rad,
        record.command.speed_m_s,
        record.command.turn_rate_rad_s,
    ]
}

#[test]
fn every_case_agrees_with_scipy() {
    let all = cases();
    assert_eq!(all.len(), 9);
    for case in &all {
        let (rows, _) = run(case);
        let table = table(&case.name);
        assert_eq!(table.len(), usize::try_from(case.ticks).unwrap().div_ceil(EVERY), "{}", case.name);
        assert!(rows.len() as u64 > case.ticks, "{}: the plan's end is one more tick at least", case.name);
        let mut worst = [0.0_f64; 14];
        for (row, wanted) in rows.iter().step_by(EVERY).zip(&table) {
            for (column, (value, wanted)) in columns(row).into_iter().zip(wanted).enumerate() {
                let off = value - wanted;
                let off = if matches!(column, 3 | 6 | 11) { wrap(off) } else { off };
                worst[column] = worst[column].max(off.abs());
            }
        }
        for (column, off) in worst.into_iter().enumerate() {
            let most = if column <= 3 { 1e-9 } else { 1e-8 };
            assert!(off <= most, "{}: column {column} is off by up to {off:e}", case.name);
        }
    }
}

#[test]
fn row_0_is_t_0_in_tracking_at_the_start_and_the_last_row_is_the_one_that_ends_it() {
    for case in cases() {
        let (rows, _) = run(&case);
        let (first, last) = (&rows[0], rows.last().unwrap());
        assert_eq!(
            (first.t_s, first.truth, first.record.mode),
            (0.0, case.start, Mode::Tracking),
            "{}",
            case.name
        );
        assert_eq!(last.record.mode, Mode::Standby, "{}", case.name);
        assert!(rows[..rows.len() - 1].iter().all(|row| row.record.mode == Mode::Tracking), "{}", case.name);
        assert_eq!(
            (last.record.command.speed_m_s, last.record.command.turn_rate_rad_s),
            (0.0, 0.0),
            "{}",
            case.name
        );
    }
}

#[test]
fn the_same_run_has_the_same_digest_and_another_one_another() {
    for case in cases() {
        let (_, digest) = run(&case);
        assert_eq!(run(&case).1, digest, "{}", case.name);
        let mut nudged = case;
        nudged.start.x_m += 1e-12;
        assert_ne!(run(&nudged).1, digest, "{}", nudged.name);
    }
}

#[test]
fn pose_offsets_are_honoured() {
    for case in cases() {
        let (plain, _) = run(&case);
        let mut mounted = case;
        for (key, value) in [("offset_x_m", 0.4), ("offset_y_m", -0.1), ("heading_offset_rad", 3.0)] {
            mounted.settings.pose.set(key, value);
        }
        let (rows, _) = run(&mounted);
        for (row, plain) in rows.iter().zip(&plain) {
            assert!(row.truth.distance_to(plain.truth) < 1e-9, "{} at {} s", mounted.name, row.t_s);
        }
    }
}
