//! The companion's surface: what it says of site files, its exit codes, and how it behaves in a pipe.

use std::io::{BufRead, BufReader, Read};
use std::path::Path;
use std::process::{Command, Output, Stdio};

use hushwatch_tests::plant::Plant;
use hushwatch_tests::programs::{program, told};
use serde_json::Value;

fn hushwatch(arguments: &[&str]) -> Output {
    Command::new(program("hushwatch"))
        .args(arguments)
        .env_remove("HUSHWATCH_SITE")
        .current_dir(std::env::temp_dir())
        .output()
        .expect("it starts")
}

fn check(text: &str) -> (i32, String, String) {
    let folder = tempfile::Builder::new().prefix("hw").tempdir().expect("a folder");
    let path = folder.path().join("site.toml");
    std::fs::write(&path, text).expect("a site file");
    let output = hushwatch(&["check", path.to_str().expect("UTF-8")]);
    (
        output.status.code().expect("an exit code"),
        String::from_utf8(output.stdout).expect("UTF-8"),
        String::from_utf8(output.stderr).expect("UTF-8"),
    )
}

const SITE: &str = r#"format = 1

[site]
name = "Bottling hall 2, cabinet E14"

[[instrument]]
name    = "rx1"
port    = "/dev/hushwatch/rx1"
dialect = "scpi-swept"

[[cable]]
tag   = "W12"
probe = { kind = "current-probe", factor = [["150 kHz", 2.0], ["2 MHz", 12.0], ["30 MHz", 14.0]] }
choke = { core = { material = "nizn-800", outer = "26 mm", inner = "13 mm", length = "28 mm", split = true }, cores = 3 }
loop  = { source = "25 ohm", load = "25 ohm" }
"#;

#[test]
fn the_example_that_is_shipped_is_right() {
    let path = concat!(env!("CARGO_MANIFEST_DIR"), "/../deploy/site.toml");
    let output = hushwatch(&["check", path]);
    assert!(output.status.success(), "{}", told(&output));
}

#[test]
fn the_smallest_site_file_is_explained_with_its_sums() {
    let (code, page, _) = check(SITE);
    assert_eq!(code, 0, "{page}");
    // 150 kHz to 30 MHz at 9 kHz in steps of half of it: 6600 points and more, at 20 ms each more than two minutes.
    for word in [
        "W12",
        "rms",
        "DOES NOT KEEP UP",
        "every = \"2 min",
        "rbw",
        "2 min",
        "a day",
        "no compliance measurement",
        "loop of 25 + 25 ohm",
    ] {
        assert!(page.contains(word), "{word}:\n{page}");
    }
}

#[test]
fn what_is_hardly_meant_is_told() {
    let text = SITE.replace("dialect = \"scpi-swept\"", "dialect = \"scpi-swept\"\ndwell = \"1 ms\"");
    let text = text
        .replace("kind = \"current-probe\",", "kind = \"current-probe\", calibrated = 2020-01-01, due = 2022-01-01,");
    let (code, page, said) = check(&text);
    assert_eq!(code, 0, "{page}{said}");
    for word in ["shorter than a mains period", "was due on 2022-01-01"] {
        assert!(page.contains(word), "{word}:\n{page}{said}");
    }
}

#[test]
fn a_requirement_that_physics_cannot_meet_is_refused_at_its_place() {
    // One clip in 150 + 150 ohm gives under 5 dB even at 100 MHz.
    let text = SITE.replace("cores = 3 }", "cores = 1 }").replace("\"25 ohm\"", "\"150 ohm\"")
        + "min_suppression = \"6 dB\"\n";
    let (code, _, said) = check(&text);
    assert_eq!(code, 1, "{said}");
    for word in ["site.toml:16:", "6 dB cannot be had from this choke", "150 + 150 ohm", "^"] {
        assert!(said.contains(word), "{word}:\n{said}");
    }
    // Where the loop's impedance is low, it can.
    let (code, page, said) = check(&(SITE.to_owned() + "min_suppression = \"6 dB\"\n"));
    assert_eq!(code, 0, "{page}{said}");
}

#[test]
fn all_faults_are_told_at_once_with_what_would_be_right() {
    let text = SITE.replace("dialect =", "dialekt =").replace("\"26 mm\"", "\"26 MHz\"").replace("nizn-800", "nizn-80");
    let (code, _, said) = check(&text);
    assert_eq!(code, 1);
    assert!(said.contains("did you mean `dialect`?") && said.contains("26 MHz"), "{said}");
    let (code, _, said) = check(&SITE.replace("nizn-800", "nizn-80"));
    assert!(code == 1 && said.contains("no material `nizn-80`") && said.contains("nizn-800"), "{said}");
}

#[test]
fn what_cannot_be_done_is_told_by_the_exit_code() {
    let folder = tempfile::Builder::new().prefix("hw").tempdir().expect("a folder");
    let site = folder.path().join("site.toml");
    std::fs::write(&site, SITE.replace("[site]", "[record]\npath = \"e14.db\"\n[site]")).expect("a site file");
    let site = site.to_str().expect("UTF-8");
    for (arguments, code, word) in [
        (vec!["status", "--site", "/nowhere/site.toml"], 3, "/nowhere/site.toml"),
        (vec!["status", "--site", site], 3, "no record"),
        (vec!["alarms", "--site", site, "ack", "1", "--cause", "choke"], 3, "is `hushwatchd` running"),
        (vec!["reference", "W12", "after", "--site", site], 2, "--last"),
        (vec!["reference", "W12", "after", "--last", "soon", "--site", site], 2, "no span of time"),
        (vec!["reference", "W12", "during", "--last", "1h", "--site", site], 2, "during"),
        (vec!["statsu"], 2, "status"),
        (vec!["simulate", "/nowhere.toml"], 3, "/nowhere.toml"),
        (vec!["demo", "--dir", "/"], 3, "is there already"),
    ] {
        let output = hushwatch(&arguments);
        let said = String::from_utf8_lossy(&output.stderr);
        assert_eq!(output.status.code(), Some(code), "{arguments:?}: {}", told(&output));
        assert!(said.contains(word), "{arguments:?}: {said}");
    }
}

/// A plant that has run for a while, with references.
fn seasoned() -> Plant {
    let mut plant = Plant::new("");
    plant.start();
    plant.wait_for("blocks", |plant| plant.count("SELECT count(*) FROM blocks") >= 20);
    plant
}

#[test]
fn people_and_programs_read_the_same() {
    let mut plant = seasoned();
    let laid: Value =
        serde_json::from_str(&plant.ask(&["reference", "W12", "before", "--last", "1h", "--json"], 0)).expect("JSON");
    assert_eq!(laid["laid"][0]["provisional"], Value::Bool(true), "{laid}");
    plant.ask(&["reference", "W12", "after", "--last", "1h", "--who", "Anna"], 0);
    let second = plant.hushwatch(&["reference", "W12", "after", "--last", "1h"]);
    assert!(second.status.code() == Some(3) && told(&second).contains("--note"), "{}", told(&second));
    plant.ask(&["reference", "W12", "after", "--last", "1h", "--note", "new cable"], 0);
    let wrong = plant.hushwatch(&["reference", "W21", "after", "--last", "1h"]);
    assert!(told(&wrong).contains("W12"), "{}", told(&wrong));

    let trend = plant.ask(&["trend", "W12"], 0);
    for word in ["W12", "ringing", "before the fix", "after the fix", "max rise", "dB(uA)"] {
        assert!(trend.contains(word), "{word}:\n{trend}");
    }
    let json: Value = serde_json::from_str(&plant.ask(&["trend", "W12", "--json"], 0)).expect("JSON");
    assert!(json["points"].as_array().is_some_and(|points| points.len() >= 8), "{json}");
    let svg = plant.folder().join("w12.svg");
    plant.ask(&["trend", "W12", "--svg", svg.to_str().expect("UTF-8")], 0);
    assert!(std::fs::read_to_string(&svg).expect("a picture").starts_with("<svg"));

    let status = plant.ask(&["status"], 0);
    assert!(status.contains("no alarm") && !status.contains('\u{1b}'), "{status}");
    let coloured = plant.ask(&["status", "--color", "always"], 0);
    assert!(coloured.contains('\u{1b}'), "{coloured}");

    for what in ["levels", "alarms", "gaps"] {
        let lines = plant.ask(&["export", what, "--format", "json"], 0);
        for line in lines.lines() {
            serde_json::from_str::<Value>(line).unwrap_or_else(|error| panic!("{error}: {line}"));
        }
    }
    let head = plant.ask(&["export", "levels", "--json"], 0).lines().next().expect("a line").to_owned();
    let head: Value = serde_json::from_str(&head).expect("JSON");
    assert_eq!(head["units"]["W12/ringing"], "dB(uA)", "{head}");
    let of_one = plant.ask(&["export", "levels", "--cable", "W14", "--since", "1h"], 0);
    assert!(of_one.lines().skip(1).all(|line| line.contains(",W14,")) && of_one.lines().count() > 2);
    assert!(plant.stop().success());
}

#[test]
fn a_reader_that_has_seen_enough_is_no_accident() {
    let mut plant = seasoned();
    assert!(plant.stop().success());
    let mut child = Command::new(program("hushwatch"))
        .args(["export", "levels"])
        .env("HUSHWATCH_SITE", plant.site())
        .stdout(Stdio::piped())
        .stderr(Stdio::piped())
        .spawn()
        .expect("it starts");
    let mut first = String::new();
    BufReader::new(child.stdout.take().expect("a pipe")).read_line(&mut first).expect("a line");
    let mut said = String::new();
    child.stderr.take().expect("a pipe").read_to_string(&mut said).expect("text");
    assert!(first.starts_with("time,cable,band") && said.is_empty(), "{first}{said}");
    assert!(child.wait().expect("it ends").code().is_some_and(|code| code == 0));
}

#[test]
fn the_simulated_receiver_serves_a_service_of_its_own() {
    let folder = tempfile::Builder::new().prefix("hw").tempdir().expect("a folder");
    let at = |name: &str| folder.path().join(name).to_str().expect("UTF-8").to_owned();
    let mut receiver = Command::new(program("hushwatch"))
        .args(["simulate", "bottling-hall", "--no-pacing", "--port", &at("rx1"), "--write-site", &at("site.toml")])
        .stdout(Stdio::piped())
        .stderr(Stdio::null())
        .spawn()
        .expect("it starts");
    let mut port = String::new();
    BufReader::new(receiver.stdout.take().expect("a pipe")).read_line(&mut port).expect("a line");
    assert_eq!(port.trim(), at("rx1"));
    let mut service = Command::new(program("hushwatchd"))
        .args(["--site", &at("site.toml")])
        .stderr(Stdio::null())
        .spawn()
        .expect("it starts");
    let record = folder.path().join("cabinet.db");
    let count =
        || hushwatch_tests::sqlite::query(&record, "SELECT count(DISTINCT cable) FROM levels").unwrap_or_default();
    let begun = std::time::Instant::now();
    while count().trim() != "3" && begun.elapsed().as_secs() < 30 {
        std::thread::sleep(std::time::Duration::from_millis(100));
    }
    let got = count();
    for child in [&mut service, &mut receiver] {
        let id = child.id().to_string();
        Command::new("kill").args(["-TERM", &id]).status().expect("kill runs");
        assert!(child.wait().expect("it ends").success());
    }
    assert_eq!(got.trim(), "3", "levels of all three cables");
    assert!(!Path::new(&at("rx1")).exists(), "the port goes with the receiver");
}
