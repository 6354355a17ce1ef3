//! `fieldbook cap`: caps a machine's speed, also while it runs.

use super::{AFTER_HELP, To, tell};
use crate::client::{Answer, Client, Pace};
use anyhow::Result;
use std::process::ExitCode;
use trackhold_proto::Message;
use trackhold_proto::message::{Cap, LEAST_SHARE};

/// Arguments of `cap`.
#[derive(Debug, clap::Args)]
#[command(after_help = AFTER_HELP)]
pub struct CapArgs {
    /// Percent of the plan's own speed, 5 to 100; holds until the next cap, over stops and starts too.
    #[arg(value_name = "PERCENT", value_parser = parse_percent)]
    pub percent: f64,
    #[command(flatten)]
    to: To,
}

fn parse_percent(text: &str) -> Result<f64, String> {
    let least = 100.0 * LEAST_SHARE;
    match text.trim_end_matches('%').trim_end().parse::<f64>() {
        Ok(percent) if (least..=100.0).contains(&percent) => Ok(percent),
        _ => Err(format!(
            "give percent of the plan's speed, {least} to 100; to stop the machine: fieldbook stop"
        )),
    }
}

/// Caps the plan time's pace at a share of its own.
///
/// # Errors
/// If no answer comes.
pub fn cap(client: &mut Client, share: f64) -> Result<Answer> {
    client.order(Message::Cap(Cap { share }), Pace::ORDER)
}

/// Runs `cap`.
///
/// # Errors
/// If nobody answers.
pub fn run_cap(args: &CapArgs) -> Result<ExitCode> {
    // Divided, not multiplied: 5 % is 0.05 to the last bit.
    let answer = cap(&mut Client::connect(&args.to.to)?, args.percent / 100.0)?;
    let good = if args.percent < 100.0 {
        format!(
            "the plan runs at no more than {} % of its speed from now on, also after a stop and a start\nlift it with: \
             fieldbook cap --to {} 100",
            args.percent, args.to.to
        )
    } else {
        "the plan runs at its own speed again".to_string()
    };
    tell("cap", &answer, &args.to, &good, "the cap that was in force stays in force")
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn percent_are_a_share_within_bounds() {
        assert_eq!(parse_percent("40"), Ok(40.0));
        assert_eq!(parse_percent("12.5 %"), Ok(12.5));
        for wrong in ["0", "4.9", "101", "NaN", "-40", "half", "%", ""] {
            assert!(parse_percent(wrong).unwrap_err().contains("5 to 100"), "{wrong}");
        }
        assert!((LEAST_SHARE..=1.0).contains(&(parse_percent("5").unwrap() / 100.0)));
    }
}
