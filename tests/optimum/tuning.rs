//! How the gains of `gains.toml` were found: a compass search over the logarithms of a law's gains, from the file's gains and
//! from the corners of a box around them. Not part of a test run:
//!
//! ```text
//! TRACKHOLD_TUNE=kanayama,off-axle:k_p+x_p_m \
//!     cargo test --release -p trackhold-tests --test optimum tuning -- --ignored --nocapture
//! ```
//!
//! names the laws; after a colon the gains to be searched, else all of the law's that are not zero. It prints sections for
//! `gains.toml`, and a person decides what goes there; what is found on the way goes to the error output.
//! `TRACKHOLD_TUNE_ON=stop,eight` looks at these scenarios alone.

use crate::scenario::{self, Scenario};
use crate::table::{self, Drive};
use trackhold_core::keys::Values;
use trackhold_core::law;
use trackhold_core::settings::Settings;

/// Names the laws to tune.
const VARIABLE: &str = "TRACKHOLD_TUNE";
/// Names the scenarios to look at, if not all of them.
const ON: &str = "TRACKHOLD_TUNE_ON";
/// What a scenario counts that a law gave up: worse than any that it drove.
const GIVEN_UP: f64 = 20.0;
/// The greater, the more the worst scenario decides.
const POWER: i32 = 3;
/// What the median weighs beside that.
const MEDIAN_WEIGHT: f64 = 0.5;
/// A corner of the box lies this factor up or down in every gain.
const BOX: f64 = 2.5;
/// First and last step of the search, as factors.
const STEPS: (f64, f64) = (1.5, 1.005);

/// A search over some gains of a law.
struct Search<'a> {
    base: &'a Settings,
    scenarios: &'a [Scenario],
    law: &'static str,
    /// The gains that stay.
    fixed: Values,
    names: Vec<String>,
    drives: u64,
}

impl Search<'_> {
    fn gains(&self, point: &[f64]) -> Values {
        let mut gains = self.fixed.clone();
        self.names.iter().zip(point).for_each(|(name, value)| gains.set(name, *value));
        gains
    }

    /// Small is good; infinite where the gains do not hold.
    fn score(&mut self, point: &[f64]) -> f64 {
        let settings = table::settings_with(self.base, self.law, &self.gains(point));
        if settings.checked().is_err() {
            return f64::INFINITY;
        }
        self.drives += self.scenarios.len() as u64;
        let drives = self.scenarios.iter().map(|scenario| table::drive(&settings, scenario));
        let ratios: Vec<f64> = drives
            .map(|drive| match drive {
                Drive::Ratio(ratio) => ratio.min(GIVEN_UP),
                Drive::OutsideDomain | Drive::Stopped(_) => GIVEN_UP,
            })
            .collect();
        // A scenario that the law cannot drive at all costs the same at every point, and must not hide the others.
        let driven = ratios.iter().filter(|ratio| **ratio < GIVEN_UP);
        let given_up = (ratios.len() - driven.clone().count()) as f64;
        let mean = driven.clone().map(|ratio| ratio.powi(POWER)).sum::<f64>() / ratios.len() as f64;
        let median = table::median(driven.copied().collect()).unwrap_or(GIVEN_UP);
        GIVEN_UP * given_up + mean.powf(1.0 / f64::from(POWER)) + MEDIAN_WEIGHT * median
    }

    /// Goes one gain up or down as long as that helps, in ever smaller steps.
    fn descend(&mut self, mut point: Vec<f64>) -> (f64, Vec<f64>) {
        let mut best = self.score(&point);
        let mut step = STEPS.0;
        while step > STEPS.1 && best.is_finite() {
            let mut better = false;
            for index in 0..point.len() {
                for factor in [step, 1.0 / step] {
                    let mut next = point.clone();
                    next[index] *= factor;
                    let score = self.score(&next);
                    if score < best {
                        eprintln!("{score:.4} {next:.4?}");
                        (best, point, better) = (score, next, true);
                        break;
                    }
                }
            }
            step = if better { step } else { step.sqrt() };
        }
        (best, point)
    }

    /// The best of all descents from around a point; of a law that optimises, whose drives take long, that from there.
    fn run(&mut self, start: &[f64]) -> (f64, Vec<f64>) {
        if table::OPTIMISING.contains(&self.law) {
            return self.descend(start.to_vec());
        }
        let corners = (0..1_u32 << start.len()).map(|corner| {
            let factor = |index: usize| if corner >> index & 1 == 0 { BOX } else { 1.0 / BOX };
            start.iter().enumerate().map(|(index, value)| value * factor(index)).collect()
        });
        let starts: Vec<Vec<f64>> = std::iter::once(start.to_vec()).chain(corners).collect();
        let found = starts.into_iter().map(|start| self.descend(start));
        let found: Vec<(f64, Vec<f64>)> = found.collect();
        found.into_iter().min_by(|a, b| a.0.total_cmp(&b.0)).expect("there is a start")
    }
}

/// To three digits: more would not be kept by any machine.
fn rounded(value: f64) -> f64 {
    format!("{value:.2e}").parse().expect("a number prints as one")
}

fn tune(request: &str, base: &Settings, scenarios: &[Scenario]) {
    let (law, chosen) = request.split_once(':').unwrap_or((request, ""));
    let kind = law::find(law).unwrap_or_else(|problem| panic!("{VARIABLE}: {problem}"));
    let given = table::gains().remove(law).unwrap_or_default();
    let fixed = table::all_gains(base, law, &given);
    let chosen: Vec<&str> = chosen.split('+').filter(|name| !name.is_empty()).collect();
    let (names, start): (Vec<String>, Vec<f64>) = fixed
        .iter()
        .filter(|(name, value)| *value != 0.0 && (chosen.is_empty() || chosen.contains(name)))
        .map(|(name, value)| (name.to_owned(), value))
        .unzip();
    let mut search = Search { base, scenarios, law: kind.name, fixed, names, drives: 0 };
    let before = search.score(&start);
    let (score, point) = search.run(&start);
    println!("# score {score:.4}, before {before:.4}, {} drives\n[{law}]", search.drives);
    for (name, value) in search.names.iter().zip(&point) {
        println!("{name} = {}", rounded(*value));
    }
}

#[test]
#[ignore = "a search that takes minutes, for a person who chooses gains"]
fn tuning() {
    let requests = std::env::var(VARIABLE).unwrap_or_else(|_| panic!("{VARIABLE} names the laws to tune"));
    let base = scenario::settings();
    let mut scenarios = scenario::all(&base.checked().unwrap().vehicle);
    if let Ok(names) = std::env::var(ON) {
        scenarios.retain(|scenario| names.split(',').any(|name| name == scenario.name));
        assert_eq!(scenarios.len(), names.split(',').count(), "{ON}={names}: not all of them are scenarios");
    }
    requests.split(',').for_each(|request| tune(request, &base, &scenarios));
}
