use super::*;
use crate::client::fake::{self, Served, bad_link};
use crate::log::{Ending, LogReader};
use std::time::Instant;
use trackhold_proto::Message;
use trackhold_proto::blob::{Blob, Hex};
use trackhold_proto::journal::{Body, Entry, Note, PlanEvent, write_frame};
use trackhold_proto::message::{JOURNAL_BYTES, JournalGone, JournalPart, Subscribed, WANT_JOURNAL};

fn frame(number: u64) -> Vec<u8> {
    let body = match number % 50 {
        17 => Body::Plan(PlanEvent {
            session: 1,
            sequence: 1,
            digest: Hex::NONE,
            raw: vec![number as u8; 4000],
        }),
        _ => Body::Note(Note::EventsDropped { count: number }),
    };
    let mut bytes = Vec::new();
    write_frame(&Entry { number, at_ns: number, body }, &mut bytes);
    bytes
}

fn parts(number: u64) -> Vec<Message> {
    let bytes = frame(number);
    let chunks: Vec<&[u8]> = bytes.chunks(JOURNAL_BYTES).collect();
    let parts = chunks.len() as u32;
    let part = |(part, chunk): (u32, &&[u8])| {
        let bytes = Blob::new(chunk).unwrap();
        Message::JournalPart(JournalPart { first: number, entries: 1, part, parts, bytes })
    };
    (0..).zip(&chunks).map(part).collect()
}

/// A journal that held `before` entries when the subscription came, makes another one a millisecond or two up to
/// `after`, and has lost `lost`. It restarts as another boot when it has come to `restart`.
fn journal(before: u64, after: u64, lost: (u64, u64), restart: u64) -> Served {
    let mut next = before;
    fake::daemon(move |envelope| {
        let boot = if next >= restart { Hex([2; 16]) } else { Hex([1; 16]) };
        match envelope.map(|envelope| envelope.message) {
            Some(Message::Subscribe(subscribe)) => {
                let (want, lease_ms) = (subscribe.want, subscribe.lease_ms);
                vec![Message::Subscribed(Subscribed {
                    boot,
                    want,
                    lease_ms,
                    oldest_entry: 0,
                    next_entry: next,
                })]
            }
            Some(Message::JournalRequest(request)) => {
                let mut answer = Vec::new();
                for number in request.first..=request.last.min(next.saturating_sub(1)) {
                    match (lost.0..=lost.1).contains(&number) {
                        true => {
                            answer.push(Message::JournalGone(JournalGone { first: number, last: number }))
                        }
                        false => answer.extend(parts(number)),
                    }
                }
                answer
            }
            None if next < after => {
                next += 1;
                if (lost.0..=lost.1).contains(&(next - 1)) { Vec::new() } else { parts(next - 1) }
            }
            _ => Vec::new(),
        }
    })
}

pub(super) struct Scratch(pub(super) PathBuf);

impl Scratch {
    pub(super) fn new(name: &str) -> Self {
        let path =
            std::env::temp_dir().join(format!("fieldbook-record-{}-{name}.tracklog", std::process::id()));
        drop(std::fs::remove_file(&path));
        Self(path)
    }
}

impl Drop for Scratch {
    fn drop(&mut self) {
        drop(std::fs::remove_file(&self.0));
    }
}

fn recorder(address: std::net::SocketAddr, out: &Scratch, from_now: bool) -> Recorder {
    Recorder::begin(Client::connect_to(address).unwrap(), &out.0, from_now).unwrap()
}

/// Records until `entries` are written, gaps counted, at most 20 s.
fn record_until(mut recorder: Recorder, entries: u64) -> Recording {
    let begun = Instant::now();
    while recorder.follower.expected() < entries && begun.elapsed() < Duration::from_secs(20) {
        recorder.follower.poll(Duration::from_millis(5));
        recorder.drain(u64::MAX).unwrap();
    }
    recorder.finish().unwrap()
}

fn numbers(path: &Path) -> Vec<u64> {
    let mut reader = LogReader::open(path).unwrap();
    let numbers =
        reader.by_ref().map(|entry| entry.unwrap()).filter(|entry| !matches!(entry.body, Body::Gap(_)));
    let numbers = numbers.map(|entry| entry.number).collect();
    assert!(matches!(reader.ending(), Ending::Marked(_)));
    numbers
}

#[test]
fn a_recording_over_a_link_that_loses_a_fifth_is_complete_and_in_order() {
    let daemon = journal(400, 700, (u64::MAX, u64::MAX), u64::MAX);
    let link = bad_link(daemon.address(), 0.2);
    let out = Scratch::new("bad-link");
    let recording = record_until(recorder(link.address(), &out, false), 700);
    assert_eq!(recording.gaps, []);
    assert!(recording.tally.asked_again > 0 && recording.tally.duplicates > 0);
    assert_eq!(numbers(&out.0), (0..700).collect::<Vec<u64>>());
    assert!(recording.told().contains("no gap"));
}

#[test]
fn what_is_gone_is_written_as_one_gap() {
    let daemon = journal(100, 140, (20, 120), u64::MAX);
    let link = bad_link(daemon.address(), 0.1);
    let out = Scratch::new("gone");
    let recording = record_until(recorder(link.address(), &out, false), 140);
    assert_eq!(recording.gaps, [(20, 120)]);
    assert_eq!((recording.entries, recording.lost), (39, 101));
    assert!(recording.told().contains("20..120"));
    assert_eq!(numbers(&out.0), (0..20).chain(121..140).collect::<Vec<u64>>());
}

#[test]
fn from_now_on_begins_with_the_boot_entry_and_a_gap() {
    let daemon = journal(100, 120, (u64::MAX, u64::MAX), u64::MAX);
    let out = Scratch::new("now");
    let recording = record_until(recorder(daemon.address(), &out, true), 120);
    assert_eq!(recording.gaps, [(1, 99)]);
    assert_eq!((recording.entries, recording.lost), (21, 0));
    assert!(recording.told().contains("left out"));
    assert_eq!(numbers(&out.0), std::iter::once(0).chain(100..120).collect::<Vec<u64>>());
}

#[test]
fn a_restart_ends_the_log_and_says_so() {
    let daemon = journal(10, 60, (u64::MAX, u64::MAX), 60);
    let out = Scratch::new("restart");
    let recorder = recorder(daemon.address(), &out, false);
    let recording = recorder.record(&AtomicBool::new(false), Some(Duration::from_secs(20)), false).unwrap();
    assert_eq!(recording.other_boot, Some(Hex([2; 16])));
    assert_eq!(recording.gaps, []);
    assert_eq!(numbers(&out.0), (0..60).collect::<Vec<u64>>());
    assert!(recording.told().contains("restarted"));
}

#[test]
fn a_log_that_is_there_is_not_written_over() {
    let daemon = journal(1, 1, (u64::MAX, u64::MAX), u64::MAX);
    let out = Scratch::new("there");
    std::fs::write(&out.0, b"precious").unwrap();
    let error = Recorder::begin(Client::connect_to(daemon.address()).unwrap(), &out.0, false).unwrap_err();
    assert!(error.to_string().contains("not written over"), "{error}");
    assert_eq!(std::fs::read(&out.0).unwrap(), b"precious");
}

#[test]
fn no_room_for_a_subscriber_is_an_error_that_says_so() {
    let daemon = fake::daemon(|envelope| match envelope.map(|envelope| envelope.message) {
        Some(Message::Subscribe(subscribe)) => vec![Message::Subscribed(Subscribed {
            boot: Hex::NONE,
            want: subscribe.want & !WANT_JOURNAL,
            lease_ms: 1000,
            oldest_entry: 0,
            next_entry: 0,
        })],
        _ => Vec::new(),
    });
    let out = Scratch::new("room");
    let error = Recorder::begin(Client::connect_to(daemon.address()).unwrap(), &out.0, false).unwrap_err();
    assert!(error.to_string().contains("no room"), "{error}");
    assert!(!out.0.exists());
}
