//! Every law over latency, loss and speed, on a machine that turns on the spot and on one that steers.
//!
//! `tests/reference/sweep/table.txt` is the committed result. After a change that is meant to move it:
//!
//! ```text
//! TRACKHOLD_REWRITE_TABLE=1 cargo test -p trackhold-tests --test sweep table
//! ```

use crate::bend::{self, MACHINES, Machine};
use crate::field::{self, Driven};
use simrobot::LinkSpec;
use std::fmt::Write as _;
use std::path::{Path, PathBuf};
use trackhold_core::law;

/// Set to 1, the table is written instead of compared.
const REWRITE: &str = "TRACKHOLD_REWRITE_TABLE";
const LATENCIES_S: [f64; 3] = [0.0, 0.05, 0.1];
const LOSSES: [f64; 3] = [0.0, 0.1, 0.3];
const SPEEDS_M_S: [f64; 3] = [0.3, 1.0, 1.5];
const HEAD: &str = "\
True cross-track error, rms / greatest, mm, up to the plan's end: an S-bend of clothoids, 0.5 1/m, from rest to rest.
Each law with its default gains, the node at 50 Hz, poses at 50 Hz. The link delays and loses poses, commands and the
comparison of clocks alike, each way; the node knows its delay as dead time. The robot does what it is told, so that a
delay alone costs nothing: rows of the same speed without loss are alike. A lost command leaves the one before in force.
Made by tests/sweep/table.rs, which also says how to make it again.
";

fn file() -> PathBuf {
    Path::new(concat!(env!("CARGO_MANIFEST_DIR"), "/reference/sweep/table.txt")).to_owned()
}

fn cell(driven: &Driven) -> String {
    match driven {
        Ok(cross) => format!("{:.1} / {:.1}", 1e3 * cross.rms(), 1e3 * cross.greatest()),
        Err(cause) => cause.name().to_owned(),
    }
}

/// The laws that are made for a machine.
fn laws(machine: &Machine) -> Vec<&'static str> {
    let checked =
        machine.settings("kanayama", 0.0).checked().unwrap_or_else(|problems| panic!("{problems:?}"));
    let context = checked.context();
    law::KINDS.iter().filter(|kind| kind.machines.unfit(&context).is_none()).map(|kind| kind.name).collect()
}

fn sweep(machine: &Machine, text: &mut String) {
    let laws = laws(machine);
    let mut line = |name: &str, cells: Vec<String>| {
        let cells: String = cells.iter().map(|cell| format!("{cell:>16}")).collect();
        writeln!(text, "{name:<22}{cells}").expect("a text takes every line");
    };
    line(machine.kind, laws.iter().map(|law| (*law).to_owned()).collect());
    for speed_m_s in SPEEDS_M_S {
        let plan = bend::plan(speed_m_s);
        for (row, delay_s) in LATENCIES_S.into_iter().enumerate() {
            for (column, loss) in LOSSES.into_iter().enumerate() {
                let link = LinkSpec { delay_s, loss, ..LinkSpec::default() };
                let seed = (10 * row + column) as u64;
                let drive =
                    |law: &&str| cell(&field::drive(&machine.settings(law, delay_s), &plan, link, seed));
                let name = format!("{speed_m_s} m/s {:>4} ms {:>3} %", 1e3 * delay_s, 100.0 * loss);
                line(&name, laws.iter().map(drive).collect());
            }
        }
    }
}

#[test]
fn the_table_over_latency_loss_and_speed_is_the_committed_one() {
    let mut table = String::from(HEAD);
    for machine in &MACHINES {
        table.push('\n');
        sweep(machine, &mut table);
    }
    println!("{table}");
    if std::env::var_os(REWRITE).is_some_and(|value| value == "1") {
        std::fs::write(file(), &table).expect("the reference data can be written");
    }
    let committed =
        std::fs::read_to_string(file()).unwrap_or_else(|error| panic!("{}: {error}", file().display()));
    assert!(
        committed == table,
        "table.txt differs from the table above; if that is meant, run this test with {REWRITE}=1 and commit the file"
    );
}
