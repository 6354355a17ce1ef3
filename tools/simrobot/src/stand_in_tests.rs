//! On real sockets of this machine. Times are asserted with generous bounds: what is tested is the logic.

use super::*;
use crate::drive::Taken;
use crate::link::LinkSpec;
use crate::spec::RobotSpec;
use crate::testing::differential;
use std::sync::Arc;
use std::thread;
use std::time::Instant;
use trackhold_core::geometry::{Mount, Pose};
use trackhold_proto::message::{Command, TimeRequest, WheelLayout};
use trackhold_proto::words::Mode;
use trackhold_proto::{Envelope, Message};

fn options(daemon: SocketAddr, seconds: f64) -> Options {
    let setup = Setup {
        vehicle: differential(),
        mount: Mount::default(),
        robot: RobotSpec::default(),
        start: Pose::new(1.0, 2.0, 0.0),
        link: LinkSpec::default(),
        link_seed: 0,
    };
    Options { daemon, setup, seconds: Some(seconds) }
}

fn command(sequence: u64, speed: f64) -> Vec<u8> {
    let message = Message::Command(Command {
        mode: Mode::Tracking,
        layout: WheelLayout::LeftRight,
        valid_ns: 300_000_000,
        speed_m_s: 0.0,
        turn_rate_rad_s: 0.0,
        wheels: [speed, speed, 0.0, 0.0],
    });
    Envelope { session: 5, sequence, stamp_ns: 0, message }.to_vec()
}

/// What a daemon stub saw.
#[derive(Debug, Default)]
struct Seen {
    poses: u64,
    subscribed: u64,
    ended: u64,
    replies: u64,
    commands: u64,
}

/// Answers every pose with a command and a time request for `seconds`, and then is silent as if killed. As from any
/// daemon, zeros come before motion.
fn daemon_stub(socket: &UdpSocket, seconds: f64) -> Seen {
    let (begin, mut seen, mut drive) = (Instant::now(), Seen::default(), None);
    let mut buffer = [0; 1300];
    while seen.ended == 0 && begin.elapsed().as_secs_f64() < 20.0 {
        let Ok((length, from)) = socket.recv_from(&mut buffer) else { continue };
        match Envelope::decode(&buffer[..length]).unwrap().message {
            Message::Subscribe(subscribe) if subscribe.want == 0 => seen.ended += 1,
            Message::Subscribe(_) => {
                seen.subscribed += 1;
                drive = Some(from);
            }
            Message::Pose(_) => {
                seen.poses += 1;
                let request = Message::TimeRequest(TimeRequest { sent_ns: 1 });
                let request = Envelope { session: 5, sequence: 1, stamp_ns: 0, message: request }.to_vec();
                socket.send_to(&request, from).unwrap();
                if let Some(drive) = drive.filter(|_| begin.elapsed().as_secs_f64() < seconds) {
                    assert_ne!(drive, from, "estimator and drive have addresses of their own");
                    seen.commands += 1;
                    let speed = if seen.commands <= 5 { 0.0 } else { 5.0 };
                    socket.send_to(&command(seen.commands, speed), drive).unwrap();
                }
            }
            Message::TimeReply(reply) => {
                assert!(reply.reply_sent_ns >= reply.request_received_ns);
                seen.replies += 1;
            }
            other => panic!("{other:?}"),
        }
    }
    seen
}

#[test]
fn it_drives_on_real_sockets_and_stands_once_the_daemon_is_gone() {
    let socket = UdpSocket::bind("127.0.0.1:0").unwrap();
    socket.set_read_timeout(Some(Duration::from_millis(100))).unwrap();
    let stand_in = StandIn::bind(options(socket.local_addr().unwrap(), 2.0)).unwrap();
    let daemon = thread::spawn(move || daemon_stub(&socket, 0.8));
    let mut points = Vec::new();
    let summary = stand_in.run(&Control::default(), &mut |point, _| points.push(*point)).unwrap();
    let seen = daemon.join().unwrap();
    assert!(seen.poses >= 20 && seen.subscribed >= 2 && seen.ended == 1 && seen.replies > 0, "{seen:?}");
    assert!(summary.seconds >= 2.0 && points.is_sorted_by_key(|point| point.at));
    assert!(summary.drive.of(Taken::Taken) > 0 && summary.drive.ran_out >= 1, "{summary:?}");
    assert!(summary.end.pose.x_m > 1.0 && summary.end.pose.y_m == 2.0, "it moved along +x: {summary:?}");
    assert_eq!(summary.end.wheels, [0.0; 4], "the daemon fell silent");
    assert!((summary.top_speed_m_s - 0.5).abs() < 1e-12);
    assert!(!points.first().unwrap().commanded && points.iter().any(|point| point.commanded));
}

#[test]
fn without_a_daemon_it_goes_on_asking_until_it_is_stopped() {
    let nobody = UdpSocket::bind("127.0.0.1:0").unwrap().local_addr().unwrap();
    let stand_in = StandIn::bind(Options { seconds: None, ..options(nobody, 1.0) }).unwrap();
    let control = Arc::new(Control::default());
    let stopper = control.clone();
    let stopping = thread::spawn(move || {
        thread::sleep(Duration::from_millis(600));
        stopper.stop();
    });
    let summary = stand_in.run(&control, &mut |_, _| {}).unwrap();
    stopping.join().unwrap();
    assert!(summary.counts.subscriptions >= 2 && summary.unsent > 0, "{summary:?}");
    assert_eq!(summary.end.pose, Pose::new(1.0, 2.0, 0.0));
}

#[test]
fn a_specification_that_does_not_hold_is_told_before_anything_runs() {
    let mut options = options("127.0.0.1:9".parse().unwrap(), 1.0);
    options.setup.link.loss = 2.0;
    let error = StandIn::bind(options.clone()).unwrap_err().to_string();
    assert_eq!(error, "link.loss: 2 is not at least 0 and at most 1");
    options.setup.link.loss = 0.0;
    options.setup.robot.drive.steer_lag_s = 0.1;
    let error = StandIn::bind(options).unwrap_err().to_string();
    assert_eq!(error, "drive.steer_lag_s: this machine does not steer; leave it out");
}
