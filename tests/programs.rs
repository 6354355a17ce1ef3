//! Real processes: the programs built once in the test's own profile, started, and ended with the test.

use std::io::{BufRead, BufReader, Read};
use std::net::{SocketAddr, UdpSocket};
use std::path::{Path, PathBuf};
use std::process::{Child, Command, Output, Stdio};
use std::sync::OnceLock;
use std::sync::mpsc::{Receiver, channel};
use std::time::Duration;

/// The folder that holds the programs, built now if they were not.
pub fn folder() -> &'static Path {
    static FOLDER: OnceLock<PathBuf> = OnceLock::new();
    FOLDER.get_or_init(|| {
        // A test lies in target/PROFILE/deps; cargo hands a program's path only to its own package's tests.
        let test = std::env::current_exe().expect("a test has a path");
        let folder = test.parent().and_then(Path::parent).expect("target/PROFILE/deps").to_path_buf();
        let mut build = Command::new(std::env::var_os("CARGO").unwrap_or_else(|| "cargo".into()));
        build
            .args(["build", "-p", "trackhold", "-p", "fieldbook", "-p", "simrobot"])
            .current_dir(workspace());
        if folder.ends_with("release") {
            build.arg("--release");
        }
        assert!(build.status().expect("cargo runs").success(), "the programs do not build");
        folder
    })
}

/// The workspace's root.
pub fn workspace() -> &'static Path {
    Path::new(concat!(env!("CARGO_MANIFEST_DIR"), "/.."))
}

/// A program with arguments, not yet started.
pub fn program(name: &str, arguments: &[&str]) -> Command {
    let mut command = Command::new(folder().join(name));
    command.args(arguments).current_dir(workspace());
    command
}

/// Runs a program to its end.
pub fn run(name: &str, arguments: &[&str]) -> Output {
    program(name, arguments).output().unwrap_or_else(|error| panic!("{name}: {error}"))
}

/// Standard output as text.
pub fn stdout(output: &Output) -> String {
    String::from_utf8_lossy(&output.stdout).into_owned()
}

/// Standard output and standard error as text.
pub fn told(output: &Output) -> String {
    format!("{}{}", stdout(output), String::from_utf8_lossy(&output.stderr))
}

/// A folder of its own for a test, emptied.
pub fn scratch(test: &str) -> PathBuf {
    let folder = std::env::temp_dir().join(format!("trackhold-test-{}-{test}", std::process::id()));
    let _ = std::fs::remove_dir_all(&folder);
    std::fs::create_dir_all(&folder).expect("a scratch folder");
    folder
}

/// A loopback port that was free a moment ago.
pub fn free_address() -> SocketAddr {
    let socket = UdpSocket::bind("127.0.0.1:0").expect("a loopback port");
    socket.local_addr().expect("a bound socket has an address")
}

/// A process that is killed with the test, should that not have ended it.
pub struct Running {
    child: Child,
    lines: Receiver<String>,
}

impl Running {
    /// Starts a program and reads its standard error and output line by line.
    pub fn start(name: &str, arguments: &[&str]) -> Self {
        let mut child = program(name, arguments)
            .stdin(Stdio::null())
            .stdout(Stdio::piped())
            .stderr(Stdio::piped())
            .spawn()
            .unwrap_or_else(|error| panic!("{name}: {error}"));
        let (sender, lines) = channel();
        let pipes: [Option<Box<dyn Read + Send>>; 2] = [
            child.stderr.take().map(|pipe| Box::new(pipe) as Box<dyn Read + Send>),
            child.stdout.take().map(|pipe| Box::new(pipe) as Box<dyn Read + Send>),
        ];
        for pipe in pipes.into_iter().flatten() {
            let sender = sender.clone();
            std::thread::spawn(move || {
                for line in BufReader::new(pipe).lines().map_while(Result::ok) {
                    if sender.send(line).is_err() {
                        return;
                    }
                }
            });
        }
        Self { child, lines }
    }

    /// Waits for a line that contains `part`.
    pub fn wait_for(&self, part: &str) -> String {
        let mut seen = Vec::new();
        loop {
            match self.lines.recv_timeout(Duration::from_secs(20)) {
                Ok(line) if line.contains(part) => return line,
                Ok(line) => seen.push(line),
                Err(_) => panic!("no line with {part:?}; said: {seen:#?}"),
            }
        }
    }

    /// The process' number.
    pub fn id(&self) -> u32 {
        self.child.id()
    }

    /// Ends it at once, as `kill -9` does.
    pub fn kill(&mut self) {
        let _ = self.child.kill();
        let _ = self.child.wait();
    }

    /// Asks it to end and returns its exit code.
    pub fn end(&mut self, signal: &str) -> Option<i32> {
        let id = self.id().to_string();
        let sent = Command::new("kill").args([signal, &id]).status().expect("kill runs");
        assert!(sent.success(), "the process had ended before");
        self.child.wait().expect("a child can be waited for").code()
    }
}

impl Drop for Running {
    fn drop(&mut self) {
        self.kill();
    }
}
