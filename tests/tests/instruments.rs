//! Several inputs and several instruments: all come in their turn, and one's trouble is nobody else's.

use std::path::Path;
use std::process::{Child, Command, Stdio};
use std::time::{Duration, Instant};

use hushwatch_tests::device::{Device, Knobs, Manner};
use hushwatch_tests::programs::program;
use hushwatch_tests::sqlite;

fn device(folder: &Path, name: &str, inputs: u32) -> Device {
    let dbm = (1..=inputs).map(|input| (input, -60.0 - f64::from(input))).collect();
    let identity = format!("Test bench,{name},7,1.0");
    Device::plug_in(&folder.join(name), Knobs { most_points: 1001, identity, dbm, ..Knobs::default() })
}

fn site(folder: &Path, cables: &[(&str, &str, u32)]) -> String {
    let mut text =
        String::from("format = 1\n[site]\nname = \"test\"\n[record]\npath = \"e14.db\"\ncommit_every = \"200 ms\"\n");
    for name in ["rx1", "rx2"] {
        if cables.iter().any(|(_, instrument, _)| *instrument == name) {
            text.push_str(&format!(
                "[[instrument]]\nname = \"{name}\"\nport = \"{name}\"\ndialect = \"scpi-swept\"\nbaud = 3000000\n\
                 timeout = \"2 s\"\ndwell = \"0.1 ms\"\n"
            ));
        }
    }
    text.push_str("[[probe]]\nname = \"direct\"\nkind = \"direct\"\n");
    text.push_str("[[band]]\nname = \"ringing\"\nfrom = \"2 MHz\"\nto = \"10 MHz\"\nrbw = \"100 kHz\"\n");
    for (tag, instrument, input) in cables {
        text.push_str(&format!(
            "[[cable]]\ntag = \"{tag}\"\ninstrument = \"{instrument}\"\ninput = {input}\nprobe = \"direct\"\nevery = \"200 ms\"\n"
        ));
    }
    let path = folder.join("site.toml");
    std::fs::write(&path, text).expect("a site file");
    path.to_str().expect("UTF-8").to_owned()
}

struct Service(Child);

impl Drop for Service {
    fn drop(&mut self) {
        let _ = self.0.kill();
        let _ = self.0.wait();
    }
}

fn start(site: &str) -> Service {
    let child = Command::new(program("hushwatchd")).args(["--site", site]).stderr(Stdio::null()).spawn();
    Service(child.expect("the service starts"))
}

fn number(folder: &Path, sql: &str) -> i64 {
    sqlite::query(&folder.join("e14.db"), sql).ok().and_then(|text| text.trim().parse().ok()).unwrap_or(0)
}

fn wait_for(what: &str, holds: impl Fn() -> bool) {
    let begun = Instant::now();
    while !holds() {
        assert!(begun.elapsed() < Duration::from_mins(1), "waited in vain for {what}");
        std::thread::sleep(Duration::from_millis(50));
    }
}

#[test]
fn sixteen_inputs_come_in_turn_each_with_its_own_level() {
    let folder = tempfile::Builder::new().prefix("hw").tempdir().expect("a folder");
    let _device = device(folder.path(), "rx1", 16);
    let tags: Vec<String> = (1..=16).map(|input| format!("W{input:02}")).collect();
    let cables: Vec<(&str, &str, u32)> =
        tags.iter().zip(1..).map(|(tag, input)| (tag.as_str(), "rx1", input)).collect();
    let _service = start(&site(folder.path(), &cables));
    let least = "SELECT min(n) FROM (SELECT count(*) AS n FROM levels GROUP BY cable HAVING count(*) > 0)";
    let all = "SELECT count(DISTINCT cable) FROM levels";
    wait_for("five levels of each", || number(folder.path(), all) == 16 && number(folder.path(), least) >= 5);
    // Nobody is served more often than another by more than a turn (commits fall anywhere).
    let spread = "SELECT max(n) - min(n) FROM (SELECT count(*) AS n FROM levels GROUP BY cable)";
    assert!(number(folder.path(), spread) <= 1, "{}", number(folder.path(), spread));
    // The level of input n is n dB lower than that of an input 0 would be: nobody got another one's answer.
    // Half of the step between inputs tells them apart; the noise of the device makes 0.03 dB (standard deviation).
    let wrong = "SELECT count(*) FROM levels a JOIN levels b WHERE a.cable = 'W01' \
                 AND abs(a.level - b.level - (CAST(substr(b.cable, 2) AS INTEGER) - 1)) > 0.5";
    let levels = "SELECT cable, min(level), max(level) FROM levels GROUP BY cable";
    let levels = sqlite::query(&folder.path().join("e14.db"), levels).expect("levels");
    assert_eq!(number(folder.path(), wrong), 0, "{levels}");
}

#[test]
fn an_instrument_that_hangs_delays_no_other() {
    let folder = tempfile::Builder::new().prefix("hw").tempdir().expect("a folder");
    let first = device(folder.path(), "rx1", 1);
    let _second = device(folder.path(), "rx2", 1);
    let _service = start(&site(folder.path(), &[("W12", "rx1", 1), ("W14", "rx2", 1)]));
    let count = |cable: &str| number(folder.path(), &format!("SELECT count(*) FROM levels WHERE cable = '{cable}'"));
    wait_for("levels of both", || count("W12") > 3 && count("W14") > 3);
    first.turn().manner = Manner::HangsInAnswer;
    wait_for("the gap", || number(folder.path(), "SELECT count(*) FROM gaps") == 1);
    let before = count("W14");
    wait_for("twenty levels of the other", || count("W14") >= before + 20);
    // All of them were measured while the other instrument was silent: a service that waits for it would have none.
    let meanwhile = "SELECT count(*) FROM levels JOIN gaps WHERE levels.cable = 'W14' AND levels.time > gaps.\"from\"";
    assert!(number(folder.path(), meanwhile) >= 20);
    let gaps = sqlite::query(&folder.path().join("e14.db"), "SELECT cable FROM gaps").expect("gaps");
    assert_eq!(gaps.trim(), "W12");
}
