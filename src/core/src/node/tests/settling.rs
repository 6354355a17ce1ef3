//! Settling on the final pose: it ends within the dead band, from anywhere near, and does not hunt.

use super::*;
use crate::geometry::TrackingError;
use crate::law::testing::Random;
use crate::math;

const DT_S: f64 = 1.0 / RATE_HZ;

/// Ways to come to a plan's end.
const ENDS: [&str; 5] = [
    r#"{"kind":"line","length_m":0.4,"speed_m_s":0.3}"#,
    r#"{"kind":"arc","radius_m":1,"turn_rad":0.4,"speed_m_s":0.3}"#,
    r#"{"kind":"line","length_m":0.4,"speed_m_s":0.3,"reverse":true}"#,
    r#"{"kind":"pivot","turn_rad":0.5,"rate_rad_s":0.5}"#,
    r#"{"kind":"dwell","duration_s":0.2}"#,
];

fn differential(node: &[(&str, f64)]) -> Settings {
    let mut all = vec![("rate_hz", RATE_HZ), ("jump_distance_m", 100.0), ("jump_heading_rad", 3.0)];
    all.extend_from_slice(node);
    Settings {
        vehicle: VehicleSettings {
            kind: "differential".to_string(),
            values: values(&[
                ("wheel_radius_m", 0.1),
                ("track_width_m", 0.5),
                ("max_wheel_speed_rad_s", 12.0),
                ("max_wheel_accel_rad_s2", 15.0),
            ]),
        },
        ..settings(&all)
    }
}

/// What differs from an ideal machine that states the truth.
#[derive(Clone, Copy, Debug, Default)]
struct Faults {
    /// Ticks by which commands act late. The node does not know.
    late: usize,
    position_sd_m: f64,
    heading_sd_rad: f64,
}

/// A machine on its way to a plan's end.
struct Settler {
    rig: Rig,
    truth: Pose,
    commands: Vec<BodyVelocity>,
    faults: Faults,
    random: Random,
}

/// What settling came to.
#[derive(Debug)]
struct Came {
    cause: Cause,
    seconds: f64,
    distance_m: f64,
    heading_rad: f64,
    /// Greatest true heading error on the way, rad.
    turned_rad: f64,
    /// How often the command's speed and turn rate changed their sign.
    turns: (usize, usize),
}

impl Settler {
    fn at_the_end(segments: &str, faults: Faults, seed: u64) -> Self {
        let mut rig = Rig::with_settings(&differential(&[]));
        assert_eq!(rig.load(segments, false), None);
        rig.tick();
        assert_eq!(rig.start(), None);
        let truth = rig.pose;
        let mut settler = Self { rig, truth, commands: vec![], faults, random: Random(seed) };
        // One tick before it settles.
        let end = settler.rig.node.plan().unwrap().end();
        let last = |settler: &Self| settler.rig.node.plan_time() + SpanNs::from_seconds(1.5 * DT_S) >= end;
        while !last(&settler) {
            settler.tick();
        }
        settler
    }

    fn send(&mut self) {
        let Faults { position_sd_m, heading_sd_rad, .. } = self.faults;
        // Uniform noise of that standard deviation: ±√3 of it.
        let mut noise = |sd: f64| self.random.within(-sd, sd) * math::sqrt(3.0);
        let pose = message::Pose {
            measured_ns: self.rig.at.0 + 1,
            x_m: self.truth.x_m + noise(position_sd_m),
            y_m: self.truth.y_m + noise(position_sd_m),
            heading_rad: self.truth.heading_rad + noise(heading_sd_rad),
            position_sd_m,
            heading_sd_rad,
        };
        let received_ns = self.rig.at.0;
        self.rig.event(Event::Pose(PoseEvent { session: 1, sequence: 1, received_ns, pose }));
    }

    fn tick(&mut self) -> TickRecord {
        self.send();
        self.rig.event(Event::Tick);
        let record = self.rig.records().next_back().unwrap();
        let (speed_m_s, turn_rate_rad_s) = (record.command.speed_m_s, record.command.turn_rate_rad_s);
        self.commands.push(BodyVelocity { speed_m_s, turn_rate_rad_s });
        let acting = self.commands.len().checked_sub(1 + self.faults.late);
        let motion = acting.map_or(BodyVelocity::ZERO, |index| self.commands[index]);
        self.truth = self.truth.moved(motion, DT_S);
        self.rig.at = TimeNs(tick_offset(record.tick + 1, RATE_HZ).0);
        self.rig.log.clear();
        record
    }

    /// Settles from where the machine is then put. Commands below the last two numbers do not count as hunting.
    fn settle_from(
        mut self,
        along_m: f64,
        cross_m: f64,
        heading_rad: f64,
        (least_m_s, least_rad_s): (f64, f64),
    ) -> Came {
        let plan = self.rig.node.plan().unwrap();
        let end = plan.at(1e3, &mut 0);
        let (x_m, y_m) = end.direction.out_of_frame(along_m, cross_m);
        let Pose { x_m: end_x_m, y_m: end_y_m, heading_rad: end_rad } = end.pose;
        self.truth = Pose::new(end_x_m + x_m, end_y_m + y_m, math::wrap(end_rad + heading_rad));
        let begin = self.commands.len();
        let (mut turned_rad, mut ticks) = (0.0_f64, 0);
        let last = loop {
            let record = self.tick();
            ticks += 1;
            let error = TrackingError::between(self.truth, end.pose, end.direction);
            turned_rad = turned_rad.max(error.heading_rad.abs());
            if record.mode != Mode::Tracking {
                break record;
            }
            assert!(ticks < 10_000, "it neither settles nor gives up");
        };
        let rest = self.truth;
        for _ in 0..self.faults.late + 50 {
            assert_eq!(self.tick().command.wheels, [0.0; 4], "no motion after settling");
        }
        assert!(self.faults.late > 0 || self.truth == rest);
        let error = TrackingError::between(self.truth, end.pose, end.direction);
        let changes = |of: fn(&BodyVelocity) -> f64, least: f64| {
            let counting = self.commands[begin..].iter().map(of).filter(|value| value.abs() > least);
            let mut signs: Vec<bool> = counting.map(|value| value > 0.0).collect();
            signs.dedup();
            signs.len().saturating_sub(1)
        };
        Came {
            cause: last.cause,
            seconds: f64::from(ticks) * DT_S,
            distance_m: math::length(error.along_m, error.cross_m),
            heading_rad: error.heading_rad.abs(),
            turned_rad,
            turns: (
                changes(|motion| motion.speed_m_s, least_m_s),
                changes(|motion| motion.turn_rate_rad_s, least_rad_s),
            ),
        }
    }
}

/// The worst of many.
#[derive(Debug, Default)]
struct Worst {
    runs: u32,
    late: u32,
    seconds: f64,
    distance_m: f64,
    heading_rad: f64,
    turned_rad: f64,
    turns: (usize, usize),
}

impl Worst {
    fn take(&mut self, came: &Came) {
        self.runs += 1;
        self.late += u32::from(came.cause != Cause::PlanEnded);
        self.seconds = self.seconds.max(came.seconds);
        self.distance_m = self.distance_m.max(came.distance_m);
        self.heading_rad = self.heading_rad.max(came.heading_rad);
        self.turned_rad = self.turned_rad.max(came.turned_rad);
        self.turns = (self.turns.0.max(came.turns.0), self.turns.1.max(came.turns.1));
    }
}

#[test]
fn an_ideal_machine_settles_from_a_thousand_errors_at_any_end_without_hunting() {
    let mut random = Random(4);
    let mut worst = Worst::default();
    for run in 0..1000 {
        let [along_m, cross_m] = [0.3, 0.3].map(|most| random.within(-most, most));
        let heading_rad = random.within(-0.5, 0.5);
        let settler = Settler::at_the_end(ENDS[run % ENDS.len()], Faults::default(), 0);
        worst.take(&settler.settle_from(along_m, cross_m, heading_rad, (1e-9, 1e-9)));
    }
    assert_eq!(worst.late, 0, "{worst:?}");
    assert!(worst.distance_m <= 0.005 && worst.heading_rad <= 0.5_f64.to_radians(), "{worst:?}");
    // There, past it and back; to the bearing, a correction, and back.
    assert!(worst.turns.0 <= 2 && worst.turns.1 <= 3, "{worst:?}");
    assert!(worst.turned_rad <= 0.5 * math::PI + 0.5 && worst.seconds <= 8.0, "{worst:?}");
}

#[test]
fn noise_and_a_dead_time_that_nobody_stated_do_not_make_it_hunt() {
    for late in [0, 2, 4] {
        for (position_sd_m, heading_sd_rad) in [(0.0, 0.0), (0.002, 0.002), (0.004, 0.002), (0.01, 0.0087)] {
            let faults = Faults { late, position_sd_m, heading_sd_rad };
            let mut random = Random(4);
            let mut worst = Worst::default();
            for run in 0..200 {
                let [along_m, cross_m] = [0.05, 0.05].map(|most| random.within(-most, most));
                let heading_rad = random.within(-0.1, 0.1);
                // Not from a dwell: there poses are averaged already, and a machine put elsewhere is a jump.
                let settler = Settler::at_the_end(ENDS[run % 4], faults, run as u64);
                worst.take(&settler.settle_from(along_m, cross_m, heading_rad, (0.005, 0.1)));
            }
            // With noise of twice the dead band one may have to shift a second time, and run out of time.
            assert!(worst.late <= u32::from(position_sd_m > 0.005), "{faults:?} {worst:?}");
            let reached = worst.late > 0 || worst.heading_rad <= 0.02;
            assert!(worst.distance_m <= 0.007 && reached, "{faults:?} {worst:?}");
            assert!(worst.turns.0 <= 4 && worst.turns.1 <= 6, "{faults:?} {worst:?}");
        }
    }
}
