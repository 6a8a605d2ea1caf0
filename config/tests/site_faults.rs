//! Wrong site files and what is told of them, whole: each `faults/*.toml` with its `*.txt`.
//!
//! With `BLESS=1` in the environment the texts are written anew; look at the difference before it is committed.

use std::path::{Path, PathBuf};

use hushwatch_config::site;

#[test]
fn wrong_site_files_are_told_as_written_down() {
    // Tests of a package run in its folder: relative paths keep the machine's own out of the texts.
    let mut files: Vec<PathBuf> = std::fs::read_dir("tests/faults")
        .expect("the folder of wrong files")
        .map(|entry| entry.expect("an entry").path())
        .filter(|path| path.extension().is_some_and(|ending| ending == "toml"))
        .collect();
    files.sort();
    assert!(files.len() >= 20, "only {} wrong files were found", files.len());
    let wrong: Vec<String> = files.iter().filter_map(|path| compare(path)).collect();
    assert!(wrong.is_empty(), "{}", wrong.join("\n\n"));
}

/// What differs, if anything does.
fn compare(path: &Path) -> Option<String> {
    let told = match site::load(path) {
        Ok(_) => String::from("this file was taken"),
        Err(faults) => faults.to_string(),
    };
    let golden = path.with_extension("txt");
    if std::env::var_os("BLESS").is_some() {
        return std::fs::write(&golden, format!("{told}\n")).err().map(|error| error.to_string());
    }
    let wanted = std::fs::read_to_string(&golden).unwrap_or_default();
    (wanted.trim_end() != told).then(|| format!("=== {}\n--- told:\n{told}\n--- wanted:\n{wanted}", path.display()))
}
