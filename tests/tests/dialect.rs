//! A receiver of a command set that nothing here knows, and the dialect file that config/dialects/README.md writes for it.

use std::io::{Read, Write};
use std::path::Path;
use std::process::Command;

use hushwatch_tests::programs::{program, told};
use hushwatch_tests::terminal::Terminal;
use serde_json::Value;

/// The level in each point, dBm.
const DBM: f64 = -55.0;

/// The receiver: one letter for each command, CR at the end, answers with CR LF. It lets go when the terminal does.
fn pocket_receiver(terminal: Terminal) {
    std::thread::spawn(move || {
        // Both ends come along, not only the one that is read from.
        let mut terminal = terminal;
        let (mut a, mut b, mut n, mut w) = (1e6, 2e6, 101usize, 9e3);
        let mut line = Vec::new();
        let mut byte = [0];
        while terminal.master.read(&mut byte).is_ok_and(|count| count == 1) {
            if byte[0] != b'\r' {
                line.push(byte[0]);
                continue;
            }
            let text = String::from_utf8(std::mem::take(&mut line)).expect("ASCII");
            let (command, value) = text.split_at(1.min(text.len()));
            let value: Option<f64> = value.parse().ok();
            let answer = match (command, value) {
                ("V", _) => Some(String::from("POCKET 2.1")),
                ("A", Some(hz)) => {
                    a = hz;
                    None
                }
                ("B", Some(hz)) => {
                    b = hz;
                    None
                }
                ("N", Some(points)) => {
                    n = (points as usize).min(401);
                    None
                }
                ("W", Some(hz)) => {
                    w = hz;
                    None
                }
                ("A", None) => Some(format!("{a:.0}")),
                ("B", None) => Some(format!("{b:.0}")),
                ("N", None) => Some(n.to_string()),
                ("W", None) => Some(format!("{w:.0}")),
                ("R", _) => Some(vec![format!("{DBM:.1}"); n].join(",")),
                _ => None,
            };
            if let Some(answer) = answer {
                let _ = terminal.master.write_all(format!("{answer}\r\n").as_bytes());
            }
        }
    });
}

/// The TOML of the page: everything that stands between the fences that say so.
fn dialect_of_the_page() -> String {
    let page = include_str!("../../config/dialects/README.md");
    let blocks: Vec<&str> = page.split("```toml\n").skip(1).filter_map(|rest| rest.split("```").next()).collect();
    assert_eq!(blocks.len(), 2, "the page has two pieces of the dialect");
    // Written with dotted keys, the pieces may stand in any order before the first table.
    let (head, more) = (blocks[0], blocks[1]);
    format!("{head}{more}")
}

fn site(folder: &Path) -> String {
    let site = folder.join("site.toml");
    let text = r#"format = 1
[site]
name = "test"
[record]
path = "pocket.db"
[[instrument]]
name = "rx1"
port = "rx1"
dialect = "pocket.toml"
dwell = "0.1 ms"
timeout = "1 s"
[[probe]]
name = "direct"
kind = "direct"
[[band]]
name = "ringing"
from = "2 MHz"
to = "10 MHz"
rbw = "100 kHz"
[[cable]]
tag = "W12"
probe = "direct"
every = "100 ms"
"#;
    std::fs::write(&site, text).expect("a site file");
    site.to_str().expect("UTF-8").to_owned()
}

#[test]
fn ten_minutes_from_an_unknown_receiver_to_a_level() {
    let folder = tempfile::Builder::new().prefix("hw").tempdir().expect("a folder");
    std::fs::write(folder.path().join("pocket.toml"), dialect_of_the_page()).expect("a dialect");
    let site = site(folder.path());
    pocket_receiver(Terminal::at(&folder.path().join("rx1")));

    let output = Command::new(program("hushwatch"))
        .args(["sweep", "rx1", "--site", &site, "--transcript", "--json"])
        .output()
        .expect("it starts");
    assert!(output.status.success(), "{}", told(&output));
    let transcript = String::from_utf8_lossy(&output.stderr);
    for line in ["> V\\r", "< POCKET 2.1\\r\\n", "> A2000000\\r", "> G\\r", "> R\\r"] {
        assert!(transcript.contains(line), "{line}:\n{transcript}");
    }
    let swept: Value = serde_json::from_slice(&output.stdout).expect("JSON");
    // Noise of -55 dBm in each point of a 100 kHz filter (noise bandwidth 0.75269 of that, tests/reference/
    // filter_bandwidths.csv), over 8 MHz, in 50 ohm.
    let truth = DBM + 90.0 + 10.0 * 50f64.log10() + 10.0 * (8e6f64 / (0.75269 * 100e3)).log10();
    let level = swept["bands"][0]["level_db"].as_f64().expect("a level");
    assert!((level - truth).abs() < 0.3, "{level} instead of {truth}: {swept}");
    assert_eq!(swept["bands"][0]["quality"], "good: assumed setting", "the detector cannot be read back");
}

#[test]
fn a_port_on_which_nobody_answers_is_told_with_every_byte() {
    let folder = tempfile::Builder::new().prefix("hw").tempdir().expect("a folder");
    std::fs::write(folder.path().join("pocket.toml"), dialect_of_the_page()).expect("a dialect");
    let site = site(folder.path());
    let _terminal = Terminal::at(&folder.path().join("rx1"));
    let output = Command::new(program("hushwatch"))
        .args(["sweep", "rx1", "--site", &site, "--transcript"])
        .output()
        .expect("it starts");
    assert_eq!(output.status.code(), Some(3), "{}", told(&output));
    let said = String::from_utf8_lossy(&output.stderr);
    assert!(said.contains("> V\\r") && said.contains("no whole answer to `V`"), "{said}");
}
