//! Cost of the core: a pose and a tick, the digest over results, frames, datagrams, plans.

use criterion::{BatchSize, Criterion, Throughput, criterion_group, criterion_main};
use fieldbook::sim::{Options, simulate};
use std::hint::black_box;
use trackhold_core::digest::{self, ResultDigest};
use trackhold_core::geometry::Pose as Pose2;
use trackhold_core::keys::Values;
use trackhold_core::law;
use trackhold_core::node::{Event, Node, Sink};
use trackhold_core::plan::check::admit;
use trackhold_core::plan::{compile, pack};
use trackhold_core::settings::{LawSettings, Settings, VehicleSettings};
use trackhold_core::time::TimeNs;
use trackhold_proto::Envelope;
use trackhold_proto::blob::Hex;
use trackhold_proto::header::MAX_DATAGRAM_BYTES;
use trackhold_proto::journal::{
    Body, Entry, Order, OrderEvent, PlanEvent, PoseEvent, read_frame, write_frame,
};
use trackhold_proto::message::{Message, Pose, Start};
use trackhold_proto::words::{Mode, StartAt};

/// Keeps the last entry, as a loop that sends commands does.
#[derive(Default)]
struct Last(Option<Entry>);

impl Sink for Last {
    fn entry(&mut self, entry: Entry) {
        self.0 = Some(entry);
    }
}

fn settings(law: &str) -> Settings {
    let mut values = Values::default();
    for (key, value) in [
        ("wheel_radius_m", 0.15),
        ("track_width_m", 0.6),
        ("max_wheel_speed_rad_s", 12.0),
        ("max_wheel_accel_rad_s2", 10.0),
    ] {
        values.set(key, value);
    }
    Settings {
        vehicle: VehicleSettings { kind: "differential".into(), values },
        law: LawSettings { name: law.into(), gains: Values::default() },
        ..Settings::default()
    }
}

/// The laws for this machine, which does not steer.
fn laws() -> impl Iterator<Item = &'static str> {
    law::KINDS.iter().filter(|kind| kind.machines != law::Machines::Steered).map(|kind| kind.name)
}

const BENDS: &str = r#"{"format":"trackhold-plan/1","id":"bends","revision":1,"start":{"x_m":0,"y_m":0,"heading_rad":0},
"segments":[{"kind":"arc","radius_m":50,"turn_rad":900,"speed_m_s":1}]}"#;

/// A node that tracks a plan, and the tick it is at.
fn tracking(law: &str, raw: &[u8]) -> (Node, Last, u64) {
    let mut last = Last::default();
    let mut node = Node::new(&settings(law), Hex([1; 16]), 1, TimeNs(0), &mut last).expect("settings hold");
    let raw = raw.to_vec();
    let plan = compile(&raw, &**node.vehicle()).expect("a good plan");
    let digest = digest::of_bytes(&raw);
    let event = PlanEvent { session: 1, sequence: 1, digest, raw };
    node.handle(TimeNs(0), Event::Plan(event, Ok(Box::new(plan))), &mut last);
    node.handle(TimeNs(0), pose_event(0), &mut last);
    let start = Start {
        boot: Hex([1; 16]),
        plan: digest,
        start_number: node.start_number(),
        at: StartAt::Beginning,
        plan_time_ns: 0,
    };
    let order = OrderEvent { session: 1, sequence: 2, received_ns: 0, order: Order::Start(start) };
    node.handle(TimeNs(0), Event::Order(order), &mut last);
    assert_eq!(node.mode(), Mode::Tracking);
    (node, last, 0)
}

fn pose_event(at_ns: u64) -> Event {
    // A pose that moves along with the plan, half a centimetre beside it.
    let turn = at_ns as f64 * 1e-9 / 50.0;
    let pose = Pose {
        measured_ns: at_ns + 1,
        x_m: 50.005 * turn.sin(),
        y_m: 50.0 - 50.005 * turn.cos(),
        heading_rad: turn,
        position_sd_m: 0.0,
        heading_sd_rad: 0.0,
    };
    Event::Pose(PoseEvent { session: 1, sequence: at_ns, received_ns: at_ns, pose })
}

fn ticks(criterion: &mut Criterion) {
    let mut group = criterion.benchmark_group("pose and tick");
    group.throughput(Throughput::Elements(1));
    for law in laws() {
        let (mut node, mut last, mut tick) = tracking(law, BENDS.as_bytes());
        group.bench_function(law, |bencher| {
            bencher.iter(|| {
                let at = tick * 1_000_000 % 40_000_000_000_000;
                tick += 1;
                node.handle(TimeNs(at), pose_event(at), &mut last);
                node.handle(TimeNs(at), Event::Tick, &mut last);
            });
        });
        assert_eq!(node.mode(), Mode::Tracking, "the bench must measure tracking");
    }
    group.finish();
}

fn tick_body() -> Body {
    let (mut node, mut last, _) = tracking("kanayama", BENDS.as_bytes());
    node.handle(TimeNs(0), Event::Tick, &mut last);
    last.0.expect("a tick was made").body
}

fn records(criterion: &mut Criterion) {
    let body = tick_body();
    let mut results = ResultDigest::default();
    criterion
        .bench_function("digest of a tick record", |bencher| bencher.iter(|| results.add(black_box(&body))));
    let entry = Entry { number: 1, at_ns: 1, body };
    let mut frame = Vec::with_capacity(1024);
    criterion.bench_function("frame of a tick record, written", |bencher| {
        bencher.iter(|| {
            frame.clear();
            write_frame(black_box(&entry), &mut frame);
        });
    });
    criterion.bench_function("frame of a tick record, read", |bencher| {
        bencher.iter(|| read_frame(black_box(&frame)))
    });
}

fn datagrams(criterion: &mut Criterion) {
    let Event::Pose(event) = pose_event(1_000) else { unreachable!() };
    let envelope = Envelope { session: 1, sequence: 2, stamp_ns: 3, message: Message::Pose(event.pose) };
    let mut datagram = [0; MAX_DATAGRAM_BYTES];
    criterion.bench_function("pose datagram, encoded", |bencher| {
        bencher.iter(|| {
            black_box(&envelope).encode(&mut datagram);
            black_box(&datagram);
        });
    });
    let bytes = envelope.to_vec();
    criterion.bench_function("pose datagram, decoded", |bencher| {
        bencher.iter(|| Envelope::decode(black_box(&bytes)))
    });
    let json = envelope.to_json();
    criterion.bench_function("pose datagram, decoded from JSON", |bencher| {
        bencher.iter(|| Envelope::decode(black_box(json.as_bytes())));
    });
}

fn plans(criterion: &mut Criterion) {
    let (node, ..) = tracking("kanayama", BENDS.as_bytes());
    let vehicle = node.vehicle().clone();
    criterion.bench_function("plan of one arc, compiled", |bencher| {
        bencher.iter_batched(
            || BENDS.as_bytes(),
            |raw| compile(black_box(raw), &*vehicle).expect("a good plan"),
            BatchSize::SmallInput,
        );
    });
}

const MANY: usize = 1_000_000;

/// A plan of so many points on a circle of 50 m at 1 m/s, one every 20 ms, in JSON.
fn samples_json(count: usize) -> String {
    let points: Vec<String> = (0..count)
        .map(|index| {
            let (t_s, turn) = (0.02 * index as f64, 0.02 * index as f64 / 50.0);
            let (x_m, y_m) = (50.0 * turn.sin(), 50.0 - 50.0 * turn.cos());
            format!(r#"{{"t_s":{t_s:.2},"x_m":{x_m:.9},"y_m":{y_m:.9},"heading_rad":{turn:.9}}}"#)
        })
        .collect();
    format!(
        r#"{{"format":"trackhold-plan/1","id":"many","revision":1,"start":{{"x_m":0,"y_m":0,"heading_rad":0}},"segments":[{{"kind":"samples","points":[{}]}}]}}"#,
        points.join(",")
    )
}

/// Plans of ten segments of one kind, about as long.
fn ten_segments() -> [(&'static str, String); 3] {
    let plan = |segments: String| {
        BENDS.replace(r#"{"kind":"arc","radius_m":50,"turn_rad":900,"speed_m_s":1}"#, &segments)
    };
    let arc = r#"{"kind":"arc","radius_m":50,"turn_rad":40,"speed_m_s":1}"#;
    let clothoid = r#"{"kind":"clothoid","curvature_start_1_m":0.01,"curvature_end_1_m":0.03,"length_m":2000,"speed_m_s":1}"#;
    let samples = |begin: usize| {
        let points: Vec<String> = (0..=2000)
            .map(|index| {
                let (t_s, turn) = (index as f64, (begin + index) as f64 / 50.0);
                let (x_m, y_m) = (50.0 * turn.sin(), 50.0 - 50.0 * turn.cos());
                format!(r#"{{"t_s":{t_s},"x_m":{x_m},"y_m":{y_m},"heading_rad":{turn}}}"#)
            })
            .collect();
        format!(r#"{{"kind":"samples","points":[{}]}}"#, points.join(","))
    };
    let samples: Vec<String> = (0..10).map(|segment| samples(2000 * segment)).collect();
    [
        ("ten arcs", plan([arc; 10].join(","))),
        ("ten clothoids", plan([clothoid; 10].join(","))),
        ("ten segments of samples", plan(samples.join(","))),
    ]
}

/// What a long plan costs when it comes, and when it is followed.
fn long_plans(criterion: &mut Criterion) {
    let (node, ..) = tracking("kanayama", BENDS.as_bytes());
    let json = samples_json(MANY);
    let compact = pack(json.as_bytes()).expect("plain samples");
    println!("plan of 1,000,000 samples: {} bytes compact, {} bytes in JSON", compact.len(), json.len());
    let mut group = criterion.benchmark_group("plan of 1,000,000 samples");
    group.sample_size(10);
    for (form, raw) in [("compact", compact.as_slice()), ("JSON", json.as_bytes())] {
        group.bench_function(format!("{form}, read and compiled"), |bencher| {
            bencher.iter_with_large_drop(|| compile(black_box(raw), &**node.vehicle()).expect("a good plan"));
        });
        group.bench_function(
            format!("{form}, loaded: read, compiled, checked as the daemon does"),
            |bencher| {
                bencher.iter_with_large_drop(|| admit(black_box(raw), node.terms()).expect("a good plan"));
            },
        );
    }
    group.bench_function("digest of the compact form", |bencher| {
        bencher.iter(|| digest::of_bytes(black_box(&compact)));
    });
    group.finish();

    let mut group = criterion.benchmark_group("pose and tick with a plan of");
    group.throughput(Throughput::Elements(1));
    let plans = ten_segments().map(|(name, json)| (name, json.into_bytes()));
    for (name, raw) in plans.into_iter().chain([("1,000,000 samples", compact)]) {
        let (mut node, mut last, mut tick) = tracking("kanayama", &raw);
        group.bench_function(name, |bencher| {
            bencher.iter(|| {
                // So many ticks a second that the plan outlasts the bench.
                let at = tick * 100_000;
                tick += 1;
                node.handle(TimeNs(at), pose_event(at), &mut last);
                node.handle(TimeNs(at), Event::Tick, &mut last);
            });
        });
        assert_eq!(node.mode(), Mode::Tracking, "the bench must measure tracking");
        let plan = compile(&raw, &**node.vehicle()).expect("a good plan");
        let mut place = 0.0;
        group.bench_function(format!("{name}: one lookup anywhere"), |bencher| {
            bencher.iter(|| {
                place = (place + 7_919.77) % 19_000.0;
                plan.at(black_box(place), &mut 0)
            });
        });
    }
    group.finish();
}

/// As long as the simulated run: what compiling and checking it costs must not be counted for time that is not driven.
const LAPS: &str = r#"{"format":"trackhold-plan/1","id":"laps","revision":1,"start":{"x_m":0,"y_m":0,"heading_rad":0},
"segments":[{"kind":"arc","radius_m":50,"turn_rad":40.1,"speed_m_s":1}]}"#;

/// A whole closed loop on an ideal robot, per tick: law, limits, exact motion; without and with the digest.
fn simulation(criterion: &mut Criterion) {
    const TICKS: u64 = 100_000;
    let options =
        Options { start: Some(Pose2::new(-0.2, 0.1, 0.2)), seconds: Some(TICKS as f64 / 50.0 - 0.01) };
    let mut group = criterion.benchmark_group("simulated tick");
    group.throughput(Throughput::Elements(TICKS)).sample_size(20);
    for law in laws() {
        let settings = settings(law);
        group.bench_function(law, |bencher| {
            bencher.iter(|| {
                let outcome = simulate(&settings, LAPS.as_bytes(), &options, &mut ()).expect("it starts");
                assert_eq!((outcome.ticks, outcome.mode), (TICKS, Mode::Tracking));
            });
        });
    }
    let settings = settings("kanayama");
    group.bench_function("kanayama, with digest", |bencher| {
        bencher.iter(|| {
            let mut results = ResultDigest::default();
            simulate(&settings, LAPS.as_bytes(), &options, &mut results).expect("it starts");
            results.finish()
        });
    });
    group.finish();
}

criterion_group!(benches, ticks, simulation, records, datagrams, plans, long_plans);
criterion_main!(benches);
