//! `check`: the corpus in `tests/plans`, and what the command prints and draws.

use serde_json::Value;
use std::path::{Path, PathBuf};
use std::process::Command;
use trackhold::site::Site;
use trackhold_core::plan::check::{Finding, Report, Severity, Where, check, too_large};

fn root() -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("../..")
}

fn plans() -> PathBuf {
    root().join("tests/plans")
}

/// A line of `table.csv`: `-` where nothing is stated.
struct Row {
    plan: String,
    site: String,
    fit: bool,
    finding: String,
    /// Index of the segment, or key of the plan file.
    place: String,
    t_s: Option<f64>,
}

fn table() -> Vec<Row> {
    let text = std::fs::read_to_string(plans().join("table.csv")).unwrap();
    let row = |line: &str| {
        let cells: Vec<&str> = line.split(',').collect();
        let [plan, site, verdict, finding, place, t_s] = cells[..] else { panic!("{line}") };
        let (plan, site, finding, place) = (plan.into(), site.into(), finding.into(), place.into());
        Row { plan, site, fit: verdict == "fit", finding, place, t_s: t_s.parse().ok() }
    };
    text.lines().skip(1).map(row).collect()
}

fn checked(row: &Row) -> Report {
    let site = Site::load(&plans().join(format!("sites/{}.toml", row.site))).unwrap();
    let raw = std::fs::read(plans().join(&row.plan)).unwrap();
    let limit = site.net.max_plan_bytes;
    if raw.len() > limit {
        return too_large(raw.len(), limit, "net.max_plan_bytes");
    }
    check(&raw, &site.checked().unwrap().terms())
}

fn meets(finding: &Finding, row: &Row) -> bool {
    let at_place = match &finding.place {
        Where::Plan => row.place == "-",
        Where::Key(key) => row.place == "-" || *key == row.place,
        Where::At(place) => row.place == "-" || place.segment.to_string() == row.place,
    };
    let in_time = row.t_s.is_none_or(|t_s| finding.at().is_some_and(|place| (place.t_s - t_s).abs() < 0.11));
    finding.severity == Severity::Unfit && finding.fault.name() == row.finding && at_place && in_time
}

#[test]
fn every_broken_plan_is_found_broken_where_it_is_and_every_good_one_passes() {
    let table = table();
    let broken = table.iter().filter(|row| !row.fit).count();
    assert!(broken >= 40 && table.len() - broken >= 20, "{broken} of {}", table.len());
    for row in &table {
        let report = checked(row);
        let told: Vec<String> = report.findings.iter().map(Finding::line).collect();
        assert_eq!(report.is_fit(), row.fit, "{}: {told:#?}", row.plan);
        let found = row.fit || report.findings.iter().any(|finding| meets(finding, row));
        assert!(found, "{} has no {} at {}: {told:#?}", row.plan, row.finding, row.place);
    }
}

#[test]
fn every_file_of_the_corpus_is_in_the_table() {
    let listed: Vec<String> = table().into_iter().map(|row| row.plan).collect();
    for folder in ["broken", "good"] {
        for entry in std::fs::read_dir(plans().join(folder)).unwrap() {
            let name = format!("{folder}/{}", entry.unwrap().file_name().to_string_lossy());
            assert!(listed.contains(&name), "{name}");
        }
    }
}

#[test]
fn every_finding_of_the_corpus_says_what_would_mend_it() {
    for row in &table() {
        for finding in checked(row).findings {
            assert!(!finding.remedy.is_empty() && !finding.line().is_empty(), "{}: {finding:?}", row.plan);
            assert!(finding.severity == Severity::Information || !finding.meaning.is_empty(), "{finding:?}");
        }
    }
}

/// The plans that a site file says it fits, in the comment at its head.
fn plans_that_fit(site: &Path) -> Vec<String> {
    let text = std::fs::read_to_string(site).unwrap();
    let head: String = text.lines().take_while(|line| line.starts_with('#')).collect();
    let words = head.split(|letter: char| letter.is_whitespace() || letter == ',' || letter == '#');
    let names = words.map(|word| word.trim_end_matches('.')).filter(|word| word.starts_with("plans/"));
    names.map(str::to_owned).collect()
}

fn assert_fit(site: &Path, plan: &Path) {
    let terms = Site::load(site).unwrap().checked().unwrap().terms();
    let report = check(&std::fs::read(plan).unwrap(), &terms);
    let told: Vec<String> = report.findings.iter().map(Finding::line).collect();
    assert!(report.is_fit(), "{} on {}: {told:#?}", plan.display(), site.display());
}

#[test]
fn every_ready_plan_is_fit_on_the_sites_that_say_so() {
    let config = root().join("config");
    let files = |folder: &Path, kind: &str| {
        let entries = std::fs::read_dir(folder).unwrap().map(|entry| entry.unwrap().path());
        entries.filter(|path| path.extension().is_some_and(|end| end == kind)).collect::<Vec<_>>()
    };
    let mut said = Vec::new();
    for site in files(&config, "toml") {
        let plans = plans_that_fit(&site);
        assert!(!plans.is_empty(), "{} says no plan that fits", site.display());
        plans.iter().for_each(|plan| assert_fit(&site, &config.join(plan)));
        said.extend(plans);
    }
    for plan in files(&config.join("plans"), "json") {
        let name = format!("plans/{}", plan.file_name().unwrap().to_string_lossy());
        assert!(said.contains(&name), "no site file says that {name} fits it");
    }
    let demo = root().join("tools/fieldbook/src/demo");
    ["plan.json", "plan-short.json"]
        .iter()
        .for_each(|plan| assert_fit(&demo.join("site.toml"), &demo.join(plan)));
}

fn run(site: &str, plan: &str, args: &[&str]) -> (i32, String, String) {
    let output = Command::new(env!("CARGO_BIN_EXE_fieldbook"))
        .args(["check", "--site"])
        .arg(plans().join(site))
        .arg("--plan")
        .arg(plans().join(plan))
        .args(args)
        .output()
        .unwrap();
    let text = |bytes: &[u8]| String::from_utf8_lossy(bytes).into_owned();
    (output.status.code().unwrap(), text(&output.stdout), text(&output.stderr))
}

fn json(site: &str, plan: &str) -> (i32, Value) {
    let (code, out, error) = run(site, plan, &["--json"]);
    (code, serde_json::from_str(&out).unwrap_or_else(|_| panic!("{out}{error}")))
}

#[test]
fn json_has_the_verdict_the_figures_and_the_segments() {
    let (code, fit) = json("sites/cart.toml", "good/round-the-yard.json");
    assert_eq!((code, &fit["verdict"]), (0, &"fit".into()));
    assert!((fit["length_m"].as_f64().unwrap() - 8.356_194_45).abs() < 1e-6);
    assert!(fit["duration_s"].as_f64().unwrap() > 10.0);
    let segments = fit["segments"].as_array().unwrap();
    assert_eq!(segments.len(), 6);
    assert!(segments[1]["shares"].as_array().unwrap().iter().any(|peak| peak["limit"] == "wheel-speed"));
    assert!((segments[1]["authority_left"].as_f64().unwrap() - 0.3).abs() < 1e-9);

    let (code, unfit) = json("sites/car.toml", "broken/car-curvature-step.json");
    assert_eq!((code, &unfit["verdict"]), (1, &"unfit".into()));
    let findings = unfit["findings"].as_array().unwrap();
    let step = findings.iter().find(|finding| finding["name"] == "curvature-step").unwrap();
    assert_eq!(
        (&step["severity"], &step["segment"], &step["t_s"]),
        (&"unfit".into(), &1.into(), &4.0.into())
    );
    assert_eq!((&step["value"], &step["limit"], &step["unit"]), (&0.25.into(), &0.05.into(), &"1/m".into()));

    let (code, refused) = json("sites/cart.toml", "broken/times-not-rising.json");
    assert_eq!(
        (code, &refused["duration_s"], &refused["findings"][0]["segment"]),
        (1, &Value::Null, &0.into())
    );
    assert_eq!(refused["findings"][0]["key"], "segments[0] (samples).points[2].t_s");
}

#[test]
fn text_tells_verdict_findings_and_segments() {
    let (code, out, _) = run("sites/cart.toml", "broken/too-fast-outer-wheel.json", &[]);
    assert_eq!(code, 1);
    assert!(out.starts_with("unfit: "), "{out}");
    assert!(out.contains("the limit is 10 rad/s: slow down or turn wider"), "{out}");
    assert!(out.contains("segment kind"), "{out}");
}

#[test]
fn what_cannot_run_exits_with_two() {
    assert_eq!(run("sites/none.toml", "good/line.json", &[]).0, 2);
    assert_eq!(run("sites/cart.toml", "good/none.json", &[]).0, 2);
    assert_eq!(run("sites/cart.toml", "good/line.json", &["--svg", "/no/such/place.svg"]).0, 2);
}

#[test]
fn the_picture_is_well_formed_and_has_every_finding() {
    let file = Path::new(env!("CARGO_TARGET_TMPDIR")).join("check.svg");
    let name = file.display().to_string();
    for (site, plan) in [
        ("sites/cart.toml", "good/round-the-yard.json"),
        ("sites/car.toml", "broken/car-curvature-step.json"),
        ("sites/cart.toml", "good/only-a-dwell.json"),
        ("sites/unicycle.toml", "good/many-segments.json"),
    ] {
        let (_, out, error) = run(site, plan, &["--json", "--svg", &name]);
        let told: Value = serde_json::from_str(&out).unwrap_or_else(|_| panic!("{error}"));
        let svg = std::fs::read_to_string(&file).unwrap();
        assert!(svg.starts_with("<svg ") && svg.trim_end().ends_with("</svg>"));
        let words = svg.split(|letter: char| !letter.is_ascii_alphanumeric());
        assert!(words.into_iter().all(|word| word != "NaN" && word != "inf"), "{plan}");
        balanced(&svg);
        for number in 1..=told["findings"].as_array().unwrap().len() {
            let mark = format!(">{number}</text>");
            assert!(svg.contains(&mark), "{plan}: no mark {number}");
        }
        assert!(svg.contains("plan time, s") && svg.contains("share of the limit"));
    }
    // A plan that does not compile has nothing to draw, and says so.
    let (code, _, error) = run("sites/cart.toml", "broken/nan.json", &["--svg", &name]);
    assert!(code == 1 && error.contains("nothing to draw"), "{error}");
}

/// Every element that is opened is closed, in order.
fn balanced(svg: &str) {
    let mut open: Vec<&str> = Vec::new();
    for tag in svg.split('<').skip(1) {
        let tag = &tag[..tag.find('>').unwrap()];
        if let Some(name) = tag.strip_prefix('/') {
            assert_eq!(open.pop(), Some(name));
        } else if !tag.ends_with('/') {
            open.push(tag.split(' ').next().unwrap());
        }
    }
    assert!(open.is_empty(), "{open:?}");
}
