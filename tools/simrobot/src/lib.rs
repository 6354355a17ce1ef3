//! A stand-in for the robot and its estimator, and a faulty link.
//!
//! | module | what it holds |
//! | --- | --- |
//! | [`spec`] | everything in which a robot differs from an ideal one, and its file |
//! | [`plant`] | the true motion of the chassis under wheel commands |
//! | [`sensor`] | the pose estimator: noise, latency, dropouts, jumps, a clock of its own |
//! | [`robot`] | plant and estimator together, in simulated time |
//! | [`drive`] | how a drive obeys commands |
//! | [`link`] | loss, delay, jitter, duplicates, reordering, flipped bits |
//! | [`machine`] | all of these speaking the protocol: datagrams in, datagrams out |
//! | [`stand_in`] | the machine on real sockets, in real time: the only place with I/O and a clock |
//! | [`site`] | what a site file says of the machine |
//!
//! Everything but [`stand_in`] and the readers of files is a function of its past and its seed: no I/O, no clock, no
//! thread. Where two things fall on one moment a written rule says which comes first.
//!
//! # In simulated time
//!
//! ```
//! use simrobot::{Robot, RobotSpec};
//! use trackhold_core::geometry::{Mount, Pose};
//! use trackhold_core::keys::Values;
//! use trackhold_core::time::{TimeNs, SpanNs, tick_offset};
//! use trackhold_core::vehicle;
//!
//! let mut values = Values::default();
//! for (key, value) in [
//!     ("wheel_radius_m", 0.1),
//!     ("track_width_m", 0.5),
//!     ("max_wheel_speed_rad_s", 20.0),
//!     ("max_wheel_accel_rad_s2", 20.0),
//! ] {
//!     values.set(key, value);
//! }
//! let (vehicle, _) = vehicle::build("differential", &values).unwrap();
//! let spec = RobotSpec::parse("[chassis]\nleft_radius_error = -0.02", "worn.toml").unwrap();
//! let mut robot = Robot::new(&spec, vehicle, Mount::default(), Pose::default(), TimeNs(0)).unwrap();
//! for k in 0..100 {
//!     let tick = TimeNs(0) + tick_offset(k, 50.0);
//!     while let Some(seen) = robot.next_pose(tick) {
//!         // Here the node would take a pose: seen.measured_ns, seen.pose, received at seen.arrives.
//!         assert!(seen.arrives <= tick);
//!     }
//!     // Here the node would tick.
//!     robot.command(tick, &[10.0, 10.0, 0.0, 0.0]);
//! }
//! let truth = robot.advance(TimeNs(0) + SpanNs::from_seconds(2.0));
//! // The left wheel is 2 % small: the machine turns left at r ω (0 − (−0.02))/W = 0.1 · 10 · 0.02/0.5 = 0.04 rad/s.
//! assert!((truth.heading_rad - 0.08).abs() < 1e-12);
//! ```
//!
//! # In real time, against a daemon
//!
//! ```no_run
//! use simrobot::machine::Setup;
//! use simrobot::site::SiteMachine;
//! use simrobot::{Control, LinkSpec, Options, RobotSpec, StandIn};
//! use std::path::Path;
//! use std::sync::Arc;
//! use trackhold_core::geometry::Pose;
//!
//! # fn main() -> Result<(), Box<dyn std::error::Error>> {
//! let site = SiteMachine::load(Path::new("site.toml"))?;
//! let setup = Setup {
//!     vehicle: site.vehicle,
//!     mount: site.mount,
//!     robot: RobotSpec::load(Path::new("worn.toml"))?,
//!     start: Pose::new(0.0, 0.0, 0.0),
//!     link: LinkSpec { loss: 0.01, ..LinkSpec::default() },
//!     link_seed: 1,
//! };
//! let options = Options { daemon: "127.0.0.1:4710".parse()?, setup, seconds: None };
//! let control = Arc::new(Control::default());
//! let stand_in = StandIn::bind(options)?;
//! let running = std::thread::spawn({
//!     let control = control.clone();
//!     move || {
//!         let mut track = Vec::new();
//!         let summary = stand_in.run(&control, &mut |point, _machine| track.push(*point))?;
//!         Ok::<_, simrobot::stand_in::StandInError>((track, summary))
//!     }
//! });
//! // … and at the end:
//! control.stop();
//! let joined = running.join();
//! # Ok(())
//! # }
//! ```

pub mod drive;
mod file;
pub mod link;
pub mod machine;
pub mod plant;
mod random;
pub mod robot;
mod section;
pub mod sensor;
pub mod site;
pub mod spec;
pub mod stand_in;
#[cfg(test)]
mod testing;

pub use drive::{Drive, Taken};
pub use file::FileError;
pub use link::{Link, LinkCounts, LinkSpec};
pub use machine::{Machine, TruePoint};
pub use plant::Plant;
pub use robot::Robot;
pub use sensor::{PoseSensor, Seen};
pub use spec::RobotSpec;
pub use stand_in::{Control, Options, StandIn, Summary};
