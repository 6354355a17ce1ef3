use super::*;

#[test]
fn a_short_run_is_tracked_recorded_and_replayed() {
    let directory = std::env::temp_dir().join(format!("fieldbook-demo-test-{}", std::process::id()));
    let args = Args { out: Some(directory.clone()), seconds_limit: 30.0, fast: true };
    let code = run(&args).unwrap();
    assert_eq!(code, ExitCode::SUCCESS);
    let log = directory.join("demo.tracklog");
    let report = replay::replay_log(LogReader::open(&log).unwrap(), false).unwrap();
    assert!(report.difference.is_none() && report.complete && report.ticks > 100);
    assert!(free_name(&directory).unwrap().ends_with("demo-2.tracklog"));
    std::fs::remove_dir_all(&directory).unwrap();
}
