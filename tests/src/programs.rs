//! The real programs. A package of tests gets no path of other packages' programs from cargo, and cargo does not
//! build them for it: so they are built here, once for each run.

use std::path::PathBuf;
use std::process::{Command, Output};
use std::sync::OnceLock;

/// The path of `hushwatch` or `hushwatchd`, freshly built.
///
/// # Panics
/// The programs do not build.
pub fn program(name: &str) -> PathBuf {
    static FOLDER: OnceLock<PathBuf> = OnceLock::new();
    FOLDER.get_or_init(build).join(name)
}

fn build() -> PathBuf {
    let output = Command::new(env!("CARGO"))
        .args([
            "build",
            "--offline",
            "--message-format",
            "json",
            "--package",
            "hushwatch",
            "--package",
            "hushwatchd",
            "--bins",
        ])
        .arg("--manifest-path")
        .arg(concat!(env!("CARGO_MANIFEST_DIR"), "/../Cargo.toml"))
        .output()
        .expect("cargo runs");
    assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
    let messages = String::from_utf8(output.stdout).expect("cargo writes UTF-8");
    messages
        .lines()
        .filter_map(|line| serde_json::from_str::<serde_json::Value>(line).ok())
        .find_map(|message| Some(PathBuf::from(message["executable"].as_str()?)))
        .and_then(|executable| Some(executable.parent()?.to_owned()))
        .expect("cargo tells where the programs are")
}

/// What a finished program said, in full, for the message of a failed test.
pub fn told(output: &Output) -> String {
    format!(
        "{}\n--- stdout\n{}\n--- stderr\n{}",
        output.status,
        String::from_utf8_lossy(&output.stdout),
        String::from_utf8_lossy(&output.stderr)
    )
}
