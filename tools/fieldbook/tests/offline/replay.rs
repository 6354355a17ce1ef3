//! Replays: identical, diverged, and everything about which a replay must not say "identical".

use crate::common::{case_named, cases, reference, scratch, write_log};
use fieldbook::log::{Ending, LogReader, LogWriter};
use fieldbook::replay::{CannotVouch, Report, replay_log};
use std::path::Path;
use std::process::Command;
use trackhold_proto::journal::{Body, Entry, FRAME_HEAD_BYTES, frame_length};

fn replayed(bytes: &[u8], partial: bool) -> Result<Report, CannotVouch> {
    replay_log(LogReader::new(bytes)?, partial)
}

fn is_identical(bytes: &[u8], partial: bool) -> bool {
    replayed(bytes, partial).is_ok_and(|report| report.difference.is_none())
}

/// A short log's bytes.
fn small_log(name: &str) -> Vec<u8> {
    let path = scratch(name);
    write_log(&case_named("off-axle-differential"), Some(0.25), &path);
    std::fs::read(path).unwrap()
}

fn entries(bytes: &[u8]) -> Vec<Entry> {
    LogReader::new(bytes).unwrap().map(Result::unwrap).collect()
}

/// Where each frame begins, and the end of the last.
fn boundaries(bytes: &[u8]) -> Vec<usize> {
    let mut at = 8;
    let mut all = vec![at];
    while at < bytes.len() {
        at += frame_length(&bytes[at..]).unwrap();
        all.push(at);
    }
    all
}

/// A log of these entries, with right CRCs and a right end mark.
fn written(name: &str, entries: &[Entry]) -> Vec<u8> {
    let path = scratch(name);
    let mut writer = LogWriter::replace(&path).unwrap();
    entries.iter().for_each(|entry| writer.write_entry(entry).unwrap());
    writer.finish().unwrap();
    std::fs::read(path).unwrap()
}

#[test]
fn every_simulated_log_replays_identical() {
    for case in cases() {
        let path = scratch(&format!("whole-{}.tracklog", case.name));
        write_log(&case, None, &path);
        let report = replay_log(LogReader::open(&path).unwrap(), false).unwrap();
        assert_eq!(report.difference, None, "{}", case.name);
        assert!(report.ticks > case.ticks && report.complete && report.unfinished == 0, "{}", case.name);
    }
}

#[test]
fn a_log_from_before_the_section_check_replays_identical() {
    let mut all = entries(&small_log("younger.tracklog"));
    let Body::Boot(boot) = &mut all[0].body else { panic!("entry 0 is the boot") };
    let mut settings: serde_json::Value = serde_json::from_str(&boot.settings).unwrap();
    assert!(settings.as_object_mut().unwrap().remove("check").is_some());
    boot.settings = settings.to_string();
    assert!(is_identical(&written("older.tracklog", &all), false));
    // A key that the node would not know is another matter.
    let Body::Boot(boot) = &mut all[0].body else { panic!("entry 0 is the boot") };
    boot.settings = boot.settings.replace("\"pose\"", "\"posture\"");
    assert!(!is_identical(&written("strange.tracklog", &all), false));
}

#[test]
fn no_altered_byte_passes() {
    let good = small_log("altered.tracklog");
    assert!(is_identical(&good, false));
    // Every byte of everything but the middle of the log, where every seventh is enough.
    let (begin, end) = (2000, good.len() - 700);
    for at in (0..good.len()).filter(|at| *at < begin || *at >= end || at.is_multiple_of(7)) {
        for change in [0x01, 0x80, 0xff] {
            let mut bad = good.clone();
            bad[at] ^= change;
            assert!(!is_identical(&bad, false), "byte {at} ^ {change:#x}");
            assert!(!is_identical(&bad, true), "byte {at} ^ {change:#x}, --partial");
        }
    }
}

#[test]
fn every_head_byte_of_every_frame_counts() {
    let good = small_log("heads.tracklog");
    let mut frames = boundaries(&good);
    frames.pop();
    for at in frames.into_iter().flat_map(|begin| begin..begin + FRAME_HEAD_BYTES) {
        let mut bad = good.clone();
        bad[at] = bad[at].wrapping_add(1);
        assert!(!is_identical(&bad, true), "byte {at}");
    }
}

#[test]
fn a_cut_log_is_vouched_for_only_in_part_and_only_behind_a_whole_frame() {
    let good = small_log("cut.tracklog");
    let frames = boundaries(&good);
    let first_end = frames[1];
    let step =
        |at: &usize| *at < 800 || *at > good.len() - 800 || at.is_multiple_of(11) || frames.contains(at);
    for at in (0..good.len()).filter(step) {
        assert!(!is_identical(&good[..at], false), "cut at {at}");
        let whole = frames.contains(&at) && at >= first_end;
        assert_eq!(is_identical(&good[..at], true), whole, "cut at {at}, --partial");
    }
}

#[test]
fn bytes_after_the_end_mark_and_a_false_end_mark_are_noticed() {
    let good = small_log("end.tracklog");
    for more in [&b"\0"[..], &good[8..]] {
        assert!(matches!(replayed(&[&good[..], more].concat(), true), Err(CannotVouch::Log(_))));
    }
    let frames = boundaries(&good);
    let mut swapped = entries(&good);
    swapped.pop();
    let short = written("short.tracklog", &swapped);
    let end_of_short = &short[boundaries(&short)[swapped.len()]..];
    let false_end = [&good[..frames[frames.len() - 2]], end_of_short].concat();
    assert!(matches!(replayed(&false_end, true), Err(CannotVouch::Log(_))));
}

#[test]
fn a_log_with_a_gap_or_without_its_beginning_is_not_vouched_for() {
    let all = entries(&small_log("gap.tracklog"));
    assert!(matches!(replayed(&written("late.tracklog", &all[1..]), true), Err(CannotVouch::NoBeginning)));
    let path = scratch("gap2.tracklog");
    let mut writer = LogWriter::replace(&path).unwrap();
    all[..20].iter().for_each(|entry| writer.write_entry(entry).unwrap());
    writer.gap(20, 29).unwrap();
    all[30..].iter().for_each(|entry| writer.write_entry(entry).unwrap());
    writer.finish().unwrap();
    let bytes = std::fs::read(path).unwrap();
    match replayed(&bytes, true) {
        Err(CannotVouch::Gap(gap)) => assert_eq!((gap.first, gap.last), (20, 29)),
        other => panic!("{other:?}"),
    }
    // Entries left out without a word show as a difference.
    let silent = written("silent.tracklog", &[&all[..20], &all[30..]].concat());
    assert!(replayed(&silent, true).unwrap().difference.is_some());
}

type Edit = fn(&mut Entry);

#[test]
fn an_edited_field_with_right_checksums_diverges_and_is_named() {
    let all = entries(&small_log("edited.tracklog"));
    let tick = all.iter().rposition(|entry| matches!(entry.body, Body::Tick(_))).unwrap();
    let edits: [(&str, Edit); 5] = [
        ("cross_error_m", |entry| tick_of(entry).cross_error_m += 1e-15),
        ("command.wheels[1]", |entry| tick_of(entry).command.wheels[1] *= -1.0),
        ("mode", |entry| tick_of(entry).mode = trackhold_proto::words::Mode::Standby),
        ("at_ns", |entry| tick_of(entry).at_ns += 1),
        ("number", |entry| entry.number += 1),
    ];
    for (field, edit) in edits {
        let mut edited = all.clone();
        edit(&mut edited[tick]);
        let report = replayed(&written("edited2.tracklog", &edited), false).unwrap();
        let difference = report.difference.unwrap();
        assert_eq!(difference.field, field);
        assert_ne!(difference.log, difference.replay, "{field}");
        assert_eq!(report.entries, tick as u64 + 1, "{field}");
    }
    // An event altered in the log shows in the tick behind it.
    let mut edited = all.clone();
    let pose = all.iter().rposition(|entry| matches!(entry.body, Body::Pose(_))).unwrap();
    if let Body::Pose(event) = &mut edited[pose].body {
        event.pose.x_m += 1e-9;
    }
    let difference = replayed(&written("edited3.tracklog", &edited), false).unwrap().difference.unwrap();
    assert_eq!((difference.kind, difference.field.as_str()), ("tick", "x_m"));
}

fn tick_of(entry: &mut Entry) -> &mut trackhold_proto::journal::TickRecord {
    match &mut entry.body {
        Body::Tick(record) => record,
        other => panic!("{other:?}"),
    }
}

#[test]
fn a_result_too_many_diverges_and_another_build_is_told() {
    let mut all = entries(&small_log("surplus.tracklog"));
    let change = all.iter().find(|entry| matches!(entry.body, Body::ModeChange(_))).unwrap().clone();
    let mut surplus = all.clone();
    surplus.push(Entry { number: all.len() as u64, ..change });
    let difference = replayed(&written("surplus2.tracklog", &surplus), false).unwrap().difference.unwrap();
    assert_eq!((difference.kind, difference.field.as_str()), ("mode-change", "kind"));
    if let Body::Boot(boot) = &mut all[0].body {
        boot.build = "another".to_owned();
    }
    let report = replayed(&written("build.tracklog", &all), false).unwrap();
    assert_eq!((report.difference, report.other_build.as_deref()), (None, Some("another")));
}

#[test]
fn a_recording_is_never_written_over() {
    let path = scratch("once.tracklog");
    let _ = std::fs::remove_file(&path);
    LogWriter::create(&path).unwrap().finish().unwrap();
    assert_eq!(LogWriter::create(&path).unwrap_err().kind(), std::io::ErrorKind::AlreadyExists);
    let mut reader = LogReader::open(&path).unwrap();
    assert!(reader.next().is_none() && matches!(reader.ending(), Ending::Marked(_)));
}

#[test]
fn a_hostile_length_allocates_no_more_than_is_there() {
    let mut bytes = trackhold_proto::journal::LOG_MAGIC.to_vec();
    bytes.extend([0; 16]);
    bytes.extend(60_000_000_u32.to_le_bytes());
    bytes.extend([0; 4]);
    let mut reader = LogReader::new(&bytes[..]).unwrap();
    assert!(reader.next().unwrap().is_err() && reader.next().is_none());
    assert!(reader.frame_bytes().len() < 1000);
}

fn fieldbook(args: &[&str]) -> (i32, String, String) {
    let output = Command::new(env!("CARGO_BIN_EXE_fieldbook")).args(args).output().unwrap();
    let text = |bytes: &[u8]| String::from_utf8_lossy(bytes).into_owned();
    (output.status.code().unwrap(), text(&output.stdout), text(&output.stderr))
}

fn save(name: &str, bytes: &[u8]) -> String {
    let path = scratch(name);
    std::fs::write(&path, bytes).unwrap();
    path.display().to_string()
}

#[test]
fn exit_codes_say_identical_diverged_or_not_vouched_for() {
    let good = small_log("codes.tracklog");
    let (code, out, _) = fieldbook(&["replay", &save("good.tracklog", &good)]);
    assert!(code == 0 && out.starts_with("identical: "), "{out}");
    let mut edited = entries(&good);
    let last = edited.len() - 1;
    tick_of(&mut edited[last]).ref_x_m += 1.0;
    let edited = written("codes2.tracklog", &edited);
    let edited = save("diverged.tracklog", &edited);
    let (code, out, _) = fieldbook(&["replay", &edited]);
    assert!(code == 1 && out.contains("field ref_x_m"), "{out}");
    let (code, out, _) = fieldbook(&["replay", &edited, "--json"]);
    let object: serde_json::Value = serde_json::from_str(&out).unwrap();
    assert_eq!(
        (code, &object["result"], &object["difference"]["field"]),
        (1, &"diverged".into(), &"ref_x_m".into())
    );
    let cut = save("no-end.tracklog", &good[..boundaries(&good)[30]]);
    let (code, _, error) = fieldbook(&["replay", &cut]);
    assert!(code == 2 && error.contains("--partial"), "{error}");
    assert_eq!(fieldbook(&["replay", &cut, "--partial"]).0, 0);
    assert_eq!(fieldbook(&["replay", &save("torn.tracklog", &good[..good.len() - 1]), "--partial"]).0, 2);
    assert_eq!(fieldbook(&["replay", "no-such-file.tracklog"]).0, 2);
}

#[test]
fn the_same_law_in_open_loop_commands_what_the_log_has() {
    for case in cases() {
        let path = scratch(&format!("open-{}.tracklog", case.name));
        write_log(&case, None, &path);
        let path = path.display().to_string();
        let (code, out, error) = fieldbook(&["replay", &path, "--law", &case.settings.law.name, "--json"]);
        assert_eq!(code, 0, "{error}");
        let object: serde_json::Value = serde_json::from_str(&out).unwrap();
        assert_eq!(object["open_loop"], true);
        for key in
            ["max_speed_difference_m_s", "max_turn_rate_difference_rad_s", "rms_wanted_speed_difference_m_s"]
        {
            assert_eq!(object[key], 0.0, "{}: {key}", case.name);
        }
        assert!(object["ticks"].as_u64().unwrap() > case.ticks);
    }
}

#[test]
fn another_law_in_open_loop_differs_and_says_what_it_is() {
    let path = scratch("other-law.tracklog");
    write_log(&case_named("samson-car"), None, &path);
    let (path, csv) = (path.display().to_string(), scratch("other-law.csv"));
    let csv_name = csv.display().to_string();
    let (code, out, _) =
        fieldbook(&["replay", &path, "--law", "kanayama", "--gain", "k_y=9", "--csv", &csv_name]);
    assert!(code == 0 && out.contains("open loop: the poses do not respond"), "{out}");
    assert!(out.contains("k_y = 9") && !out.contains("k_1"), "{out}");
    let table = std::fs::read_to_string(csv).unwrap();
    assert!(table.lines().count() > 2804 && table.starts_with("t_s,plan_time_s,"), "{}", &table[..100]);
    let (code, _, error) = fieldbook(&["replay", &path, "--gain", "k_9=1"]);
    assert!(code == 2 && error.contains("k_1, k_2, k_3"), "{error}");
    let (code, _, error) = fieldbook(&["replay", &path, "--csv", "x.csv"]);
    assert!(code == 2 && error.contains("--law") && !Path::new("x.csv").exists(), "{error}");
}

#[test]
fn poses_of_a_simulated_run_give_its_commands() {
    for name in ["kanayama-differential", "off-axle-differential", "samson-unicycle"] {
        let case = case_named(name);
        let (site, plan) = (reference(&format!("{name}.site.toml")), reference(&format!("{name}.plan.json")));
        let (site, plan) = (site.display().to_string(), plan.display().to_string());
        let (run, asked) = (scratch(&format!("{name}.run.csv")), scratch(&format!("{name}.asked.csv")));
        let start = format!("--start={},{},{}", case.start.x_m, case.start.y_m, case.start.heading_rad);
        let run_name = run.display().to_string();
        let (code, _, error) =
            fieldbook(&["simulate", "--site", &site, "--plan", &plan, &start, "--csv", &run_name]);
        assert_eq!(code, 0, "{error}");
        let asked_name = asked.display().to_string();
        let (code, out, error) = fieldbook(&[
            "replay",
            "--poses",
            &run_name,
            "--site",
            &site,
            "--plan",
            &plan,
            "--csv",
            &asked_name,
        ]);
        assert!(code == 0 && out.contains("open loop"), "{error}");
        let (run, asked) = (read_columns(&run), read_columns(&asked));
        // Up to the plan's end; then the run settles, which poses alone do not show.
        for (row, again) in run.iter().zip(&asked).take(usize::try_from(case.ticks).unwrap()) {
            assert!(
                (row[0] - again[0]).abs() < 1e-6 && (row[1] - again[1]).abs() < 1e-6,
                "{name}: {row:?} {again:?}"
            );
        }
        let (code, _, error) = fieldbook(&[
            "replay",
            "--poses",
            &run_name,
            "--site",
            &site,
            "--plan",
            &plan,
            "--plan-begin",
            "1000",
        ]);
        assert!(code == 2 && error.contains("--plan-begin"), "{error}");
    }
}

/// The columns speed_m_s and turn_rate_rad_s.
fn read_columns(path: &Path) -> Vec<[f64; 2]> {
    let text = std::fs::read_to_string(path).unwrap();
    let mut lines = text.lines();
    let names: Vec<&str> = lines.next().unwrap().split(',').collect();
    let places =
        ["speed_m_s", "turn_rate_rad_s"].map(|column| names.iter().position(|name| *name == column).unwrap());
    lines
        .map(|line| {
            let cells: Vec<&str> = line.split(',').collect();
            places.map(|place| cells[place].parse().unwrap())
        })
        .collect()
}
