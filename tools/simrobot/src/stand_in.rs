//! The machine on real sockets, in real time. The only place of this crate with network and a clock.

use crate::drive::DriveCounts;
use crate::link::LinkCounts;
use crate::machine::{Counts, Machine, Party, Setup, TruePoint};
use nix::poll::{PollFd, PollFlags, ppoll};
use nix::sys::time::TimeSpec;
use nix::time::{ClockId, clock_gettime};
use std::io::{self, ErrorKind};
use std::net::{Ipv4Addr, Ipv6Addr, SocketAddr, UdpSocket};
use std::os::fd::AsFd;
use std::sync::atomic::{AtomicBool, Ordering};
use std::time::Duration;
use trackhold_core::keys::Problem;
use trackhold_core::time::{SpanNs, TimeNs};
use trackhold_proto::header::MAX_DATAGRAM_BYTES;

/// The longest sleep, so that a stop is seen.
const LONGEST_SLEEP: SpanNs = SpanNs(20_000_000);
/// The most datagrams taken from a socket before anything else gets its turn.
const MOST_IN_A_BURST: usize = 1000;

/// What to stand in for, and where the daemon is.
#[derive(Clone, Debug)]
pub struct Options {
    /// The daemon's address.
    pub daemon: SocketAddr,
    /// The machine.
    pub setup: Setup,
    /// How long to run, s; until stopped if none.
    pub seconds: Option<f64>,
}

/// What is asked of a running stand-in, from any thread.
#[derive(Debug, Default)]
pub struct Control {
    stop: AtomicBool,
    silent: AtomicBool,
}

impl Control {
    /// Ends the run within some tens of milliseconds.
    pub fn stop(&self) {
        self.stop.store(true, Ordering::Relaxed);
    }

    /// Silences the estimator, as if it had been killed, or lets it speak again.
    pub fn silence(&self, silent: bool) {
        self.silent.store(silent, Ordering::Relaxed);
    }
}

/// Why a stand-in cannot run.
#[derive(Debug, thiserror::Error)]
pub enum StandInError {
    /// The specification does not hold for the machine.
    #[error("{}", .0.iter().map(ToString::to_string).collect::<Vec<_>>().join("\n"))]
    Setup(Vec<Problem>),
    /// A socket failed.
    #[error("cannot reach the daemon at {daemon}: {error}")]
    Socket {
        /// The daemon's address.
        daemon: SocketAddr,
        /// What the system says.
        error: io::Error,
    },
    /// The system's clock, random source or poll failed.
    #[error("the system failed: {0}")]
    System(#[from] io::Error),
}

/// What happened.
#[derive(Clone, Copy, Debug)]
pub struct Summary {
    /// How long it ran, s.
    pub seconds: f64,
    /// Where it truly is at the end.
    pub end: TruePoint,
    /// The greatest true speed at a moment of measurement, m/s.
    pub top_speed_m_s: f64,
    /// What the machine did.
    pub counts: Counts,
    /// What became of the commands that reached the drive.
    pub drive: DriveCounts,
    /// What the link did to the estimator's datagrams.
    pub poses_link: LinkCounts,
    /// What the link did to the datagrams to the drive.
    pub commands_link: LinkCounts,
    /// Datagrams that the system did not take, or that nobody was there to get.
    pub unsent: u64,
}

/// A machine with its sockets.
#[derive(Debug)]
pub struct StandIn {
    options: Options,
    sockets: [UdpSocket; 2],
    sessions: [u64; 2],
    unsent: u64,
    top_speed_m_s: f64,
}

impl StandIn {
    /// Checks the options and opens the sockets, one for the estimator and one for the drive.
    ///
    /// # Errors
    /// If the specification does not hold for the machine, or a socket cannot be opened.
    pub fn bind(options: Options) -> Result<Self, StandInError> {
        let sessions = [random()?, random()?];
        Machine::new(&options.setup, sessions, TimeNs(0)).map_err(StandInError::Setup)?;
        let socket = || {
            connected(options.daemon).map_err(|error| StandInError::Socket { daemon: options.daemon, error })
        };
        Ok(Self { sockets: [socket()?, socket()?], options, sessions, unsent: 0, top_speed_m_s: 0.0 })
    }

    /// Runs until the time is up or `control` says stop. `observe` gets a true point a measurement, in order of time;
    /// its moments are CLOCK_MONOTONIC's, the same as the daemon's where both run on one machine.
    ///
    /// # Errors
    /// If the system fails. A daemon that is away is none: the machine goes on asking.
    pub fn run(
        mut self,
        control: &Control,
        observe: &mut dyn FnMut(&TruePoint, &Machine),
    ) -> Result<Summary, StandInError> {
        let begin = clock()?;
        let mut machine =
            Machine::new(&self.options.setup, self.sessions, begin).map_err(StandInError::Setup)?;
        let end = self.options.seconds.map(|seconds| begin + SpanNs::from_seconds(seconds));
        loop {
            let now = clock()?;
            self.receive(&mut machine, now)?;
            machine.set_silent(control.silent.load(Ordering::Relaxed));
            machine.step(now);
            self.send(&mut machine, now);
            while let Some(point) = machine.next_point() {
                self.top_speed_m_s = self.top_speed_m_s.max(point.velocity.speed_m_s.abs());
                observe(&point, &machine);
            }
            if control.stop.load(Ordering::Relaxed) || end.is_some_and(|end| now >= end) {
                return Ok(self.finish(&mut machine, begin, now));
            }
            let until = end.map_or(machine.due(), |end| end.min(machine.due()));
            self.sleep(until)?;
        }
    }

    fn finish(mut self, machine: &mut Machine, begin: TimeNs, now: TimeNs) -> Summary {
        let farewell = machine.farewell(now);
        self.put(Party::Drive, &farewell);
        Summary {
            seconds: now.since(begin).seconds(),
            end: machine.point(),
            top_speed_m_s: self.top_speed_m_s,
            counts: machine.counts(),
            drive: machine.drive_counts(),
            poses_link: machine.link_counts(Party::Estimator).0,
            commands_link: machine.link_counts(Party::Drive).1,
            unsent: self.unsent,
        }
    }

    /// Takes in what has arrived; all of it counts as one burst.
    fn receive(&mut self, machine: &mut Machine, now: TimeNs) -> Result<(), StandInError> {
        let mut buffer = [0; MAX_DATAGRAM_BYTES + 1];
        for party in Party::ALL {
            for _ in 0..MOST_IN_A_BURST {
                match self.sockets[party as usize].recv(&mut buffer) {
                    Ok(length) => machine.receive(now, party, &buffer[..length]),
                    // An earlier datagram found nobody: the daemon is away.
                    Err(error) if error.kind() == ErrorKind::ConnectionRefused => self.unsent += 1,
                    Err(error) if error.kind() == ErrorKind::WouldBlock => break,
                    Err(error) if error.kind() == ErrorKind::Interrupted => {}
                    Err(error) => return Err(error.into()),
                }
            }
        }
        Ok(())
    }

    fn send(&mut self, machine: &mut Machine, now: TimeNs) {
        while let Some((party, datagram)) = machine.next_datagram(now) {
            self.put(party, &datagram);
        }
    }

    fn put(&mut self, party: Party, datagram: &[u8]) {
        self.unsent += u64::from(self.sockets[party as usize].send(datagram).is_err());
    }

    /// Sleeps until a moment or until something arrives.
    fn sleep(&self, until: TimeNs) -> Result<(), StandInError> {
        let span = until.since(clock()?).min(LONGEST_SLEEP);
        let mut watched =
            Party::ALL.map(|party| PollFd::new(self.sockets[party as usize].as_fd(), PollFlags::POLLIN));
        match ppoll(&mut watched, Some(TimeSpec::from_duration(Duration::from_nanos(span.0))), None) {
            Ok(_) | Err(nix::errno::Errno::EINTR) => Ok(()),
            Err(error) => Err(StandInError::System(error.into())),
        }
    }
}

/// CLOCK_MONOTONIC.
fn clock() -> Result<TimeNs, StandInError> {
    let time = clock_gettime(ClockId::CLOCK_MONOTONIC).map_err(io::Error::from)?;
    Ok(TimeNs(time.tv_sec().cast_unsigned() * 1_000_000_000 + time.tv_nsec().cast_unsigned()))
}

fn random() -> Result<u64, StandInError> {
    getrandom::u64().map_err(|error| StandInError::System(io::Error::other(error.to_string())))
}

fn connected(daemon: SocketAddr) -> io::Result<UdpSocket> {
    let any: SocketAddr = match daemon {
        SocketAddr::V4(_) => (Ipv4Addr::UNSPECIFIED, 0).into(),
        SocketAddr::V6(_) => (Ipv6Addr::UNSPECIFIED, 0).into(),
    };
    let socket = UdpSocket::bind(any)?;
    socket.connect(daemon)?;
    socket.set_nonblocking(true)?;
    Ok(socket)
}

#[cfg(test)]
#[path = "stand_in_tests.rs"]
mod tests;
