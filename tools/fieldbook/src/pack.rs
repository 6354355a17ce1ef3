//! `fieldbook pack`: a plan of samples in its compact form.

use crate::output;
use anyhow::{Context, Result, anyhow};
use std::path::PathBuf;
use std::process::ExitCode;
use trackhold_core::{digest, plan};

/// Arguments of `pack`.
#[derive(Debug, clap::Args)]
#[command(
    after_help = "The compact form says the same as the JSON plan in a third of the bytes and is read many times faster; \
                  its digest is its own. It holds one segment of samples, whose points all give the same fields.\nExit \
                  codes: 0 done, 2 could not run."
)]
pub struct Args {
    /// The plan, JSON.
    #[arg(value_name = "PLAN.json")]
    pub plan: PathBuf,
    /// Where the compact form goes.
    #[arg(long, value_name = "PLAN.bin")]
    pub out: PathBuf,
}

/// Runs the subcommand.
///
/// # Errors
/// If the plan cannot be read, packed or written.
pub fn run(args: &Args) -> Result<ExitCode> {
    let name = args.plan.display();
    let json = std::fs::read(&args.plan).with_context(|| format!("cannot read the plan {name}"))?;
    let packed = plan::pack(&json).map_err(|what| anyhow!("{name}: {what}"))?;
    std::fs::write(&args.out, &packed).with_context(|| format!("cannot write {}", args.out.display()))?;
    output::print(&format!(
        "{}: {} bytes instead of {}, digest {}\n",
        args.out.display(),
        packed.len(),
        json.len(),
        digest::of_bytes(&packed)
    ))?;
    Ok(ExitCode::SUCCESS)
}

#[cfg(test)]
mod tests {
    use super::*;
    use trackhold_core::keys::Values;
    use trackhold_core::vehicle;

    #[test]
    fn a_packed_plan_gives_the_same_references_as_its_json() {
        let points: Vec<String> = (0..200)
            .map(|index| {
                let t = 0.1 * f64::from(index);
                let turn = 0.2 * t;
                let (x, y) = (5.0 * turn.sin(), 5.0 - 5.0 * turn.cos());
                format!(r#"{{"t_s":{t},"x_m":{x},"y_m":{y},"heading_rad":{turn}}}"#)
            })
            .collect();
        let json = format!(
            r#"{{"format":"trackhold-plan/1","id":"p","revision":1,"start":{{"x_m":0,"y_m":0,"heading_rad":0}},"segments":[{{"kind":"samples","points":[{}]}}]}}"#,
            points.join(",")
        );
        let folder = std::env::temp_dir().join(format!("fieldbook-pack-{}", std::process::id()));
        std::fs::create_dir_all(&folder).unwrap();
        let (plan, out) = (folder.join("plan.json"), folder.join("plan.bin"));
        std::fs::write(&plan, &json).unwrap();
        run(&Args { plan: plan.clone(), out: out.clone() }).unwrap();
        let packed = std::fs::read(&out).unwrap();
        std::fs::write(&plan, json.replace("samples", "line")).unwrap();
        let refused = run(&Args { plan, out }).unwrap_err().to_string();
        std::fs::remove_dir_all(&folder).unwrap();
        assert!(refused.contains("plan.json: segments[0] (line)"), "{refused}");
        let mut values = Values::default();
        for key in ["max_speed_m_s", "max_turn_rate_rad_s", "max_accel_m_s2", "max_turn_accel_rad_s2"] {
            values.set(key, 2.0);
        }
        let machine = vehicle::build("unicycle", &values).unwrap().0;
        let [one, other] =
            [json.as_bytes(), &packed].map(|raw| trackhold_core::plan::compile(raw, &*machine).unwrap());
        assert_eq!((one.id(), one.duration_s()), (other.id(), other.duration_s()));
        for step in 0..500 {
            let t_s = 0.05 * f64::from(step);
            assert_eq!(one.at(t_s, &mut 0), other.at(t_s, &mut 0));
        }
    }
}
