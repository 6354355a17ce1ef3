//! A daemon for tests: answers what a closure says. And a bad link to it.

use crate::demo::relay::Relay;
use simrobot::LinkSpec;
use std::net::{SocketAddr, UdpSocket};
use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering};
use std::thread::JoinHandle;
use std::time::Duration;
use trackhold_proto::blob::{BootId, Hex, Text};
use trackhold_proto::header::MAX_DATAGRAM_BYTES;
use trackhold_proto::message::{Ack, Counters, Status};
use trackhold_proto::words::{Cause, Mode, Regime};
use trackhold_proto::{Envelope, Message};

/// A thread that answers until it is dropped.
pub(crate) struct Served {
    address: SocketAddr,
    stop: Arc<AtomicBool>,
    thread: Option<JoinHandle<()>>,
}

impl Served {
    pub(crate) fn address(&self) -> SocketAddr {
        self.address
    }

    fn spawn(socket: UdpSocket, work: impl FnOnce(UdpSocket, Arc<AtomicBool>) + Send + 'static) -> Self {
        socket.set_read_timeout(Some(Duration::from_millis(2))).unwrap();
        let address = socket.local_addr().unwrap();
        let stop = Arc::new(AtomicBool::new(false));
        let told = Arc::clone(&stop);
        let thread = Some(std::thread::spawn(move || work(socket, told)));
        Self { address, stop, thread }
    }
}

impl Drop for Served {
    fn drop(&mut self) {
        self.stop.store(true, Ordering::Relaxed);
        if let Some(thread) = self.thread.take() {
            let ended = thread.join();
            assert!(ended.is_ok() || std::thread::panicking());
        }
    }
}

/// A daemon whose `answer` gets every message, or `None` when a millisecond or two passed without one.
pub(crate) fn daemon(mut answer: impl FnMut(Option<&Envelope>) -> Vec<Message> + Send + 'static) -> Served {
    Served::spawn(UdpSocket::bind("127.0.0.1:0").unwrap(), move |socket, stop| {
        let mut buffer = [0; MAX_DATAGRAM_BYTES];
        let mut sequence = 0;
        let mut peer = None;
        while !stop.load(Ordering::Relaxed) {
            let envelope = socket.recv_from(&mut buffer).ok().and_then(|(length, from)| {
                peer = Some(from);
                Envelope::decode(&buffer[..length]).ok()
            });
            for message in answer(envelope.as_ref()) {
                sequence += 1;
                let datagram = Envelope { session: 7, sequence, stamp_ns: 0, message }.to_vec();
                if let Some(peer) = peer {
                    let _ = socket.send_to(&datagram, peer);
                }
            }
        }
    })
}

/// A link to `target` that loses `loss` of the datagrams each way, doubles and reorders a few and holds all up a little.
pub(crate) fn bad_link(target: SocketAddr, loss: f64) -> Relay {
    let spec = LinkSpec {
        loss,
        delay_s: 0.0005,
        jitter_s: 0.001,
        duplicate: 0.05,
        reorder: 0.05,
        reorder_delay_s: 0.004,
        corrupt: 0.0,
    };
    Relay::begin(target, spec, 1).unwrap()
}

/// The acknowledgement of an order.
pub(crate) fn ack_of(order: &Envelope, refusal: &str) -> Message {
    let plan = match &order.message {
        Message::PlanPart(part) => part.digest,
        Message::Start(start) => start.plan,
        _ => Hex::NONE,
    };
    Message::Ack(Ack {
        order_session: order.session,
        order_sequence: order.sequence,
        order_kind: u32::from(order.message.kind()),
        accepted: u32::from(refusal.is_empty()),
        plan,
        text: Text::cut(refusal),
    })
}

/// A status to vary.
pub(crate) fn status() -> Status {
    Status {
        boot: BootId::NONE,
        start_number: 1,
        mode: Mode::Standby,
        cause: Cause::Boot,
        plan: Hex::NONE,
        plan_id: Text::cut(""),
        plan_revision: 0,
        plan_duration_ns: 0,
        plan_time_ns: 0,
        tick: 0,
        has_pose: 0,
        x_m: 0.0,
        y_m: 0.0,
        heading_rad: 0.0,
        pose_age_ns: 0,
        clock_offset_ns: 0,
        along_error_m: 0.0,
        cross_error_m: 0.0,
        heading_error_rad: 0.0,
        command_subscribers: 0,
        journal_subscribers: 0,
        oldest_entry: 0,
        next_entry: 1,
        counters: Counters::default(),
        regime: Regime::None,
        plan_rate: 1.0,
        speed_cap: 1.0,
        bandwidth_rad_s: 2.0,
        law: Text::cut("kanayama"),
        gains: Text::cut("{\"k_heading\":4.0,\"k_x\":1.0,\"k_y\":4.0}"),
    }
}
