//! The clients that come with the protocol, against the same golden datagrams: C with `cc`, Python with `python3`.
//! A tool that this machine does not have is reported and not taken for a failure.

use std::path::{Path, PathBuf};
use std::process::Command;

fn tools() -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("../tools")
}

/// Runs a command; false if there is no such program.
///
/// Panics with what it printed if it fails.
fn run(command: &mut Command) -> bool {
    match command.output() {
        Ok(output) => {
            let (said, complained) =
                (String::from_utf8_lossy(&output.stdout), String::from_utf8_lossy(&output.stderr));
            assert!(output.status.success(), "{command:?}: {}\n{said}{complained}", output.status);
            true
        }
        Err(error) if error.kind() == std::io::ErrorKind::NotFound => {
            println!("not run, there is no such program here: {}", command.get_program().display());
            false
        }
        Err(error) => panic!("{command:?}: {error}"),
    }
}

/// Compiles the C test with further `flags` and runs it.
fn compile_and_run(name: &str, flags: &[&str]) {
    let program = Path::new(env!("CARGO_TARGET_TMPDIR")).join(name);
    let mut compile = Command::new("cc");
    compile.args(["-std=c99", "-Wall", "-Wextra", "-Werror", "-pedantic"]).args(flags);
    compile.arg("-o").arg(&program).arg(tools().join("c/test_vectors.c"));
    if run(&mut compile) {
        run(Command::new(&program).arg(Path::new(env!("CARGO_MANIFEST_DIR")).join("vectors")));
    }
}

#[test]
fn the_c_header_reads_the_vectors_and_does_a_drives_duties() {
    compile_and_run("test_vectors", &[]);
    compile_and_run("test_vectors_fast", &["-O2", "-Wconversion", "-Wshadow"]);
}

/// Reads beyond the end, unaligned accesses and overflows show in a build that looks for them.
#[test]
fn the_c_header_has_no_undefined_behaviour_the_sanitizers_know() {
    let flags = ["-g", "-fsanitize=address,undefined", "-fno-sanitize-recover=all"];
    let probe = Path::new(env!("CARGO_TARGET_TMPDIR")).join("probe.c");
    std::fs::write(&probe, "int main(void) { return 0; }\n").unwrap();
    let probed =
        Command::new("cc").args(flags).arg("-o").arg(probe.with_extension("out")).arg(&probe).output();
    match probed {
        Ok(output) if output.status.success() => compile_and_run("test_vectors_checked", &flags),
        _ => println!("not run, this machine's cc has no sanitizers"),
    }
}

#[test]
fn the_python_client_reads_the_vectors_and_repeats_its_orders() {
    let script = tools().join("python/test_vectors.py");
    // -B: leaves no compiled files in the source tree.
    run(Command::new("python3").arg("-B").arg(script).current_dir(tools().join("python")));
}
