use super::*;
use crate::client::fake;
use trackhold_proto::Message;
use trackhold_proto::blob::{Blob, Hex};
use trackhold_proto::journal::{ModeChange, TickRecord, write_frame};
use trackhold_proto::message::{JournalPart, Subscribed, WheelLayout};
use trackhold_proto::words::{Cause, Mode};

fn args(json: bool, every: u64) -> Args {
    Args { from: String::new(), json, every, poses: false, seconds: None }
}

fn part(number: u64, body: Body) -> Message {
    let mut bytes = Vec::new();
    write_frame(&Entry { number, at_ns: number * 20_000_000, body }, &mut bytes);
    Message::JournalPart(JournalPart {
        first: number,
        entries: 1,
        part: 0,
        parts: 1,
        bytes: Blob::new(&bytes).unwrap(),
    })
}

/// Ticks 0, 1, … under numbers 100, 101, …; number 102 is a change of mode, 104 never comes.
fn daemon() -> fake::Served {
    let mut next = 100;
    fake::daemon(move |envelope| match envelope.map(|envelope| envelope.message) {
        Some(Message::Subscribe(subscribe)) => {
            let (want, lease_ms) = (subscribe.want, subscribe.lease_ms);
            let boot = Hex::NONE;
            vec![Message::Subscribed(Subscribed { boot, want, lease_ms, oldest_entry: 0, next_entry: 100 })]
        }
        None if next < 110 => {
            let (number, change) = (
                next,
                ModeChange {
                    from: Mode::Standby,
                    to: Mode::Tracking,
                    cause: Cause::Operator,
                    start_number: 1,
                },
            );
            next += 1;
            match number {
                102 => vec![part(number, Body::ModeChange(change))],
                104 => Vec::new(),
                _ => {
                    let tick = TickRecord { tick: number - 100, ..TickRecord::blank(WheelLayout::Body) };
                    vec![part(number, Body::Tick(tick))]
                }
            }
        }
        _ => Vec::new(),
    })
}

/// What tail writes until it has written `lines`, at most 10 s.
fn output(args: &Args, lines: usize) -> Vec<String> {
    struct Counted<'a>(Vec<u8>, &'a AtomicBool, usize);
    impl Write for Counted<'_> {
        fn write(&mut self, bytes: &[u8]) -> io::Result<usize> {
            self.0.extend_from_slice(bytes);
            let lines = self.0.iter().filter(|byte| **byte == b'\n').count();
            self.1.store(lines >= self.2, Ordering::Relaxed);
            Ok(bytes.len())
        }
        fn flush(&mut self) -> io::Result<()> {
            Ok(())
        }
    }
    let daemon = daemon();
    let stop = AtomicBool::new(false);
    let mut out = Counted(Vec::new(), &stop, lines);
    let follower =
        Follower::begin(Client::connect_to(daemon.address()).unwrap(), From::Now, GIVE_UP).unwrap();
    let restarted = follow(follower, args, &mut out, &stop, Some(Duration::from_secs(10))).unwrap();
    assert!(!restarted);
    String::from_utf8(out.0).unwrap().lines().map(str::to_string).collect()
}

#[test]
fn a_line_a_tick_events_between_and_what_did_not_come_is_told() {
    let lines = output(&args(false, 1), 10);
    assert_eq!(lines.len(), 10);
    assert!(lines[0].contains("standby"), "{}", lines[0]);
    assert!(lines[2].contains("standby -> tracking, cause: operator"), "{}", lines[2]);
    assert!(lines[4].contains("entries 104 to 104 did not come"), "{}", lines[4]);
}

#[test]
fn every_nth_tick_still_tells_the_events() {
    let lines = output(&args(false, 4), 4);
    assert_eq!(lines.iter().filter(|line| line.contains("plan")).count(), 2, "ticks 0 and 8: {lines:?}");
    assert!(lines.iter().any(|line| line.contains("-> tracking")));
}

#[test]
fn json_gives_an_object_a_line() {
    let lines = output(&args(true, 1), 10);
    let first: serde_json::Value = serde_json::from_str(&lines[0]).unwrap();
    assert_eq!(first["number"], 100);
    assert_eq!(first["body"]["tick"]["tick"], 0);
    let gap: serde_json::Value = serde_json::from_str(&lines[4]).unwrap();
    assert_eq!(gap["gap"]["first"], 104);
}

#[test]
fn a_reader_who_has_gone_is_told_as_a_broken_pipe() {
    struct Gone;
    impl Write for Gone {
        fn write(&mut self, _: &[u8]) -> io::Result<usize> {
            Err(io::ErrorKind::BrokenPipe.into())
        }
        fn flush(&mut self) -> io::Result<()> {
            Ok(())
        }
    }
    let daemon = daemon();
    let follower =
        Follower::begin(Client::connect_to(daemon.address()).unwrap(), From::Now, GIVE_UP).unwrap();
    let error = follow(follower, &args(false, 1), &mut Gone, &AtomicBool::new(false), None).unwrap_err();
    assert!(crate::output::is_broken_pipe(&error));
}
