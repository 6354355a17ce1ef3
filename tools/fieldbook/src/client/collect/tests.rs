use super::*;
use trackhold_proto::blob::{Blob, Digest};
use trackhold_proto::journal::{Body, Entry, Note, PlanEvent, write_frame};
use trackhold_proto::message::JOURNAL_BYTES;

fn entry(number: u64) -> Entry {
    Entry { number, at_ns: number, body: Body::Note(Note::EventsDropped { count: number }) }
}

fn frame(number: u64) -> Vec<u8> {
    let mut bytes = Vec::new();
    write_frame(&entry(number), &mut bytes);
    bytes
}

fn part(first: u64, entries: u32) -> JournalPart {
    let bytes: Vec<u8> = (0..u64::from(entries)).flat_map(|count| frame(first + count)).collect();
    JournalPart { first, entries, part: 0, parts: 1, bytes: Blob::new(&bytes).unwrap() }
}

fn drain(collector: &mut Collector) -> Vec<Item> {
    std::iter::from_fn(|| collector.next_item()).collect()
}

fn numbers(items: &[Item]) -> Vec<u64> {
    let number = |item: &Item| match item {
        Item::Frame(bytes) => read_frame(bytes).unwrap().0.number,
        Item::Gap(..) => panic!("a gap"),
    };
    items.iter().map(number).collect()
}

#[test]
fn entries_come_out_in_order_and_once() {
    let now = Instant::now();
    let mut collector = Collector::new(0, 0, 20);
    for (first, entries) in [(0, 2), (4, 1), (2, 2), (2, 2), (0, 2), (5, 3)] {
        collector.take_part(&part(first, entries), now);
    }
    assert_eq!(numbers(&drain(&mut collector)), [0, 1, 2, 3, 4, 5, 6, 7]);
    assert_eq!(collector.tally().duplicates, 4);
    assert!(collector.requests(now + Duration::from_secs(1)).is_empty());
}

#[test]
fn what_was_before_is_asked_for_at_once_in_bounded_requests() {
    let now = Instant::now();
    let mut collector = Collector::new(0, 1000, 20);
    let first = collector.requests(now);
    let asked: u64 = first.iter().map(|request| request.last - request.first + 1).sum();
    assert_eq!(asked, OUTSTANDING as u64);
    assert!(first.iter().all(|request| request.last - request.first < REQUEST_ENTRIES));
    assert!(collector.requests(now).is_empty(), "no more before answers come");
    collector.take_part(&part(0, 10), now);
    let more = collector.requests(now);
    assert_eq!(more.iter().map(|request| request.last - request.first + 1).sum::<u64>(), 10);
    assert_eq!(collector.tally().asked_again, 0);
}

#[test]
fn a_young_gap_is_left_alone_and_an_old_one_is_asked_for_until_it_is_given_up() {
    let mut now = Instant::now();
    let mut collector = Collector::new(0, 0, 3);
    collector.take_part(&part(3, 1), now);
    assert!(collector.requests(now).is_empty());
    now += GRACE;
    for _ in 0..3 {
        assert_eq!(collector.requests(now), [JournalRequest { first: 0, last: 2 }]);
        now += ASK_AGAIN;
    }
    assert!(collector.requests(now).is_empty());
    let items = drain(&mut collector);
    assert_eq!(items, [Item::Gap(0, 0), Item::Gap(1, 1), Item::Gap(2, 2), Item::Frame(frame(3))]);
}

#[test]
fn what_the_daemon_says_is_gone_becomes_a_gap_but_never_hides_an_entry_that_is_here() {
    let now = Instant::now();
    let mut collector = Collector::new(0, 10, 20);
    collector.take_part(&part(5, 1), now);
    collector.take_part(&part(0, 1), now);
    collector.take_gone(&JournalGone { first: 1, last: 8 });
    collector.take_part(&part(9, 1), now);
    let items = drain(&mut collector);
    let wanted = [
        Item::Frame(frame(0)),
        Item::Gap(1, 4),
        Item::Frame(frame(5)),
        Item::Gap(6, 8),
        Item::Frame(frame(9)),
    ];
    assert_eq!(items, wanted);
}

#[test]
fn a_long_entry_is_joined_from_parts_in_any_order_over_two_answers() {
    let now = Instant::now();
    let plan = PlanEvent { session: 1, sequence: 2, digest: Digest::NONE, raw: vec![b'x'; 5000] };
    let mut bytes = Vec::new();
    write_frame(&Entry { number: 0, at_ns: 0, body: Body::Plan(plan) }, &mut bytes);
    let parts = bytes.chunks(JOURNAL_BYTES).count() as u32;
    let piece = |part: u32| {
        let bytes = bytes.chunks(JOURNAL_BYTES).nth(part as usize).unwrap();
        JournalPart { first: 0, entries: 1, part, parts, bytes: Blob::new(bytes).unwrap() }
    };
    let mut collector = Collector::new(0, 1, 20);
    for part in [4, 0, 2, 2, 1] {
        collector.take_part(&piece(part), now);
        assert_eq!(collector.next_item(), None);
    }
    collector.take_part(&piece(3), now);
    assert_eq!(drain(&mut collector), [Item::Frame(bytes.clone())]);
}

#[test]
fn what_comes_behind_a_long_entry_is_waited_for_as_long_as_that_takes() {
    let begun = Instant::now();
    let mut collector = Collector::new(0, 3, 4);
    assert_eq!(collector.requests(begun)[0], JournalRequest { first: 0, last: 2 });
    let bytes = Blob::new(&[0; JOURNAL_BYTES]).unwrap();
    for part in 0..1000 {
        let now = begun + Duration::from_millis(10) * part;
        collector.take_part(&JournalPart { first: 0, entries: 1, part, parts: 10_000, bytes }, now);
        assert_eq!(collector.requests(now), []);
    }
    assert_eq!(collector.next_item(), None);
    let again = collector.requests(begun + Duration::from_millis(10_200));
    assert_eq!(again[0], JournalRequest { first: 0, last: 2 }, "once it has become silent");
}

#[test]
fn damage_and_nonsense_are_counted_and_change_nothing() {
    let now = Instant::now();
    let mut collector = Collector::new(0, 0, 20);
    let mut bytes = frame(0);
    bytes[30] ^= 1;
    let damaged = JournalPart { first: 0, entries: 1, part: 0, parts: 1, bytes: Blob::new(&bytes).unwrap() };
    collector.take_part(&damaged, now);
    let misnumbered = JournalPart { first: 7, ..part(3, 1) };
    collector.take_part(&misnumbered, now);
    collector.take_part(&part(u64::MAX - 1, 1), now);
    let too_many_parts = JournalPart { parts: u32::MAX, part: 3, ..part(0, 1) };
    collector.take_part(&too_many_parts, now);
    assert_eq!(collector.next_item(), None);
    assert_eq!(collector.tally().damaged, 3);
}

#[test]
fn giving_up_leaves_gaps_and_keeps_what_is_here() {
    let now = Instant::now();
    let mut collector = Collector::new(0, 6, 20);
    collector.take_part(&part(2, 1), now);
    collector.give_up_below(5);
    assert_eq!(drain(&mut collector), [Item::Gap(0, 1), Item::Frame(frame(2)), Item::Gap(3, 4)]);
    assert_eq!(collector.expected(), 5);
}

#[test]
fn early_entries_beyond_the_room_are_dropped_from_the_far_end_and_come_again() {
    let now = Instant::now();
    let mut collector = Collector::new(0, 0, 20);
    let plan = PlanEvent { session: 1, sequence: 2, digest: Digest::NONE, raw: vec![b'x'; 1 << 20] };
    for number in 1..=100 {
        let mut bytes = Vec::new();
        write_frame(&Entry { number, at_ns: 0, body: Body::Plan(plan.clone()) }, &mut bytes);
        collector.insert(number, bytes);
    }
    assert!(collector.held_bytes <= ROOM_BYTES);
    assert!(collector.tally().no_room > 0);
    collector.take_part(&part(0, 1), now);
    let out = drain(&mut collector).len() as u64;
    assert!(out > 60, "{out} came out");
    assert_eq!(collector.expected(), out);
    assert_eq!(collector.end(), 101);
    collector.requests(now);
    let asked = collector.requests(now + GRACE);
    assert_eq!(asked[0].first, out);
}
