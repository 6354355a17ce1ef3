//! A panic sends zero before the process ends, and the process does not end well. This program starts itself again as
//! the one that panics.

use std::io::{BufRead, BufReader, Write};
use std::net::{SocketAddr, UdpSocket};
use std::process::{Command, Stdio};
use std::time::Duration;
use trackhold::Daemon;
use trackhold::site::Site;
use trackhold_proto::message::{Subscribe, WANT_COMMANDS};
use trackhold_proto::words::Mode;
use trackhold_proto::{Envelope, Message};

const CHILD: &str = "TRACKHOLD_TEST_PANICS";

/// Does nothing unless it is started by the test below.
#[test]
fn child() {
    if std::env::var_os(CHILD).is_none() {
        return;
    }
    let text = "[vehicle]\nkind = \"unicycle\"\nmax_speed_m_s = 1\nmax_turn_rate_rad_s = 1\nmax_accel_m_s2 = 1\n\
                max_turn_accel_rad_s2 = 1\n[law]\nname = \"samson\"\n[net]\nlisten = \"127.0.0.1:0\"\n";
    let daemon = Daemon::start(Site::parse(text, "test.toml").unwrap()).unwrap();
    daemon.abort_on_panic();
    println!("\nlistening on {}", daemon.address());
    std::io::stdin().read_line(&mut String::new()).unwrap();
    panic!("on purpose");
}

#[test]
fn a_panic_of_any_thread_sends_zero_and_ends_the_process_badly() {
    let mut child = Command::new(std::env::current_exe().unwrap())
        .args(["--exact", "child", "--nocapture"])
        .env(CHILD, "1")
        .stdin(Stdio::piped())
        .stdout(Stdio::piped())
        .stderr(Stdio::piped())
        .spawn()
        .unwrap();
    let mut lines = BufReader::new(child.stdout.take().unwrap()).lines().map_while(Result::ok);
    let daemon: SocketAddr = lines
        .find_map(|line| line.strip_prefix("listening on ").map(str::to_owned))
        .unwrap()
        .parse()
        .unwrap();
    let drive = UdpSocket::bind("127.0.0.1:0").unwrap();
    drive.set_read_timeout(Some(Duration::from_millis(500))).unwrap();
    let subscribe = Message::Subscribe(Subscribe { want: WANT_COMMANDS, lease_ms: 10_000 });
    let envelope = Envelope { session: 1, sequence: 1, stamp_ns: 0, message: subscribe };
    drive.send_to(&envelope.to_vec(), daemon).unwrap();
    let receive = || {
        let mut bytes = [0; 1200];
        drive.recv(&mut bytes).ok().map(|length| Envelope::decode(&bytes[..length]).unwrap())
    };
    while !matches!(receive().expect("a command").message, Message::Command(_)) {}
    child.stdin.take().unwrap().write_all(b"now\n").unwrap();
    let commands: Vec<(u64, Mode)> = std::iter::from_fn(receive)
        .filter_map(|envelope| match envelope.message {
            Message::Command(command) => Some((envelope.sequence, command.mode)),
            _ => None,
        })
        .collect();
    let output = child.wait_with_output().unwrap();
    assert!(!output.status.success(), "{output:?}");
    assert!(String::from_utf8_lossy(&output.stderr).contains("on purpose"), "{output:?}");
    let newest = commands.iter().max_by_key(|(sequence, _)| *sequence);
    assert_eq!(newest.map(|(_, mode)| *mode), Some(Mode::ProtectiveStop), "{commands:?}");
}
