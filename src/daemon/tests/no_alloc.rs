//! The control loop allocates and frees nothing, also while poses, orders and plans arrive, and never waits for a full
//! queue. The loop runs here with a clock of its own, as fast as it can; an allocator counts on this thread.
#![expect(unsafe_code, reason = "a global allocator is an unsafe trait; this one counts and passes on")]

use std::alloc::{GlobalAlloc, Layout, System};
use std::cell::Cell;
use std::net::UdpSocket;
use std::sync::Arc;
use std::sync::atomic::Ordering::SeqCst;
use trackhold::control::Loop;
use trackhold::gate::{Gate, Source};
use trackhold::lanes::{Bell, Item, OtherEnds, Shared, Waste, lanes_with};
use trackhold::site::Site;
use trackhold::zero::Outlet;
use trackhold_core::digest;
use trackhold_core::law;
use trackhold_core::node::Event;
use trackhold_core::node::tuning::Tuning;
use trackhold_core::plan::compile;
use trackhold_core::time::TimeNs;
use trackhold_proto::blob::Hex;
use trackhold_proto::journal::{Body, Entry, Order, OrderEvent, PlanEvent, PoseEvent, TuneEvent};
use trackhold_proto::message::{Pose, Start};
use trackhold_proto::words::{Cause, Mode, StartAt, StopKind};
use trackhold_proto::{Envelope, Message};

struct Counting;

thread_local! {
    static COUNTING: Cell<bool> = const { Cell::new(false) };
    static CALLS: Cell<u64> = const { Cell::new(0) };
}

fn count() {
    if COUNTING.get() {
        CALLS.set(CALLS.get() + 1);
    }
}

// SAFETY: every call goes to the system's allocator unchanged.
unsafe impl GlobalAlloc for Counting {
    unsafe fn alloc(&self, layout: Layout) -> *mut u8 {
        count();
        // SAFETY: as above.
        unsafe { System.alloc(layout) }
    }

    unsafe fn dealloc(&self, pointer: *mut u8, layout: Layout) {
        count();
        // SAFETY: as above.
        unsafe { System.dealloc(pointer, layout) }
    }

    unsafe fn realloc(&self, pointer: *mut u8, layout: Layout, size: usize) -> *mut u8 {
        count();
        // SAFETY: as above.
        unsafe { System.realloc(pointer, layout, size) }
    }
}

#[global_allocator]
static ALLOCATOR: Counting = Counting;

const SITE: &str = "[vehicle]\nkind = \"differential\"\nwheel_radius_m = 0.1\ntrack_width_m = 0.5\n\
                    max_wheel_speed_rad_s = 10\nmax_wheel_accel_rad_s2 = 20\n[law]\nname = \"kanayama\"\n\
                    [node]\nrate_hz = 1000\nplanner_lease_s = 0\n";
const PERIOD_NS: u64 = 1_000_000;
const BEGIN_NS: u64 = 1_000_000_000;

const SAMSON: &str = r#"{"name":"samson","gains":{"k_1":2,"k_2":9,"k_3":6}}"#;

/// A loop, everybody else's ends, and a drive's socket.
struct Bench {
    control: Loop,
    ends: OtherEnds,
    shared: Arc<Shared>,
    gate: Arc<Gate>,
    drive: UdpSocket,
    now: u64,
}

impl Bench {
    fn new(entry_items: usize) -> Self {
        Self::on(SITE, entry_items)
    }

    fn on(site: &str, entry_items: usize) -> Self {
        let (inlets, outlets, mut ends) = lanes_with(entry_items);
        let (gate, shared) = (Arc::new(Gate::default()), Arc::new(Shared::default()));
        let socket = UdpSocket::bind("127.0.0.1:0").unwrap();
        socket.set_nonblocking(true).unwrap();
        let drive = UdpSocket::bind("127.0.0.1:0").unwrap();
        drive.set_nonblocking(true).unwrap();
        ends.drives.push([Some(drive.local_addr().unwrap()), None, None, None]).unwrap();
        let control = Loop::new(
            &Site::parse(site, "test.toml").unwrap().settings,
            (Hex([3; 16]), 7),
            TimeNs(BEGIN_NS),
            inlets,
            (outlets, Arc::new(Bell::new().unwrap())),
            Outlet { socket, gate: Arc::clone(&gate), session: 1 },
            Arc::clone(&shared),
        );
        Self { control: control.unwrap(), ends, shared, gate, drive, now: BEGIN_NS }
    }

    /// One turn a period later, counted.
    fn turn(&mut self) -> u64 {
        self.now += PERIOD_NS;
        let now = TimeNs(self.now);
        CALLS.set(0);
        COUNTING.set(true);
        self.control.turn(&|| now);
        COUNTING.set(false);
        CALLS.get()
    }

    fn pose(&mut self, sequence: u64, x_m: f64) {
        let (heading_rad, position_sd_m, heading_sd_rad) = (0.0, 0.0, 0.0);
        let pose = Pose { measured_ns: self.now, x_m, y_m: 0.0, heading_rad, position_sd_m, heading_sd_rad };
        self.ends
            .stream
            .push(Event::Pose(PoseEvent { session: 1, sequence, received_ns: self.now, pose }))
            .unwrap();
    }

    fn order(&mut self, sequence: u64, order: Order) {
        let event = Event::Order(OrderEvent { session: 2, sequence, received_ns: self.now, order });
        let ticket = (order == Order::Stop(StopKind::Emergency)).then(|| self.gate.trip(Source::Intake).0);
        self.ends.orders.push(Item { event, ticket }).unwrap();
    }

    fn start(&mut self, sequence: u64) {
        let node = self.control.node();
        let plan = node.plan().map(|plan| plan.digest()).unwrap();
        let (boot, start_number) = (node.boot(), node.start_number());
        let start = Start { boot, plan, start_number, at: StartAt::Beginning, plan_time_ns: 0 };
        self.order(sequence, Order::Start(start));
    }

    fn plan(&mut self, sequence: u64, speed_m_s: f64) {
        let raw = format!(
            r#"{{"format":"trackhold-plan/1","id":"at {speed_m_s}","revision":1,"start":{{"x_m":0,"y_m":0,"heading_rad":0}},
            "segments":[{{"kind":"line","length_m":500,"speed_m_s":{speed_m_s}}}]}}"#
        );
        self.send_plan(sequence, raw);
    }

    /// A plan that goes on `ahead_ns` from now with the one that was loaded, `aside_m` beside it.
    fn continuing(&mut self, sequence: u64, revision: u32, speed_m_s: f64, ahead_ns: u64, aside_m: f64) {
        let at_s = (self.control.node().plan_time().0 + ahead_ns) as f64 * 1e-9;
        let raw = format!(
            r#"{{"format":"trackhold-plan/1","id":"at {speed_m_s}","revision":{revision},"continues":{{"at_s":{at_s}}},
            "start":{{"x_m":{},"y_m":{aside_m},"heading_rad":0}},"segments":[{{"kind":"line","length_m":400,"speed_m_s":{speed_m_s}}}]}}"#,
            speed_m_s * at_s
        );
        self.send_plan(sequence, raw);
    }

    fn send_plan(&mut self, sequence: u64, raw: String) {
        let raw = raw.into_bytes();
        let compiled = compile(&raw, &**self.control.node().vehicle()).map(Box::new);
        let event = PlanEvent { session: 3, sequence, digest: digest::of_bytes(&raw), raw };
        self.ends.plans.push(Event::Plan(event, compiled)).unwrap();
    }

    fn tune(&mut self, sequence: u64, law: &str) {
        let built = Tuning::build(law, self.control.node().law_context());
        let event = TuneEvent { session: 2, sequence, received_ns: self.now, law: law.to_owned() };
        self.ends.laws.push(Event::Tune(event, built)).unwrap();
    }

    fn drain(&mut self) -> Vec<Entry> {
        while self.ends.waste.pop().is_ok() {}
        std::iter::from_fn(|| self.ends.entries.pop().ok()).collect()
    }

    /// Modes of the commands the drive got since the last call.
    fn commands(&self) -> Vec<Mode> {
        let mut bytes = [0; 1200];
        let received = std::iter::from_fn(|| self.drive.recv(&mut bytes).ok().map(|n| bytes[..n].to_vec()));
        received
            .map(|bytes| match Envelope::decode(&bytes).unwrap().message {
                Message::Command(command) => command.mode,
                other => panic!("{other:?}"),
            })
            .collect()
    }
}

#[test]
fn thousands_of_ticks_with_poses_orders_and_plans_neither_allocate_nor_free() {
    let mut bench = Bench::new(8192);
    let (mut tracked, mut loaded, mut laws) = (0, 0, 0);
    let speed = |k: u64| 0.3 + 0.0001 * (k / 600) as f64;
    for k in 0..6000_u64 {
        bench.pose(k, 0.0005 * (k % 600) as f64);
        match k % 600 {
            // A good plan, the same once more, one that is not fit, a start, plans while tracking, and stops.
            1 | 3 => bench.plan(k, speed(k)),
            5 => bench.plan(k, 30.0),
            10 => bench.start(k),
            // Caps and laws: good ones, one sent again, one that is not fit, and one that the plan does not fit.
            100 => bench.order(k, Order::Cap { share: 0.6 }),
            110 => bench.tune(k, SAMSON),
            112 => bench.tune(k - 2, SAMSON),
            115 => bench.tune(k, r#"{"name":"kanayama","gains":{"k_q":1}}"#),
            120 => bench.tune(k, r#"{"name":"off-axle","gains":{"x_p_m":-0.3}}"#),
            150 => bench.order(k, Order::Cap { share: 1.0 }),
            180 => bench.tune(k, r#"{"name":"predictive"}"#),
            200 => bench.plan(k, 0.4),
            205 => bench.plan(k, 30.0),
            // Two that wait and take over, the second of them one that takes the place of a third, and one that steps.
            250 => bench.continuing(k, 2, speed(k), 30_000_000, 0.0),
            255 => bench.continuing(k, 3, speed(k), 60_000_000, 0.0),
            260 => bench.continuing(k, 4, speed(k), 50_000_000, 0.0),
            265 => bench.continuing(k, 5, speed(k), 50_000_000, 0.5),
            // And one that still waits when the machine is stopped.
            395 => bench.continuing(k, 6, speed(k), 900_000_000, 0.0),
            400 => bench.order(k, Order::Stop(StopKind::Controlled)),
            590 => bench.order(k, Order::Stop(StopKind::Emergency)),
            595 => bench.order(k, Order::Reset),
            _ => {}
        }
        let calls = bench.turn();
        let entries = bench.drain();
        assert_eq!(
            calls,
            0,
            "turn {k}: {:?}",
            entries.iter().map(|entry| entry.body.name()).collect::<Vec<_>>()
        );
        tracked += usize::from(bench.control.node().mode() == Mode::Tracking);
        laws += entries.iter().filter(|entry| matches!(entry.body, Body::LawChanged(_))).count();
        loaded += entries.iter().filter(|entry| matches!(entry.body, Body::PlanLoaded(_))).count();
    }
    assert!(tracked > 3000 && loaded == 30, "{tracked} ticks tracking, {loaded} plans loaded");
    assert_eq!(laws, 20, "two laws a round");
    assert_eq!((bench.shared.entries_lost.load(SeqCst), bench.shared.ticks_late.load(SeqCst)), (0, 0));
}

const CAR: &str = "[vehicle]\nkind = \"car\"\nwheelbase_m = 1\nmax_speed_m_s = 1\nmax_accel_m_s2 = 1\n\
                   max_steer_rad = 0.5\nmax_steer_rate_rad_s = 1\n[law]\nname = \"kanayama\"\n\
                   [node]\nrate_hz = 1000\nplanner_lease_s = 0\n";

#[test]
fn no_law_allocates_or_frees_in_a_tick() {
    for kind in law::KINDS {
        let site = if kind.machines == law::Machines::Steered { CAR } else { SITE };
        let mut bench = Bench::on(&site.replace("kanayama", kind.name), 8192);
        let mut tracked = 0;
        for k in 0..400 {
            bench.pose(k, 0.0003 * k as f64);
            match k {
                1 => bench.plan(k, 0.3),
                10 => bench.start(k),
                _ => {}
            }
            assert_eq!(bench.turn(), 0, "{} in turn {k}", kind.name);
            tracked += usize::from(bench.control.node().mode() == Mode::Tracking);
        }
        assert!(tracked > 380, "{}: {tracked} ticks tracking", kind.name);
    }
}

#[test]
fn a_full_journal_queue_is_counted_and_shows_as_a_gap_in_the_numbers() {
    let mut bench = Bench::new(16);
    for k in 0..100 {
        bench.pose(k, 0.0);
        if k == 50 {
            bench.plan(k, 0.3);
            bench.tune(k, SAMSON);
        }
        assert_eq!(bench.turn(), 0, "turn {k}");
    }
    let lost = bench.shared.entries_lost.load(SeqCst);
    let waste: Vec<_> = std::iter::from_fn(|| bench.ends.waste.pop().ok()).collect();
    let holds = |name: &str| {
        waste.iter().any(|item| matches!(item, Waste::Entry(entry) if entry.body.name() == name))
    };
    assert!(holds("plan") && holds("tune") && holds("law-changed"), "{waste:?}");
    let kept = bench.drain();
    assert_eq!(kept.len(), 16);
    assert_eq!(kept.last().map(|entry| entry.number), Some(15));
    bench.turn();
    assert_eq!(
        bench.drain().first().map(|entry| entry.number),
        Some(16 + lost),
        "the gap is as long as the loss"
    );
    assert!(bench.commands().len() > 90, "commands went out all the same");
}

#[test]
fn after_a_zero_past_the_loop_nothing_is_sent_until_the_trip_is_taken_in() {
    let mut bench = Bench::new(8192);
    bench.turn();
    assert_eq!(bench.commands().len(), 1);
    let (ticket, _) = bench.gate.trip(Source::Supervisor);
    bench.turn();
    bench.turn();
    assert_eq!(bench.commands(), []);
    let event = Event::Trip(trackhold_proto::journal::TripEvent { cause: Cause::StalledLoop });
    bench.ends.supervisor_trips.push(Item { event, ticket: Some(ticket) }).unwrap();
    bench.turn();
    assert_eq!(bench.commands().len(), 2, "the trip's own zero and the tick's");
}

#[test]
fn a_trip_whose_event_was_lost_is_taken_in_by_the_loop_itself() {
    let mut bench = Bench::new(8192);
    bench.turn();
    bench.commands();
    bench.gate.trip(Source::Intake);
    bench.turn();
    bench.turn();
    assert_eq!(bench.commands(), []);
    assert!(bench.drain().iter().all(|entry| !matches!(entry.body, Body::Trip(_))));
    bench.turn();
    let trip = bench.drain().into_iter().find_map(|entry| match entry.body {
        Body::Trip(trip) => Some(trip.cause),
        _ => None,
    });
    assert_eq!(trip, Some(Cause::LostTrip));
    assert!(!bench.commands().is_empty());
}

#[test]
fn missed_periods_give_one_tick_and_the_grid_goes_on() {
    let mut bench = Bench::new(8192);
    bench.turn();
    bench.now += 7 * PERIOD_NS + PERIOD_NS / 3;
    bench.turn();
    assert_eq!(bench.shared.ticks_late.load(SeqCst), 1);
    assert_eq!(bench.control.due(), TimeNs(BEGIN_NS + 10 * PERIOD_NS));
    let ticks = bench.drain().into_iter().filter(|entry| matches!(entry.body, Body::Tick(_))).count();
    assert_eq!(ticks, 2);
}
