//! The arrows between the rooms point one way: what cargo says of the workspace is held against the table of the
//! design, and pure rooms reach nothing that could read a clock, a file or a socket.

use std::collections::{BTreeMap, BTreeSet};
use std::process::Command;

use serde_json::Value;

/// Which rooms each room may name among its dependencies. A new arrow is a change of design: see DEVELOPERS.md.
const ARROWS: &[(&str, &[&str])] = &[
    ("quantity", &[]),
    ("signal", &["quantity"]),
    ("ferrite", &["quantity"]),
    ("drift", &["quantity"]),
    ("alarm", &["quantity"]),
    ("config", &["quantity"]),
    ("record", &["quantity", "drift", "alarm"]),
    ("instrument", &["quantity", "config"]),
    ("plan", &["quantity", "config", "signal", "instrument"]),
    ("scene", &["quantity", "config"]),
    ("recipient", &["quantity"]),
    ("control", &[]),
    ("report", &["quantity"]),
    (
        "hushwatchd",
        &["quantity", "config", "signal", "drift", "alarm", "record", "instrument", "plan", "recipient", "control"],
    ),
    (
        "hushwatch",
        &[
            "quantity",
            "config",
            "signal",
            "ferrite",
            "drift",
            "alarm",
            "record",
            "instrument",
            "plan",
            "scene",
            "control",
            "report",
        ],
    ),
    ("tests", &[]),
];

/// The rooms whose every dependency, near or far, must be free of input and output.
const PURE: &[&str] = &["quantity", "signal", "ferrite", "drift", "alarm"];

/// Crates through which a pure room could reach the world outside.
const WORLDLY: &[&str] = &[
    "tokio",
    "rustix",
    "libc",
    "nix",
    "mio",
    "rusqlite",
    "notify",
    "tracing",
    "jiff",
    "tempfile",
    "socket2",
    "getrandom",
];

fn room(package: &str) -> &str {
    package.strip_prefix("hushwatch-").unwrap_or(package)
}

fn metadata(arguments: &[&str]) -> Value {
    let output = Command::new(env!("CARGO"))
        .args(["metadata", "--format-version", "1", "--offline", "--manifest-path"])
        .arg(concat!(env!("CARGO_MANIFEST_DIR"), "/../Cargo.toml"))
        .args(arguments)
        .output()
        .expect("cargo runs");
    assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
    serde_json::from_slice(&output.stdout).expect("cargo metadata is JSON")
}

fn texts<'a>(value: &'a Value, key: &str) -> &'a str {
    value[key].as_str().unwrap_or_else(|| panic!("`{key}` is missing in {value}"))
}

#[test]
fn no_room_knows_more_than_the_design_allows() {
    let metadata = metadata(&["--no-deps"]);
    let allowed: BTreeMap<&str, BTreeSet<&str>> =
        ARROWS.iter().map(|(name, arrows)| (*name, arrows.iter().copied().collect())).collect();
    let packages = metadata["packages"].as_array().expect("packages");
    let rooms: BTreeSet<&str> = packages.iter().map(|package| room(texts(package, "name"))).collect();
    assert_eq!(rooms, allowed.keys().copied().collect(), "the table of arrows and the workspace differ");
    for package in packages {
        let name = room(texts(package, "name"));
        let known: BTreeSet<&str> = package["dependencies"]
            .as_array()
            .expect("dependencies")
            .iter()
            .filter(|dependency| dependency["kind"].is_null())
            .map(|dependency| room(texts(dependency, "name")))
            .filter(|dependency| rooms.contains(dependency))
            .collect();
        let forbidden: Vec<_> = known.difference(&allowed[name]).collect();
        assert!(forbidden.is_empty(), "`{name}` must not know {forbidden:?}");
    }
}

#[test]
fn pure_rooms_reach_nothing_worldly() {
    for name in PURE {
        let output = Command::new(env!("CARGO"))
            .args(["tree", "--offline", "--edges", "normal", "--prefix", "none", "--format", "{p}", "--package"])
            .arg(format!("hushwatch-{name}"))
            .arg("--manifest-path")
            .arg(concat!(env!("CARGO_MANIFEST_DIR"), "/../Cargo.toml"))
            .output()
            .expect("cargo runs");
        assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
        let tree = String::from_utf8_lossy(&output.stdout).into_owned();
        let reached: BTreeSet<&str> = tree.lines().filter_map(|line| line.split(' ').next()).collect();
        assert!(reached.contains(format!("hushwatch-{name}").as_str()), "an empty tree proves nothing: {tree}");
        let worldly: Vec<_> = WORLDLY.iter().filter(|foreign| reached.contains(*foreign)).collect();
        assert!(worldly.is_empty(), "the pure room `{name}` reaches {worldly:?}");
        let fence = format!("{}/../daemon/{name}/clippy.toml", env!("CARGO_MANIFEST_DIR"));
        let fence = std::fs::read_to_string(&fence).unwrap_or_else(|error| panic!("{fence}: {error}"));
        assert!(fence.contains("std::time::SystemTime::now"), "clippy.toml of `{name}` must ban the clock");
    }
}
