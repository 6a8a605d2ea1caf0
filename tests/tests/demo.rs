//! The main job, as the README's first command runs it.

use std::process::Command;

use hushwatch_tests::programs::{program, told};

#[test]
fn the_demo_ends_in_the_right_alarm() {
    let folder = tempfile::Builder::new().prefix("hw").tempdir().expect("a folder");
    let output = Command::new(program("hushwatch"))
        .args(["demo", "--dir"])
        .arg(folder.path().join("demo"))
        .env("NO_COLOR", "1")
        .output()
        .expect("the companion starts");
    assert!(output.status.success(), "{}", told(&output));
    // What the record says, read by another program: regression on W12 and on nothing else, found after the clip
    // opened on day 20 and dated to it.
    let record = folder.path().join("demo/cabinet.db");
    let sql = "SELECT DISTINCT subject FROM alarms WHERE kind = 'regression'";
    let rows = hushwatch_tests::sqlite::query(&record, sql).expect("a record");
    assert_eq!(rows.trim(), "W12", "{}", told(&output));
    for file in ["site.toml", "scene.toml", "levels.csv", "W12.svg"] {
        assert!(folder.path().join("demo").join(file).exists(), "{file} is missing:\n{}", told(&output));
    }

    // The same levels through the same charts, offline: the same alarm, raised at the same time and dated alike.
    let replayed = Command::new(program("hushwatch"))
        .current_dir(folder.path().join("demo"))
        .args(["replay", "levels.csv", "--before", "2026-08-31T22:00:00Z/2026-09-05T22:00:00Z"])
        .args(["--after", "2026-09-05T23:00:00Z/2026-09-10T22:00:00Z"])
        .output()
        .expect("the companion starts");
    assert!(replayed.status.success(), "{}", told(&replayed));
    let lines = String::from_utf8(replayed.stdout.clone()).expect("UTF-8");
    let alarms: Vec<serde_json::Value> = lines.lines().map(|line| serde_json::from_str(line).expect("JSON")).collect();
    assert_eq!(alarms.len(), 1, "{}", told(&replayed));
    let sql = "SELECT raised || ' ' || since FROM alarms";
    let recorded = hushwatch_tests::sqlite::query(&record, sql).expect("a record");
    let of = |key: &str| alarms[0][key].as_str().expect("a text").to_owned();
    assert_eq!(format!("{} {}", of("time"), of("since")), recorded.trim());
    assert_eq!(of("cable"), "W12");
}
