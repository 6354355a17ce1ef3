//! The ranking for people and for programs, and what to choose.

use super::measure::{Conditions, Score};
use serde_json::{Value, json};
use std::fmt::Write as _;

/// Costs this much above the least one are as good: other gains would move them more.
const AS_GOOD: f64 = 1.1;
/// A law that bears less than this in addition leaves little room for a slow network or a worn drive, s.
const ENOUGH_S: f64 = 0.2;
/// From this share of limited ticks on it is said what to do about it.
const MUCH_LIMITED: f64 = 0.2;
/// If the along-track error has more than this of the best law's cost, no law can help much.
const MOSTLY: f64 = 0.9;

const HEADER: &str = "
                              cross track    along     heading      at the    mean  effort       at  bears more
  law             cost  path      rms     most       rms     rms     most        end     time         limits  dead time
                                   mm       mm        mm    mrad     mrad         mm        s       %        %
";

/// The ranking.
pub(super) struct Ranking<'a> {
    /// What was ranked on what.
    pub(super) head: String,
    /// Under what.
    pub(super) conditions: &'a Conditions,
    /// The laws that fit, the best one first.
    pub(super) scores: Vec<Score>,
    /// The others.
    pub(super) left_out: Vec<LeftOut>,
}

/// A law that does not fit.
pub(super) struct LeftOut {
    pub(super) law: &'static str,
    pub(super) why: String,
}

impl Ranking<'_> {
    /// As one JSON object.
    pub(super) fn json(&self) -> String {
        let laws: Vec<Value> = self
            .scores
            .iter()
            .map(|score| {
                let mut law = json!(score);
                law["relative_cost"] = json!(self.relative_cost(score));
                law["relative_path_cost"] = json!(self.relative_path_cost(score));
                law
            })
            .collect();
        let left_out: Vec<Value> =
            self.left_out.iter().map(|one| json!({ "law": one.law, "reason": one.why })).collect();
        let object = json!({
            "seeds": self.conditions.seeds,
            "offset_m": self.conditions.offset_m,
            "offset_rad": self.conditions.offset_rad,
            "choice": self.choice().map(|score| score.law.name.as_str()),
            "laws": laws,
            "left_out": left_out,
        });
        format!("{object}\n")
    }

    /// As a table with advice.
    pub(super) fn text(&self) -> String {
        let conditions = self.conditions;
        let mut text = format!(
            "{}\n{} runs a law, start offsets up to {} m and {} rad, the same for every law\n",
            self.head, conditions.seeds, conditions.offset_m, conditions.offset_rad
        );
        if let Some(first) = self.scores.first() {
            let _ = writeln!(text, "the plan takes {:.1} s", first.plan_duration_s);
            text += &self.table();
        }
        for score in &self.scores {
            let Score { law, runs, finished, stopped, fallback_share, .. } = score;
            if let Some(why) = stopped {
                let _ =
                    writeln!(text, "  {}: {} of {runs} runs ended early: {why}", law.name, runs - finished);
            }
            if *fallback_share > 0.0 {
                let share = 100.0 * fallback_share;
                let _ = writeln!(
                    text,
                    "  {}: left {share:.2} % of the ticks to the law it falls back to",
                    law.name
                );
            }
        }
        for LeftOut { law, why } in &self.left_out {
            let _ = writeln!(text, "  {law} left out: {why}");
        }
        for line in self.advice() {
            let _ = writeln!(text, "- {line}");
        }
        text
    }

    fn table(&self) -> String {
        let mut text = String::from(HEADER);
        for score in &self.scores {
            let errors = &score.errors;
            let name = format!("{}{}", score.law.name, if score.law.gains_of_site { " *" } else { "" });
            let _ = writeln!(
                text,
                "  {name:<14} {:>5} {:>5} {:>8.1} {:>8.1} {:>9.1} {:>7.1} {:>8.1} {:>10.1} {:>8.1} {:>7.1} {:>8.1} {:>9}",
                told_ratio(self.relative_cost(score)),
                told_ratio(self.relative_path_cost(score)),
                1e3 * errors.rms_cross_m,
                1e3 * errors.max_cross_m,
                1e3 * errors.rms_along_m,
                1e3 * errors.rms_heading_rad,
                1e3 * errors.max_heading_rad,
                1e3 * score.worst_final_position_error_m,
                score.mean_duration_s,
                100.0 * score.effort,
                100.0 * errors.limited_share,
                dead_time(score),
            );
        }
        text += if self.scores.iter().any(|score| score.law.gains_of_site) {
            "  * the site file's law with its gains; all others with their defaults\n"
        } else {
            "  all with their default gains\n"
        };
        text
    }

    /// Those that came to the plan's end in every run.
    fn reliable(&self) -> impl Iterator<Item = &Score> {
        self.scores.iter().filter(|score| score.finished == score.runs)
    }

    /// Cost over the least one of those that always came to the plan's end.
    fn relative_cost(&self, score: &Score) -> Option<f64> {
        self.relative(score, |score| score.cost_m2_s)
    }

    fn relative_path_cost(&self, score: &Score) -> Option<f64> {
        self.relative(score, |score| score.path_cost_m2_s)
    }

    fn relative(&self, score: &Score, of: impl Fn(&Score) -> f64) -> Option<f64> {
        let least = self.reliable().map(&of).min_by(f64::total_cmp)?;
        let own = of(score);
        (score.finished == score.runs).then(|| if own <= least { 1.0 } else { own / least })
    }

    /// Those whose cost is as good as the least one.
    fn as_good(&self) -> impl Iterator<Item = &Score> {
        self.scores.iter().filter(|score| self.relative_cost(score).is_some_and(|cost| cost <= AS_GOOD))
    }

    /// See the help of the command.
    fn choice(&self) -> Option<&Score> {
        let steady = self.as_good().filter(|score| borne_s(score) >= ENOUGH_S);
        let straying = |a: &&Score, b: &&Score| a.path_cost_m2_s.total_cmp(&b.path_cost_m2_s);
        let toughest =
            || self.as_good().min_by(|a, b| borne_s(b).total_cmp(&borne_s(a)).then_with(|| straying(a, b)));
        steady.min_by(straying).or_else(toughest)
    }

    /// Where the choice bears little dead time: of those that bear enough, whatever they cost, the one that costs least.
    fn safer_choice(&self, choice: &Score) -> Option<&Score> {
        if borne_s(choice) >= ENOUGH_S {
            return None;
        }
        let cheapest = |a: &&Score, b: &&Score| a.cost_m2_s.total_cmp(&b.cost_m2_s);
        self.reliable().filter(|score| borne_s(score) >= ENOUGH_S).min_by(cheapest)
    }

    fn advice(&self) -> Vec<String> {
        let Some(choice) = self.choice() else {
            let what = if self.scores.is_empty() {
                "no law fits: `fieldbook check` tells what is wrong with the plan for this machine"
            } else {
                "no law came to the plan's end in every run: see why above; smaller offsets or a slower plan may help"
            };
            return vec![what.to_owned()];
        };
        let mut advice = vec![self.told_choice(choice)];
        if borne_s(choice) < ENOUGH_S {
            advice.push(self.told_little_dead_time(choice));
        }
        advice.extend(self.on_the_sites_law(choice));
        advice.extend(on_the_choice(choice));
        advice
    }

    fn told_little_dead_time(&self, choice: &Score) -> String {
        let bears = format!(
            "{} bears {} more dead time, little room for a slow network or a worn drive: ",
            choice.law.name,
            dead_time(choice)
        );
        bears
            + &match self.safer_choice(choice) {
                Some(safer) => format!(
                    "{} is the safer choice at {} times the cost, and bears {}",
                    safer.law.name,
                    told_ratio(self.relative_cost(safer)),
                    dead_time(safer)
                ),
                None => "weaker gains bear more".to_owned(),
            }
    }

    fn told_choice(&self, choice: &Score) -> String {
        let law = &choice.law;
        let gains: Vec<String> = law.gains.iter().map(|(key, value)| format!("{key} = {value}")).collect();
        let why = if self.as_good().count() == 1 {
            "its cost is the least by more than 10 %"
        } else if borne_s(choice) >= ENOUGH_S {
            "of the laws within 10 % of the least cost that bear enough more dead time it strays least from the path"
        } else {
            "of the laws within 10 % of the least cost it bears the most dead time"
        };
        format!("choose {} ({}): {why}", law.name, gains.join(", "))
    }

    fn on_the_sites_law(&self, choice: &Score) -> Option<String> {
        let own = self.scores.iter().find(|score| score.law.gains_of_site)?;
        if own.law.name == choice.law.name {
            return None;
        }
        let (cost, path) = (self.relative_cost(own)?, own.path_cost_m2_s / choice.path_cost_m2_s);
        let little = cost <= AS_GOOD && path <= AS_GOOD && borne_s(own) >= ENOUGH_S;
        Some(format!(
            "the site file's {}: {cost:.2} times the least cost, {path:.2} times the path cost of {}, bears {} more dead \
             time{}",
            own.law.name,
            choice.law.name,
            dead_time(own),
            if little { "; little is gained by changing it" } else { "" }
        ))
    }
}

/// What an engineer may want to change beside the law.
fn on_the_choice(choice: &Score) -> Vec<String> {
    let mut advice = Vec::new();
    let along = 1.0 - choice.path_cost_m2_s / choice.cost_m2_s;
    if along > MOSTLY {
        advice.push(format!(
            "{:.0} % of its cost is along the path: the machine is late, which no law mends. Either the plan asks for \
             speeds sooner than it reaches them (`fieldbook retime` mends that), or its drives lag",
            100.0 * along
        ));
    }
    if choice.errors.limited_share > MUCH_LIMITED {
        advice.push(
            "limits act much of the time: weaker gains where the estimator is noisy, a slower plan where it is not"
                .to_owned(),
        );
    }
    advice
}

fn borne_s(score: &Score) -> f64 {
    score.extra_dead_time_s.unwrap_or(0.0)
}

fn told_ratio(ratio: Option<f64>) -> String {
    ratio.map_or_else(|| "–".to_owned(), |ratio| format!("{ratio:.2}"))
}

fn dead_time(score: &Score) -> String {
    let Some(borne) = score.extra_dead_time_s else { return "–".to_owned() };
    let more = if score.extra_dead_time_is_more { ">" } else { "" };
    format!("{more}{:.0} ms", 1e3 * borne)
}
