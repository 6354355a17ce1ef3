//! Zero past the loop: what an emergency stop, the supervisor, the end of the program and a panic send at once.

use crate::clock;
use crate::gate::{Gate, Source, Ticket};
use crate::lanes::{Drives, Shared, count};
use std::net::UdpSocket;
use std::sync::{Arc, Mutex, PoisonError};
use trackhold_proto::header::MAX_DATAGRAM_BYTES;
use trackhold_proto::message::{Command, WheelLayout};
use trackhold_proto::words::Mode;
use trackhold_proto::{Envelope, Message};

/// What every datagram of this daemon is sent with.
#[derive(Debug)]
pub struct Outlet {
    /// The one socket, non-blocking.
    pub socket: UdpSocket,
    /// Numbers and latch.
    pub gate: Arc<Gate>,
    /// The daemon's session.
    pub session: u64,
}

impl Outlet {
    /// Another one on the same socket.
    ///
    /// # Errors
    /// If the system has no file descriptor left.
    pub fn another(&self) -> std::io::Result<Self> {
        Ok(Self { socket: self.socket.try_clone()?, gate: Arc::clone(&self.gate), session: self.session })
    }

    /// Encodes a command under a number. Allocates nothing.
    pub fn encode(&self, number: u64, command: Command, datagram: &mut [u8; MAX_DATAGRAM_BYTES]) -> usize {
        let envelope = Envelope {
            session: self.session,
            sequence: number,
            stamp_ns: clock::now().0,
            message: Message::Command(command),
        };
        envelope.encode(datagram)
    }
}

/// Sends zero past the loop.
#[derive(Debug)]
pub struct ZeroSide {
    outlet: Outlet,
    layout: WheelLayout,
    valid_ns: u64,
    shared: Arc<Shared>,
    /// Locked only to copy the array, which cannot fail or wait; the loop never locks it.
    drives: Mutex<Drives>,
}

impl ZeroSide {
    /// The zero side of a machine whose commands have this layout and validity.
    pub fn new(outlet: Outlet, layout: WheelLayout, valid_ns: u64, shared: Arc<Shared>) -> Self {
        Self { outlet, layout, valid_ns, shared, drives: Mutex::default() }
    }

    /// The gate that it shuts.
    pub fn gate(&self) -> &Gate {
        &self.outlet.gate
    }

    /// Where zero goes from now on.
    pub fn set_drives(&self, drives: Drives) {
        *self.drives.lock().unwrap_or_else(PoisonError::into_inner) = drives;
    }

    /// Shuts the gate and sends zero to every drive; `mode` is the one the node will be in once it took the trip in.
    /// The ticket goes with the event. Never waits for the network.
    pub fn trip(&self, source: Source, mode: Mode) -> Ticket {
        let (ticket, number) = self.outlet.gate.trip(source);
        let command = Command {
            mode,
            layout: self.layout,
            valid_ns: self.valid_ns,
            speed_m_s: 0.0,
            turn_rate_rad_s: 0.0,
            wheels: self.outlet.gate.held(),
        };
        let mut datagram = [0; MAX_DATAGRAM_BYTES];
        let length = self.outlet.encode(number, command, &mut datagram);
        let drives = *self.drives.lock().unwrap_or_else(PoisonError::into_inner);
        for drive in drives.into_iter().flatten() {
            if self.outlet.socket.send_to(&datagram[..length], drive).is_err() {
                count(&self.shared.commands_unsent);
            }
        }
        ticket
    }
}

#[cfg(test)]
pub(crate) mod tests {
    use super::*;

    /// A drive's socket.
    pub(crate) struct Drive(UdpSocket);

    impl Drive {
        fn commands(&self) -> Vec<(u64, Command)> {
            let mut bytes = [0; MAX_DATAGRAM_BYTES];
            let received =
                std::iter::from_fn(|| self.0.recv(&mut bytes).ok().map(|length| bytes[..length].to_vec()));
            let command = |bytes: Vec<u8>| match Envelope::decode(&bytes) {
                Ok(Envelope { sequence, message: Message::Command(command), .. }) => (sequence, command),
                other => panic!("{other:?}"),
            };
            received.map(command).collect()
        }

        /// Modes of the commands it got.
        pub(crate) fn modes(&self) -> Vec<Mode> {
            self.commands().into_iter().map(|(_, command)| command.mode).collect()
        }
    }

    /// The zero side of a car, and a drive that is subscribed to it.
    pub(crate) fn zero_side() -> (Arc<ZeroSide>, Arc<Shared>, Drive) {
        let socket = UdpSocket::bind("127.0.0.1:0").unwrap();
        let drive = UdpSocket::bind("127.0.0.1:0").unwrap();
        drive.set_nonblocking(true).unwrap();
        let shared = Arc::new(Shared::default());
        let outlet = Outlet { socket, gate: Arc::new(Gate::default()), session: 1 };
        let zero = ZeroSide::new(outlet, WheelLayout::SpeedSteer, 5, Arc::clone(&shared));
        zero.set_drives([None, Some(drive.local_addr().unwrap()), None, None]);
        (Arc::new(zero), shared, Drive(drive))
    }

    #[test]
    fn zero_is_newer_than_every_command_before_and_holds_the_steering() {
        let (zero, shared, drive) = zero_side();
        let before = zero.gate().number();
        zero.gate().hold(&[0.0, 0.25, 0.0, 0.0]);
        zero.trip(Source::Intake, Mode::EmergencyStop);
        let commands = drive.commands();
        let (sequence, command) = commands[0];
        assert!(commands.len() == 1 && sequence > before);
        assert_eq!(
            (command.mode, command.wheels, command.valid_ns),
            (Mode::EmergencyStop, [0.0, 0.25, 0.0, 0.0], 5)
        );
        assert_eq!(shared.commands_unsent.load(std::sync::atomic::Ordering::SeqCst), 0);
    }
}
