//! Robot, drive, estimator and link as one machine that speaks the protocol: datagrams in, datagrams out, no I/O.
//!
//! The estimator and the drive are two parties with a session and an address each, as on a real robot. What they send
//! and what is sent to them passes a faulty link each way.
//!
//! [`Machine::step`] does what has fallen due, in the order of its moments. Of one moment, in this order: measuring and
//! sending poses; what arrives at the estimator; all that arrives at the drive, of which the newest counts; the drive's
//! own zero; renewing the subscription.

use crate::drive::{Drive, DriveCounts, Output};
use crate::link::{Link, LinkCounts, LinkSpec};
use crate::robot::Robot;
use crate::sensor::Seen;
use crate::spec::{RobotSpec, SensorSpec};
use std::collections::VecDeque;
use std::sync::Arc;
use trackhold_core::geometry::{BodyVelocity, Mount, Pose};
use trackhold_core::keys::Problem;
use trackhold_core::time::{SpanNs, TimeNs};
use trackhold_core::vehicle::{Vehicle, Wheels};
use trackhold_proto::message::{self, Subscribe, TimeReply, WANT_COMMANDS};
use trackhold_proto::{Envelope, Message};

/// The drive accepts no command that is valid for longer: what the daemon's own bound allows.
pub const LONGEST_VALIDITY: SpanNs = SpanNs(2_000_000_000);
/// Lease of the drive's subscription, ms.
pub const LEASE_MS: u32 = 1500;
/// While no lease is granted the drive asks this often, ms.
const ASK_AGAIN_MS: u32 = 250;

/// What the machine is.
#[derive(Clone, Debug)]
pub struct Setup {
    /// The machine as it believes to be: the site file's vehicle.
    pub vehicle: Arc<dyn Vehicle>,
    /// Where the site file says the estimator sits.
    pub mount: Mount,
    /// In what it differs from that.
    pub robot: RobotSpec,
    /// True pose of the chassis point at the beginning.
    pub start: Pose,
    /// The link, each way.
    pub link: LinkSpec,
    /// Seed of the link's faults.
    pub link_seed: u64,
}

/// Which of the two parties.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Party {
    /// The pose estimator.
    Estimator,
    /// The drive.
    Drive,
}

impl Party {
    /// Both.
    pub const ALL: [Self; 2] = [Self::Estimator, Self::Drive];
}

/// Where the machine truly was at the moment of a measurement, missing or not.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct TruePoint {
    /// The moment, daemon's clock.
    pub at: TimeNs,
    /// True pose of the chassis point.
    pub pose: Pose,
    /// True body velocity.
    pub velocity: BodyVelocity,
    /// What the wheels really did.
    pub wheels: Wheels,
    /// Way travelled since the beginning, m.
    pub travelled_m: f64,
    /// A command was in force; otherwise the drive was at zero by itself.
    pub commanded: bool,
}

/// What the machine did so far.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Counts {
    /// Poses sent.
    pub poses_sent: u64,
    /// Poses that dropouts swallowed.
    pub poses_missing: u64,
    /// Poses that were held back because the estimator was silenced.
    pub poses_silenced: u64,
    /// Time requests answered.
    pub time_requests: u64,
    /// Subscriptions sent.
    pub subscriptions: u64,
    /// Datagrams that did not decode.
    pub malformed: u64,
    /// Sound datagrams that the party has no use for.
    pub ignored: u64,
}

/// One party's session, and its link each way.
#[derive(Debug)]
struct End {
    session: u64,
    sequence: u64,
    up: Link,
    down: Link,
}

impl End {
    fn new(setup: &Setup, session: u64, number: u64) -> Result<Self, Vec<Problem>> {
        let link = |way: u64| Link::new(setup.link, setup.link_seed.wrapping_add(2 * number + way));
        Ok(Self { session, sequence: 0, up: link(0)?, down: link(1)? })
    }

    fn envelope(&mut self, stamp_ns: u64, message: Message) -> Vec<u8> {
        self.sequence += 1;
        Envelope { session: self.session, sequence: self.sequence, stamp_ns, message }.to_vec()
    }
}

/// The machine.
#[derive(Debug)]
pub struct Machine {
    robot: Robot,
    drive: Drive,
    /// What the plant was told last.
    output: Output,
    ends: [End; 2],
    sensor_spec: SensorSpec,
    silent: bool,
    granted_lease_ms: Option<u32>,
    subscribe_at: TimeNs,
    points: VecDeque<TruePoint>,
    counts: Counts,
}

/// What falls due, in the order of one moment.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord)]
enum Due {
    Robot,
    Estimator,
    Drive,
    RunOut,
    Subscribe,
}

impl Machine {
    /// A machine at rest. `sessions` are random numbers, one for the estimator and one for the drive.
    ///
    /// # Errors
    /// Every number of the specification or the link that does not hold.
    pub fn new(setup: &Setup, sessions: [u64; 2], at: TimeNs) -> Result<Self, Vec<Problem>> {
        let mut drive = Drive::new(setup.vehicle.clone(), LONGEST_VALIDITY);
        let in_link =
            |more: Vec<Problem>| more.into_iter().map(|problem| problem.within("link")).collect::<Vec<_>>();
        let end = |number: usize| End::new(setup, sessions[number], number as u64).map_err(in_link);
        Ok(Self {
            robot: Robot::new(&setup.robot, setup.vehicle.clone(), setup.mount, setup.start, at)?,
            output: drive.output(at),
            drive,
            ends: [end(0)?, end(1)?],
            sensor_spec: setup.robot.sensor,
            silent: false,
            granted_lease_ms: None,
            subscribe_at: at,
            points: VecDeque::new(),
            counts: Counts::default(),
        })
    }

    /// Takes in a datagram that arrived for a party. What arrives in one burst should carry one moment.
    pub fn receive(&mut self, at: TimeNs, party: Party, datagram: &[u8]) {
        self.ends[party as usize].down.send(at, datagram);
    }

    /// Does everything that has fallen due by `now`.
    pub fn step(&mut self, now: TimeNs) {
        while let Some((at, due)) = self.first_due().filter(|(at, _)| *at <= now) {
            match due {
                Due::Robot => self.measure_and_send(at, now),
                Due::Estimator => self.estimator_receives(at, now),
                Due::Drive => self.drive_receives(at),
                Due::RunOut => self.obey(at),
                Due::Subscribe => self.subscribe(now),
            }
        }
        self.robot.advance(now);
    }

    /// When [`Machine::step`] or [`Machine::next_datagram`] has something to do next.
    pub fn due(&self) -> TimeNs {
        let out = self.ends.iter().filter_map(|end| end.up.next_arrival()).min();
        let own = self.first_due().map(|(at, _)| at);
        out.into_iter().chain(own).min().unwrap_or(TimeNs(u64::MAX))
    }

    /// The next datagram to put on the wire, with its sender.
    pub fn next_datagram(&mut self, now: TimeNs) -> Option<(Party, Vec<u8>)> {
        Party::ALL.into_iter().find_map(|party| {
            let (_, bytes) = self.ends[party as usize].up.poll(now)?;
            Some((party, bytes))
        })
    }

    /// The next of the true points that have come up since the last call.
    pub fn next_point(&mut self) -> Option<TruePoint> {
        self.points.pop_front()
    }

    /// The drive's end of its subscription, to be sent when the machine is put away.
    pub fn farewell(&mut self, now: TimeNs) -> Vec<u8> {
        let message = Message::Subscribe(Subscribe { want: 0, lease_ms: LEASE_MS });
        self.ends[Party::Drive as usize].envelope(now.0, message)
    }

    /// Silences the estimator, as if it had been killed, or lets it speak again.
    pub fn set_silent(&mut self, silent: bool) {
        self.silent = silent;
    }

    /// Where the machine truly is at the moment last reached.
    pub fn point(&self) -> TruePoint {
        let plant = self.robot.plant();
        TruePoint {
            at: plant.at(),
            pose: plant.pose(),
            velocity: plant.velocity(),
            wheels: plant.wheels(),
            travelled_m: plant.travelled_m(),
            commanded: self.output.commanded,
        }
    }

    /// What the machine did so far.
    pub fn counts(&self) -> Counts {
        Counts { poses_missing: self.robot.missing(), ..self.counts }
    }

    /// What became of the commands that reached the drive.
    pub fn drive_counts(&self) -> DriveCounts {
        self.drive.counts()
    }

    /// What the link did to the datagrams of a party: (from it, to it).
    pub fn link_counts(&self, party: Party) -> (LinkCounts, LinkCounts) {
        let end = &self.ends[party as usize];
        (end.up.counts(), end.down.counts())
    }

    fn first_due(&self) -> Option<(TimeNs, Due)> {
        let [estimator, drive] = &self.ends;
        let dues = [
            (Some(self.robot.due()), Due::Robot),
            (estimator.down.next_arrival(), Due::Estimator),
            (drive.down.next_arrival(), Due::Drive),
            (self.drive.runs_out(), Due::RunOut),
            (Some(self.subscribe_at), Due::Subscribe),
        ];
        dues.into_iter().filter_map(|(at, due)| Some((at?, due))).min()
    }

    fn measure_and_send(&mut self, at: TimeNs, now: TimeNs) {
        let measures = self.robot.sensor().due() <= at;
        while let Some(seen) = self.robot.next_pose(at) {
            self.send_pose(&seen, now);
        }
        if measures {
            self.points.push_back(self.point());
        }
    }

    fn send_pose(&mut self, seen: &Seen, now: TimeNs) {
        if self.silent {
            self.counts.poses_silenced += 1;
            return;
        }
        let message = Message::Pose(message::Pose {
            measured_ns: seen.measured_ns,
            x_m: seen.pose.x_m,
            y_m: seen.pose.y_m,
            heading_rad: seen.pose.heading_rad,
            position_sd_m: self.sensor_spec.position_sd_m,
            heading_sd_rad: self.sensor_spec.heading_sd_rad,
        });
        let stamp_ns = self.robot.sensor().clock_ns(now);
        let end = &mut self.ends[Party::Estimator as usize];
        let datagram = end.envelope(stamp_ns, message);
        end.up.send(seen.arrives, &datagram);
        self.counts.poses_sent += 1;
    }

    fn estimator_receives(&mut self, at: TimeNs, now: TimeNs) {
        while let Some((arrived, datagram)) = self.ends[Party::Estimator as usize].down.poll(at) {
            let Some(envelope) = self.decode(&datagram) else { continue };
            let Message::TimeRequest(request) = envelope.message else {
                self.counts.ignored += 1;
                continue;
            };
            if self.silent {
                continue;
            }
            let reply_sent_ns = self.robot.sensor().clock_ns(now);
            let message = Message::TimeReply(TimeReply {
                request_sent_ns: request.sent_ns,
                request_received_ns: self.robot.sensor().clock_ns(arrived),
                reply_sent_ns,
            });
            let end = &mut self.ends[Party::Estimator as usize];
            let datagram = end.envelope(reply_sent_ns, message);
            end.up.send(now, &datagram);
            self.counts.time_requests += 1;
        }
    }

    fn drive_receives(&mut self, at: TimeNs) {
        self.robot.advance(at);
        self.drive.set_moving(self.robot.plant().is_moving());
        while let Some((arrived, datagram)) = self.ends[Party::Drive as usize].down.poll(at) {
            let Some(envelope) = self.decode(&datagram) else { continue };
            match envelope.message {
                Message::Command(command) => {
                    self.drive.on_command(arrived, envelope.session, envelope.sequence, &command);
                }
                Message::Subscribed(subscribed) => {
                    let granted = subscribed.want & WANT_COMMANDS != 0;
                    self.granted_lease_ms = granted.then_some(subscribed.lease_ms);
                }
                _ => self.counts.ignored += 1,
            }
        }
        self.obey(at);
    }

    fn decode(&mut self, datagram: &[u8]) -> Option<Envelope> {
        let decoded = Envelope::decode(datagram).ok();
        self.counts.malformed += u64::from(decoded.is_none());
        decoded
    }

    /// Tells the plant what the drive wants now, if that has changed.
    fn obey(&mut self, at: TimeNs) {
        let output = self.drive.output(at);
        if output == self.output {
            return;
        }
        self.output = output;
        self.robot.advance(at);
        let wheels = if output.hold_steering {
            self.robot.plant().with_steering_held(&output.wheels)
        } else {
            output.wheels
        };
        self.robot.command(at, &wheels);
    }

    fn subscribe(&mut self, now: TimeNs) {
        let third_ms = self.granted_lease_ms.unwrap_or(LEASE_MS) / 3;
        let wait_ms =
            if self.granted_lease_ms.is_some() { third_ms.max(10) } else { third_ms.min(ASK_AGAIN_MS) };
        self.subscribe_at = now + SpanNs(u64::from(wait_ms) * 1_000_000);
        let message = Message::Subscribe(Subscribe { want: WANT_COMMANDS, lease_ms: LEASE_MS });
        let end = &mut self.ends[Party::Drive as usize];
        let datagram = end.envelope(now.0, message);
        end.up.send(now, &datagram);
        self.counts.subscriptions += 1;
    }
}

#[cfg(test)]
#[path = "machine_tests.rs"]
mod tests;
