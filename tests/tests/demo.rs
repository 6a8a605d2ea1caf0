//! The main job, as the README's first command runs it.

#![allow(
    clippy::expect_used,
    clippy::unwrap_used,
    clippy::panic,
    clippy::missing_panics_doc,
    reason = "a test fails by a panic that tells what was expected"
)]

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
}
