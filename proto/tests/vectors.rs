//! Golden datagrams: one or more of every kind, binary and JSON. `TRACKHOLD_WRITE_VECTORS=1` writes them anew.

mod common;

use common::{check_golden, samples, vectors};
use std::collections::BTreeSet;
use trackhold_proto::Envelope;
use trackhold_proto::header::MAX_DATAGRAM_BYTES;
use trackhold_proto::message::KINDS;

#[test]
fn every_sample_reads_and_writes_its_golden_bytes() {
    for (name, sample) in samples() {
        let mut json = sample.to_json();
        json.push('\n');
        check_golden(&format!("{name}.bin"), &sample.to_vec());
        check_golden(&format!("{name}.json"), json.as_bytes());
        assert_eq!(Envelope::decode(&sample.to_vec()), Ok(sample), "{name}.bin");
        assert_eq!(Envelope::from_json(json.as_bytes()), Ok(sample), "{name}.json");
        if json.len() <= MAX_DATAGRAM_BYTES {
            assert_eq!(Envelope::decode(json.as_bytes()), Ok(sample), "{name}.json as a datagram");
        }
    }
}

#[test]
fn every_kind_has_a_vector_and_every_vector_a_sample() {
    let kinds: BTreeSet<_> = samples().iter().map(|(name, _)| name.split('.').next().unwrap()).collect();
    assert_eq!(kinds, KINDS.iter().map(|&(_, name)| name).collect());
    for (name, sample) in samples() {
        assert_eq!(name.split('.').next(), Some(sample.message.name()));
    }
    let known: BTreeSet<_> = samples()
        .iter()
        .flat_map(|(name, _)| [format!("{name}.bin"), format!("{name}.json")])
        .chain(["journal-frames.bin".to_string(), "track-log.bin".to_string()])
        .collect();
    for file in std::fs::read_dir(vectors()).unwrap() {
        let file = file.unwrap().file_name().into_string().unwrap();
        assert!(known.contains(&file), "vectors/{file} belongs to no sample");
    }
}
