//! The service and its companion, as real programs, with an instrument on a pseudo-terminal that is not the
//! project's own simulator.

use std::time::Duration;

use hushwatch_tests::device::{Knobs, Manner};
use hushwatch_tests::plant::{Plant, QUIET_DBM};
use serde_json::Value;

/// The level of the band 2 to 10 MHz of [`Plant`] for noise of `dbm` in each point, dB(uA), worked out here step by
/// step: 50 ohm, the clamp's factor and the path loss by straight lines over lg f, a Gaussian filter named by its
/// 6 dB width whose noise bandwidth is 0.75269 of it (tests/reference/filter_bandwidths.csv).
fn true_level(dbm: f64) -> f64 {
    let line = |f: f64, (f0, y0): (f64, f64), (f1, y1): (f64, f64)| y0 + (y1 - y0) * (f / f0).ln() / (f1 / f0).ln();
    let steps = 20_000;
    let width = 8e6 / f64::from(steps);
    let power: f64 = (0..steps)
        .map(|step| {
            let hz = 2e6 + (f64::from(step) + 0.5) * width;
            let factor = line(hz, (2e6, 12.0), (30e6, 14.0));
            let loss = line(hz, (150e3, 0.1), (30e6, 0.8));
            let db = dbm + 90.0 + 10.0 * 50f64.log10() - factor + loss;
            10f64.powf(db / 10.0) * width / (0.75269 * 100e3)
        })
        .sum();
    10.0 * power.log10()
}

fn latest_level(plant: &Plant, cable: &str) -> f64 {
    let sql = format!("SELECT level FROM levels WHERE cable = '{cable}' ORDER BY time DESC LIMIT 1");
    plant.sql(&sql).expect("a record").trim().parse().expect("a level")
}

fn kinds_and_cables(alarms: &[Value]) -> Vec<(String, String)> {
    let text = |alarm: &Value, key: &str| alarm[key].as_str().unwrap_or_default().to_owned();
    alarms.iter().map(|alarm| (text(alarm, "kind"), text(alarm, "subject"))).collect()
}

/// Lets the healthy cables run for a while and takes that as the `after` reference of both.
fn with_references(plant: &mut Plant) {
    plant.start();
    plant.wait_for("ten seconds of blocks", |plant| plant.count("SELECT count(*) FROM blocks") >= 24);
    for cable in ["W12", "W14"] {
        plant.ask(&["reference", cable, "after", "--last", "60s"], 0);
    }
}

#[test]
fn levels_are_true_and_healthy_cables_raise_nothing() {
    let mut plant = Plant::new("");
    with_references(&mut plant);
    for cable in ["W12", "W14"] {
        let (level, truth) = (latest_level(&plant, cable), true_level(QUIET_DBM));
        assert!((level - truth).abs() < 0.3, "{cable}: {level} instead of {truth} dB(uA)");
    }
    std::thread::sleep(Duration::from_secs(5));
    assert_eq!(plant.alarms(), Vec::<Value>::new());
    let status: Value = serde_json::from_str(&plant.ask(&["status", "--json"], 0)).expect("one document");
    assert_eq!(status["cables"].as_array().map(Vec::len), Some(2), "{status}");
    assert!(plant.stop().success(), "{}", plant.log());
    // The record can be read without the service, and nothing is left open in it.
    let csv = plant.ask(&["export", "levels", "--format", "csv"], 0);
    assert!(csv.starts_with("time,cable,band,level,peak,peak_hz,state,quality\r\n"), "{}", &csv[..200.min(csv.len())]);
    assert_eq!(csv.lines().count() as i64 - 1, plant.count("SELECT count(*) FROM levels"));
}

#[test]
fn a_clip_that_opens_is_told_on_its_cable_alone() {
    let told = "#!/bin/sh\ncat >> \"$(dirname \"$0\")/told.jsonl\"\necho >> \"$(dirname \"$0\")/told.jsonl\"\n";
    let mut plant = Plant::new("[[recipient]]\nname = \"shift\"\nkind = \"command\"\nrun = [\"./tell\"]\n");
    let script = plant.folder().join("tell");
    std::fs::write(&script, told).expect("a script");
    let mode = std::os::unix::fs::PermissionsExt::from_mode(0o755);
    std::fs::set_permissions(&script, mode).expect("executable");
    let site = std::fs::read_to_string(plant.site()).expect("a site file");
    let site = site.replace("./tell", script.to_str().expect("UTF-8"));
    std::fs::write(plant.site(), site).expect("a site file");

    with_references(&mut plant);
    plant.device.turn().dbm.insert(1, QUIET_DBM + 6.0);
    plant.wait_for("an alarm", |plant| !plant.alarms().is_empty());
    std::thread::sleep(Duration::from_secs(3));
    let alarms = plant.alarms();
    assert_eq!(kinds_and_cables(&alarms), [("regression".to_owned(), "W12".to_owned())]);
    let rise: f64 = alarms[0]["rise_db"].as_f64().unwrap_or_else(|| panic!("no rise in {}", alarms[0]));
    assert!((rise - 6.0).abs() < 0.5, "{rise} dB");
    plant.ask(&["status"], 1);

    plant.wait_for("the recipient", |plant| plant.folder().join("told.jsonl").exists());
    let told = std::fs::read_to_string(plant.folder().join("told.jsonl")).expect("what was told");
    let notice: Value = serde_json::from_str(told.lines().next().expect("a line")).expect("JSON");
    assert_eq!((notice["kind"].as_str(), notice["cable"].as_str()), (Some("regression"), Some("W12")), "{notice}");
    assert!(notice["key"].is_string() && !notice["look_first"].as_array().expect("a list").is_empty(), "{notice}");

    // The alarm outlives a restart, is acknowledged, and returns when the clip is closed again.
    plant.kill();
    plant.start();
    assert_eq!(kinds_and_cables(&plant.alarms()).len(), 1);
    let occurrence = plant.alarms()[0]["occurrence"].to_string();
    plant.ask(&["alarms", "ack", &occurrence, "--note", "latch was open", "--cause", "choke"], 0);
    assert_eq!(plant.alarms()[0]["state"].as_str(), Some("acknowledged"), "{}", plant.alarms()[0]);
    plant.device.turn().dbm.insert(1, QUIET_DBM);
    plant.wait_for("the alarm's return", |plant| plant.alarms().is_empty());
    plant.ask(&["status"], 0);
    let journal = plant.sql("SELECT note FROM journal WHERE note != ''").expect("a journal");
    assert!(journal.contains("latch was open"), "{journal}");
}

#[test]
fn unplugged_and_plugged_in_again_is_a_gap_with_its_reason() {
    let mut plant = Plant::new("");
    plant.start();
    plant.device.unplug();
    plant.wait_for("the gap", |plant| plant.count("SELECT count(*) FROM gaps") >= 2);
    std::thread::sleep(Duration::from_secs(1));
    let before = plant.count("SELECT count(*) FROM levels");
    plant.device.replug();
    plant.wait_for("new levels", |plant| plant.count("SELECT count(*) FROM levels") > before + 4);
    let gaps = plant.ask(&["export", "gaps", "--format", "csv"], 0);
    assert_eq!(gaps.matches("unplugged").count(), 2, "one gap for each cable, each with its reason:\n{gaps}");
    let said = plant.log().lines().filter(|line| line.contains("WARN") || line.contains("ERROR")).count();
    assert!(said <= 4, "the same trouble is told again and again:\n{}", plant.log());
}

#[test]
fn garbage_and_a_hang_never_become_a_level() {
    for manner in [Manner::Garbles, Manner::HangsInAnswer, Manner::Silent] {
        let mut plant = Plant::new("");
        plant.start();
        plant.device.turn().manner = manner;
        plant.wait_for("the gap", |plant| plant.count("SELECT count(*) FROM gaps") > 0);
        std::thread::sleep(Duration::from_millis(500));
        plant.device.turn().manner = Manner::Healthy;
        let before = plant.count("SELECT count(*) FROM levels");
        plant.wait_for("new levels", |plant| plant.count("SELECT count(*) FROM levels") > before + 4);
        let truth = true_level(QUIET_DBM);
        let wrong = format!("SELECT count(*) FROM levels WHERE abs(level - {truth}) > 0.5");
        assert_eq!(plant.count(&wrong), 0, "{manner:?}");
    }
}

#[test]
fn another_instrument_on_the_port_is_an_alarm_and_no_level() {
    let mut plant = Plant::new("");
    plant.start();
    plant.device.unplug();
    "Test bench,OTHER,9,2.0".clone_into(&mut plant.device.turn().identity);
    plant.device.turn().dbm.insert(1, 0.0);
    plant.device.replug();
    plant.wait_for("the alarm", |plant| !plant.alarms().is_empty());
    assert_eq!(kinds_and_cables(&plant.alarms()), [("instrument".to_owned(), "rx1".to_owned())]);
    assert_eq!(plant.count(&format!("SELECT count(*) FROM levels WHERE level > {}", true_level(QUIET_DBM) + 3.0)), 0);
    plant.device.unplug();
    "Test bench,RX-1,7,1.0".clone_into(&mut plant.device.turn().identity);
    plant.device.turn().dbm.insert(1, QUIET_DBM);
    plant.device.replug();
    plant.wait_for("its return", |plant| plant.alarms().iter().all(|alarm| alarm["state"] == "returned"));
}

#[test]
fn a_device_that_knows_only_the_least_is_taken_with_assumed_settings() {
    let lacks = vec!["SWE:TIME", "DET", "BAND:VID", "INP:ATT", "UNIT:POW"];
    let mut plant = Plant::with_knobs("", Knobs { lacks, most_points: 101, ..Knobs::default() });
    plant.start();
    let (level, truth) = (latest_level(&plant, "W12"), true_level(QUIET_DBM));
    assert!((level - truth).abs() < 0.3, "{level} instead of {truth} dB(uA)");
    let quality = plant.sql("SELECT DISTINCT quality FROM levels").expect("a record");
    assert_eq!(quality.trim(), "good: assumed setting");
}

#[test]
fn killed_in_traffic_nothing_committed_is_lost_or_counted_twice() {
    let mut plant = Plant::new("");
    with_references(&mut plant);
    let all = "SELECT count(*) || ' ' || count(DISTINCT time || cable || band) FROM levels";
    for _ in 0..5 {
        let dump = "SELECT time, cable, band, level FROM levels ORDER BY time, cable, band";
        std::thread::sleep(Duration::from_millis(700));
        let before = plant.sql(dump).expect("a record");
        plant.kill();
        let after = plant.sql(dump).expect("a record");
        assert!(after.starts_with(&before), "a committed level is gone");
        plant.start();
        let counts = plant.sql(all).expect("a record");
        let (count, distinct) = counts.trim().split_once(' ').expect("two numbers");
        assert_eq!(count, distinct, "a level is there twice");
    }
    // Each block is there once and stands on the levels that are in the record for it. Cut-off blocks of the kills are among them.
    plant.wait_for("a block after the last start", |plant| plant.count("SELECT count(*) FROM blocks") > 30);
    assert_eq!(plant.count("SELECT count(*) - count(DISTINCT time || cable || band || state) FROM blocks"), 0);
    let wrong = "SELECT count(*) FROM blocks b WHERE b.count != (SELECT count(*) FROM levels l WHERE l.cable = b.cable \
                 AND l.band = b.band AND l.state = b.state AND unixepoch(l.time) = unixepoch(b.time))";
    assert_eq!(plant.count(wrong), 0, "a chart has seen other levels than the record holds");
    // The charts went on: the reference still stands, and a rise is found.
    plant.device.turn().dbm.insert(2, QUIET_DBM + 6.0);
    plant.wait_for("an alarm", |plant| !plant.alarms().is_empty());
    assert_eq!(kinds_and_cables(&plant.alarms()), [("regression".to_owned(), "W14".to_owned())]);
}

#[test]
fn levels_of_other_settings_are_never_compared() {
    let mut plant = Plant::new("");
    with_references(&mut plant);
    assert!(plant.stop().success(), "{}", plant.log());
    // Another bandwidth, and a level that would be a regression by the old reference.
    let site = std::fs::read_to_string(plant.site()).expect("a site file");
    std::fs::write(plant.site(), site.replace("rbw = \"100 kHz\"", "rbw = \"200 kHz\"")).expect("a site file");
    for input in [1, 2] {
        plant.device.turn().dbm.insert(input, QUIET_DBM + 9.0);
    }
    plant.start();
    let before = plant.count("SELECT count(*) FROM blocks");
    plant.wait_for("ten seconds of blocks", |plant| plant.count("SELECT count(*) FROM blocks") >= before + 20);
    assert_eq!(plant.alarms(), Vec::<Value>::new(), "{}", plant.log());
    let epochs = plant.sql("SELECT cable, reason FROM epochs ORDER BY cable").expect("a record");
    assert!(epochs.lines().count() == 2 && epochs.contains("rbw_hz is 200000, not 100000"), "{epochs}");
    let page = plant.ask(&["status"], 0);
    assert!(page.contains("W12: its references no longer count since"), "{page}");
    // The probe's factor bears on a level as well: other levels by the same receiver.
    let site = std::fs::read_to_string(plant.site()).expect("a site file");
    std::fs::write(plant.site(), site.replace("[\"2 MHz\", 12.0]", "[\"2 MHz\", 13.0]")).expect("a site file");
    plant.wait_for("the other factor", |plant| plant.count("SELECT count(*) FROM epochs") == 4);
    let epochs = plant.sql("SELECT reason FROM epochs ORDER BY time DESC LIMIT 1").expect("a record");
    assert!(epochs.contains("factor is a table of 3 points"), "{epochs}");
    let blocks = plant.count("SELECT count(*) FROM blocks");
    // Long enough that chance is not taken for memory: of a handful of blocks nobody can tell how correlated they are.
    plant.wait_for("25 seconds of blocks", |plant| plant.count("SELECT count(*) FROM blocks") >= blocks + 50);
    // An interval that reaches back before the change makes no reference; one after it does.
    let refused = plant.hushwatch(&["reference", "W12", "after", "--last", "1h"]);
    assert!(hushwatch_tests::programs::told(&refused).contains("other settings"));
    plant.ask(&["reference", "W12", "after", "--last", "24s", "--note", "wider filter"], 0);
    // It is remembered over a restart.
    plant.kill();
    plant.start();
    assert_eq!(plant.count("SELECT count(*) FROM epochs"), 4);
    plant.device.turn().dbm.insert(1, QUIET_DBM + 15.0);
    plant.wait_for("an alarm by the new reference", |plant| !plant.alarms().is_empty());
    assert_eq!(kinds_and_cables(&plant.alarms()), [("regression".to_owned(), "W12".to_owned())]);
}

#[test]
fn people_tell_the_operating_state_where_it_is_left_to_them() {
    let states = "[operating_states]\nsource = \"manual\"\nstates = [\"running\", \"idle\"]\n";
    let mut plant = Plant::new(states);
    plant.start();
    let of_state =
        |plant: &Plant, state: &str| plant.count(&format!("SELECT count(*) FROM levels WHERE state = '{state}'"));
    plant.wait_for("levels of the first state", |plant| of_state(plant, "running") > 0);
    plant.ask(&["state", "idle"], 0);
    plant.wait_for("levels of the other state", |plant| of_state(plant, "idle") > 0);
    let wrong = plant.hushwatch(&["state", "idel"]);
    let said = hushwatch_tests::programs::told(&wrong);
    assert!(wrong.status.code() == Some(3) && said.contains("did you mean `idle`"), "{said}");
    // It is remembered over a crash.
    let before = of_state(&plant, "running");
    plant.kill();
    plant.start();
    assert_eq!(of_state(&plant, "running"), before);
    assert!(plant.stop().success(), "{}", plant.log());
}

#[test]
fn stopped_in_order_the_gap_is_told() {
    let mut plant = Plant::new("");
    plant.start();
    assert!(plant.stop().success(), "{}", plant.log());
    std::thread::sleep(Duration::from_secs(1));
    plant.start();
    let gaps = plant.ask(&["export", "gaps", "--format", "csv"], 0);
    assert_eq!(gaps.matches("service").count(), 2, "{gaps}");
    assert_eq!(plant.count("SELECT count(*) FROM gaps WHERE \"to\" IS NULL"), 0, "{gaps}");
}

#[test]
fn a_site_file_that_is_saved_is_put_in_force_and_a_faulty_one_refused() {
    let mut plant = Plant::new("");
    with_references(&mut plant);
    let levels = "SELECT count(*) FROM levels";
    let good = std::fs::read_to_string(plant.site()).expect("a site file");
    // As most editors save: another file, renamed over the old one.
    let save = |plant: &Plant, text: &str| {
        let new = plant.folder().join("site.toml.new");
        std::fs::write(&new, text).expect("written");
        std::fs::rename(new, plant.site()).expect("renamed");
    };
    save(&plant, &good.replace("rbw = \"100 kHz\"", "rwb = \"100 kHz\""));
    plant.wait_for("the refusal", |plant| plant.log().contains("did you mean `rbw`"));
    let page = plant.ask(&["status", "--json"], 3);
    assert!(page.is_empty(), "the companion cannot read the faulty file either: {page}");
    let before = plant.count(levels);
    plant.wait_for("more levels by the old file", |plant| plant.count(levels) > before + 20);

    save(&plant, &good.replace("tag = \"W12\"", "tag = \"W12\"\ndescription = \"filler pump\""));
    plant.wait_for("the new file", |plant| plant.log().contains("is put in force"));
    let before = plant.count(levels);
    plant.wait_for("levels by the new file", |plant| plant.count(levels) > before + 20);
    assert_eq!(plant.count("SELECT count(*) FROM site_versions"), 2);
    assert_eq!(plant.count("SELECT count(*) FROM gaps"), 0, "no cable missed a turn");
    assert_eq!(plant.count("SELECT count(*) FROM epochs"), 0, "nothing bears on the levels");
    let status = plant.ask(&["status"], 0);
    assert!(!status.contains("no reference"), "references still count: {status}");
    // The charts went on, and SIGHUP on a file that is as it was does nothing.
    plant.signal("HUP");
    plant.wait_for("the answer to SIGHUP", |plant| plant.log().contains("it is as it was"));
    plant.device.turn().dbm.insert(1, QUIET_DBM + 6.0);
    plant.wait_for("an alarm", |plant| !plant.alarms().is_empty());
    assert!(plant.stop().success(), "{}", plant.log());
}

#[test]
fn a_second_service_on_the_record_is_refused() {
    let mut plant = Plant::new("");
    plant.start();
    let output = std::process::Command::new(hushwatch_tests::programs::program("hushwatchd"))
        .arg("--site")
        .arg(plant.site())
        .output()
        .expect("it starts");
    assert_eq!(output.status.code(), Some(3));
    let said = String::from_utf8_lossy(&output.stderr);
    assert!(said.contains("e14.db"), "it must name the record: {said}");
    // Another record, the same port: refused as well, since two cannot talk on one line.
    let other = plant.folder().join("other.toml");
    let site = std::fs::read_to_string(plant.site()).expect("a site file").replace("e14.db", "other.db");
    std::fs::write(&other, site).expect("a site file");
    let output = std::process::Command::new(hushwatch_tests::programs::program("hushwatchd"))
        .arg("--site")
        .arg(&other)
        .output()
        .expect("it starts");
    assert_eq!(output.status.code(), Some(3));
    let said = String::from_utf8_lossy(&output.stderr);
    assert!(said.contains("rx1"), "it must name the port: {said}");
}
