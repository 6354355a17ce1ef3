//! `fieldbook tune`: changes the law and its gains, also while the machine runs.

use super::{To, outcome, tell};
use crate::choice::{LawChoice, problem_lines};
use crate::client::{Answer, Client, Pace};
use crate::output;
use anyhow::{Context, Result, bail, ensure};
use serde_json::json;
use std::process::ExitCode;
use trackhold_core::keys::Values;
use trackhold_core::settings::LawSettings;
use trackhold_proto::Message;
use trackhold_proto::blob::Text;
use trackhold_proto::message::{LAW_BYTES, Status, Tune};

/// Arguments of `tune`.
#[derive(Debug, clap::Args)]
#[command(
    after_help = "What counts as the site's law and gains here are those in force now, as fieldbook status tells them. The \
                        change is gone when the daemon restarts: put what proves good into the site file.\nExit codes: 0 \
                        accepted, 1 refused, 2 could not run."
)]
pub struct TuneArgs {
    #[command(flatten)]
    choice: LawChoice,
    #[command(flatten)]
    to: To,
}

/// Puts a law with these gains in force; a gain that is not named has its default.
///
/// # Errors
/// If it is too long for a datagram, or if no answer comes.
pub fn tune(client: &mut Client, law: &LawSettings) -> Result<Answer> {
    let text = json!(law).to_string();
    ensure!(
        text.len() <= LAW_BYTES,
        "the law's text has {} bytes, {LAW_BYTES} fit: name fewer gains",
        text.len()
    );
    client.order(Message::Tune(Tune { law: Text::cut(&text) }), Pace::ORDER)
}

/// Runs `tune`.
///
/// # Errors
/// If nothing is chosen or nobody answers.
pub fn run_tune(args: &TuneArgs) -> Result<ExitCode> {
    let TuneArgs { choice, to } = args;
    if !choice.is_given() {
        bail!(
            "name a law with --law, or gains with --gain; what is in force now: fieldbook status --from {}",
            to.to
        );
    }
    let mut client = Client::connect(&to.to)?;
    let law = match choice.over(&in_force(&client.status()?, choice)?) {
        Ok(law) => law,
        Err(problems) => return refused(&problem_lines(&problems), to),
    };
    let answer = tune(&mut client, &law)?;
    let status = client.status()?;
    if answer.accepted() && to.json {
        let mut object = outcome("tune", &answer);
        object["law"] = json!(status.law);
        object["gains"] = serde_json::from_str(status.gains.as_str()).unwrap_or_default();
        object["bandwidth_rad_s"] = json!(status.bandwidth_rad_s);
        output::print(&format!("{object}\n"))?;
        return Ok(ExitCode::SUCCESS);
    }
    tell("tune", &answer, to, &told(&status), "the law that was in force stays in force")
}

/// The law in force, as far as the choice needs to know it.
fn in_force(status: &Status, choice: &LawChoice) -> Result<LawSettings> {
    let name = status.law.as_str().to_owned();
    if choice.law.as_ref().is_some_and(|chosen| *chosen != name) {
        return Ok(LawSettings { name, gains: Values::default() });
    }
    let gains = serde_json::from_str(status.gains.as_str())
        .context("the status does not hold the gains in force; look for law-changed in fieldbook tail, or in the site file")?;
    Ok(LawSettings { name, gains })
}

fn refused(problems: &str, to: &To) -> Result<ExitCode> {
    let text = match to.json {
        true => json!({ "order": "tune", "accepted": false, "text": problems }).to_string(),
        false => format!("not sent: {problems}"),
    };
    output::print(&format!("{text}\n"))?;
    Ok(ExitCode::from(1))
}

/// The law in force, with its gains and its bandwidth.
pub(crate) fn told(status: &Status) -> String {
    let gains = serde_json::from_str::<Values>(status.gains.as_str()).unwrap_or_default();
    let gains: Vec<String> = gains.iter().map(|(name, value)| format!("{name} {value}")).collect();
    format!(
        "{}: {}; bandwidth {:.3} rad/s at top speed",
        status.law.as_str(),
        if gains.is_empty() { "gains not told".to_string() } else { gains.join(", ") },
        status.bandwidth_rad_s
    )
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::client::fake::{self, ack_of};
    use trackhold_proto::Envelope;

    fn choice(law: Option<&str>, gains: &[(&str, f64)]) -> LawChoice {
        let gains = gains.iter().map(|(key, value)| ((*key).to_owned(), *value)).collect();
        LawChoice { law: law.map(str::to_owned), gains }
    }

    #[test]
    fn gains_not_named_keep_the_values_in_force() {
        let chosen = choice(None, &[("k_y", 9.0)]);
        let law = chosen.over(&in_force(&fake::status(), &chosen).unwrap()).unwrap();
        assert_eq!((law.gains.get("k_y"), law.gains.get("k_heading")), (9.0, 4.0));
        let chosen = choice(Some("samson"), &[]);
        let law = chosen.over(&in_force(&fake::status(), &chosen).unwrap()).unwrap();
        assert!(law.name == "samson" && law.gains.is_empty());
        let cut = Status { gains: Text::cut(""), ..fake::status() };
        assert!(in_force(&cut, &choice(None, &[("k_y", 9.0)])).is_err());
        assert!(in_force(&cut, &choice(Some("samson"), &[])).is_ok());
    }

    #[test]
    fn a_law_goes_out_as_text_and_what_is_in_force_is_told() {
        let daemon = fake::daemon(|envelope| match envelope {
            Some(envelope @ Envelope { message: Message::Tune(tune), .. }) => {
                assert_eq!(tune.law.as_str(), r#"{"gains":{"k_y":9.0},"name":"kanayama"}"#);
                vec![ack_of(envelope, "the law is not taken: law.gains.k_y: too stiff")]
            }
            _ => Vec::new(),
        });
        let mut gains = Values::default();
        gains.set("k_y", 9.0);
        let law = LawSettings { name: "kanayama".to_owned(), gains };
        let answer = tune(&mut Client::connect_to(daemon.address()).unwrap(), &law).unwrap();
        assert!(!answer.accepted() && answer.ack.text.as_str().ends_with("too stiff"));
        assert_eq!(
            told(&fake::status()),
            "kanayama: k_heading 4, k_x 1, k_y 4; bandwidth 2.000 rad/s at top speed"
        );
    }
}
