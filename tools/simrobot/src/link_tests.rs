use super::*;
use proptest::prelude::*;

fn spec(change: impl FnOnce(&mut LinkSpec)) -> LinkSpec {
    let mut spec = LinkSpec::default();
    change(&mut spec);
    spec
}

/// Sends `count` numbered datagrams, a millisecond apart, and returns what comes out: arrival and number.
fn through(spec: LinkSpec, seed: u64, count: u64) -> (Vec<(TimeNs, u64)>, LinkCounts) {
    let mut link = Link::new(spec, seed).unwrap();
    for number in 0..count {
        link.send(TimeNs(number * 1_000_000), &number.to_le_bytes());
    }
    let mut out = Vec::new();
    while let Some((arrival, bytes)) = link.poll(TimeNs(u64::MAX)) {
        out.push((arrival, u64::from_le_bytes(bytes.try_into().unwrap())));
    }
    (out, link.counts())
}

fn within_five_sigma(count: u64, n: u64, p: f64) {
    let (mean, sd) = (n as f64 * p, (n as f64 * p * (1.0 - p)).sqrt());
    assert!((count as f64 - mean).abs() < 5.0 * sd, "{count} of {n} at {p}");
}

#[test]
fn an_ideal_link_changes_nothing() {
    let (out, counts) = through(LinkSpec::default(), 1, 100);
    assert!(
        out.iter().enumerate().all(|(k, (at, number))| *number == k as u64 && at.0 == k as u64 * 1_000_000)
    );
    assert_eq!(counts, LinkCounts { sent: 100, delivered: 100, ..LinkCounts::default() });
}

#[test]
fn nothing_comes_out_before_its_time() {
    let mut link = Link::new(spec(|spec| spec.delay_s = 0.01), 1).unwrap();
    link.send(TimeNs(5), b"a");
    assert_eq!(link.next_arrival(), Some(TimeNs(10_000_005)));
    assert_eq!(link.poll(TimeNs(10_000_004)), None);
    assert_eq!(link.poll(TimeNs(10_000_005)), Some((TimeNs(10_000_005), b"a".to_vec())));
    assert_eq!(link.next_arrival(), None);
}

#[test]
fn faults_come_as_often_as_they_should() {
    let n = 20_000;
    let faulty = spec(|spec| {
        (spec.loss, spec.duplicate, spec.reorder, spec.corrupt) = (0.2, 0.1, 0.05, 0.03);
    });
    let counts = through(faulty, 9, n).1;
    within_five_sigma(counts.lost, n, 0.2);
    within_five_sigma(counts.duplicated, n - counts.lost, 0.1);
    within_five_sigma(counts.held_back, n - counts.lost, 0.05);
    within_five_sigma(counts.corrupted, n - counts.lost, 0.03);
}

#[test]
fn jitter_spreads_and_never_reorders() {
    let (out, _) = through(spec(|spec| (spec.delay_s, spec.jitter_s) = (0.005, 0.02)), 3, 2000);
    assert!(out.is_sorted_by_key(|(_, number)| *number));
    let delays: Vec<u64> = out.iter().map(|(at, number)| at.0 - number * 1_000_000).collect();
    assert!(delays.iter().all(|delay| (5_000_000..=25_000_000).contains(delay)));
    assert!(delays.iter().max().unwrap() - delays.iter().min().unwrap() > 10_000_000);
}

#[test]
fn what_is_held_back_is_overtaken() {
    let (out, counts) = through(spec(|spec| (spec.reorder, spec.reorder_delay_s) = (0.1, 0.005)), 3, 1000);
    let late: Vec<_> = out.iter().filter(|(at, number)| at.0 == number * 1_000_000 + 5_000_000).collect();
    assert_eq!(late.len() as u64, counts.held_back);
    assert!(counts.held_back > 50 && !out.is_sorted_by_key(|(_, number)| *number));
    assert_eq!(out.len(), 1000);
}

#[test]
fn a_copy_comes_behind_its_original() {
    let (out, counts) = through(spec(|spec| (spec.duplicate, spec.jitter_s) = (1.0, 0.003)), 3, 100);
    assert_eq!((out.len(), counts.duplicated), (200, 100));
    let mut seen = [0; 100];
    let mut originals = Vec::new();
    for (_, number) in out {
        seen[number as usize] += 1;
        if seen[number as usize] == 1 {
            originals.push(number);
        }
    }
    assert_eq!(seen, [2; 100]);
    assert!(originals.is_sorted(), "what comes first is the original, and those keep their order");
}

#[test]
fn a_flipped_bit_is_one_bit() {
    let mut link = Link::new(spec(|spec| spec.corrupt = 1.0), 4).unwrap();
    for _ in 0..200 {
        link.send(TimeNs(0), &[0x5a; 40]);
        let (_, bytes) = link.poll(TimeNs(0)).unwrap();
        assert_eq!(bytes.iter().map(|byte| (byte ^ 0x5a).count_ones()).sum::<u32>(), 1);
    }
    link.send(TimeNs(0), &[]);
    assert_eq!(link.poll(TimeNs(0)).unwrap().1, b"", "nothing to flip");
}

#[test]
fn numbers_out_of_bounds_are_refused() {
    let problems = Link::new(spec(|spec| (spec.loss, spec.delay_s) = (1.5, f64::NAN)), 0).unwrap_err();
    let texts: Vec<String> = problems.iter().map(ToString::to_string).collect();
    assert_eq!(
        texts,
        ["delay_s: NaN s is not at least 0 and at most 10 s", "loss: 1.5 is not at least 0 and at most 1"]
    );
}

proptest! {
    #[test]
    fn nothing_is_made_up_and_seeds_reproduce(
        seed: u64,
        chances in prop::array::uniform4(0.0..1.0_f64),
        times in prop::array::uniform3(0.0..0.05_f64),
    ) {
        let faulty = spec(|spec| {
            [spec.loss, spec.duplicate, spec.reorder, _] = chances;
            [spec.delay_s, spec.jitter_s, spec.reorder_delay_s] = times;
        });
        let (out, counts) = through(faulty, seed, 200);
        prop_assert_eq!(counts.sent - counts.lost + counts.duplicated, counts.delivered);
        prop_assert!(out.is_sorted_by_key(|(at, _)| *at));
        prop_assert!(out.iter().all(|(at, number)| at.0 >= number * 1_000_000));
        prop_assert_eq!(through(faulty, seed, 200), (out, counts));
    }
}
