//! Journal frames and track logs: golden bytes, round trips, damage.

mod common;

use common::arbitrary::any_body;
use common::bodies::bodies;
use common::{check_golden, samples};
use proptest::prelude::*;
use sha2::{Digest as _, Sha256};
use trackhold_proto::blob::Hex;
use trackhold_proto::journal::*;

fn frames() -> Vec<u8> {
    let mut bytes = Vec::new();
    for (number, body) in bodies().into_iter().enumerate() {
        let number = if matches!(body, Body::Gap(_) | Body::End(_)) { UNNUMBERED } else { number as u64 };
        write_frame(&Entry { number, at_ns: u64::MAX - 1, body }, &mut bytes);
    }
    bytes
}

fn read_all(mut bytes: &[u8]) -> Vec<Entry> {
    let mut entries = Vec::new();
    while !bytes.is_empty() {
        let (entry, used) = read_frame(bytes).unwrap();
        entries.push(entry);
        bytes = &bytes[used..];
    }
    entries
}

#[test]
fn the_golden_frames_hold_every_body_and_read_back() {
    check_golden("journal-frames.bin", &frames());
    let read: Vec<_> = read_all(&frames()).into_iter().map(|entry| entry.body).collect();
    assert_eq!(read, bodies());
    let mut variants: Vec<_> = read.iter().map(Body::name).collect();
    variants.dedup();
    assert_eq!(variants.len(), 18, "{variants:?}");
}

/// As PROTOCOL.md lays a track log out: magic, entry 0, a gap, an entry behind it, the end mark.
#[test]
fn the_golden_track_log_ends_with_a_digest_of_all_before() {
    let mut log = LOG_MAGIC.to_vec();
    let [boot, pose, ..] = bodies().try_into().map(|all: [Body; 26]| all).unwrap();
    let mut append = |number, at_ns, body| write_frame(&Entry { number, at_ns, body }, &mut log);
    append(0, 5, boot);
    append(UNNUMBERED, 0, Body::Gap(Gap { first: 1, last: 41 }));
    append(42, 6, pose);
    let end = End { entries: 2, digest: Hex(Sha256::digest(&log).into()) };
    write_frame(&Entry { number: UNNUMBERED, at_ns: 0, body: Body::End(end) }, &mut log);
    check_golden("track-log.bin", &log);

    assert_eq!(log[..8], *b"TRKHLOG1");
    let entries = read_all(&log[8..]);
    assert_eq!(entries.last().unwrap().body, Body::End(end));
    assert_eq!(entries.iter().filter(|entry| entry.number != UNNUMBERED).count(), 2);
}

#[test]
fn an_intact_frame_of_another_format_says_so_and_where() {
    let mut frame = common::bodies::frame_of(5, bodies().remove(0));
    frame[FRAME_HEAD_BYTES] = 99;
    seal(&mut frame);
    assert_eq!(
        read_frame(&frame).unwrap_err().to_string(),
        "entry 5 is intact, but not an entry this program knows: body, read up to byte 4: Body has no value 99, only 0 to 17"
    );
}

/// Puts the right CRC into a frame whose body was altered, as an attacker or another program version would.
fn seal(frame: &mut [u8]) {
    let sum: crc::Crc<u32> = crc::Crc::<u32>::new(&crc::CRC_32_ISCSI);
    let mut digest = sum.digest();
    digest.update(&frame[..20]);
    digest.update(&frame[FRAME_HEAD_BYTES..]);
    let value = digest.finalize().to_le_bytes();
    frame[20..24].copy_from_slice(&value);
}

#[test]
fn a_frame_in_a_journal_part_is_the_frame_of_a_track_log() {
    let (_, sample) = samples().into_iter().find(|(name, _)| *name == "journal-part").unwrap();
    let trackhold_proto::Message::JournalPart(part) = sample.message else { unreachable!() };
    let entries = read_all(part.bytes.as_slice());
    assert_eq!(entries.len(), part.entries as usize);
    assert_eq!(entries[0].number, part.first);
}

proptest! {
    #[test]
    fn any_body_round_trips(number: u64, at_ns: u64, body in any_body()) {
        let entry = Entry { number, at_ns, body };
        let mut bytes = vec![0xee; 3];
        write_frame(&entry, &mut bytes);
        let (read, used) = read_frame(&bytes[3..]).unwrap();
        prop_assert_eq!(used, bytes.len() - 3);
        prop_assert_eq!(frame_length(&bytes[3..]), Ok(used));
        // By bytes, because -0.0 equals 0.0.
        let mut again = Vec::new();
        write_frame(&read, &mut again);
        prop_assert_eq!(&again, &bytes[3..]);
        prop_assert_eq!(read, entry.clone());
        let mut room = vec![0; bytes.len()];
        let encoded = encode_body(&entry.body, &mut room).unwrap();
        prop_assert_eq!(&room[..encoded], &bytes[3 + FRAME_HEAD_BYTES..]);
        prop_assert_eq!(encode_body(&entry.body, &mut room[..encoded - 1]), None);
    }

    #[test]
    fn any_bytes_read_to_an_entry_or_an_error(bytes in prop::collection::vec(any::<u8>(), 0..200)) {
        let _ = read_frame(&bytes).map_err(|error| error.to_string());
    }

    #[test]
    fn a_cut_or_damaged_frame_is_never_taken(body in any_body(), at: prop::sample::Index, change in 1..=255u8) {
        let mut bytes = Vec::new();
        write_frame(&Entry { number: 1, at_ns: 2, body }, &mut bytes);
        let at = at.index(bytes.len());
        let cut = read_frame(&bytes[..at]);
        prop_assert!(matches!(cut, Err(FrameError::Short { .. })), "{:?}", cut);
        bytes[at] ^= change;
        prop_assert!(read_frame(&bytes).is_err());
    }

    #[test]
    fn an_altered_body_under_a_right_crc_does_not_panic(
        body in any_body(),
        changes in prop::collection::vec((any::<prop::sample::Index>(), any::<u8>()), 1..8),
    ) {
        let mut bytes = Vec::new();
        write_frame(&Entry { number: 1, at_ns: 2, body }, &mut bytes);
        for (at, value) in changes {
            let at = FRAME_HEAD_BYTES + at.index(bytes.len() - FRAME_HEAD_BYTES);
            bytes[at] = value;
        }
        seal(&mut bytes);
        match read_frame(&bytes) {
            Ok((entry, used)) => {
                let mut again = Vec::new();
                write_frame(&entry, &mut again);
                // One spelling a value, hence what is read is what is written.
                prop_assert_eq!((&again, used), (&bytes, bytes.len()));
            }
            Err(error) => prop_assert!(error.to_string().contains("read up to byte"), "{}", error),
        }
    }
}
