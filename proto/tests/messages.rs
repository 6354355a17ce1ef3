//! Any message round-trips in both forms; any bytes decode to a value or an error; nothing outgrows its bound.

mod common;

use common::arbitrary::{any_envelope, number, whole};
use common::samples;
use proptest::prelude::*;
use trackhold_proto::blob::{Blob, Text};
use trackhold_proto::codec::{MAX_JSON_BYTES, MAX_PAYLOAD_BYTES};
use trackhold_proto::header::{HEADER_BYTES, MAX_DATAGRAM_BYTES, TAG_BYTES};
use trackhold_proto::message::*;
use trackhold_proto::{DecodeError, Envelope, Message};

proptest! {
    #[test]
    fn any_message_round_trips_in_binary(sample in any_envelope()) {
        let bytes = sample.to_vec();
        prop_assert!(bytes.len() <= MAX_DATAGRAM_BYTES - TAG_BYTES);
        let read = Envelope::decode(&bytes).unwrap();
        prop_assert_eq!(read, sample);
        // By bytes, because -0.0 equals 0.0.
        prop_assert_eq!(read.to_vec(), bytes);
    }

    #[test]
    fn any_message_round_trips_in_json_to_the_last_bit(sample in any_envelope()) {
        let json = sample.to_json();
        prop_assert!(json.len() <= MAX_JSON_BYTES);
        prop_assert_eq!(Envelope::from_json(json.as_bytes()).unwrap().to_vec(), sample.to_vec());
        let as_datagram = Envelope::decode(json.as_bytes());
        if json.len() <= MAX_DATAGRAM_BYTES {
            prop_assert_eq!(as_datagram.unwrap().to_vec(), sample.to_vec());
        } else {
            prop_assert_eq!(as_datagram, Err(DecodeError::TooLong { bytes: json.len() }));
        }
    }

    #[test]
    fn a_tag_may_follow(sample in any_envelope(), tag: [u8; TAG_BYTES]) {
        let mut bytes = sample.to_vec();
        bytes.extend(tag);
        prop_assert_eq!(Envelope::decode(&bytes).unwrap().to_vec(), sample.to_vec());
    }

    #[test]
    fn json_numbers_keep_every_bit(x_m in number(), measured_ns in whole()) {
        let text = format!(
            r#"{{"kind":"pose","session":{measured_ns},"sequence":0,"stamp_ns":0,"measured_ns":{measured_ns},"x_m":{x_m:?},"y_m":0,"heading_rad":-0.0}}"#
        );
        let read = Envelope::decode(text.as_bytes()).unwrap();
        let Message::Pose(pose) = read.message else { panic!("{read:?}") };
        prop_assert_eq!(pose.x_m.to_bits(), x_m.to_bits());
        prop_assert_eq!(pose.heading_rad.to_bits(), (-0.0f64).to_bits());
        prop_assert_eq!((pose.measured_ns, read.session), (measured_ns, measured_ns));
    }

    #[test]
    fn any_bytes_decode_to_a_value_or_an_error(bytes in prop::collection::vec(any::<u8>(), 0..1300)) {
        prop_assert!(Envelope::decode(&bytes).is_err_and(|error| !error.to_string().is_empty()));
    }

    #[test]
    fn any_payload_behind_a_right_header_decodes_to_a_value_or_an_error(
        kind: u8,
        payload in prop::collection::vec(any::<u8>(), 0..=MAX_PAYLOAD_BYTES),
    ) {
        let mut bytes = samples()[0].1.to_vec();
        bytes.truncate(HEADER_BYTES);
        bytes[5] = kind;
        bytes[6..8].copy_from_slice(&(payload.len() as u16).to_le_bytes());
        bytes.extend(&payload);
        if let Ok(read) = Envelope::decode(&bytes) {
            // One spelling a value.
            prop_assert_eq!(read.to_vec(), bytes);
        }
    }

    #[test]
    fn any_text_that_begins_like_json_decodes_to_a_value_or_an_error(text in "\\{[ -~]{0,200}") {
        let _ = Envelope::decode(text.as_bytes()).map_err(|error| error.to_string());
    }

    #[test]
    fn an_altered_and_cut_datagram_decodes_to_a_value_or_an_error(
        sample in any_envelope(),
        json: bool,
        changes in prop::collection::vec((any::<prop::sample::Index>(), any::<u8>()), 0..6),
        keep: prop::sample::Index,
        cut: bool,
    ) {
        let mut bytes = if json { sample.to_json().into_bytes() } else { sample.to_vec() };
        for (at, value) in changes {
            let at = at.index(bytes.len());
            bytes[at] = value;
        }
        if cut {
            bytes.truncate(keep.index(bytes.len()));
        }
        for read in [Envelope::decode(&bytes), Envelope::from_json(&bytes)] {
            match read {
                Ok(read) => prop_assert_eq!(Envelope::decode(&read.to_vec()).unwrap().to_vec(), read.to_vec()),
                Err(error) => prop_assert!(!error.to_string().is_empty()),
            }
        }
    }
}

/// Every text and byte string as long as it can be; in JSON a control character takes six bytes.
fn largest() -> Vec<Envelope> {
    let mut all: Vec<_> = samples().into_iter().map(|(_, sample)| sample).collect();
    for sample in &mut all {
        match &mut sample.message {
            Message::Ack(ack) => ack.text = Text::cut(&"\u{1}".repeat(900)),
            Message::Tune(tune) => tune.law = Text::cut(&"\u{1}".repeat(LAW_BYTES)),
            Message::Status(status) => {
                status.plan_id = Text::cut(&"\u{1}".repeat(64));
                status.law = Text::cut(&"\u{1}".repeat(32));
                status.gains = Text::cut(&"\u{1}".repeat(GAINS_BYTES));
            }
            Message::JournalPart(part) => part.bytes = Blob::new(&[0xff; JOURNAL_BYTES]).unwrap(),
            Message::PlanPart(part) => {
                part.total_bytes = u32::try_from(PART_BYTES).unwrap();
                part.part_bytes = part.total_bytes;
                part.part = 0;
                part.bytes = Blob::new(&[0xff; PART_BYTES]).unwrap();
            }
            _ => {}
        }
    }
    all
}

#[test]
fn the_largest_messages_keep_to_the_bounds() {
    let mut longest = [0, 0];
    for sample in largest() {
        let (binary, json) = (sample.to_vec(), sample.to_json());
        assert_eq!(Envelope::decode(&binary), Ok(sample));
        assert_eq!(Envelope::from_json(json.as_bytes()), Ok(sample));
        longest = [longest[0].max(binary.len()), longest[1].max(json.len())];
    }
    assert!(longest[0] <= MAX_DATAGRAM_BYTES - TAG_BYTES, "{longest:?}");
    assert!(longest[1] <= MAX_JSON_BYTES, "{longest:?}");
}
